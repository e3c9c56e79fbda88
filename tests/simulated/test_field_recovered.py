"""The maps of the committed invented days against the three-dimensional truth they were made of.

Two kinds of error are told apart.  What is common to all maps of a day (the height a thin shell stands for, the
plasmasphere) is drawn once a day: three days are three draws, and no coverage can be counted from them; the sigma must
be large enough, and that is all that is asked.  What chance does (noise, arcs, biases, what lies between lines of
sight) is drawn anew for every receiver and epoch: its sigma, without the common part, must cover the map's differences
from the day's mean error.
"""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from scipy.spatial import Delaunay
from tests.simulated.day_results import CALM, RECOVERY, STORM, day, truth_of

from invented import network, weather
from skylag import chain
from skylag.ionosphere import adjustment, displacement, field, geometry, left_out
from skylag.tables import HOLDS, Fields, concatenate

WITHIN_95 = 1.959964


@cache
def compared(name: str, with_leanings: bool = True) -> dict[str, np.ndarray]:
    """Error, sigma, support, hull, and distance to the wall [km] of every cell every half hour."""
    products, known = day(name).products, truth_of(name)
    maps = products.fields
    if not with_leanings:
        maps = without_leanings(name)
    lon, lat = np.meshgrid(maps.lons, maps.lats)
    chosen = slice(None, None, 6) if name != STORM else slice(None, None, 3)
    times = products.fields.times[chosen]
    layers = {layer: getattr(maps, layer) if not with_leanings else getattr(maps, layer)[chosen]
              for layer in ("vtec", "vtec_sigma", "support")}  # fmt: skip
    true = np.stack([known.vertical_content(lat, lon, time) for time in times])
    places = np.array([geometry.geodetic(np.asarray(r.position_m))[:2] for r in products.receivers], dtype=float)
    hull = Delaunay(places).find_simplex(np.column_stack([lat.ravel(), lon.ravel()])).reshape(lat.shape) >= 0
    east, north = weather.plane_of(lat, lon)
    wall = np.full(true.shape, np.inf)
    for number, time in enumerate(times):
        if known.front.at(time) is not None:
            wall[number] = np.abs(known.front.ahead_km(east, north, float(weather.hours_since(time))))
    return {
        "error": layers["vtec"] - true, "sigma": layers["vtec_sigma"], "support": layers["support"],
        "hull": np.broadcast_to(hull, true.shape), "wall": wall,
    }  # fmt: skip


def without_leanings(name: str) -> Fields:
    """The day's maps with sigmas of chance alone."""
    products = day(name).products
    samples = products.samples
    nothing = np.zeros(len(samples.rays))
    alone = replace(samples, lean_shell=nothing, lean_high=nothing)
    every = 6 if name != STORM else 3
    return field.fit(alone, products.fields.lats, products.fields.lons, products.fields.times[::every])


@cache
def slopes_compared(name: str) -> dict[str, np.ndarray]:
    """Slope of the maps, its sigma, the true slope over the same 40 km, support, distance to the wall [km]; on the
    storm day while there is a wall, else every hour."""
    maps, known = day(name).products.fields, truth_of(name)
    lon, lat = np.meshgrid(maps.lons, maps.lats)
    epochs = np.arange(6, 288, 12) if name != STORM else np.arange(70, 99, 2)
    half = np.degrees(20.0 / 6371.0)
    steps = ((0.0, half / np.cos(np.radians(lat))), (half, 0.0))
    true, wall = [], []
    east, north = weather.plane_of(lat, lon)
    for time in maps.times[epochs]:
        ways = [known.vertical_content(lat + dy, lon + dx, time) - known.vertical_content(lat - dy, lon - dx, time)
                for dy, dx in steps]  # fmt: skip
        true.append(np.hypot(*ways) / 40.0 * 162.372448)
        ahead = known.front.ahead_km(east, north, float(weather.hours_since(time)))
        wall.append(np.abs(ahead) if known.front.at(time) is not None else np.full(lat.shape, np.inf))
    return {
        "slope": maps.slope[epochs].astype(float), "sigma": maps.slope_sigma[epochs].astype(float),
        "true": np.array(true), "wall": np.array(wall), "seen": maps.support[epochs] > 0,
        "state": maps.state[epochs],
    }  # fmt: skip


