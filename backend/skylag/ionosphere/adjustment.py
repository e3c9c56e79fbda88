"""The network adjustment: code biases of receivers and satellites from one day of levelled slant content.

The day's vertical content over the network is a smooth function of place and time (B-splines in time, a polynomial in
latitude and longitude); what is left on each receiver and each satellite all day long is its bias.  The level error of
every arc is a random effect of known size, so a badly levelled arc cannot pull a bias.  Never uses the smooth function
as a map: the map is made afterwards from the calibrated rays (`field`).
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.interpolate import BSpline
from scipy.linalg import cho_factor, cho_solve
from scipy.sparse import csr_matrix, diags_array, hstack

from skylag.constants import SHELL_EARTH_RADIUS_M, SPEED_OF_LIGHT_M_S, carrier_hz
from skylag.errors import NotEnough
from skylag.ionosphere.arcs import tecu_per_metre
from skylag.ionosphere.bias_algebra import pair_bias
from skylag.ionosphere.plasmasphere import FOOT_EXPONENT, FOOT_EXPONENT_SIGMA, slant_shape
from skylag.tables import Biases, Calibration, Floats, Ints, Rays, Samples


@dataclass(frozen=True)
class AdjustmentChoices:
    """How the biases are found.

    thin_s              one ray per arc in each such span carries the adjustment; levels do not change faster
    minimum_elevation   rays below are left out of the adjustment [deg] (mapping errors grow downward)
    knots_s             spacing of the time knots of the vertical content
    degree_network, degree_single  degree of the polynomial in place, for a network and for one receiver alone
    shell_height_sigma_m  how far the height that a single shell stands for strays; 50 km spans the shell heights in
                        use for the same data, 350 to 450 km (broadcast model, IONEX maps)
    high_layer, high_layer_sigma  amplitude expected of the plasmasphere model: between drained and twice saturated
    """

    thin_s: float = 300.0
    minimum_elevation: float = 15.0
    knots_s: float = 1800.0
    degree_network: int = 3
    degree_single: int = 2
    shell_height_sigma_m: float = 50_000.0
    high_layer: float = 1.0
    high_layer_sigma: float = 1.0
    robust_limit: float = 2.0
    rounds: int = 5


@dataclass(frozen=True)
class _Unknowns:
    """The list of biases: kind, name, system, pair row, GLONASS channel (0 elsewhere), and each ray's two rows."""

    kind: list[str]
    name: list[str]
    pair: list[int]
    channel: list[int]
    receiver_row: Ints
    satellite_row: Ints


def content_per_ns(rays: Rays, channels: Mapping[str, int] | None = None) -> Floats:
    """TECU per nanosecond of code1 minus code2, per ray; 2.854 for GPS C1W-C2W.  Needs GLONASS channels."""
    known = channels or {}
    factor = np.zeros((len(rays.pairs), len(rays.satellites)))
    for p, pair in enumerate(rays.pairs):
        for s, name in enumerate(rays.satellites):
            if str(name)[0] != pair.system:
                continue
            channel = known.get(str(name), 0)
            f1 = carrier_hz(pair.system, pair.code1[1], channel)
            f2 = carrier_hz(pair.system, pair.code2[1], channel)
            factor[p, s] = tecu_per_metre(np.asarray(f1), np.asarray(f2)) * SPEED_OF_LIGHT_M_S * 1e-9
    return np.asarray(factor[rays.pair, rays.satellite])


def solve(
    rays: Rays,
    prior: Biases | None = None,
    choices: AdjustmentChoices | None = None,
    channels: Mapping[str, int] | None = None,
) -> Calibration:
    """Biases of all receivers and satellites of one network day.

    prior     published biases: satellites named there are held at them, the rest is found around them
    channels  GLONASS satellite -> FDMA channel
    The datum of each signal pair: satellites held at the prior, or the mean over its satellites is zero.
    Raises NotEnough where fewer than 50 thinned rays remain.
    """
    choices = choices or AdjustmentChoices()
    per_ns = content_per_ns(rays, channels)
    used = _thinned(rays, choices)
    if len(used) < 50:
        raise NotEnough(
            f"bias adjustment needs 50 thinned lines of sight above {choices.minimum_elevation:g} deg, there are "
            f"{len(used)}; add files or a longer span",
            had=len(used), needed=50, where="adjustment",
        )  # fmt: skip
    unknowns = _unknowns(rays, channels or {})
    part = rays.where(used)
    design, layout = _design(part, per_ns[used], unknowns, used, choices)
    prior_rows, held = _prior_rows(unknowns, rays, prior, layout["biases"], part.time)
    penalty, target = _penalty(layout, choices)
    estimate = _iterate(part, design, layout, prior_rows, penalty, target, choices)
    return _calibration(rays, part, used, per_ns, unknowns, held, estimate, layout, choices, prior)


