"""The shape of the plasmasphere against the integral written out, and its published ingredients."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.interpolate import CubicSpline
from tests.ionosphere import ray_world

from skylag.ionosphere.plasmasphere import BASE_HEIGHT_M, TOP_HEIGHT_M, along_rays, slant_shape, vertical_shape

RADIUS = 6.371e6
POLE = np.radians((80.589, -72.680))


def density(position: np.ndarray, exponent: float) -> np.ndarray:
    """Electrons per cubic metre: 10^(3.9043 - 0.3145 L) per cm^3 at the equator (Carpenter and Anderson 1992, from
    memory), (R L / r)^exponent toward the feet, and a plasmapause at L = 4.5."""
    r = np.linalg.norm(position, axis=-1)
    axis = np.array([np.cos(POLE[0]) * np.cos(POLE[1]), np.cos(POLE[0]) * np.sin(POLE[1]), np.sin(POLE[0])])
    sine = position @ axis / r
    shell = r / RADIUS / np.maximum(1 - sine**2, 1e-3)
    equator = 10 ** (3.9043 - 0.3145 * np.minimum(shell, 20)) * 1e6
    return equator * (shell * RADIUS / r) ** exponent / (1 + np.exp(np.clip((shell - 4.5) / 0.3, -50, 50)))


def written_out(lat: float, lon: float, elevation: float, azimuth: float, exponent: float = 1.0) -> float:
    """The integral along a straight ray in 40 000 equal steps [TECU]."""
    la, lo, el, az = np.radians([lat, lon, elevation, azimuth])
    up = np.array([np.cos(la) * np.cos(lo), np.cos(la) * np.sin(lo), np.sin(la)])
    north = np.array([-np.sin(la) * np.cos(lo), -np.sin(la) * np.sin(lo), np.cos(la)])
    east = np.array([-np.sin(lo), np.cos(lo), 0.0])
    way = np.sin(el) * up + np.cos(el) * (np.cos(az) * north + np.sin(az) * east)

    def reach(height: float) -> float:
        return float(-RADIUS * np.sin(el) + np.sqrt((RADIUS * np.sin(el)) ** 2 + 2 * RADIUS * height + height**2))

    s = np.linspace(reach(BASE_HEIGHT_M), reach(TOP_HEIGHT_M), 40_001)
    return float(np.trapezoid(density(RADIUS * up + s[:, None] * way, exponent), s) / 1e16)


@pytest.mark.parametrize("lat, lon", [(-40.0, 146.0), (0.0, 20.0), (52.0, 5.0), (-70.0, -60.0)])
@pytest.mark.parametrize("elevation, azimuth", [(90.0, 0.0), (40.0, 350.0), (15.0, 120.0), (15.0, 200.0)])
def test_same_as_the_integral_written_out(lat: float, lon: float, elevation: float, azimuth: float) -> None:
    for exponent in (1.0, 1.5):
        one = slant_shape(*(np.array([v]) for v in (lat, lon, elevation, azimuth)), exponent)
        # Fourteen nodes blur the edge of the plasmapause by some hundredths of a TECU.
        assert one[0] == pytest.approx(written_out(lat, lon, elevation, azimuth, exponent), abs=0.06, rel=0.02)


def test_one_sided_toward_the_equator() -> None:
    """From middle latitudes, rays toward the equator hold more than rays toward the pole."""
    at = (np.array([-40.0]), np.array([146.0]), np.array([20.0]))
    assert slant_shape(*at, np.array([0.0]))[0] > 2 * slant_shape(*at, np.array([180.0]))[0]
    north = (np.array([52.0]), np.array([5.0]), np.array([20.0]))
    assert slant_shape(*north, np.array([180.0]))[0] > 2 * slant_shape(*north, np.array([0.0]))[0]


def test_thins_away_from_the_magnetic_equator() -> None:
    lats = np.array([10.0, 25.0, 40.0, 55.0, 70.0])  # at 110 deg east the dipole's equator lies at 9 deg north
    assert np.all(np.diff(vertical_shape(lats, np.full(5, 110.0))) < 0)


def test_along_rays_interpolates_finely(rng: np.random.Generator) -> None:
    rays = ray_world.make(rng, ((ray_world.GPS,),)).rays
    # One pass, drawn finely enough for epochs of half a minute.
    pass_ = rays.where(rays.arc == rays.arc[np.argmax(rays.elevation)])
    seconds = (pass_.time - pass_.time[0]).astype("timedelta64[s]").astype(float)
    fine = np.arange(0.0, seconds[-1], 30.0)
    columns = {name: CubicSpline(seconds, getattr(pass_, name))(fine)
               for name in ("elevation", "pierce_lat", "pierce_lon")}  # fmt: skip
    azimuth = np.mod(CubicSpline(seconds, np.unwrap(np.radians(pass_.azimuth)))(fine) * 180 / np.pi, 360.0)
    blank = pass_.where(np.zeros(len(fine), dtype=int))
    rays = replace(blank, **columns, azimuth=azimuth, time=pass_.time[0] + (fine * 1e9).astype("timedelta64[ns]"))
    lat, lon = np.full(len(rays), -38.1), np.full(len(rays), 142.4)
    layer = along_rays(rays, lat, lon)
    for exponent in (0.0, 0.4, 1.0, 1.5, 2.0):
        slant, slant_change = layer.slant(exponent)
        above, above_change = layer.above(exponent)
        exact = slant_shape(lat, lon, rays.elevation, rays.azimuth, exponent)
        assert slant == pytest.approx(exact, abs=0.015, rel=0.01)
        overhead = slant_shape(rays.pierce_lat, rays.pierce_lon, np.full(len(rays), 90.0), 0.0 * lat, exponent)
        assert above == pytest.approx(overhead, abs=0.03, rel=0.01)
        steeper = slant_shape(lat, lon, rays.elevation, rays.azimuth, exponent + 0.01)
        assert slant_change == pytest.approx((steeper - exact) / 0.01, abs=0.03, rel=0.05)
        assert np.all(above_change > 0)
    few = layer.where(np.array([3, 5]))
    assert few.slant(0.7)[0] == pytest.approx(layer.slant(0.7)[0][[3, 5]])
