"""Klobuchar and NTCM-G against published examples."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tests.conftest import Evidence, reference_rows

from skylag.constants import L1_HZ, L2_HZ
from skylag.ionosphere import broadcast_delay, geometry

ALPHA_1, BETA_1 = (3.82e-8, 1.49e-8, -1.79e-7, 0.0), (1.43e5, 0.0, -3.28e5, 1.13e5)
ALPHA_2, BETA_2 = (0.1118e-7, -0.7451e-8, -0.5961e-7, 0.1192e-6), (0.1167e6, -0.2294e6, -0.1311e6, 0.1049e7)
SETS = {
    "H": (236.831641, -0.39362878, 0.00402826613),
    "M": (121.129893, 0.351254133, 0.0134635348),
    "L": (2.580271, 0.127628236, 0.0252748384),
}


@pytest.mark.parametrize(
    ("alpha", "beta", "place", "time", "expected"),
    [
        (ALPHA_1, BETA_1, (40, -100, 20, 210), "2024-01-01T20:45:00", 23.784147584979),
        (ALPHA_1, BETA_1, (40, 260, 20, 210), "2024-01-01T20:45:00", 23.784147584979),
        (ALPHA_2, BETA_2, (50, 10, 30, 135), "2004-01-01T12:00:00", 6.298881642943),
        (ALPHA_2, BETA_2, (50, 10, 30, 135), "2004-01-01T00:00:00", 2.649302814715),
    ],
)
def test_klobuchar_examples(
    alpha: tuple[float, ...], beta: tuple[float, ...], place: tuple[float, ...], time: str, expected: float,
    evidence: Evidence,
) -> None:  # fmt: skip
    got = broadcast_delay.klobuchar(alpha, beta, *place, np.datetime64(time, "ns"))  # type: ignore[arg-type]
    evidence(f"Klobuchar delay at {place}, {time[11:16]}", unit="m", expected=expected, got=float(got), tolerance=1e-9,
             source="IS-GPS-200 20.3.3.5.2.5; orekit 13.1.9 as independent code")  # fmt: skip


def test_klobuchar_scales_with_frequency_and_takes_arrays() -> None:
    times = np.datetime64("2024-01-01", "ns") + np.arange(0, 24, 2).astype("timedelta64[h]")
    one = broadcast_delay.klobuchar(ALPHA_2, BETA_2, 50, 10, np.full(12, 30.0), 135.0, times)
    two = broadcast_delay.klobuchar(ALPHA_2, BETA_2, 50, 10, np.full(12, 30.0), 135.0, times, L2_HZ)
    assert one.shape == (12,)
    assert two / one == pytest.approx((L1_HZ / L2_HZ) ** 2)
    assert one.argmax() == 6  # 12 h at 10 degrees east is nearest to 14 h local time


@given(st.floats(-90, 90), st.floats(-180, 180), st.floats(5, 90), st.floats(0, 360), st.integers(0, 86_399))
def test_klobuchar_is_never_below_its_night_value(lat: float, lon: float, el: float, az: float, second: int) -> None:
    when = np.datetime64("2024-01-01", "ns") + np.timedelta64(second, "s")
    night = 5e-9 * 299_792_458.0 * (1 + 16 * (0.53 - el / 180) ** 3)
    got = broadcast_delay.klobuchar(ALPHA_1, BETA_1, lat, lon, el, az, when)  # type: ignore[arg-type]
    assert float(got) >= night * (1 - 1e-12)


@pytest.mark.parametrize(
    "row", reference_rows("ntcm_slant.csv"), ids=lambda row: f"{row['set']}{row['ut_h']}{row['lon']}"
)
def test_ntcm_examples(row: dict[str, str], evidence: Evidence) -> None:
    station = geometry.earth_fixed(float(row["lat"]), float(row["lon"]), float(row["height_m"]))
    satellite = geometry.earth_fixed(
        float(row["satellite_lat"]), float(row["satellite_lon"]), float(row["satellite_height_m"])
    )
    elevation, azimuth = geometry.look(station.tolist(), satellite)
    when = np.datetime64("2023-01-01", "ns") + np.timedelta64(int(row["day_of_year"]) - 1, "D")
    when = when + np.timedelta64(int(row["ut_h"]), "h")
    slant, vertical = broadcast_delay.ntcm(
        SETS[row["set"]], float(row["lat"]), float(row["lon"]), elevation, azimuth, when
    )  # type: ignore[arg-type]
    which = f"set {row['set']}, {row['ut_h']} UT, {row['lat']} {row['lon']} to {row['satellite_lat']}"
    evidence(f"NTCM-G slant content, {which}",
             unit="TECU", source="NTCM-G Ionospheric Model Description 1.0 (2022), Annex D",
             expected=float(row["stec"]), got=float(slant), tolerance=1e-4)  # fmt: skip
    assert float(vertical) < float(slant)
