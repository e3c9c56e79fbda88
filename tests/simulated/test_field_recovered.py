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

from invented import weather
from skylag.ionosphere import field, geometry, left_out
from skylag.tables import Fields

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


def rms(values: np.ndarray) -> float:
    return float(np.sqrt(np.mean(values**2)))


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
    assert np.mean(np.abs(got["error"][near]) <= WITHIN_95 * got["sigma"][near]) >= 0.88


@pytest.mark.slow
@pytest.mark.parametrize("name", [CALM, STORM, RECOVERY])
def test_content_outside_the_network_where_it_is_seen(name: str) -> None:
    got = compared(name)
    outside = ~got["hull"] & (got["support"] > 0)
    far = outside & (got["wall"] > 150.0)
    assert rms(got["error"][far]) <= 1.5
    assert np.mean(np.abs(got["error"][outside]) <= WITHIN_95 * got["sigma"][outside]) >= 0.93


@pytest.mark.slow
def test_the_part_of_chance_has_honest_sigmas_on_the_calm_day() -> None:
    """Differences from the day's mean error over sigmas without the common part: a unit normal, nearly."""
    got = compared(CALM, with_leanings=False)
    for region in (got["hull"], ~got["hull"]):
        rows = region & (got["support"] > 0)
        off = got["error"][rows] - got["error"][got["hull"]].mean()
        z = off / got["sigma"][rows]
        assert 0.8 < np.std(z) < 1.3, np.std(z)
        assert 0.85 <= np.mean(np.abs(z) <= WITHIN_95) <= 0.99, np.mean(np.abs(z) <= WITHIN_95)


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
