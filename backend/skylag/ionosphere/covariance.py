"""The rays of an epoch, the covariance of their errors, and that of the content between them.

Errors are of three kinds: a ray's own, the level of its arc, and biases that all rays of a receiver or a satellite
share.  Content is a plane plus a residual with an exponential covariance, whose reach, spread and grain the data tell
by restricted likelihood.  Never makes a map (`kriging` does), never smooths over time beyond the window of an epoch.
"""

import itertools
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.linalg import solve_triangular

from skylag.constants import SHELL_EARTH_RADIUS_M
from skylag.errors import NotEnough
from skylag.tables import Bools, Floats, Ints, Samples, Times

# Fall of the logarithm of a likelihood at the edge of a 95 % interval of one parameter (Wilks 1938: half of the
# chi-square 3.84).
_NOT_AGAINST = 1.92
_STEP = float(np.sqrt(2.0))  # steps in which a spread is sought


@dataclass(frozen=True)
class Epoch:
    """The averaged rays of one epoch: place [km from the middle of the grid], content, and the parts of its error.

    own, arc   sigmas [TECU]; rows (N, 2) of the bias covariance, factor [TECU per ns]; leanings (N, 2) [TECU]
    """

    x: Floats
    y: Floats
    vtec: Floats
    own: Floats
    arc: Floats
    rows: Ints
    factor: Floats
    leanings: Floats
    receiver: Ints

    def __len__(self) -> int:
        return len(self.vtec)

    def where(self, rows: Ints | Bools) -> "Epoch":
        """Some of the rays."""
        return Epoch(**{name: getattr(self, name)[rows] for name in self.__dataclass_fields__})

    def noise(self, covariance: Floats) -> Floats:
        """Covariance of the rays' errors [TECU^2]."""
        a, b = self.rows[:, 0], self.rows[:, 1]
        half = (covariance[a] + covariance[b]) * self.factor[:, None]  # (rays, biases)
        matrix = np.take(half, a, axis=1)
        matrix += np.take(half, b, axis=1)
        matrix *= self.factor
        matrix[np.diag_indices_from(matrix)] += self.own**2 + self.arc**2
        return np.asarray(matrix)

    def bias_variance(self, covariance: Floats) -> Floats:
        """What the biases give to the variance of each ray [TECU^2]."""
        a, b = self.rows[:, 0], self.rows[:, 1]
        return np.asarray(self.factor**2 * (covariance[a, a] + covariance[b, b] + 2.0 * covariance[a, b]))

    def distances(self) -> Floats:
        """Distances [km] between the pierce points."""
        return np.asarray(np.sqrt((self.x[:, None] - self.x) ** 2 + (self.y[:, None] - self.y) ** 2))

    def drift(self) -> Floats:
        """The plane's terms at the pierce points, in units of 1000 km; (N, 3)."""
        return plane_terms(self.x, self.y)


@dataclass(frozen=True)
class Residual:
    """What content does beside a plane: reach [km], spread [TECU], and the grain [TECU] that no distance resolves."""

    reach_km: float
    spread: float
    grain: float


def plane_terms(x: Floats, y: Floats) -> Floats:
    """The plane's terms at places [km], in units of 1000 km; (places, 3)."""
    return np.stack([np.ones(len(x)), x / 1000.0, y / 1000.0], axis=1)


def plane_km(lat: Floats, lon: Floats, middle: tuple[float, float]) -> tuple[Floats, Floats]:
    """East and north [km] of places from the middle on the sphere, true in distance from it (azimuthal equidistant)."""
    lat_rad, middle_rad = np.radians(lat), np.radians(middle[0])
    turn = np.radians(np.mod(np.asarray(lon) - middle[1] + 180.0, 360.0) - 180.0)
    cosine = np.sin(middle_rad) * np.sin(lat_rad) + np.cos(middle_rad) * np.cos(lat_rad) * np.cos(turn)
    angle = np.arccos(np.clip(cosine, -1.0, 1.0))
    stretch = np.where(angle > 1e-9, angle / np.maximum(np.sin(angle), 1e-12), 1.0)
    radius_km = SHELL_EARTH_RADIUS_M / 1000.0
    x = radius_km * stretch * np.cos(lat_rad) * np.sin(turn)
    y = radius_km * stretch * (
        np.cos(middle_rad) * np.sin(lat_rad) - np.sin(middle_rad) * np.cos(lat_rad) * np.cos(turn)
    )
    return np.asarray(x), np.asarray(y)