def apply(calibration: Calibration, rays: Rays) -> Samples:
    """Calibrated vertical content of every ray, with its sigma in parts.  One row per ray."""
    stec = rays.stec - calibration.ray_bias
    high = calibration.high_layer if calibration.high_layer is not None else np.zeros(len(rays))
    high_vertical = calibration.high_layer_vertical
    high_vertical = high_vertical if high_vertical is not None else np.zeros(len(rays))
    low = (stec - high) / rays.mapping
    vtec = low + high_vertical
    mapping_sigma = np.abs(low) * relative_mapping_sigma(
        rays.elevation, rays.shell_height_m, calibration.shell_height_sigma_m
    )
    arc_sigma = calibration.arc_sigma / rays.mapping
    # Half of the mapping's doubt is taken as a ray's own (the profile differs by direction); all of it leans together.
    own = np.hypot(rays.noise_sigma / rays.mapping, 0.5 * mapping_sigma)
    bias_sigma = calibration.ray_bias_sigma / rays.mapping
    return Samples(
        rays=rays,
        stec=stec,
        vtec=vtec,
        sigma=np.sqrt(own**2 + arc_sigma**2 + bias_sigma**2 + np.sum(calibration.leanings**2, axis=0)),
        arc_sigma=arc_sigma,
        receiver_sigma=calibration.receiver_sigma[rays.receiver] / rays.mapping,
        own_sigma=own,
        bias_rows=calibration.ray_bias_rows,
        bias_factor=calibration.ray_per_ns / rays.mapping,
        bias_covariance=calibration.covariance,
        lean_shell=calibration.leanings[0],
        lean_high=calibration.leanings[1],
    )


def relative_mapping_sigma(elevation: Floats, shell_height_m: float, height_sigma_m: float) -> Floats:
    """Relative sigma of the vertical content through the single-shell mapping, for a shell height known to a sigma.

    d(ln M)/dh of M = 1/sqrt(1 - (R cos E/(R + h))^2), times the height sigma; any shape.  0.015 at 30 deg for 50 km.
    """
    u2 = (SHELL_EARTH_RADIUS_M * np.cos(np.radians(elevation)) / (SHELL_EARTH_RADIUS_M + shell_height_m)) ** 2
    return np.asarray(height_sigma_m * u2 / (1.0 - u2) / (SHELL_EARTH_RADIUS_M + shell_height_m))


# ---------------------------------------------------------------------------------------------- the equations


def _thinned(rays: Rays, choices: AdjustmentChoices) -> Ints:
    """Row numbers: the first ray of each arc in each span of `thin_s`, above the elevation limit."""
    high = np.flatnonzero((rays.elevation >= choices.minimum_elevation) & np.isfinite(rays.stec))
    span = rays.time[high].astype("datetime64[ns]").astype(np.int64) // round(choices.thin_s * 1e9)
    span = span - (span.min() if len(span) else 0)
    key = rays.arc[high] * (int(span.max(initial=0)) + 1) + span
    _, first = np.unique(key, return_index=True)
    return np.sort(high[first])


