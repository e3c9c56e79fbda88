"""Carriers and what a unit of content does to them: against published frequencies and worked tables."""

from collections.abc import Callable

import numpy as np
import pytest
from tests.conftest import reference_rows

from skylag import constants
from skylag.constants import carrier_hz

Evidence = Callable[..., None]


def _digits(text: str) -> float:
    """Half of the last digit of a printed number, and a trifle for the printing."""
    return 0.51 * 10.0 ** -len(text.partition(".")[2])


@pytest.mark.parametrize("row", reference_rows("carriers.csv"), ids=lambda r: f"{r['system']}{r['band']}{r['channel']}")
def test_carrier(row: dict[str, str], evidence: Evidence) -> None:
    hz = carrier_hz(row["system"], row["band"], int(row["channel"]))
    metres = constants.REFRACTION_M3_S2 * constants.TECU / hz**2
    name = f"{row['system']} band {row['band']} channel {row['channel']}"
    got = {"mhz": hz / 1e6, "wavelength_m": constants.SPEED_OF_LIGHT_M_S / hz, "m_per_tecu": metres,
           "ns_per_tecu": metres / constants.SPEED_OF_LIGHT_M_S * 1e9}  # fmt: skip
    for column, value in got.items():
        if row[column]:
            evidence(f"{name}: {column}", source="signal specifications (references 1.1, 1.3)",
                     expected=float(row[column]), got=value, tolerance=_digits(row[column]))  # fmt: skip


def test_delay_of_a_unit_on_the_first_frequency(evidence: Evidence) -> None:
    evidence("delay on 1575.42 MHz per TECU", source="IS-GPS-200 and IONEX practice, worked twice (references 1.1)",
             expected=0.162372447511995, got=constants.L1_M_PER_TECU, tolerance=1e-14, unit="m")  # fmt: skip


def test_ratios_of_frequencies(evidence: Evidence) -> None:
    """(77/60)^2 for GPS, (9/7)^2 for every GLONASS channel, exactly."""
    gps = (constants.L1_HZ / constants.L2_HZ) ** 2
    evidence("GPS (f1/f2)^2", source="IS-GPS-200 (references 1.2)", expected=5929 / 3600, got=gps, tolerance=1e-15)
    for channel in range(-7, 7):
        ratio = (carrier_hz("R", "1", channel) / carrier_hz("R", "2", channel)) ** 2
        assert abs(ratio - 81 / 49) < 1e-14


def test_no_such_band() -> None:
    with pytest.raises(KeyError):
        carrier_hz("G", "7")


def test_earth_and_light(evidence: Evidence) -> None:
    evidence("speed of light", source="SI", expected=299792458, got=constants.SPEED_OF_LIGHT_M_S, tolerance=0)
    b = constants.WGS84_A_M * (1.0 - constants.WGS84_F)
    evidence("polar radius", source="NIMA TR8350.2, table 3.3 (from memory)", expected=6356752.3142, got=b,
             tolerance=1e-4, unit="m")  # fmt: skip
    assert np.isclose(constants.EARTH_ROTATION_RAD_S * 86164.0905 / (2 * np.pi), 1.0, atol=1e-7)