def honest_slope_sigmas(
    calm: dict[str, np.ndarray], storm: dict[str, np.ndarray], factor: float = 1.0
) -> dict[str, bool]:
    """Whether 95 % intervals of the slope hold it, calm, beside a wall and far from one, and are not far too wide.

    factor  on the sigma, to try whether this notices a wrong one
    """
    def of(got: dict[str, np.ndarray], rows: np.ndarray) -> tuple[float, float]:
        z = ((got["slope"] - got["true"]) / (factor * got["sigma"]))[rows & got["seen"]]
        return float(np.mean(np.abs(z) <= WITHIN_95)), float(np.std(np.clip(z, -9.0, 9.0)))

    # A wall has long tails: beside it most errors are small, so the spread of errors over sigmas is below one.
    groups = {
        "calm": (calm, np.ones(calm["slope"].shape, dtype=bool), 0.93, 0.6),
        "steep": (storm, storm["true"] > 25.5, 0.90, 0.3), "near": (storm, storm["wall"] <= 150.0, 0.93, 0.3),
        "far": (storm, storm["wall"] > 150.0, 0.93, 0.2),
    }  # fmt: skip
    found = {name: (*of(got, rows), least, spread) for name, (got, rows, least, spread) in groups.items()}
    return {name: held >= least and is_ > spread for name, (held, is_, least, spread) in found.items()}


def rms(values: np.ndarray) -> float:
    return float(np.sqrt(np.mean(values**2)))


def test_three_hours_of_eight_receivers() -> None:
    """A short stretch through the same way: biases found from three hours alone are poor, and sigmas have to say so."""
    markers = ["VANP", "KELM", "FENN", "BRIM", "SKAR", "TWSK", "EDRO", "QUDL"]
    world = network.simulate(CALM, markers, (2.0, 5.0), 120.0)
    choices = chain.Choices()
    rays = concatenate([chain.receiver_day(s, [world.ephemerides], choices, 400e3).rays for s in world.signals])
    samples = adjustment.apply(adjustment.solve(rays, None, choices.adjustment, {}), rays)
    lats, lons = np.arange(-42.5, -36.9, 1.0), np.arange(143.0, 149.1, 1.0)
    maps = field.fit(samples, lats, lons, world.times[::15])
    lon, lat = np.meshgrid(lons, lats)
    error = maps.vtec - np.stack([world.vertical_content(lat, lon, time) for time in maps.times])
    seen = maps.support > 0
    assert seen.mean() > 0.9
    assert rms(error[seen]) < 3.0
    assert np.mean(np.abs(error[seen]) <= WITHIN_95 * maps.vtec_sigma[seen]) >= 0.93
    level = np.array([one[here].mean() for one, here in zip(error, seen, strict=True)])[:, None, None]
    assert rms((error - level)[seen]) < 0.4


def test_sigmas_of_slopes_are_wide_at_a_wall_and_narrow_elsewhere() -> None:
    calm, storm = slopes_compared(CALM), slopes_compared(STORM)
    assert (storm["seen"] & (storm["true"] > 25.5)).sum() > 80
    assert all(honest_slope_sigmas(calm, storm).values())
    # Two fifths of these sigmas would be too narrow, three times as much too wide, and both would be noticed.
    narrow, wide = (honest_slope_sigmas(calm, storm, factor) for factor in (0.4, 3.0))
    assert not narrow["calm"] and not narrow["steep"] and not narrow["near"]
    assert not any(wide.values())
    # While a wall passes, most of the region that is far from it is still said to hold, and none of it wrongly.
    far = storm["seen"] & (storm["wall"] > 150.0)
    assert np.mean(storm["state"][far] == HOLDS) > 0.5
    assert not np.any((storm["state"] == HOLDS) & (storm["true"] > 8.0))


def test_the_sigma_of_a_ray_beside_the_wall_has_what_the_height_of_the_shell_does() -> None:
    products, known = day(STORM).products, truth_of(STORM)
    samples, rays, maps = products.samples, products.samples.rays, products.fields
    rows, true, wall = [], [], []
    for time in maps.times[70:99:2]:
        here = np.flatnonzero((rays.time == time) & (rays.elevation >= 20.0))
        lat, lon = rays.pierce_lat[here], rays.pierce_lon[here]
        rows.append(here)
        true.append(known.vertical_content(lat, lon, time))
        ahead = known.front.ahead_km(*weather.plane_of(lat, lon), float(weather.hours_since(time)))
        wall.append(np.abs(ahead) if known.front.at(time) is not None else np.full(len(here), np.inf))
    row = np.concatenate(rows)
    misplaced = displacement.of_rays(samples, maps, 50e3)[row]
    beside = (np.concatenate(wall) < 100.0) & (misplaced > 0.0)
    assert beside.sum() > 60
    off, sigma = (samples.vtec[row] - np.concatenate(true))[beside], samples.sigma[row][beside]
    without = np.sqrt(np.maximum(sigma**2 - misplaced[beside] ** 2, 0.0))
    held, held_without = (float(np.mean(np.abs(off) <= WITHIN_95 * one)) for one in (sigma, without))
    assert held >= 0.85 and held_without <= 0.7
    assert np.std(np.clip(off / sigma, -9.0, 9.0)) > 0.5


