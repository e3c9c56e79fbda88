"""The climatology under the outlook: IRI between months, levels of flux and nodes, beside IRI asked outright."""

import subprocess
import sys

import numpy as np
import pytest
from tests.conftest import Evidence

from skylag.constants import L1_M_PER_TECU
from skylag.ionosphere.broadcast_delay import ntcm_vertical
from skylag.ionosphere.climatology import ABOVE_TECU, LEAST_DELAY_M, USUAL_FLUX, climate_of, smoothed
from skylag.tables import Floats

LATS, LONS = np.array([51.3, 46.9, 59.1]), np.array([7.4, 13.2, 1.9])


def content(day: str, flux: float, lats: Floats = LATS, lons: Floats = LONS) -> Floats:
    """Content (24, P) [TECU] of one day."""
    climate = climate_of(np.array([day], dtype="datetime64[D]"), lats, lons)
    return climate.delay(slice(None), np.array([flux]))[0] / L1_M_PER_TECU


@pytest.mark.parametrize("flux", [95.0, 160.0])
@pytest.mark.parametrize("day", ["2031-03-15", "2024-12-28", "2015-07-02"])
def test_what_lies_between_is_what_iri_gives(day: str, flux: float, evidence: Evidence) -> None:
    """IRI itself, asked for the day, the flux and the places, integrated in steps of 5 km from 80 to 2000 km."""
    import PyIRI

    heights = np.arange(80.0, 2001.0, 5.0)
    year, month, of_month = (int(part) for part in day.split("-"))
    *_, density = PyIRI.edp_update.IRI_density_1day(
        year, month, of_month, np.arange(24) + 0.5, LONS, LATS, heights, flux, PyIRI.coeff_dir
    )
    outright = np.trapezoid(density, heights * 1e3, axis=1) / 1e16
    evidence(f"climatology {day}, F10.7 {flux:g}: greatest departure of any hour",
             source="IRI with CCIR coefficients, PyIRI (Forsythe et al. 2023, Space Weather 21)",
             expected=0.0, got=float(np.abs(content(day, flux) - ABOVE_TECU - outright).max()),
             tolerance=0.06 * float(outright.max()), unit="TECU")  # fmt: skip


def test_it_follows_activity_and_hour() -> None:
    low, high = content("2031-03-20", 80.0), content("2031-03-20", 190.0)
    assert (high > low).all()
    local = (np.argmax(low, axis=0) + 0.5 + LONS / 15.0) % 24.0
    assert ((local >= 11.0) & (local <= 16.0)).all(), "the top lies after local noon"
    assert np.array_equal(content("2031-03-20", np.nan), content("2031-03-20", USUAL_FLUX))


def test_two_published_models_agree_as_far_as_such_models_do() -> None:
    """NTCM-G, made from other data, at noon of all seasons: half as much to twice as much."""
    for month in ("03", "06", "12"):
        noon = np.datetime64(f"2023-{month}-15T12:30:00", "ns")
        other = ntcm_vertical((120.0, 0.0, 0.0), LATS, LONS, np.full(3, noon))
        assert (np.abs(np.log(content(f"2023-{month}-15", 120.0)[12] / other)) < np.log(2.0)).all()


def test_beyond_the_levels_of_flux_the_ends_hold() -> None:
    assert np.array_equal(content("2023-06-15", 50.0), content("2023-06-15", 70.0))
    assert np.array_equal(content("2023-06-15", 400.0), content("2023-06-15", 190.0))


@pytest.mark.parametrize(("lats", "lons"), [
    ([90.0, -90.0], [0.0, 180.0]), ([50.0], [10.0]), ([0.0, 0.1], [-180.0, 180.0]), ([87.5], [-5.0]),
])  # fmt: skip
def test_any_place_has_a_value(lats: list[float], lons: list[float]) -> None:
    told = content("2023-06-15", 120.0, np.array(lats), np.array(lons))
    assert told.shape == (24, len(lats)) and np.isfinite(told).all()
    assert (told * L1_M_PER_TECU >= LEAST_DELAY_M).all() and (told < 120.0).all()


def test_longitudes_go_around() -> None:
    west = content("2023-06-15", 120.0, np.array([50.0]), np.array([-175.0]))
    assert west == pytest.approx(content("2023-06-15", 120.0, np.array([50.0]), np.array([185.0])))


def test_years_without_coefficients_of_their_own_have_a_value() -> None:
    assert np.isfinite(content("1994-01-01", 120.0)).all() and np.isfinite(content("2049-12-31", 120.0)).all()


def test_days_in_any_number_each_have_their_own() -> None:
    """A long row of days gives each what it has by itself, over the turns of months and of the year."""
    days = np.arange("2023-12-10", "2024-03-20", dtype="datetime64[D]")
    row = climate_of(days, LATS, LONS).delay(slice(None), np.linspace(80.0, 180.0, len(days)))
    for number in (0, 4, 5, 21, 22, 50, 80, len(days) - 1):
        alone = content(str(days[number]), float(np.linspace(80.0, 180.0, len(days))[number]))
        assert row[number] / L1_M_PER_TECU == pytest.approx(alone)
    assert np.abs(np.diff(np.log(row[:, 12, 0]))).max() < 0.06, "no leap from day to day"


def test_bringing_the_library_in_changes_nothing_for_others() -> None:
    """It turns off that errors of logging are told, for the whole process: in one of its own that is seen."""
    said = "import logging; from skylag.ionosphere.climatology import _iri; _iri(); print(logging.raiseExceptions)"
    run = subprocess.run([sys.executable, "-c", said], capture_output=True, text=True, check=True)
    assert run.stdout.strip() == "True"


def test_a_mean_flux_knows_only_days_that_were() -> None:
    flux = np.full(200, 100.0)
    flux[150:] = 200.0
    flux[:3] = np.nan
    mean = smoothed(flux)
    assert np.isnan(mean[:3]).all() and (mean[3:150] == 100.0).all()
    assert mean[150] == pytest.approx((80 * 100.0 + 200.0) / 81.0) and mean[190] == pytest.approx(
        (40 * 100.0 + 41 * 200.0) / 81.0
    )
