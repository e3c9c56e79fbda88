"""Availability of approaches: laws, causes, and that nothing unseen is available."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.conftest import Evidence

from skylag.errors import Refused
from skylag.impact import correction_grid, protection, sky
from skylag.impact import satellite_augmentation as augmentation
from skylag.impact.correction_grid import GridConfidence
from skylag.impact.satellite_augmentation import LEVEL, ServiceChoices
from skylag.ionosphere import geometry
from skylag.ionosphere.augmentation_grid import all_points
from skylag.tables import Site

SITE = Site("Here", -40.0, 146.0, "aerodrome")
TIMES = np.datetime64("2031-03-12", "ns") + np.arange(60).astype("timedelta64[m]")


def a_sky(satellites: int = 9, seed: int = 5) -> sky.Sky:
    """Satellites standing still over the site, spread at random, 26 560 km from the Earth's centre."""
    rng = np.random.default_rng(seed)
    place = geometry.earth_fixed(SITE.lat, SITE.lon, 0.0)
    elevation = np.degrees(np.arcsin(rng.uniform(0.15, 1, satellites)))
    azimuth = (np.arange(satellites) * 360 / satellites + rng.uniform(0, 30)) % 360
    axes = _axes(SITE.lat, SITE.lon)
    e, a = np.radians(elevation), np.radians(azimuth)
    toward = np.stack([np.cos(e) * np.sin(a), np.cos(e) * np.cos(a), np.sin(e)], axis=1) @ axes
    along = toward @ place
    reach = -along + np.sqrt(along**2 + 26_560e3**2 - place @ place)
    position = np.broadcast_to(place + reach[:, None] * toward, (len(TIMES), satellites, 3)).copy()
    names = np.array([f"G{k + 1:02d}" for k in range(satellites)])
    return sky.Sky(TIMES, names, position, "made up")


def _axes(lat: float, lon: float) -> np.ndarray:
    b, l = np.radians(lat), np.radians(lon)  # noqa: E741
    return np.array([[-np.sin(l), np.cos(l), 0], [-np.sin(b) * np.cos(l), -np.sin(b) * np.sin(l), np.cos(b)],
                     [np.cos(b) * np.cos(l), np.cos(b) * np.sin(l), np.sin(b)]])  # fmt: skip


def a_grid(step: int = 5) -> GridConfidence:
    """All points of the map around at one step, every five minutes."""
    every = all_points()
    some = (every.band <= 8) & (every.lat >= -60) & (every.lat <= -20) & (every.lon >= 120) & (every.lon <= 175)
    times = TIMES[::5]
    shape = (len(times), int(some.sum()))
    return GridConfidence(
        times, every.lat[some].astype(int), every.lon[some].astype(int), np.full(shape, 2.0), np.full(shape, 0.1),
        np.full(shape, step), np.zeros(shape, dtype=bool), np.full(shape, 30),
    )  # fmt: skip


def _with_step(grid: GridConfidence, step: np.ndarray) -> GridConfidence:
    return replace(grid, step=step)


def test_a_good_hour_is_available() -> None:
    found = augmentation.availability(a_grid(), a_sky(), [SITE])
    assert found.available.all()
    assert found.outages == ()
    assert found.share.tolist() == [[1.0], [1.0], [1.0]]
    assert (found.in_view == 9).all()
    assert (found.used == 9).all()


def test_levels_equal_the_worked_parts() -> None:
    """The whole way, place to level, equals the parts put together by hand for each satellite."""
    world, grid = a_sky(), a_grid(7)
    found = augmentation.availability(grid, world, [SITE])
    elevation, azimuth = world.look(SITE.lat, SITE.lon)
    choices = ServiceChoices()
    variance = (
        choices.correction_m2 + protection.pierce_factor(elevation[0]) ** 2 * 0.5322
        + protection.airborne_variance(elevation[0], 0.36) + protection.troposphere_variance(elevation[0])
    )  # fmt: skip
    expected = protection.levels(elevation[0], azimuth[0], variance)
    assert found.vertical_m[0, 0] == pytest.approx(float(expected.vertical_m))
    assert found.horizontal_m[0, 0] == pytest.approx(float(expected.horizontal_m))


def test_without_a_grid_nothing_is_available_but_what_needs_none() -> None:
    old = replace(a_grid(), times=TIMES[::5] - np.timedelta64(2, "h"))
    found = augmentation.availability(old, a_sky(), [SITE])
    by_name = dict(zip([level.name for level in found.levels], found.share[:, 0], strict=True))
    assert by_name == {"NPA": 1.0, "APV-I": 0.0, "LPV-200": 0.0}
    assert {outage.cause for outage in found.outages} == {"unseen"}
    assert all("nothing can be said" in outage.why for outage in found.outages)


