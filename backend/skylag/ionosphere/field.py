"""The vertical-content field: best linear unbiased estimation from calibrated pierce points, with its uncertainty.

At each epoch the field is a plane plus a correlated residual whose variance and reach are found from the data of that
hour, seen through noise of three kinds: a ray's own, an arc's level, and the bias errors that all rays of a receiver
or a satellite share (they do not average out).  Slopes are differences of the same field over a stated length, so that
they too carry an honest sigma.  Never smooths over time beyond the window of an epoch, never fills a gap with a guess
that looks like a measurement: where no ray is near, support is 0.
"""

import itertools
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.linalg import LinAlgError, cho_factor, cho_solve, solve_triangular

from skylag.constants import L1_M_PER_TECU, SHELL_EARTH_RADIUS_M
from skylag.errors import NotEnough
from skylag.tables import UNSEEN, Bools, Fields, Floats, Ints, Samples, Times


@dataclass(frozen=True)
class FieldChoices:
    """How the field is made.

    minimum_elevation  rays below are left out [deg]
    window_s        rays within half of it around an epoch are averaged per arc
    reach_km        reaches of the residual that are tried (exponential covariance)
    spread_tecu, grain_tecu  standard deviations of the residual and of its unresolved part that are tried
    support_km      a ray this near to a cell's middle carries the cell
    slope_over_km   length over which the slope of the field is taken
    """

    minimum_elevation: float = 15.0
    window_s: float = 300.0
    reach_km: tuple[float, ...] = (60.0, 125.0, 250.0, 500.0, 1000.0)
    spread_tecu: tuple[float, ...] = (0.06, 0.12, 0.25, 0.5, 1.0, 2.0, 4.0, 8.0, 16.0)
    grain_tecu: tuple[float, ...] = (0.02, 0.06, 0.2, 0.6)
    support_km: float = 150.0
    slope_over_km: float = 40.0
    learn_rays: int = 140


@dataclass(frozen=True)
class Epoch:
    """The averaged rays of one epoch: place [km from the middle of the grid], content, and the parts of its error."""

    x: Floats
    y: Floats
    vtec: Floats
    own: Floats
    arc: Floats
    rows: Ints
    factor: Floats
    leanings: Floats

    def noise(self, covariance: Floats) -> Floats:
        """Covariance of the rays' errors [TECU^2]."""
        a, b = self.rows[:, 0], self.rows[:, 1]
        shared = covariance[np.ix_(a, a)] + covariance[np.ix_(b, b)]
        cross = covariance[np.ix_(a, b)]
        matrix = (shared + cross + cross.T) * self.factor[:, None] * self.factor[None, :]
        matrix[np.diag_indices_from(matrix)] += self.own**2 + self.arc**2
        return np.asarray(matrix)


def epochs_between(start: np.datetime64, end: np.datetime64, step_s: float) -> Times:
    """Epochs from start to before end every `step_s` seconds."""
    count = int(np.ceil((end - start) / np.timedelta64(1, "s") / step_s))
    steps = np.rint(np.arange(count) * step_s * 1e9).astype(np.int64).astype("timedelta64[ns]")
    return np.asarray(start.astype("datetime64[ns]") + steps)


