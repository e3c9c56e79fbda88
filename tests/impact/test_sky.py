"""Satellites in view, from orbits and from the directions in which receivers saw them."""

import numpy as np
import pytest

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
