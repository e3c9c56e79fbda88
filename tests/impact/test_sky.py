"""Satellites in view, from orbits and from the directions in which receivers saw them."""

import numpy as np
import pytest
from tests.conftest import Evidence

from invented import network
from skylag import chain
from skylag.errors import NotEnough
from skylag.impact import sky
from skylag.ionosphere import geometry
from skylag.tables import concatenate


@pytest.fixture(scope="module")
def small() -> tuple:
    world = network.small_world()
    choices = chain.Choices()
    days = [chain.receiver_day(one, [world.ephemerides], choices, 400e3) for one in world.signals]
    return world, concatenate([one.rays for one in days])


def test_directions_give_the_places_of_satellites(small: tuple) -> None:
    """Within a tenth of a degree of the orbits' own directions, 300 km from the nearest receiver."""
    world, rays = small
    times = np.unique(rays.time)[::20]
    seen = sky.from_rays(rays, times)
    true = sky.from_orbits([world.ephemerides], seen.satellites, times)
    lat, lon, _ = geometry.geodetic(np.array(rays.receivers[0].position_m))
    elevation, azimuth = seen.look(float(lat) - 2.0, float(lon) + 2.0)
    true_elevation, true_azimuth = true.look(float(lat) - 2.0, float(lon) + 2.0)
    known = np.isfinite(elevation)
    assert known.sum() > 100
    assert np.abs(elevation - true_elevation)[known].max() < 0.1
    turn = (azimuth - true_azimuth + 180.0) % 360.0 - 180.0
    assert (np.abs(turn) * np.cos(np.radians(true_elevation)))[known].max() < 0.1


def test_only_the_systems_asked_for(small: tuple) -> None:
    _, rays = small
    times = np.unique(rays.time)[:5]
    assert {str(name)[0] for name in sky.from_rays(rays, times, "E").satellites} == {"E"}
    both = sky.from_rays(rays, times)
    assert {str(name)[0] for name in both.satellites} == {"E", "G"}
    assert {str(name)[0] for name in both.of("G").satellites} == {"G"}


def test_no_lines_of_sight_is_said(small: tuple) -> None:
    _, rays = small
    with pytest.raises(NotEnough):
        sky.from_rays(rays.where(np.zeros(len(rays), dtype=bool)), np.unique(rays.time)[:1])


def test_dilution_of_a_known_geometry() -> None:
    """One satellite overhead and three at the horizon, 120 degrees apart: the textbook optimum of four.

    By symmetry east and north have variance 2/3 each; up and clock follow from a 2 by 2 system: 4/3 and 1/3.
    """
    elevation = np.array([[90.0, 0.0, 0.0, 0.0]])
    azimuth = np.array([[0.0, 0.0, 120.0, 240.0]])
    found = sky.spread(elevation, azimuth, 0.0)
    assert found.count.tolist() == [4]
    assert found.horizontal[0] == pytest.approx(np.sqrt(4 / 3))
    assert found.vertical[0] == pytest.approx(np.sqrt(4 / 3))
    assert found.position[0] == pytest.approx(np.sqrt(8 / 3))


def test_below_the_mask_nothing_counts() -> None:
    found = sky.spread(np.array([[90.0, 10.0, 10.0, 10.0]]), np.array([[0.0, 0.0, 120.0, 240.0]]), 15.0)
    assert found.count.tolist() == [1]
    assert np.isnan(found.position[0])


def test_the_nominal_constellation_keeps_what_is_promised_of_it(rng: np.random.Generator, evidence: Evidence) -> None:
    """Dilution of position over the whole Earth and a day, above 5 degrees."""
    world = sky.nominal()
    places = zip(np.degrees(np.arcsin(rng.uniform(-1, 1, 60))), rng.uniform(-180, 180, 60), strict=True)
    good = [sky.spread(*world.look(lat, lon), 5.0).position <= 6.0 for lat, lon in places]
    source = "GPS SPS Performance Standard: dilution of position of 6 or less, 98 % of the globe at least (from memory)"
    evidence("share of globe and day with dilution of position beyond 6, nominal constellation", source=source,
             expected=0.02, got=float(1 - np.mean(good)), tolerance=0.0, at_most=True)  # fmt: skip
    assert min(sky.spread(*world.look(lat, 10.0), 5.0).count.min() for lat in range(-90, 91, 15)) >= 4


def test_the_nominal_constellation_goes_round_as_satellites_do() -> None:
    """Height, inclination, two turns in a sidereal day, planes 60 degrees apart."""
    world = sky.nominal(60.0)
    radius = np.linalg.norm(world.position_m, axis=-1)
    assert radius == pytest.approx(26_559.7e3)
    highest = np.degrees(np.arcsin(np.abs(world.position_m[..., 2]).max(axis=0) / 26_559.7e3))
    assert highest == pytest.approx(55.0, abs=0.2)
    turn = 2 * np.pi * np.arange(len(world.times)) / len(world.times)  # undo the Earth's own turn
    x, y, z = np.moveaxis(world.position_m, -1, 0)
    fixed = np.stack([x * np.cos(turn)[:, None] - y * np.sin(turn)[:, None],
                      x * np.sin(turn)[:, None] + y * np.cos(turn)[:, None], z], axis=-1)  # fmt: skip
    assert fixed[0] == pytest.approx(fixed[len(fixed) // 2], abs=1e3)
    normal = np.cross(fixed[0], fixed[60])
    node = np.degrees(np.arctan2(normal[:, 0], -normal[:, 1])).reshape(6, 4)
    assert np.ptp(node, axis=1) == pytest.approx(0, abs=1e-6)
    assert np.diff(node[:, 0]) % 360 == pytest.approx(60.0, abs=1e-6)