def fit(
    samples: Samples,
    lats: Floats,
    lons: Floats,
    epochs: Times,
    choices: FieldChoices | None = None,
    progress: Callable[[float], None] | None = None,
) -> Fields:
    """Maps of vertical content and slope at each epoch.

    lats, lons  axes of the grid [deg], increasing
    progress    told the share done, 0 to 1
    Returns Fields with every state `unseen`: states are judged elsewhere.
    Source of the method: universal kriging (Matheron 1969; Cressie 1993, chapter 3), parameters by restricted
    likelihood (Patterson and Thompson 1971).
    Raises NotEnough where no ray is left above the elevation limit.
    """
    choices = choices or FieldChoices()
    middle = (0.5 * (lats[0] + lats[-1]), 0.5 * (lons[0] + lons[-1]))
    parts = gather(samples, epochs, middle, choices)
    grid_lon, grid_lat = np.meshgrid(lons, lats)
    gx, gy = plane_km(grid_lat.ravel(), grid_lon.ravel(), middle)
    shape = (len(epochs), len(lats), len(lons))
    real = [name for name in Fields.LAYERS if name not in ("support", "state")]
    layers = {name: np.full(shape, np.nan, dtype=np.float32) for name in real}
    support = np.zeros(shape, dtype=np.uint16)
    hour = ((epochs - epochs[0]) // np.timedelta64(3600, "s")).astype(int)
    parameters: dict[int, tuple[float, float, float]] = {}
    for number, part in enumerate(parts):
        if progress is not None:
            progress(number / len(parts))
        if part is None or len(part.vtec) < 4:
            continue
        if hour[number] not in parameters:
            same = [p for p, h in zip(parts, hour, strict=True) if h == hour[number] and p is not None]
            parameters[hour[number]] = learn(same, samples.bias_covariance, choices)
        value, sigma, east, east_sigma, north, north_sigma = krige(
            part, samples.bias_covariance, parameters[hour[number]], gx, gy, choices.slope_over_km
        )
        slope = np.hypot(east, north)
        along = np.where(slope > 0, slope, 1.0)
        slope_sigma = np.hypot(east * east_sigma, north * north_sigma) / along
        slope_sigma = np.where(slope > 0, slope_sigma, np.maximum(east_sigma, north_sigma))
        to_mm_per_km = L1_M_PER_TECU * 1000.0
        for name, flat in (
            ("vtec", value), ("vtec_sigma", sigma), ("slope", slope * to_mm_per_km),
            ("slope_sigma", slope_sigma * to_mm_per_km), ("slope_east", east * to_mm_per_km),
            ("slope_north", north * to_mm_per_km),
        ):  # fmt: skip
            layers[name][number] = flat.reshape(shape[1:])
        near = np.hypot(gx[:, None] - part.x[None, :], gy[:, None] - part.y[None, :]) <= choices.support_km
        support[number] = near.sum(axis=1).reshape(shape[1:])
    if progress is not None:
        progress(1.0)
    return Fields(
        times=epochs, lats=lats, lons=lons, support=support, state=np.full(shape, UNSEEN, dtype=np.uint8), **layers
    )


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
    samples: Samples, epochs: Times, middle: tuple[float, float], choices: FieldChoices
) -> list[Epoch | None]:
    """The rays of each epoch, one averaged row per arc; None where an epoch has none."""
    rays = samples.rays
    half = np.timedelta64(round(choices.window_s * 5e8), "ns")
    nearest = np.clip(np.searchsorted(epochs, rays.time - half, side="left"), 0, len(epochs) - 1)
    inside = np.abs(rays.time - epochs[nearest]) <= half
    good = inside & (rays.elevation >= choices.minimum_elevation) & np.isfinite(samples.vtec)
    row = np.flatnonzero(good)
    if not len(row):
        raise NotEnough(
            f"the field needs lines of sight above {choices.minimum_elevation:g} deg in its span; there are none",
            had=0, needed=1, where=str(epochs[0]),
        )  # fmt: skip
    order = row[np.lexsort((rays.arc[row], nearest[row]))]
    key_epoch, key_arc = nearest[order], rays.arc[order]
    start = np.flatnonzero(np.r_[True, (np.diff(key_epoch) != 0) | (np.diff(key_arc) != 0)])
    count = np.diff(np.r_[start, len(order)])

    def mean(values: Floats) -> Floats:
        return np.asarray(np.add.reduceat(values[order], start) / count)

    x, y = plane_km(rays.pierce_lat, rays.pierce_lon, middle)
    columns = {
        "x": mean(x), "y": mean(y), "vtec": mean(samples.vtec), "own": mean(samples.own_sigma),
        "arc": mean(samples.arc_sigma), "factor": mean(samples.bias_factor),
    }  # fmt: skip
    rows = samples.bias_rows[order[start]]
    leanings = np.stack([mean(samples.lean_shell), mean(samples.lean_high)], axis=1)
    edges = np.searchsorted(key_epoch[start], np.arange(len(epochs) + 1))
    parts: list[Epoch | None] = []
    for first, last in itertools.pairwise(edges):
        if first == last:
            parts.append(None)
            continue
        own_columns = {name: values[first:last] for name, values in columns.items()}
        parts.append(Epoch(rows=rows[first:last], leanings=leanings[first:last], **own_columns))
    return parts


