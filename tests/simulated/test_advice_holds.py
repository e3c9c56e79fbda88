"""Advice against what was put in: errors stay under what was said, and no bad time is called workable."""

import numpy as np
import pytest
from tests.simulated.day_results import CALM, RECOVERY, STORM, day, truth_of

from skylag.constants import L1_M_PER_TECU, SBAS_EARTH_RADIUS_M, SBAS_SHELL_HEIGHT_M
from skylag.impact import correction_grid, protection, sky, survey
from skylag.impact.correction_grid import GridConfidence, Lattice
from skylag.impact.satellite_augmentation import ServiceChoices
from skylag.impact.survey import Job
from skylag.ionosphere import geometry
from skylag.tables import Site
from skylag.timescales import seconds

pytestmark = pytest.mark.slow


def _sites(name: str, kind: str) -> list[Site]:
    return [site for site in day(name).products.region.sites if site.kind == kind]


@pytest.mark.parametrize("name", [CALM, STORM, RECOVERY])
def test_differential_errors_stay_under_what_was_said(name: str) -> None:
    """95 of 100 true differential delays over 10 km lie under `differential_95`, and whatever was called workable was.

    True ones are differences of the true vertical content over 10 km east and north of the site.
    """
    products = day(name).products
    truth = truth_of(name)
    world = sky.from_rays(products.samples.rays, products.fields.times)
    for site in _sites(name, "survey"):
        advice = survey.advise(Job(site.name, ((site.lat, site.lon),)), products.fields, world)
        north = 5.0 / 111.195
        east = north / np.cos(np.radians(site.lat))

        def content_mm(dlat: float, dlon: float, here: Site = site, times: np.ndarray = advice.times) -> np.ndarray:
            lat, lon = np.full(len(times), here.lat + dlat), np.full(len(times), here.lon + dlon)
            return truth.vertical_content(lat, lon, times) * L1_M_PER_TECU * 1000.0

        true_mm = np.hypot(content_mm(0, east) - content_mm(0, -east), content_mm(north, 0) - content_mm(-north, 0))
        seen = np.isfinite(advice.differential_95)
        assert seen.mean() > 0.5
        assert (true_mm <= advice.differential_95)[seen].mean() >= 0.95
        assert (true_mm <= advice.differential_68)[seen].mean() >= 0.68
        work = advice.verdict == survey.WORK
        assert work.mean() > 0.5
        per_mm = advice.vertical_95 / advice.differential_95
        assert not (true_mm * per_mm > advice.job.vertical_mm)[work].any()


def _errors(grid: GridConfidence, world: sky.Sky, site: Site, name: str) -> tuple[np.ndarray, ...]:
    """Per grid epoch and satellite: elevation, azimuth, slant error of the grid delay and its sigma [m]; NaN unused."""
    at = np.searchsorted(world.times, grid.times)
    elevation, azimuth = (values[at] for values in world.look(site.lat, site.lon))
    above = elevation >= 5.0
    epoch, satellite = np.nonzero(above)
    lat, lon = geometry.pierce(
        site.lat, site.lon, elevation[above], azimuth[above], SBAS_SHELL_HEIGHT_M, SBAS_EARTH_RADIUS_M
    )
    corners = Lattice(grid.lat, grid.lon).around(lat, lon, np.isfinite(grid.variance_m2)[epoch])
    place = (epoch[:, None], np.maximum(corners.point, 0))
    factor = protection.pierce_factor(elevation[above])
    variance = (corners.weight * np.nan_to_num(grid.variance_m2[place])).sum(axis=1)
    told = factor * (corners.weight * np.nan_to_num(grid.delay_m[place])).sum(axis=1)
    hours = seconds(grid.times[epoch] - np.datetime64("2031-03-11", "ns")) / 3600.0
    position = world.position_m[at][epoch, satellite]
    true = truth_of(name).ionosphere.slant(geometry.earth_fixed(site.lat, site.lon, 0.0), position, hours)
    error, sigma = np.full(elevation.shape, np.nan), np.full(elevation.shape, np.nan)
    error[above] = told - true * L1_M_PER_TECU
    sigma[above] = factor * np.sqrt(variance)
    return elevation, azimuth, error, sigma


@pytest.mark.parametrize("name", [STORM, RECOVERY])
def test_protection_levels_protect(name: str) -> None:
    """No slant error beyond 5.33 sigmas, no position error beyond its level, at aerodromes that the grid never saw."""
    products = day(name).products
    grid = correction_grid.confidence(products.samples, products.fields.times)
    world = sky.from_rays(products.samples.rays, products.fields.times, "G")
    choices = ServiceChoices()
    for site in _sites(name, "aerodrome")[::2]:
        elevation, azimuth, error, sigma = _errors(grid, world, site, name)
        used = np.isfinite(error)
        assert used.sum() > 1000
        assert (np.abs(error) / sigma)[used].max() < protection.K_VERTICAL
        variance = (
            sigma**2 + choices.correction_m2 + protection.airborne_variance(elevation, choices.noise_m)
            + protection.troposphere_variance(elevation)
        )  # fmt: skip
        levels = protection.levels(elevation, azimuth, variance)
        weight = np.where(np.isfinite(variance), 1.0 / variance, 0.0)
        rows = sky.rows_of(elevation, azimuth)
        solve = np.einsum("tij,tsj,ts->tis", sky.position_covariance(rows, weight), rows, weight)
        moved = np.einsum("tis,ts->ti", solve, np.nan_to_num(error))
        known = np.isfinite(levels.vertical_m)
        assert known.mean() > 0.9
        assert (np.abs(moved[:, 2]) < levels.vertical_m)[known].all()
        assert (np.hypot(moved[:, 0], moved[:, 1]) < levels.horizontal_m)[known].all()


def test_the_storm_is_felt_and_the_quiet_day_is_not() -> None:
    """Grid points under the wall are called irregular while it passes; on the quiet day none is."""
    steps = {}
    for name in (STORM, RECOVERY):
        products = day(name).products
        grid = correction_grid.confidence(products.samples, products.fields.times)
        near = (grid.lat == -40) & np.isin(grid.lon, (145, 150))
        hour = seconds(grid.times - np.datetime64(name, "ns")) / 3600.0
        steps[name] = grid.irregular[:, near], hour
    irregular, hour = steps[STORM]
    assert irregular[(hour > 7.0) & (hour < 7.5)].all()
    assert irregular.mean() < 0.2
    assert not steps[RECOVERY][0].any()