@pytest.mark.slow
@pytest.mark.parametrize("name", [CALM, RECOVERY])
def test_content_inside_the_network_on_calm_days(name: str) -> None:
    got = compared(name)
    inside = got["hull"] & (got["support"] > 0)
    assert inside.sum() > 2000
    assert rms(got["error"][inside]) <= 1.0
    assert np.mean(np.abs(got["error"][inside]) <= WITHIN_95 * got["sigma"][inside]) >= 0.93


@pytest.mark.slow
def test_content_inside_the_network_on_the_storm_day() -> None:
    got = compared(STORM)
    inside = got["hull"] & (got["support"] > 0)
    assert rms(got["error"][inside & (got["wall"] > 150.0)]) <= 1.5
    # Nearer no map between receivers 100 km apart can be right; there the sigma has to say so.
    near = inside & (got["wall"] <= 150.0)
    assert near.sum() > 100
    assert np.median(got["sigma"][near]) > 2.0 * np.median(got["sigma"][inside & (got["wall"] > 150.0)])
    assert 0.93 <= np.mean(np.abs(got["error"][near]) <= WITHIN_95 * got["sigma"][near]) <= 0.995


@pytest.mark.slow
@pytest.mark.parametrize("name", [CALM, STORM, RECOVERY])
def test_content_outside_the_network_where_it_is_seen(name: str) -> None:
    got = compared(name)
    outside = ~got["hull"] & (got["support"] > 0)
    far = outside & (got["wall"] > 150.0)
    assert rms(got["error"][far]) <= 1.5
    assert np.mean(np.abs(got["error"][outside]) <= WITHIN_95 * got["sigma"][outside]) >= 0.93
    near = outside & (got["wall"] <= 150.0)
    if near.any():
        assert 0.93 <= np.mean(np.abs(got["error"][near]) <= WITHIN_95 * got["sigma"][near]) <= 0.995


@pytest.mark.slow
def test_the_part_of_chance_has_honest_sigmas_on_the_calm_day() -> None:
    """Errors over sigmas without the common part lie between two bounds.

    From the day's mean error: it still holds how the common part changes from day to night, so it may be somewhat
    above one.  From each map's mean error: it lacks the part of the biases that is common to a map, so it is below one.
    """
    got = compared(CALM, with_leanings=False)
    inside = got["hull"] & (got["support"] > 0)
    of_map = np.array([error[here].mean() for error, here in zip(got["error"], inside, strict=True)])[:, None, None]
    for rows in (inside, ~got["hull"] & (got["support"] > 0)):
        from_day = ((got["error"] - got["error"][inside].mean()) / got["sigma"])[rows]
        from_map = ((got["error"] - of_map) / got["sigma"])[rows]
        assert np.std(from_map) < 1.0 < np.std(from_day) < 1.6
        assert np.mean(np.abs(from_day) <= WITHIN_95) >= 0.80
        assert np.mean(np.abs(from_map) <= WITHIN_95) >= 0.93


@pytest.mark.slow
@pytest.mark.parametrize(("name", "most_tecu"), [(CALM, 0.5), (STORM, 1.5), (RECOVERY, 0.5)])
def test_receivers_left_out_of_the_map(name: str, most_tecu: float) -> None:
    products = day(name).products
    found = left_out.check(products.samples, products.fields.lats, products.fields.lons, products.fields.times)
    known = truth_of(name)
    names = np.array(found.names)
    sound = np.ones(len(found), dtype=bool)
    for marker, start, end in known.faults:
        sound &= ~((names[found.receiver] == marker) & (found.time >= start) & (found.time <= end))
    assert sound.sum() > 5000
    assert rms(found.off[sound]) < most_tecu
    assert np.mean(np.abs(found.off[sound]) <= WITHIN_95 * found.sigma[sound]) >= 0.93
    told = products.origin.counts["receivers_left_out"]
    assert told["lines_of_sight"] == len(found)
