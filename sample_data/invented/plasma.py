"""Electron density in three dimensions, and its integrals along straight rays and upright columns.

Density = E layer + F layer (skewed Chapman-like profiles whose peak and height follow latitude, local time and the
scenario), up to 2000 km; plus a plasmasphere aligned with a tilted dipole, from 500 km to the satellites; plus the
plume of the storm, an upright wall of its own profile.  The irregular patch is a thin sheet.  All forms are invented
for this purpose: none is a published model.  Points are Earth-fixed; heights are above the WGS 84 ellipsoid.

Left out on purpose: bending of rays, the second-order terms of refraction, and phase wind-up.
"""

from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from invented import weather
from invented.places import WGS84_A_M, WGS84_F, ecef
from invented.weather import Front, Patch, Scenario

Floats = npt.NDArray[np.float64]

TOP_OF_LAYERS_KM = 2000.0
BASE_OF_PLASMASPHERE_KM = 500.0
GPS_HEIGHT_KM = 20_181.6  # the usual upper end of a vertical column

# Height segments [km] and Gauss nodes in each: dense where the layers are sharp.
_LAYER_SEGMENTS = ((80.0, 140.0, 9), (140.0, 250.0, 8), (250.0, 450.0, 11), (450.0, 850.0, 8), (850.0, 2000.0, 5))
_PLASMASPHERE_NODES = ((500.0, 2000.0, 7), (2000.0, np.inf, 11))
_PLUME_SEGMENTS = ((160.0, 320.0, 20), (320.0, 470.0, 24), (470.0, 720.0, 24), (720.0, 1300.0, 14))


@lru_cache(maxsize=16)
def _layer_nodes(refine: int) -> tuple[Floats, Floats]:
    heights, weights = [], []
    for low, high, count in _LAYER_SEGMENTS:
        x, w = np.polynomial.legendre.leggauss(count * refine)
        heights.append(0.5 * (high - low) * x + 0.5 * (high + low))
        weights.append(0.5 * (high - low) * w)
    return np.concatenate(heights), np.concatenate(weights)


@lru_cache(maxsize=16)
def _plume_nodes(refine: int) -> tuple[Floats, Floats]:
    """Heights [km] and weights (sum 1) of the plume's upright profile, a Chapman-like one with its peak at 370 km."""
    heights, weights = [], []
    for low, high, count in _PLUME_SEGMENTS:
        x, w = np.polynomial.legendre.leggauss(count * refine)
        heights.append(0.5 * (high - low) * x + 0.5 * (high + low))
        weights.append(0.5 * (high - low) * w)
    h, weight = np.concatenate(heights), np.concatenate(weights)
    scale = np.where(h < 370.0, 45.0, 45.0 + 35.0 * (1.0 - np.exp(-(h - 370.0) / 120.0)))
    z = (h - 370.0) / scale
    weight = weight * np.exp(1.0 - z - np.exp(-np.maximum(z, -8.0)))
    return h, weight / weight.sum()


@dataclass(frozen=True)
class Wave:
    """A travelling disturbance: relative amplitude, wave numbers [rad/km] east, north, up, and [rad/h]."""

    amplitude: float
    east: float
    north: float
    up: float
    turn: float
    phase: float


def _waves(seed: int) -> tuple[Wave, ...]:
    rng = np.random.default_rng([seed, 17])
    waves = []
    for _ in range(5):
        length = rng.uniform(160.0, 380.0)
        heading = np.radians(rng.uniform(-50.0, 50.0))  # mostly equatorward, as by day
        period = rng.uniform(0.35, 0.9)
        k = 2 * np.pi / length
        amplitude, phase = rng.uniform(0.002, 0.006), rng.uniform(0, 2 * np.pi)
        turn = -2 * np.pi / period
        waves.append(Wave(amplitude, k * np.sin(heading), k * np.cos(heading), k * 0.7, turn, phase))
    return tuple(waves)


