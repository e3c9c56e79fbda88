"""The sigma of a slanting ray where the map is steep: slope times the way that its content may be misplaced."""

from dataclasses import replace

import numpy as np
import pytest
from tests.conftest import Evidence
from tests.ionosphere.test_field import LATS, LONS, epochs, sky

from skylag.ionosphere import displacement
from skylag.ionosphere.geometry import pierce
from skylag.tables import Fields, Samples


def flat(x: np.ndarray, y: np.ndarray, t: np.ndarray) -> np.ndarray:
    return 20.0 + 0.0 * x


def steep(samples: Samples, east: float, north: float) -> Fields:
    """Maps that are equally steep everywhere [mm/km]."""
    times = epochs(0.4)
    shape = (len(times), len(LATS), len(LONS))
    layers = {name: np.zeros(shape, dtype=np.float32) for name in Fields.LAYERS}
    layers |= {"slope_east": np.full(shape, east, np.float32), "slope_north": np.full(shape, north, np.float32),
               "support": np.full(shape, 3, np.uint16), "state": np.zeros(shape, np.uint8)}  # fmt: skip
    return Fields(times, LATS, LONS, **layers)


def test_how_far_a_pierce_point_moves(evidence: Evidence) -> None:
    """Against the difference of two pierce points, and against height over tangent of the elevation near the zenith."""
    for elevation, azimuth in ((12.0, 30.0), (35.0, 200.0), (70.0, 290.0)):
        low, high = (pierce(-39.0, 145.0, elevation, azimuth, height) for height in (400e3, 450e3))
        north = (high[0] - low[0]) * 111.195
        east = (high[1] - low[1]) * 111.195 * np.cos(np.radians(low[0]))
        got = float(displacement.pierce_moves_km(elevation, 400e3, 50e3))
        assert got == pytest.approx(float(np.hypot(north, east)), rel=0.01)
    evidence("way of a pierce point at 80 degrees when the shell stands 50 km higher", unit="km",
             source="50 km over tan of the elevation, on the ground R/(R+h) of it; plane geometry", expected=8.3,
             got=float(displacement.pierce_moves_km(80.0, 400e3, 50e3)), tolerance=0.7)  # fmt: skip


def test_slope_along_the_ray_counts_and_only_where_it_is_known() -> None:
    rays, samples = sky(flat, hours=0.4)
    maps = steep(samples, east=0.0, north=50.0)
    got = displacement.of_rays(samples, maps, 50e3)
    way = displacement.pierce_moves_km(rays.elevation, 400e3, 50e3)
    inside = (np.abs(rays.pierce_lat - LATS.mean()) <= 3.25) & (np.abs(rays.pierce_lon - LONS.mean()) <= 3.75)
    in_time = rays.time <= maps.times[-1] + np.timedelta64(150, "s")
    known = inside & in_time
    assert 0.2 < known.mean() < 1.0
    expected = np.abs(50.0 * np.cos(np.radians(rays.azimuth)) * way) / 162.372448
    np.testing.assert_allclose(got[known], expected[known], rtol=1e-5)
    assert np.all(got[~known] == 0.0)
    wider = displacement.widened(samples, maps, 50e3)
    np.testing.assert_allclose(wider.sigma, np.hypot(samples.sigma, got))
    np.testing.assert_array_equal(wider.vtec, samples.vtec)
    unseen = replace(maps, support=np.zeros_like(maps.support))
    assert not displacement.of_rays(samples, unseen, 50e3).any()
    blind = replace(maps, slope_north=np.full_like(maps.slope_north, np.nan))
    assert not displacement.of_rays(samples, blind, 50e3).any()


def test_longitudes_go_round() -> None:
    _, samples = sky(flat, hours=0.4)
    maps = steep(samples, 10.0, 20.0)
    turned = replace(maps, lons=maps.lons + 360.0)
    np.testing.assert_array_equal(
        displacement.of_rays(samples, maps, 50e3), displacement.of_rays(samples, turned, 50e3)
    )