def test_grid_points_not_monitored_take_satellites_away() -> None:
    grid = a_grid()
    grid.step[4:8] = 15
    found = augmentation.availability(grid, a_sky(), [SITE])
    assert not found.available[1:, 0, 20:40].any()
    assert found.available[:, 0, :20].all()
    assert found.available[:, 0, 40:].all()
    outage = next(outage for outage in found.outages if outage.level == "LPV-200")
    assert (outage.start, outage.end) == (TIMES[20], TIMES[40])
    assert outage.cause == "ionosphere"
    assert "0 of 9 satellites" in outage.why
    assert "not monitored" in outage.why
    assert outage.highest == (np.inf, np.inf)


def test_irregular_points_are_named() -> None:
    grid = a_grid()
    grid.step[:] = 14
    grid.irregular[:] = True
    found = augmentation.availability(grid, a_sky(), [SITE])
    assert not found.available[1:].any()
    assert all(outage.cause == "ionosphere" for outage in found.outages if outage.level != "NPA")


def test_few_satellites_are_geometry() -> None:
    found = augmentation.availability(a_grid(), a_sky(4), [SITE], levels=["APV-II"])
    assert not found.available.any()
    assert {outage.cause for outage in found.outages} == {"geometry"}


def test_no_satellite_is_unseen() -> None:
    world = a_sky()
    world.position_m[10:20] = np.nan
    found = augmentation.availability(a_grid(), world, [SITE])
    assert not found.available[:, :, 10:20].any()
    assert {outage.cause for outage in found.outages} == {"unseen"}
    assert {(outage.start, outage.end) for outage in found.outages} == {(TIMES[10], TIMES[20])}


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 40), st.integers(5, 10), st.integers(0, 2**32 - 1))
def test_more_variance_never_shortens_an_outage(seed: int, satellites: int, chance: int) -> None:
    rng = np.random.default_rng(chance)
    grid, world = a_grid(), a_sky(satellites, seed)
    before = _with_step(grid, rng.integers(0, 15, grid.step.shape))
    after = _with_step(grid, np.minimum(before.step + rng.integers(0, 3, grid.step.shape), 14))
    names = ["NPA", "APV-I", "LPV-200", "APV-II", "CAT-I"]
    one = augmentation.availability(before, world, [SITE], levels=names)
    two = augmentation.availability(after, world, [SITE], levels=names)
    assert not (two.available & ~one.available).any()
    three = augmentation.availability(before, world, [SITE], ServiceChoices(correction_m=7.5), levels=names)
    assert not (three.available & ~one.available).any()


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 40), st.integers(5, 10), st.integers(4, 14))
def test_a_stricter_limit_never_adds_availability(seed: int, satellites: int, step: int) -> None:
    names = ["En route", "Terminal", "NPA", "APV-I", "LPV-200", "APV-II", "CAT-I"]
    found = augmentation.availability(a_grid(step), a_sky(satellites, seed), [SITE], levels=names)
    for looser, stricter in zip(found.available[:-1], found.available[1:], strict=True):
        assert not (stricter & ~looser).any()


def _just_available(level: str, horizontal: bool) -> float:
    """The largest protection level [m] with which a level is still available: what the program does."""
    low, high = 0.0, 1e5
    for _ in range(80):
        middle = 0.5 * (low + high)
        tried = np.array([middle if horizontal else 0.0]), np.array([0.0 if horizontal else middle])
        good = augmentation._within(LEVEL[level], tried[1], tried[0], tried[0])[0]
        low, high = (middle, high) if good else (low, middle)
    return low


def test_alert_limits(evidence: Evidence) -> None:
    for name, horizontal, vertical in (
        ("NPA", 556, np.inf), ("APV-I", 40, 50), ("LPV-200", 40, 35), ("APV-II", 40, 20), ("CAT-I", 40, 10),
    ):  # fmt: skip
        for across, expected in ((True, horizontal), (False, vertical)):
            word, got = "horizontal" if across else "vertical", _just_available(name, across)
            if np.isfinite(expected):
                evidence(f"largest {word} protection level with which {name} is available", unit="m", expected=expected,
                         source="ICAO Annex 10 volume I, table 3.7.2.4-1", got=got, tolerance=1e-6)  # fmt: skip
            else:
                assert got > 9e4