def _unknowns(rays: Rays, channels: Mapping[str, int]) -> _Unknowns:
    """Number the biases: one per receiver, pair and (GLONASS) channel; one per satellite and pair."""
    channel_of = np.array([channels.get(str(s), 0) if str(s)[0] == "R" else 0 for s in rays.satellites], dtype=np.int64)
    channel = channel_of[rays.satellite] if len(rays) else np.zeros(0, dtype=np.int64)
    # A code bias belongs to the two codes, whatever phases go with them.
    codes = [(pair.system, pair.code1, pair.code2) for pair in rays.pairs]
    same = np.array([codes.index(code) for code in codes], dtype=np.int64)[rays.pair]
    pairs = len(rays.pairs)
    receiver_list, receiver_row = np.unique((rays.receiver * pairs + same) * 32 + channel + 8, return_inverse=True)
    satellite_list, satellite_row = np.unique(rays.satellite * pairs + same, return_inverse=True)
    r, s = receiver_list // 32 // pairs, satellite_list // pairs
    kind = ["receiver"] * len(r) + ["satellite"] * len(s)
    name = [rays.receivers[i].name for i in r] + [str(rays.satellites[i]) for i in s]
    pair = [int(p) for p in receiver_list // 32 % pairs] + [int(p) for p in satellite_list % pairs]
    chans = [int(c) - 8 for c in receiver_list % 32] + [int(channel_of[i]) for i in s]
    return _Unknowns(
        kind, name, pair, chans, receiver_row.ravel().astype(np.int64),
        satellite_row.ravel().astype(np.int64) + len(receiver_list),
    )  # fmt: skip


def _design(
    part: Rays, per_ns: Floats, unknowns: _Unknowns, used: Ints, choices: AdjustmentChoices
) -> tuple[csr_matrix, dict[str, Any]]:
    """The sparse design: biases [ns], coefficients of the vertical content, amplitude of the high layer."""
    rows = len(part)
    seconds = (part.time - part.time.min()).astype("timedelta64[ns]").astype(np.int64) / 1e9
    intervals = max(1, round(float(seconds.max()) / choices.knots_s))
    inner = np.linspace(0.0, max(float(seconds.max()), 1.0) * (1 + 1e-9), intervals + 1)
    knots = np.concatenate([np.repeat(inner[0], 3), inner, np.repeat(inner[-1], 3)])
    spline = BSpline.design_matrix(seconds, knots, 3).tocsr()
    places = len({receiver.name for receiver in part.receivers})
    degree = choices.degree_network if places >= 4 else choices.degree_single
    middle = (float(np.mean(part.pierce_lat)), float(np.median(part.pierce_lon)))
    terms = _place_terms(part.pierce_lat, part.pierce_lon, middle, degree)
    count = spline.shape[1]
    # Row-wise product of the four splines that live at a time with the terms of the place.
    low = spline.indices.reshape(rows, 4)
    values = spline.data.reshape(rows, 4)
    data = (values[:, :, None] * terms[:, None, :] / 1.0).reshape(rows, -1)
    columns = (low[:, :, None] * terms.shape[1] + np.arange(terms.shape[1])[None, None, :]).reshape(rows, -1)
    vertical = csr_matrix(
        (data.ravel(), columns.ravel(), np.arange(rows + 1) * columns.shape[1]), shape=(rows, count * terms.shape[1])
    )
    biases = len(unknowns.kind)
    pointer = np.arange(rows + 1) * 2
    which = np.stack([unknowns.receiver_row[used], unknowns.satellite_row[used]], axis=1).ravel()
    bias = csr_matrix((np.repeat(-per_ns, 2), which, pointer), shape=(rows, biases))
    receiver_lat, receiver_lon = _spherical_receivers(part)
    high = slant_shape(receiver_lat, receiver_lon, part.elevation, part.azimuth)
    high_column = csr_matrix(high[:, None])
    other = slant_shape(receiver_lat, receiver_lon, part.elevation, part.azimuth, FOOT_EXPONENT + 0.5)
    design = hstack([bias, diags_array(part.mapping) @ vertical, high_column]).tocsr()
    layout = {
        "biases": biases, "vertical": vertical, "terms": terms.shape[1], "splines": count, "degree": degree,
        "high": biases + vertical.shape[1], "receivers": places, "high_change": (other - high) / 0.5,
        "term_degree": np.array([i + j for i in range(degree + 1) for j in range(degree + 1 - i)]),
    }  # fmt: skip
    return design, layout


def _spherical_receivers(rays: Rays) -> tuple[Floats, Floats]:
    """Geocentric latitude and longitude [deg] of each ray's receiver."""
    position = np.array([receiver.position_m for receiver in rays.receivers])
    lat = np.degrees(np.arctan2(position[:, 2], np.hypot(position[:, 0], position[:, 1])))
    lon = np.degrees(np.arctan2(position[:, 1], position[:, 0]))
    return lat[rays.receiver], lon[rays.receiver]


def _place_terms(lat: Floats, lon: Floats, middle: tuple[float, float], degree: int) -> Floats:
    """Monomials of the place, in units of ten degrees of arc from the middle; (rows, terms)."""
    x = (np.mod(lon - middle[1] + 180.0, 360.0) - 180.0) * np.cos(np.radians(middle[0])) / 10.0
    y = (lat - middle[0]) / 10.0
    return np.stack([x**i * y**j for i in range(degree + 1) for j in range(degree + 1 - i)], axis=1)


def _prior_rows(
    unknowns: _Unknowns, rays: Rays, prior: Biases | None, biases: int, time: npt.NDArray[np.datetime64]
) -> tuple[tuple[Floats, Floats, Floats], dict[int, str]]:
    """Datum as pseudo-observations (matrix, value, weight), and per bias row the words of its datum."""
    matrix: list[Floats] = []
    value: list[float] = []
    weight: list[float] = []
    datum: dict[int, str] = {}
    when = time.min() + (time.max() - time.min()) // 2
    groups: dict[tuple[int, int], list[int]] = {}
    for row in range(biases):
        if unknowns.kind[row] == "satellite":
            groups.setdefault((unknowns.pair[row], unknowns.channel[row]), []).append(row)
    for (pair_row, channel), members in groups.items():
        pair = rays.pairs[pair_row]
        held = []
        for row in members if prior is not None else []:
            known = pair_bias(prior, "satellite", unknowns.name[row], pair.system, pair.code1, pair.code2, when)  # type: ignore[arg-type]
            if known is not None and np.isfinite(known[0]):
                held.append((row, known[0]))
        for row, known_ns in held:
            line = np.zeros(biases)
            line[row] = 1.0
            matrix.append(line)
            value.append(known_ns)
            weight.append(1e6)  # a microsecond of a nanosecond: held
            datum[row] = f"held at {prior.source}" if prior is not None and prior.source else "held at prior"
        if not held:
            line = np.zeros(biases)
            line[members] = 1.0 / len(members)
            matrix.append(line)
            value.append(0.0)
            weight.append(1e8)
        where = f" of channel {channel:+d}" if pair.system == "R" else ""
        words = "satellites held at prior" if held else f"zero mean of {len(members)} satellites{where}"
        for row in range(biases):
            if unknowns.pair[row] == pair_row and unknowns.channel[row] == channel and row not in datum:
                datum[row] = words
    return (np.array(matrix).reshape(-1, biases), np.array(value), np.array(weight)), datum


def _penalty(layout: Mapping[str, Any], choices: AdjustmentChoices) -> tuple[Floats, Floats]:
    """Weak knowledge of every unknown as (weight, target): keeps corners that no ray visits from running away."""
    size = layout["high"] + 1
    weight, target = np.zeros(size), np.zeros(size)
    biases = layout["biases"]
    weight[:biases] = 1.0 / 100.0**2  # ns
    of_degree = np.array([100.0, 60.0, 40.0, 20.0, 10.0])[layout["term_degree"]]  # TECU per (10 deg)^degree
    weight[biases : layout["high"]] = np.tile(1.0 / of_degree**2, layout["splines"])
    weight[layout["high"]] = 1.0 / choices.high_layer_sigma**2
    target[layout["high"]] = choices.high_layer
    return weight, target


@dataclass(frozen=True)
class _Estimate:
    x: Floats
    covariance: Floats
    moved: Floats  # (K, unknowns) by one sigma of each thing the model may be off by
    residual: Floats
    arc_effect: Floats  # per arc of the thinned part
    arc_share: Floats  # of the effect, the share that is the arc's own level
    arc_sigma: Floats  # of the level after the adjustment
    arc_of_row: Ints
    arc_numbers: Ints
    model_sigma: Floats
    hour: Ints
    widened: float


def _iterate(
    part: Rays, design: csr_matrix, layout: Mapping[str, Any], prior: tuple[Floats, Floats, Floats],
    penalty: Floats, target: Floats, choices: AdjustmentChoices,
) -> _Estimate:  # fmt: skip
    """Robust, variance-adapting least squares with arc effects eliminated."""
    arc_numbers, arc_of_row = np.unique(part.arc, return_inverse=True)
    arc_of_row = arc_of_row.ravel()
    arcs = len(arc_numbers)
    first = np.unique(arc_of_row, return_index=True)[1]
    level = part.level_sigma[first]
    hour = ((part.time - part.time.min()).astype("timedelta64[ns]").astype(np.int64) // 3_600_000_000_000).astype(int)
    model = np.full(hour.max() + 1, 1.0)  # vertical, TECU; found from the residuals of each hour
    model_arc = 0.5  # slant-level error of the model along an arc, TECU; found from the scatter of arc effects
    relative = relative_mapping_sigma(part.elevation, part.shell_height_m, choices.shell_height_sigma_m)
    loosen_arc, loosen_row = np.ones(arcs), np.ones(len(part))
    vertical_content = np.zeros(len(part))
    x = np.zeros(design.shape[1])
    widened = 1.0
    for turn in range(choices.rounds):
        own = part.noise_sigma**2 + (part.mapping * model[hour]) ** 2
        own += (part.mapping * relative * np.maximum(vertical_content, 0.0)) ** 2
        weight = 1.0 / (own * loosen_row**2 * widened)
        arc_variance = (level**2 + model_arc**2) * loosen_arc**2
        normal = _Normal(design, weight, arc_of_row, arc_variance, prior, layout["biases"], penalty, target)
        x, effect = normal.solve(part.stec)
        residual = part.stec - design @ x
        inside = residual - effect[arc_of_row]
        vertical_content = layout["vertical"] @ x[layout["biases"] : layout["high"]]
        # How far the smooth content strays from the real one, hour by hour (robust).
        scaled = np.abs(inside) / part.mapping
        model = np.array([
            max(0.05, 1.4826 * float(np.median(scaled[hour == h]))) if np.any(hour == h) else 1.0
            for h in range(hour.max() + 1)
        ])  # fmt: skip
        model_arc = float(np.sqrt(np.clip(np.median(effect**2) / 0.455 - np.median(level**2), 0.1**2, 5.0**2)))
        ratio = np.abs(inside) / np.sqrt(own)
        loosen_row = np.sqrt(np.maximum(1.0, ratio / choices.robust_limit))
        loosen_row[ratio > 8.0] *= 10.0  # far outside: as good as left out
        widened = _err_together(part, inside / np.sqrt(own))
        strength = np.abs(effect) / np.sqrt(level**2 + model_arc**2)
        loosen_arc = np.maximum(1.0, strength / choices.robust_limit)
        if turn == 0:
            loosen_row = np.minimum(loosen_row, 3.0)  # the first residuals still hold the whole model
    amplitude = float(x[layout["high"]])
    disturbances = [
        part.mapping * relative * vertical_content,  # the height a single shell stands for
        amplitude * FOOT_EXPONENT_SIGMA * layout["high_change"],  # the shape of the plasmasphere
    ]
    moved = np.array([normal.respond(disturbance) for disturbance in disturbances])
    covariance = _covariance(normal, layout)
    share = level**2 / (level**2 + model_arc**2)
    remaining = 1.0 / (1.0 / arc_variance + normal.mass)
    arc_sigma = np.sqrt(level**2 * (1.0 - share) + share**2 * np.minimum(remaining, level**2))
    return _Estimate(
        x, covariance, moved, residual, effect, share, arc_sigma, arc_of_row, arc_numbers, model, hour, widened
    )  # fmt: skip


class _Normal:
    """The normal equations of one round, with one random effect per arc eliminated."""

    def __init__(
        self, design: csr_matrix, weight: Floats, arc_of_row: Ints, arc_variance: Floats,
        prior: tuple[Floats, Floats, Floats], biases: int, penalty: Floats, target: Floats,
    ) -> None:  # fmt: skip
        rows, arcs = len(weight), len(arc_variance)
        self._weight, self._arc = weight, arc_of_row
        self._weighted = (diags_array(weight) @ design).tocsr()
        normal = np.asarray((design.T @ self._weighted).todense())
        gather = csr_matrix((weight, arc_of_row, np.arange(rows + 1)), shape=(rows, arcs)).T.tocsr()
        self._coupling = (gather @ design).toarray()  # (arcs, unknowns)
        self.mass = np.bincount(arc_of_row, weight, minlength=arcs)
        self._inner = 1.0 / (1.0 / arc_variance + self.mass)
        normal -= self._coupling.T @ (self._coupling * self._inner[:, None])
        normal[np.diag_indices_from(normal)] += penalty
        matrix, value, datum_weight = prior
        normal[:biases, :biases] += matrix.T @ (matrix * datum_weight[:, None])
        self._known = penalty * target
        self._known[:biases] += matrix.T @ (datum_weight * value)
        self.factor = cho_factor(normal)

    def _right(self, content: Floats) -> tuple[Floats, Floats]:
        sums = np.bincount(self._arc, self._weight * content, minlength=len(self._inner))
        right = np.asarray(self._weighted.T @ content) - self._coupling.T @ (self._inner * sums)
        return right, sums

    def solve(self, content: Floats) -> tuple[Floats, Floats]:
        """The unknowns and the arc effects."""
        right, sums = self._right(content)
        x = np.asarray(cho_solve(self.factor, right + self._known))
        return x, self._inner * (sums - self._coupling @ x)

    def respond(self, disturbance: Floats) -> Floats:
        """How far the unknowns move when the content of each row is off by `disturbance`."""
        return np.asarray(cho_solve(self.factor, self._right(disturbance)[0]))


def _err_together(part: Rays, normalised: Floats) -> float:
    """By how much the row variances must grow because neighbours err together.

    The design effect (Kish 1965) of the residuals: those of all receivers on one satellite within an hour belong
    together.
    """
    hour = ((part.time - part.time.min()).astype("timedelta64[ns]").astype(np.int64) // 3_600_000_000_000).astype(int)
    cluster = np.unique(part.satellite * (hour.max() + 1) + hour, return_inverse=True)[1].ravel()
    calm = np.clip(normalised, -4.0, 4.0)
    return max(1.0, float(np.sum(np.bincount(cluster, calm) ** 2) / np.sum(calm**2)))


def _covariance(normal: _Normal, layout: Mapping[str, Any]) -> Floats:
    """Covariance of the biases [ns^2] that the weights promise."""
    biases = layout["biases"]
    unit = np.zeros((layout["high"] + 1, biases))
    unit[np.arange(biases), np.arange(biases)] = 1.0
    return np.asarray(cho_solve(normal.factor, unit))[:biases]


# ---------------------------------------------------------------------------------------------- the result


def _calibration(
    rays: Rays, part: Rays, used: Ints, per_ns: Floats, unknowns: _Unknowns, datum: Mapping[int, str],
    estimate: _Estimate, layout: Mapping[str, Any], choices: AdjustmentChoices, prior: Biases | None,
) -> Calibration:  # fmt: skip
    biases = layout["biases"]
    value = estimate.x[:biases]
    sigma = np.sqrt(np.diag(estimate.covariance) + np.sum(estimate.moved[:, :biases] ** 2, axis=0))
    start, end = part.time.min(), part.time.max()
    table = Biases(
        kind=np.array(unknowns.kind),
        name=np.array(unknowns.name),
        system=np.array([rays.pairs[p].system for p in unknowns.pair]),
        code1=np.array([rays.pairs[p].code1 for p in unknowns.pair]),
        code2=np.array([rays.pairs[p].code2 for p in unknowns.pair]),
        value_ns=value,
        sigma_ns=sigma,
        start=np.full(biases, start),
        end=np.full(biases, end),
        source="network adjustment",
        datum="; ".join(dict.fromkeys(datum[row] for row in range(biases))),
    )
    bias_rows = np.stack([unknowns.receiver_row, unknowns.satellite_row], axis=1)
    r, s = bias_rows[:, 0], bias_rows[:, 1]
    # The level an arc was found to be off, as far as it is the arc's own; arcs below the limit keep their level.
    correction = np.zeros(int(rays.arc.max(initial=-1)) + 1)
    correction[estimate.arc_numbers] = estimate.arc_effect * estimate.arc_share
    arc_sigma = np.full(len(correction), np.nan)
    arc_sigma[estimate.arc_numbers] = estimate.arc_sigma
    of_ray = arc_sigma[rays.arc]
    of_ray = np.where(np.isfinite(of_ray), of_ray, rays.level_sigma)
    c = estimate.covariance
    variance = per_ns**2 * (c[r, r] + c[s, s] + 2.0 * c[r, s])
    lat, lon = _spherical_receivers(rays)
    amplitude = float(estimate.x[layout["high"]])
    high, above, high_change, above_change = _on_a_raster(rays, lat, lon)
    leanings = _leanings(
        rays, per_ns, bias_rows, estimate.moved, amplitude, high, above, high_change, above_change,
        rays.stec - (-per_ns * (value[r] + value[s])) - amplitude * high, choices,
    )  # fmt: skip
    receiver_sigma = np.zeros(len(rays.receivers))
    for row in range(biases):
        if unknowns.kind[row] == "receiver":
            number = next(i for i, receiver in enumerate(rays.receivers) if receiver.name == unknowns.name[row])
            mean_factor = float(np.mean(per_ns[r == row])) if np.any(r == row) else 0.0
            receiver_sigma[number] = max(receiver_sigma[number], mean_factor * sigma[row])
    inside = estimate.residual - estimate.arc_effect[estimate.arc_of_row]
    hours = {
        str(start + np.timedelta64(int(h) * 3600, "s")): round(float(estimate.model_sigma[h]), 3)
        for h in np.unique(estimate.hour)
    }
    summary = {
        "rays_used": len(part),
        "receivers": layout["receivers"],
        "degree": layout["degree"],
        "residual_rms_tecu": float(np.sqrt(np.mean((inside / part.mapping) ** 2))),
        "residual_median_tecu": float(1.4826 * np.median(np.abs(inside / part.mapping))),
        "smooth_content_sigma_by_hour_tecu": hours,
        "high_layer_amplitude": round(amplitude, 3),
        "residuals_err_together": round(estimate.widened, 2),
        "datum": "; ".join(dict.fromkeys(words.split(" of channel")[0] for words in table.datum.split("; "))),
        "alone": layout["receivers"] == 1,
    }
    return Calibration(
        biases=table,
        ray_bias=-per_ns * (value[r] + value[s]) + correction[rays.arc],
        ray_bias_sigma=np.sqrt(np.maximum(variance, 0.0)),
        receiver_sigma=receiver_sigma,
        summary=summary,
        high_layer=amplitude * high,
        high_layer_vertical=amplitude * above,
        arc_sigma=of_ray,
        ray_bias_rows=bias_rows,
        ray_per_ns=-per_ns,
        covariance=estimate.covariance,
        datum_of_row=tuple(datum[row] for row in range(biases)),
        shell_height_sigma_m=choices.shell_height_sigma_m,
        leanings=leanings,
    )


def _leanings(
    rays: Rays, per_ns: Floats, rows: Ints, moved: Floats, amplitude: float, high: Floats, above: Floats,
    high_change: Floats, above_change: Floats, low_slant: Floats, choices: AdjustmentChoices,
) -> Floats:  # fmt: skip
    """How each ray's vertical content moves when the model is off by one sigma, (2, rays) [TECU].

    First the height that the single shell stands for, second how the plasmasphere grows toward its feet.  Each moves
    the biases, the amplitude of the high layer, and the way from slant to vertical together.
    """
    relative = relative_mapping_sigma(rays.elevation, rays.shell_height_m, choices.shell_height_sigma_m)
    by_bias = per_ns * (moved[:, rows[:, 0]] + moved[:, rows[:, 1]]) / rays.mapping
    by_amplitude = moved[:, -1:] * (above - high / rays.mapping)
    leanings = by_bias + by_amplitude
    leanings[0] += relative * low_slant / rays.mapping
    leanings[1] += amplitude * FOOT_EXPONENT_SIGMA * (high_change / rays.mapping - above_change)
    return np.asarray(leanings)


def _on_a_raster(rays: Rays, lat: Floats, lon: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    """Slant and vertical plasmasphere shape of every ray, and how both change with the foot exponent.

    From one value per five minutes of each arc.

    The shape changes slowly along a pass; straight interpolation over five minutes errs below 0.01 TECU.
    """
    order = np.lexsort((rays.time, rays.arc))
    arc = rays.arc[order]
    seconds = (rays.time[order] - rays.time.min()).astype("timedelta64[ns]").astype(np.int64) / 1e9
    block = seconds // 300.0
    new = np.ones(len(order), dtype=bool)
    new[1:] = (arc[1:] != arc[:-1]) | (block[1:] != block[:-1])
    last = np.ones(len(order), dtype=bool)
    last[:-1] = arc[1:] != arc[:-1]
    node = np.flatnonzero(new | last)
    at = order[node]
    overhead = np.full(len(at), 90.0)
    # One axis for all arcs: arcs stand far apart on it, so that interpolation never reaches across.
    axis = arc * 1e7 + seconds
    sought = []
    for exponent in (FOOT_EXPONENT, FOOT_EXPONENT + 0.5):
        for values in (
            slant_shape(lat[at], lon[at], rays.elevation[at], rays.azimuth[at], exponent),
            slant_shape(rays.pierce_lat[at], rays.pierce_lon[at], overhead, 0.0 * overhead, exponent),
        ):
            along = np.empty(len(order))
            along[order] = np.interp(axis, axis[node], values)
            sought.append(along)
    slant, above, slant_other, above_other = sought
    return slant, above, (slant_other - slant) / 0.5, (above_other - above) / 0.5