def gather(
    samples: Samples, epochs: Times, middle: tuple[float, float], minimum_elevation: float, window_s: float
) -> list[Epoch | None]:
    """The rays of each epoch, one averaged row per arc; None where an epoch has none.

    A ray belongs to its nearest epoch, within half a window (at least half the spacing of the observations).
    Raises NotEnough where there is none above the elevation limit.
    """
    rays = samples.rays
    half = np.timedelta64(round(max(window_s, rays.interval_s) * 5e8), "ns")
    near = np.flatnonzero((rays.time >= epochs[0] - half) & (rays.time <= epochs[-1] + half))
    near = near[(rays.elevation[near] >= minimum_elevation) & np.isfinite(samples.vtec[near])]
    time = rays.time[near]
    later = np.clip(np.searchsorted(epochs, time), 0, len(epochs) - 1)
    before = np.maximum(later - 1, 0)
    nearest = np.where(np.abs(time - epochs[before]) < np.abs(epochs[later] - time), before, later)
    inside = np.abs(time - epochs[nearest]) <= half
    row, nearest = near[inside], nearest[inside]
    if not len(row):
        raise NotEnough(
            f"the field needs lines of sight above {minimum_elevation:g} deg in its span; there are none",
            had=0, needed=1, where=str(epochs[0]),
        )  # fmt: skip
    sequence = np.lexsort((rays.arc[row], nearest))
    order = row[sequence]
    key_epoch, key_arc = nearest[sequence], rays.arc[order]
    start = np.flatnonzero(np.r_[True, (np.diff(key_epoch) != 0) | (np.diff(key_arc) != 0)])
    count = np.diff(np.r_[start, len(order)])

    def mean(values: Floats) -> Floats:
        return np.asarray(np.add.reduceat(values, start) / count)

    x, y = plane_km(rays.pierce_lat[order], rays.pierce_lon[order], middle)
    columns: dict[str, Any] = {
        "x": mean(x), "y": mean(y), "vtec": mean(samples.vtec[order]), "own": mean(samples.own_sigma[order]),
        "arc": mean(samples.arc_sigma[order]), "factor": mean(samples.bias_factor[order]),
        "rows": samples.bias_rows[order[start]], "receiver": rays.receiver[order[start]],
        "leanings": np.stack([mean(samples.lean_shell[order]), mean(samples.lean_high[order])], axis=1),
    }  # fmt: skip
    edges = np.searchsorted(key_epoch[start], np.arange(len(epochs) + 1))
    return [
        Epoch(**{name: values[first:last] for name, values in columns.items()}) if last > first else None
        for first, last in itertools.pairwise(edges)
    ]


class _Likelihood:
    """Restricted likelihood of residuals, given some rays of some epochs; what was worked out once is kept."""

    def __init__(self, parts: list[Epoch], covariance: Floats, most_rays: int) -> None:
        self._prepared: list[tuple[Epoch, Floats, Floats, dict[float, Floats]]] = []
        self._known: dict[tuple[float, ...], float] = {}
        for part in parts:
            thin = part.where(np.unique(np.linspace(0, len(part) - 1, min(most_rays, len(part))).astype(int)))
            self._prepared.append((thin, thin.distances(), thin.noise(covariance), {}))

    def __call__(self, three: tuple[float, ...]) -> float:
        if three not in self._known:
            reach, spread, grain = three
            total = 0.0
            for thin, distance, noise, decay in self._prepared:
                if reach not in decay:
                    decay[reach] = np.exp(distance / -reach)
                matrix = spread**2 * decay[reach]
                matrix += noise
                matrix[np.diag_indices_from(matrix)] += grain**2
                total += _restricted_likelihood(matrix, thin)
            self._known[three] = total
        return self._known[three]

    def widest(self, residual: Residual, most: float) -> Residual:
        """With the largest spread that the data do not speak against: few rays hardly tell one."""
        reach, spread, grain = residual.reach_km, residual.spread, residual.grain
        best = self((reach, spread, grain))
        while spread * _STEP <= most * 1.01 and self((reach, spread * _STEP, grain)) >= best - _NOT_AGAINST:
            spread *= _STEP
        return Residual(reach, spread, grain)


def learn(
    parts: list[Epoch], covariance: Floats, tried: tuple[tuple[float, ...], tuple[float, ...], tuple[float, ...]],
    most_rays: int,
) -> Residual:  # fmt: skip
    """The residual that the data of these epochs make most likely (Patterson and Thompson 1971).

    tried  reaches, spreads and grains; one of the three is varied at a time, twice round: 36 likelihoods where all
    combinations would be 180.  Three epochs are asked, the first, the last and one between.
    """
    likelihood = _Likelihood(
        [parts[i] for i in np.unique(np.linspace(0, len(parts) - 1, 3).astype(int))], covariance, most_rays
    )
    answer = tuple(axis[len(axis) // 2] for axis in tried)
    for _ in range(2):
        for number in (1, 0, 2):
            answer = max(
                [(*answer[:number], value, *answer[number + 1 :]) for value in tried[number]], key=likelihood
            )
    return likelihood.widest(Residual(*answer), max(tried[1]))


def adapt(part: Epoch, covariance: Floats, residual: Residual, spreads: tuple[float, ...], most_rays: int) -> Residual:
    """The hour's residual with the spread of one epoch: a wall that comes in later leaves the calm epochs calm."""
    likelihood = _Likelihood([part], covariance, most_rays)
    reach, spread, grain = residual.reach_km, residual.spread, residual.grain
    low, high = min(spreads) * 0.99, max(spreads) * 1.01
    for factor in (1.0 / _STEP, _STEP):
        while low <= spread * factor <= high and likelihood((reach, spread * factor, grain)) > likelihood(
            (reach, spread, grain)
        ):
            spread *= factor
    return likelihood.widest(Residual(reach, spread, grain), max(spreads))


def _restricted_likelihood(matrix: Floats, part: Epoch) -> float:
    """Logarithm of the restricted likelihood of one epoch, up to a constant."""
    try:
        lower = np.linalg.cholesky(matrix)
    except np.linalg.LinAlgError:
        return -np.inf
    right = np.column_stack([part.vtec, part.drift()])
    white = solve_triangular(lower, right, lower=True, check_finite=False)
    z, f = white[:, 0], white[:, 1:]
    normal = f.T @ f
    sign, log_det = np.linalg.slogdet(normal)
    if sign <= 0:
        return -np.inf
    rest = z - f @ np.linalg.solve(normal, f.T @ z)
    return float(-np.sum(np.log(np.diag(lower))) - 0.5 * log_det - 0.5 * rest @ rest)