def learn(parts: list[Epoch], covariance: Floats, choices: FieldChoices) -> tuple[float, float, float]:
    """Reach [km], spread [TECU] and grain [TECU] of the residual that the data of these epochs make most likely.

    One of the three is varied at a time, twice round: 36 likelihoods where all combinations would be 180.
    """
    chosen = [parts[i] for i in np.unique(np.linspace(0, len(parts) - 1, 3).astype(int))]
    prepared = []
    for part in chosen:
        pick = np.unique(np.linspace(0, len(part.vtec) - 1, min(choices.learn_rays, len(part.vtec))).astype(int))
        thin = _pick(part, pick)
        distance = np.hypot(thin.x[:, None] - thin.x[None, :], thin.y[:, None] - thin.y[None, :])
        prepared.append((thin, distance, thin.noise(covariance)))

    def likelihood(reach: float, spread: float, grain: float) -> float:
        total = 0.0
        for thin, distance, noise in prepared:
            matrix = noise + spread**2 * np.exp(-distance / reach)
            matrix[np.diag_indices_from(matrix)] += grain**2
            total += _restricted_likelihood(matrix, thin)
        return total

    axes = (choices.reach_km, choices.spread_tecu, choices.grain_tecu)
    answer = [axis[len(axis) // 2] for axis in axes]
    for _ in range(2):
        for number in (1, 0, 2):
            tried = [[*answer[:number], value, *answer[number + 1 :]] for value in axes[number]]
            answer = max(tried, key=lambda three: likelihood(*three))
    return answer[0], answer[1], answer[2]


def _pick(part: Epoch, rows: Ints | Bools) -> Epoch:
    return Epoch(**{name: getattr(part, name)[rows] for name in part.__dataclass_fields__})


def _drift(x: Floats, y: Floats) -> Floats:
    """The plane's terms, in units of 1000 km."""
    return np.stack([np.ones(len(x)), x / 1000.0, y / 1000.0], axis=1)


def _restricted_likelihood(matrix: Floats, part: Epoch) -> float:
    """Logarithm of the restricted likelihood of one epoch, up to a constant."""
    try:
        lower = np.linalg.cholesky(matrix)
    except np.linalg.LinAlgError:
        return -np.inf
    right = np.column_stack([part.vtec, _drift(part.x, part.y)])
    white = solve_triangular(lower, right, lower=True, check_finite=False)
    z, f = white[:, 0], white[:, 1:]
    normal = f.T @ f
    sign, log_det = np.linalg.slogdet(normal)
    if sign <= 0:
        return -np.inf
    rest = z - f @ np.linalg.solve(normal, f.T @ z)
    return float(-np.sum(np.log(np.diag(lower))) - 0.5 * log_det - 0.5 * rest @ rest)


def krige(
    part: Epoch, covariance: Floats, parameters: tuple[float, float, float], gx: Floats, gy: Floats, over_km: float
) -> tuple[Floats, Floats, Floats, Floats, Floats, Floats]:
    """Value, sigma, and slopes east and north with sigmas, at places [km]; slopes in TECU/km.

    Rays whose residual from the fit is beyond five sigma are taken out once (a receiver at fault, not weather: weather
    is seen by several).
    """
    reach, spread, grain = parameters
    for turn in range(2):
        matrix = part.noise(covariance)
        distance = np.hypot(part.x[:, None] - part.x[None, :], part.y[:, None] - part.y[None, :])
        matrix += spread**2 * np.exp(-distance / reach)
        matrix[np.diag_indices_from(matrix)] += grain**2
        drift = _drift(part.x, part.y)
        try:
            factor = cho_factor(matrix, lower=True, check_finite=False)
        except LinAlgError:
            matrix[np.diag_indices_from(matrix)] += 1e-3
            factor = cho_factor(matrix, lower=True, check_finite=False)
        # The content, and beside it every way in which all contents may lean together: the map leans as they do.
        data = np.column_stack([part.vtec, part.leanings])
        weighted = cho_solve(factor, np.column_stack([data, drift]), check_finite=False)
        of_drift = weighted[:, data.shape[1] :]
        normal = drift.T @ of_drift
        plane = np.linalg.solve(normal, drift.T @ weighted[:, : data.shape[1]])
        residual_weighted = weighted[:, : data.shape[1]] - of_drift @ plane
        if turn == 0:
            # Leave-one-out residuals of the kriging, from the inverse alone (Dubrule 1983).
            inverse_diagonal = _inverse_diagonal(factor, len(part.vtec))
            strange = np.abs(residual_weighted[:, 0]) / np.sqrt(inverse_diagonal) > 5.0
            if not strange.any() or (~strange).sum() < 4:
                break
            part = _pick(part, ~strange)
    lower = factor[0]
    half = 0.5 * over_km
    shape = (len(gx),)

    def covariances(x: Floats, y: Floats) -> Floats:
        d = np.hypot(x[:, None] - part.x[None, :], y[:, None] - part.y[None, :])
        return np.asarray(spread**2 * np.exp(-d / reach))

    white_drift = solve_triangular(lower, drift, lower=True, check_finite=False)
    normal_inverse = np.linalg.inv(normal)

    def functional(k: Floats, f: Floats, own: float) -> tuple[Floats, Floats]:
        answer = k @ residual_weighted + f @ plane
        white = solve_triangular(lower, k.T, lower=True, check_finite=False)  # (rays, places)
        open_drift = f - white.T @ white_drift
        variance = own - np.sum(white**2, axis=0) + np.sum((open_drift @ normal_inverse) * open_drift, axis=1)
        together = np.sum(answer[:, 1:] ** 2, axis=1)
        return answer[:, 0], np.sqrt(np.maximum(variance, 0.0) + together)

    # A cell's value is that of a place in it, so the unresolved grain is part of its uncertainty.
    value, sigma = functional(covariances(gx, gy), _drift(gx, gy), spread**2 + grain**2)
    apart = 2.0 * spread**2 * (1.0 - np.exp(-over_km / reach))
    still = np.zeros(shape)
    east, east_sigma = functional(
        covariances(gx + half, gy) - covariances(gx - half, gy),
        np.stack([still, still + over_km / 1000.0, still], axis=1), apart,
    )  # fmt: skip
    north, north_sigma = functional(
        covariances(gx, gy + half) - covariances(gx, gy - half),
        np.stack([still, still, still + over_km / 1000.0], axis=1), apart,
    )  # fmt: skip
    return value, sigma, east / over_km, east_sigma / over_km, north / over_km, north_sigma / over_km


def _inverse_diagonal(factor: tuple[Floats, bool], size: int) -> Floats:
    white = solve_triangular(factor[0], np.eye(size), lower=True, check_finite=False)
    return np.asarray(np.sum(white**2, axis=0))
