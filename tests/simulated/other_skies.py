"""Invented plasmaspheres outside the family of the estimator's model, laid over the invented dense layers.

Two kinds: densities that follow field lines, with any growth toward the feet, fall with L, and plasmapause; and
hydrogen in diffusive balance on spheres around the Earth, with any scale height, thinning toward the poles, which
follows no field line at all.  Both may have a topside tail beside them that no thin shell knows, and waves and a
trough in the dense layer that no polynomial follows.  Sizes are drawn by the content straight up over the magnetic
equator above 1000 km, 4 TECU give or take a factor of 1.6 (from memory of what altimeters leave above them).
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from skylag.ionosphere import geometry
from skylag.tables import Floats, Rays

RADIUS_M = 6.371e6
POLE = np.radians((80.6, -72.7))
_NODES = np.polynomial.legendre.leggauss(24)


@dataclass(frozen=True)
class Sight:
    """Points of rays from 500 km up to the satellites, all (rays, nodes).

    r, line  in Earth radii: the point's, and where its field line crosses the magnetic equator; sine of magnetic
    latitude; local time [h]; path [m] of each node
    """

    r: Floats
    line: Floats
    sine: Floats
    local: Floats
    path: Floats


def sight(lat: Floats, lon: Floats, elevation: Floats, azimuth: Floats, hours: Floats) -> Sight:
    """The points of straight rays that start on the ground at places [deg] at hours of the day."""
    start = geometry.earth_fixed(lat, lon, np.zeros(len(lat)))
    la, lo, e, a = (np.radians(v) for v in (lat, lon, elevation, azimuth))
    up = np.stack([np.cos(la) * np.cos(lo), np.cos(la) * np.sin(lo), np.sin(la)], axis=1)
    north = np.stack([-np.sin(la) * np.cos(lo), -np.sin(la) * np.sin(lo), np.cos(la)], axis=1)
    east = np.stack([-np.sin(lo), np.cos(lo), np.zeros(len(lo))], axis=1)
    way = np.sin(e)[:, None] * up
    way += np.cos(e)[:, None] * (np.sin(a)[:, None] * east + np.cos(a)[:, None] * north)
    along = np.sum(start * way, axis=1)
    closest = np.sum(start**2, axis=1) - along**2
    low, high = np.log(RADIUS_M + 5e5), np.log(RADIUS_M + 2.02e7)
    r = np.exp(0.5 * (high - low) * _NODES[0] + 0.5 * (high + low))
    reach = np.sqrt(r**2 - closest[:, None])
    at = start[:, None, :] + (reach - along[:, None])[..., None] * way[:, None, :]
    axis = np.array([np.cos(POLE[0]) * np.cos(POLE[1]), np.cos(POLE[0]) * np.sin(POLE[1]), np.sin(POLE[0])])
    sine = at @ axis / r
    local = np.mod(np.degrees(np.arctan2(at[..., 1], at[..., 0])) / 15.0 + hours[:, None], 24.0)
    path = 0.5 * (high - low) * _NODES[1] * r * r / reach
    across = np.broadcast_to(r / RADIUS_M, reach.shape)
    return Sight(across, across / np.maximum(1.0 - sine**2, 0.01), sine, local, path)


@dataclass(frozen=True)
class Sky:
    """One invented sky above the dense layers.

    foot, fall     of a plasmasphere along field lines: growth toward the feet, and Earth radii of L in which the
                   density at the equator falls by e; foot None: hydrogen on spheres
    scale_km, thinning  of hydrogen on spheres: scale height at 1000 km, and power of the cosine of magnetic latitude
    pause, width   of the plasmapause [Earth radii]; daily: share by which the density varies with local time
    equator_tecu   content straight up above 1000 km over the magnetic equator
    tail_tecu, tail_km  topside tail: content straight up at its highest, scale height
    waves          (share of the dense layer, rad/km, heading, rad/h, phase) of each
    trough         depth, degrees poleward, width
    """

    foot: float | None = 1.0
    fall: float = 1.2
    scale_km: float = 2500.0
    thinning: float = 2.0
    pause: float = 4.5
    width: float = 0.35
    daily: float = 0.1
    equator_tecu: float = 4.0
    tail_tecu: float = 0.0
    tail_km: float = 300.0
    waves: tuple[tuple[float, ...], ...] = ()
    trough: tuple[float, float, float] = (0.0, 5.0, 3.0)

    def _shape(self, at: Sight) -> Floats:
        height = (at.r - 1.0) * 6371.0
        rise = 1.0 - np.exp(-((np.maximum(height - 450.0, 0.0) / 700.0) ** 2))
        inside = 0.03 + 0.97 * 0.5 * (1.0 - np.tanh((at.line - self.pause) / self.width))
        if self.foot is not None:
            shape = np.exp(-(at.line - 2.0) / self.fall) * np.minimum(at.line / at.r, 50.0) ** self.foot
        else:
            base = 1.0 + 1000.0 / 6371.0  # gravity fades with height, so the scale height grows
            shape = np.exp(-base * 6371.0 * (1.0 - base / at.r) / self.scale_km)
            shape = shape * np.maximum(1.0 - at.sine**2, 0.0) ** (0.5 * self.thinning)
        return np.asarray(shape * rise * inside * (1.0 + self.daily * np.cos(2 * np.pi * (at.local - 15.0) / 24.0)))

    @cached_property
    def _unit(self) -> float:
        """What the shape is to be multiplied by [1e16 per cubic metre]."""
        low, high = np.log(1.0 + 1000.0 / 6371.0), np.log(1.0 + 20_200.0 / 6371.0)
        r = np.exp(0.5 * (high - low) * _NODES[0] + 0.5 * (high + low))[None, :]
        path = 0.5 * (high - low) * _NODES[1] * r * RADIUS_M
        over = Sight(r, r, np.zeros_like(r), np.full_like(r, 9.0), path)
        return self.equator_tecu / float(np.sum(self._shape(over) * path))

    def content(self, at: Sight) -> Floats:
        """Content [TECU] along rays above 500 km."""
        tail = np.exp(-np.maximum((at.r - 1.0) * 6371.0 - 500.0, 0.0) / self.tail_km) / (self.tail_km * 1e3)
        tail = self.tail_tecu * tail * (1.0 + 0.5 * np.cos(2 * np.pi * (at.local - 14.0) / 24.0)) / 1.5
        return np.asarray(np.sum((self._unit * self._shape(at) + tail) * at.path, axis=1))

    def ripple(self, lat: Floats, lon: Floats, hours: Floats, middle: tuple[float, float], level: float) -> Floats:
        """Vertical content [TECU] of waves and trough in a sheet, at places; `level` of the dense layer."""
        x, y = (lon - middle[1]) * 111.2 * np.cos(np.radians(middle[0])), (lat - middle[0]) * 111.2
        local = 2 * np.pi * (hours + lon / 15.0) / 24.0
        share = np.zeros(len(lat))
        for size, k, heading, turn, phase in self.waves:
            share += size * np.sin(k * (x * np.sin(heading) + y * np.cos(heading)) - turn * hours + phase)
        depth, away, width = self.trough
        poleward = np.sign(middle[0]) * (lat - middle[0])
        share -= depth * 0.5 * (1.0 + np.cos(local - np.pi / 6)) * 0.5 * (1.0 + np.tanh((poleward - away) / width))
        return np.asarray(share * level * (9.6 + 22.4 * np.exp(1.5 * (np.cos(local - np.pi * 14 / 12) - 1.0))))


def drawn(rng: np.random.Generator, number: int) -> Sky:
    """A sky: by turns along field lines with feet 0, 1, 2 and on spheres, every second pair with a ragged layer."""
    along = number % 2 == 0
    ragged = number % 4 >= 2
    return Sky(
        foot=float(rng.integers(0, 3)) if along else None, fall=rng.uniform(0.8, 2.0),
        scale_km=rng.uniform(800.0, 5000.0), thinning=rng.uniform(0.0, 8.0), pause=rng.uniform(3.0, 6.0),
        width=rng.uniform(0.1, 0.5), daily=rng.uniform(0.0, 0.3), equator_tecu=4.0 * np.exp(rng.normal(0.0, 0.5)),
        tail_tecu=rng.uniform(0.0, 5.0), tail_km=rng.uniform(150.0, 600.0),
        waves=tuple(
            (rng.uniform(0.01, 0.06), 2 * np.pi / rng.uniform(800.0, 3000.0), rng.uniform(0.0, 2 * np.pi),
             2 * np.pi / rng.uniform(2.0, 12.0), rng.uniform(0.0, 2 * np.pi)) for _ in range(6 * ragged)
        ),
        trough=(rng.uniform(0.0, 0.5) if ragged else 0.0, rng.uniform(-2.0, 8.0), rng.uniform(1.5, 4.0)),
    )  # fmt: skip


SHEET_M = 320e3


@dataclass(frozen=True)
class Looks:
    """What a table of rays needs of any sky, worked out once: along the rays, and straight up at the pierce points of
    some high ones (`high`, row numbers)."""

    rays: Rays
    along: Sight
    above: Sight
    high: np.ndarray
    hours: Floats
    sheet: tuple[Floats, Floats]
    middle: tuple[float, float]

    @staticmethod
    def of(rays: Rays) -> "Looks":
        """Of rays of one network day."""
        hours = (rays.time - rays.time.min().astype("datetime64[D]")).astype("timedelta64[ms]").astype(float) / 3.6e6
        places = np.array([geometry.geodetic(np.asarray(r.position_m))[:2] for r in rays.receivers])
        lat, lon = places[rays.receiver].T
        high = np.flatnonzero(rays.elevation > 60.0)[::12]
        overhead = np.full(len(high), 90.0)
        return Looks(
            rays, sight(lat, lon, rays.elevation, rays.azimuth, hours),
            sight(rays.pierce_lat[high], rays.pierce_lon[high], overhead, 0.0 * overhead, hours[high]), high, hours,
            geometry.pierce(lat, lon, rays.elevation, rays.azimuth, SHEET_M), tuple(places.mean(axis=0)),
        )  # fmt: skip

    def slant(self, sky: Sky, level: float) -> Floats:
        """Slant content [TECU] of a sky along all rays."""
        waves = sky.ripple(*self.sheet, self.hours, self.middle, level)
        return sky.content(self.along) + geometry.mapping(self.rays.elevation, SHEET_M) * waves

    def vertical(self, sky: Sky, level: float) -> Floats:
        """Vertical content [TECU] of a sky at the pierce points of the high rays."""
        lat, lon = self.rays.pierce_lat[self.high], self.rays.pierce_lon[self.high]
        return sky.content(self.above) + sky.ripple(lat, lon, self.hours[self.high], self.middle, level)