def test_a_thousand_random_geometries_all_the_way(rng: np.random.Generator) -> None:
    """Place to protection level, one satellite after another in plain arithmetic: pierce point, cell, table, weight."""
    grid = a_grid()
    point = {(int(la), int(lo)): n for n, (la, lo) in enumerate(zip(grid.lat, grid.lon, strict=True))}
    grid = _with_step(grid, rng.integers(0, 15, grid.step.shape))
    checked = 0
    for seed in range(17):
        satellites = int(rng.integers(5, 12))
        world = a_sky(satellites, seed)
        for minute in range(len(TIMES)):  # another geometry each
            world.position_m[minute] = a_sky(satellites, 1000 + 60 * seed + minute).position_m[0]
        site = Site("There", float(rng.uniform(-45, -35)), float(rng.uniform(140, 152)))
        found = augmentation.availability(grid, world, [site])
        elevation, azimuth = world.look(site.lat, site.lon)
        for minute in range(len(TIMES)):
            steps = grid.step[minute // 5]
            rows, weights = [], []
            for e, a in zip(np.radians(elevation[minute]), np.radians(azimuth[minute]), strict=True):
                if not e >= np.radians(5.0):
                    continue
                psi = np.pi / 2 - e - np.arcsin(6378.1363 / 6728.1363 * np.cos(e))
                b = np.radians(site.lat)
                lat = np.arcsin(np.sin(b) * np.cos(psi) + np.cos(b) * np.sin(psi) * np.cos(a))
                lon = np.degrees(np.radians(site.lon) + np.arcsin(np.sin(psi) * np.sin(a) / np.cos(lat)))
                lat = np.degrees(lat)
                south, west = int(lat // 5) * 5, int(lon // 5) * 5
                x, y = (lon - west) / 5, (lat - south) / 5
                vertical = sum(
                    share * correction_grid.CONFIDENCE_VARIANCE_M2[steps[point[south + 5 * up, west + 5 * right]]]
                    for up, right, share in ((0, 0, (1 - x) * (1 - y)), (0, 1, x * (1 - y)), (1, 0, (1 - x) * y),
                                             (1, 1, x * y))
                )  # fmt: skip
                slant2 = 1 / (1 - (6378.1363 * np.cos(e) / 6728.1363) ** 2)
                degrees = np.degrees(e)
                noise = (0.13 + 0.53 * np.exp(-degrees / 10)) ** 2 + 0.36**2
                troposphere = (0.12 * 1.001) ** 2 / (0.002001 + np.sin(e) ** 2)
                weights.append(1 / (0.8315 + slant2 * vertical + noise + troposphere))
                rows.append([np.cos(e) * np.sin(a), np.cos(e) * np.cos(a), np.sin(e), 1.0])
            inverse = np.linalg.pinv(np.array(rows) * np.sqrt(weights)[:, None])
            assert found.vertical_m[0, minute] == pytest.approx(5.33 * np.linalg.norm(inverse[2]), rel=1e-6)
            major = np.linalg.svd(inverse[:2], compute_uv=False)[0]
            assert found.horizontal_m[0, minute] == pytest.approx(6.0 * major, rel=1e-6)
            checked += 1
    assert checked >= 1000


def test_assumptions_and_caution_come_with_every_result() -> None:
    found = augmentation.availability(a_grid(), a_sky(), [SITE], ServiceChoices(correction_m=4.5))
    text = " ".join(found.assumptions)
    for word in ("4.5 m", "0.36 m", "5 degrees", "made up", "LPV-200 40 m / 35 m", "not monitored", "600 s"):
        assert word in text
    assert "not for navigation" in found.caution


def test_wrong_choices_are_refused() -> None:
    with pytest.raises(Refused, match="no step of the table"):
        ServiceChoices(correction_m=2.0)
    with pytest.raises(Refused, match="is not known"):
        augmentation.availability(a_grid(), a_sky(), [SITE], levels=["LPV"])


def test_magnetic_latitude_sets_what_a_receiver_assumes() -> None:
    assert augmentation.without_grid_m(0.0, 100.0) == 9.0
    assert augmentation.without_grid_m(45.0, 10.0) == 4.5
    assert augmentation.without_grid_m(70.0, -100.0) == 6.0


def test_the_time_out_of_the_grid() -> None:
    grid = a_grid()
    late = grid.times[-1] + np.array([0, 599, 600, 601]).astype("timedelta64[s]")
    assert augmentation.grid_epochs(grid, late).tolist() == [11, 11, 11, -1]
    assert augmentation.grid_epochs(grid, grid.times[:1] - np.timedelta64(1, "s")).tolist() == [-1]
    assert correction_grid.ConfidenceChoices().time_out_s == 600.0