@dataclass(frozen=True)
class Ionosphere:
    """The invented ionosphere of a scenario.  Times are hours since the first midnight, content is TECU."""

    scenario: Scenario = field(default_factory=Scenario)
    seed: int = 2031
    front: Front = field(init=False)
    patch: Patch = field(init=False)
    waves: tuple[Wave, ...] = field(init=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "front", Front(self.scenario))
        object.__setattr__(self, "patch", Patch(self.scenario, self.seed))
        object.__setattr__(self, "waves", _waves(self.seed))

    # ------------------------------------------------------------------------------------------------ densities

    def layers(self, points_m: Floats, hours: Floats) -> Floats:
        """Electrons per cubic metre of the E and F layers at Earth-fixed points (..., 3); hours broadcast."""
        r = np.sqrt((points_m**2).sum(axis=-1))
        direction = points_m / r[..., None]
        sine = direction[..., 2]
        height = (r - WGS84_A_M * (1.0 - WGS84_F * sine**2)) / 1e3
        lat = np.degrees(np.arcsin(sine))
        lon = np.arctan2(points_m[..., 1], points_m[..., 0])
        sun = 2 * np.pi * hours / 24.0 + lon - np.pi  # hour angle, 0 at local noon
        # F layer: peak density follows the sun with a delay of two hours, quick to rise and slow to fall.
        late = sun - 2 * np.pi * 2.2 / 24.0
        late = late - 0.35 * (1.0 - np.cos(late))
        day = np.exp(1.55 * (np.cos(late) - 1.0))
        north = np.exp(0.42 * np.tanh(0.055 * (lat + 40.0)))
        peak = 7.9e11 * (0.20 + 0.80 * day) * north * weather.level_of(hours) * self.scenario.level
        peak_km = 292.0 + 38.0 * np.cos(sun - 2 * np.pi * 13.0 / 24.0) - 0.9 * (lat + 40.0) + weather.lift_of(hours)
        above = np.maximum(height - peak_km, 0.0)
        scale = np.where(height < peak_km, 38.0, 38.0 + 30.0 * (1.0 - np.exp(-above / 100.0)) + 0.012 * above)
        z = np.maximum((height - peak_km) / scale, -8.0)
        dense = peak * np.exp(0.5 * (1.0 - z - np.exp(-z)))
        # E layer: under the sun's control, a trace of it by night.
        declination = np.radians(-3.4)
        cosine = np.sin(declination) * sine + np.cos(declination) * np.sqrt(1.0 - sine**2) * np.cos(sun)
        lit = 0.5 * (cosine + np.sqrt(cosine**2 + 0.02))  # smooth at sunrise
        z = np.maximum((height - 112.0) / np.where(height < 112.0, 7.5, 10.0), -8.0)
        low = (1.25e11 * np.sqrt(lit) + 2e9) * np.exp(0.5 * (1.0 - z - np.exp(-z)))
        if self.scenario.waves > 0.0:
            x, y = weather.plane_km(direction)
            ripple = np.zeros(np.broadcast_shapes(np.shape(r), np.shape(hours)))
            for w in self.waves:
                ripple = ripple + w.amplitude * np.sin(
                    w.east * x + w.north * y + w.up * (height - 300.0) + w.turn * hours + w.phase
                )
            dense = dense * (1.0 + self.scenario.waves * ripple)
        return np.where(height <= TOP_OF_LAYERS_KM, dense + low, 0.0)

    def plasmasphere(self, points_m: Floats, hours: Floats) -> Floats:
        """Electrons per cubic metre of the plasmasphere at Earth-fixed points (..., 3)."""
        r = np.sqrt((points_m**2).sum(axis=-1))
        # A tilted dipole whose northern pole is at 80.9 N, 72.8 W (the centred dipole about 2025; from memory).
        lat, lon = np.radians(80.9), np.radians(-72.8)
        along = (
            np.cos(lat) * np.cos(lon) * points_m[..., 0]
            + np.cos(lat) * np.sin(lon) * points_m[..., 1]
            + np.sin(lat) * points_m[..., 2]
        ) / r
        radius = r / 6.371e6
        across = np.maximum(1.0 - along**2, 0.01)
        line = radius / across  # where the field line crosses the magnetic equator, in Earth radii
        edge = weather.edge_of(hours)
        equator = 2.4e9 * np.exp(-(line - 2.0) / 1.2) + 1.2e7
        equator = equator * (0.03 + 0.97 * 0.5 * (1.0 - np.tanh((line - edge) / 0.35)))
        height = (radius - 1.0) * 6371.0
        # Denser toward the foot of a field line, and fading into the layers below.
        foot = line / radius
        rise = 1.0 - np.exp(-((np.maximum(height - 450.0, 0.0) / 700.0) ** 2))
        lon_here = np.arctan2(points_m[..., 1], points_m[..., 0])
        daily = 1.0 + 0.10 * np.cos(2 * np.pi * (hours - 15.0) / 24.0 + lon_here)
        return np.asarray(self.scenario.plasmasphere * equator * foot * rise * daily)

    # ------------------------------------------------------------------------------------------------ integrals

    def slant(
        self, receiver_m: npt.ArrayLike, satellites_m: Floats, hours: Floats, *, refine: int = 1, chunk: int = 1200
    ) -> Floats:
        """Slant content [TECU] along straight rays from one receiver to satellite positions (N, 3) at hours (N,).

        refine  factor on the number of quadrature nodes, to show convergence
        """
        total = np.empty(len(satellites_m))
        receiver = np.asarray(receiver_m, dtype=np.float64)
        for first in range(0, len(satellites_m), chunk):
            part = slice(first, first + chunk)
            total[part] = self._slant(receiver, satellites_m[part], hours[part], refine)
        return total

    def _slant(self, receiver: Floats, satellites: Floats, hours: Floats, refine: int) -> Floats:
        ray = satellites - receiver
        length = np.sqrt((ray**2).sum(axis=-1))
        unit = ray / length[:, None]
        along = unit[:, 0] * receiver[0] + unit[:, 1] * receiver[1] + unit[:, 2] * receiver[2]
        radius = float(np.sqrt((receiver**2).sum()))
        closest = radius**2 - along**2  # square of the ray's distance from the Earth's centre
        sine = receiver[2] / radius
        sea = WGS84_A_M * (1.0 - WGS84_F * sine**2)
        top = np.sqrt((satellites**2).sum(axis=-1))

        def points(r: Floats) -> tuple[Floats, Floats]:
            """Points at radii (N, K) on the rays, and path over radius there."""
            reach = np.sqrt(r**2 - closest[:, None])
            at = receiver + (reach - along[:, None])[..., None] * unit[:, None, :]
            return at, r / reach

        heights, weights = _layer_nodes(refine)
        r = np.broadcast_to(sea + heights * 1e3, (len(ray), len(heights)))
        at, stretch = points(r)
        total = (self.layers(at, hours[:, None]) * stretch * weights).sum(axis=-1) * 1e3 / 1e16

        for low, high, count in _PLASMASPHERE_NODES:
            x, w = np.polynomial.legendre.leggauss(count * refine)
            start = np.log(sea + low * 1e3)
            end = np.log(sea + high * 1e3) * np.ones(len(ray)) if np.isfinite(high) else np.log(top)
            half = 0.5 * (end - start)
            r = np.exp(half[:, None] * x + (start + half)[:, None])
            at, stretch = points(r)
            total += (self.plasmasphere(at, hours[:, None]) * stretch * r * w).sum(axis=-1) * half / 1e16

        if self.scenario.front and (weather.plume_of(hours) > 0.0).any():
            heights, weights = _plume_nodes(refine)
            r = np.broadcast_to(sea + heights * 1e3, (len(ray), len(heights)))
            at, stretch = points(r)
            x, y = weather.plane_km(at / r[..., None])
            total += (self.front.content(x, y, hours[:, None]) * stretch * weights).sum(axis=-1)
        if self.scenario.patch and (self.patch.strength(hours) > 0.0).any():
            r = np.full((len(ray), 1), sea + self.patch.sheet_km * 1e3)
            at, stretch = points(r)
            x, y = weather.plane_km(at / r[..., None])
            total += self.patch.content(x[:, 0], y[:, 0], hours) * stretch[:, 0]
        return np.asarray(total)

    def vertical(
        self, lat: npt.ArrayLike, lon: npt.ArrayLike, hours: npt.ArrayLike, *, top_km: float = GPS_HEIGHT_KM,
        refine: int = 1,
    ) -> Floats:  # fmt: skip
        """Vertical content [TECU] above geodetic places [deg] up to a height; arguments broadcast.

        top_km  2000 ends below the plasmasphere's greater part; the default reaches a GPS satellite
        """
        lat_, lon_, hours_ = np.broadcast_arrays(
            np.asarray(lat, dtype=float), np.asarray(lon, dtype=float), np.asarray(hours, dtype=float)
        )
        shape = lat_.shape
        la, lo, t = lat_.ravel(), lon_.ravel(), hours_.ravel()
        total = np.empty(la.size)
        for first in range(0, la.size, 1200):
            part = slice(first, first + 1200)
            total[part] = self._vertical(la[part], lo[part], t[part], top_km, refine)
        return total.reshape(shape)

    def _vertical(self, lat: Floats, lon: Floats, hours: Floats, top_km: float, refine: int) -> Floats:
        heights, weights = _layer_nodes(refine)
        inside = heights <= top_km
        at = ecef(lat[:, None], lon[:, None], heights[None, inside] * 1e3)
        total = (self.layers(at, hours[:, None]) * weights[inside]).sum(axis=-1) * 1e3 / 1e16
        for low, high, count in _PLASMASPHERE_NODES:
            if top_km <= low:
                continue
            x, w = np.polynomial.legendre.leggauss(count * refine)
            start, end = np.log(6371.0 + low), np.log(6371.0 + min(high, top_km))
            half = 0.5 * (end - start)
            r = np.exp(half * x + start + half)
            at = ecef(lat[:, None], lon[:, None], (r - 6371.0)[None, :] * 1e3)
            total += (self.plasmasphere(at, hours[:, None]) * (w * r)).sum(axis=-1) * half * 1e3 / 1e16
        x_km, y_km = weather.plane_of(lat, lon)
        total += self.front.content(x_km, y_km, hours)
        total += self.patch.content(x_km, y_km, hours)
        return np.asarray(total)
