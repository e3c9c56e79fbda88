"""The network adjustment: code biases of receivers and satellites from one day of levelled slant content.

The day's vertical content over the network is a smooth function of place and time (B-splines in time, a polynomial in
latitude and longitude); what is left on each receiver and each satellite all day long is its bias.  The level error of
every arc is a random effect of known size, so a badly levelled arc cannot pull a bias.  Never uses the smooth function
as a map: the map is made afterwards from the calibrated rays (`field`).
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from skylag.constants import SHELL_EARTH_RADIUS_M, SPEED_OF_LIGHT_M_S, carrier_hz
from skylag.errors import NotEnough, Refused
from skylag.ionosphere import datum as levels
from skylag.ionosphere.arcs import tecu_per_metre
from skylag.ionosphere.datum import Datum, Unknowns
from skylag.ionosphere.drift import Drift, left_on, outstanding, wanderings
from skylag.ionosphere.normal import Design, Knowledge, Normal, place_terms, time_splines
from skylag.ionosphere.plasmasphere import (
    FOOT_EXPONENT,
    FOOT_EXPONENT_REST,
    FOOT_EXPONENT_REST_FEW,
    FOOT_EXPONENT_SIGMA,
    HIDDEN_AMPLITUDE,
    HighLayer,
    along_rays,
)
from skylag.tables import Biases, Calibration, Floats, Ints, Rays, Samples, Times


@dataclass(frozen=True)
class AdjustmentChoices:
    """How the biases are found.

    thin_s              one ray per arc in each such span carries the adjustment; levels do not change faster
    minimum_elevation   rays below are left out of the adjustment [deg] (mapping errors grow downward)
    knots_s             spacing of the time knots of the vertical content
    degree_network, degree_single  degree of the polynomial in place, for four receivers or more and for fewer: with 2,
                        one receiver on a real active day leaves twice the residuals (0.09 TECU, not 0.045)
    shell_height_sigma_m  how far the height that a single shell stands for strays; 50 km spans the shell heights in
                        use for the same data, 350 to 450 km (broadcast model, IONEX maps)
    high_layer, high_layer_sigma  amplitude expected of the plasmasphere model: between drained and twice saturated
    foot_exponent, foot_exponent_sigma  how the plasmasphere grows toward its feet (see `plasmasphere`); None: found
                        from the rays of the day, about 1.  Also where the true one has another shape, level errors are
                        a quarter to a half of those with the exponent held; what is not known of it leans on all
    drift_hours         None: one bias per receiver and day; otherwise one per so many hours, walking by about
                        drift_sigma_ns from one span to the next (receivers are seen to move by 0.5 to 3 ns in a day)
    prior_walk_ns_per_day  None: satellites named in the prior are held at it; otherwise the prior is drawn upon as the
                        biases of an earlier day, which walk at random by so much in a day (published satellite biases
                        move by 0.05 to 0.1 ns from day to day)
    """

    thin_s: float = 300.0
    minimum_elevation: float = 15.0
    knots_s: float = 1800.0
    degree_network: int = 3
    degree_single: int = 3
    shell_height_sigma_m: float = 50_000.0
    high_layer: float = 1.0
    high_layer_sigma: float = 1.0
    foot_exponent: float | None = None
    foot_exponent_sigma: float = FOOT_EXPONENT_SIGMA
    robust_limit: float = 2.0
    rounds: int = 5
    drift_hours: float | None = None
    drift_sigma_ns: float = 0.5
    prior_walk_ns_per_day: float | None = None


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

    prior     published biases: satellites named there are held at them, the rest is found around them (see
              `AdjustmentChoices.prior_walk_ns_per_day` for biases of an earlier day)
    channels  GLONASS satellite -> FDMA channel
    The datum of each group of biases that see each other: satellites held at the prior, differences from another pair
    of the same satellites, or the mean over its satellites is zero; `datum_of_row` says which.
    Raises NotEnough where fewer than 50 thinned rays remain, Refused for choices that make no sense.
    """
    choices = choices or AdjustmentChoices()
    if choices.drift_hours is not None and not 1.0 <= choices.drift_hours <= 24.0:
        raise Refused(
            f"drift_hours: {choices.drift_hours:g}; a receiver's bias can be found per 1 to 24 hours",
            name="drift_hours", value=choices.drift_hours, allowed=(1.0, 24.0),
        )  # fmt: skip
    used = _thinned(rays, choices)
    if len(used) < 50:
        raise NotEnough(
            f"bias adjustment needs 50 thinned lines of sight above {choices.minimum_elevation:g} deg, there are "
            f"{len(used)}; add files or a longer span",
            had=len(used), needed=50, where="adjustment",
        )  # fmt: skip
    per_ns = content_per_ns(rays, channels)
    seconds = (rays.time - rays.time[used].min()).astype("timedelta64[ns]").astype(np.int64) / 1e9
    spans = np.zeros(len(rays), dtype=np.int64)
    if choices.drift_hours is not None:
        last = int(seconds[used].max() // (choices.drift_hours * 3600.0))
        spans = np.clip(seconds // (choices.drift_hours * 3600.0), 0, last).astype(np.int64)
    unknowns = levels.number(rays, channels or {}, spans)
    datum = levels.choose(rays, unknowns, used, prior, choices.prior_walk_ns_per_day)
    knowledge = list(datum.knowledge)
    if choices.drift_hours is not None:
        knowledge += levels.connect_blocks(unknowns, choices.drift_sigma_ns)
    lat, lon = _spherical_receivers(rays)
    layer = along_rays(rays, lat, lon)
    design, used = _design(rays, used, per_ns, seconds, unknowns, layer, choices)
    part = rays.where(used)
    knowledge.append(_penalty(design, choices))
    estimate = _iterate(part, design, spans[used], layer.where(used), knowledge, choices)
    estimate = replace(estimate, covariance=datum.with_records(estimate.covariance))
    of_receiver = levels.receiver_values(unknowns, estimate.x, seconds, choices.drift_hours)
    return _calibration(rays, part, used, per_ns, unknowns, datum, estimate, design, layer, of_receiver, choices)


def apply(calibration: Calibration, rays: Rays) -> Samples:
    """Calibrated vertical content of every ray, with its sigma in parts.  One row per ray."""
    stec = rays.stec - calibration.ray_bias
    high = calibration.high_layer if calibration.high_layer is not None else np.zeros(len(rays))
    high_vertical = calibration.high_layer_vertical
    high_vertical = high_vertical if high_vertical is not None else np.zeros(len(rays))
    low = (stec - high) / rays.mapping
    vtec = low + high_vertical
    mapping_sigma = np.abs(low) * relative_mapping_sigma(
        rays.mapping, rays.shell_height_m, calibration.shell_height_sigma_m
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


def relative_mapping_sigma(mapping: Floats, shell_height_m: float, height_sigma_m: float) -> Floats:
    """Relative sigma of the vertical content through a mapping whose shell height is known to a sigma; any shape.

    Both mappings are M = 1/sqrt(1 - u^2) with u proportional to 1/(R + h): d(ln M)/dh = -(M^2 - 1)/(R + h), whatever
    the angle in u is.  0.015 at 30 deg for 50 km.  The modified single layer stands 107 km higher than the shell of
    the pierce points: its sigma comes out 1.6 % too large.
    """
    return np.asarray(height_sigma_m * (mapping**2 - 1.0) / (SHELL_EARTH_RADIUS_M + shell_height_m))


# ---------------------------------------------------------------------------------------------- the equations


def _thinned(rays: Rays, choices: AdjustmentChoices) -> Ints:
    """Row numbers: the first ray of each arc in each span of `thin_s`, above the elevation limit."""
    high = np.flatnonzero((rays.elevation >= choices.minimum_elevation) & np.isfinite(rays.stec))
    span = rays.time[high].astype("datetime64[ns]").astype(np.int64) // round(choices.thin_s * 1e9)
    span = span - (span.min() if len(span) else 0)
    key = rays.arc[high] * (int(span.max(initial=0)) + 1) + span
    _, first = np.unique(key, return_index=True)
    return np.sort(high[first])


def _design(
    rays: Rays, used: Ints, per_ns: Floats, seconds: Floats, unknowns: Unknowns, layer: HighLayer,
    choices: AdjustmentChoices,
) -> tuple[Design, Ints]:  # fmt: skip
    """The design of the thinned rays: biases [ns], smooth vertical content, high layer; and the rays in its order."""
    values, first, splines = time_splines(seconds[used], choices.knots_s)
    order = np.lexsort((seconds[used], rays.arc[used], first))
    used, values, first = used[order], values[order], first[order]
    degree = choices.degree_network if _places(rays, used) >= 4 else choices.degree_single
    lat, lon = rays.pierce_lat[used], rays.pierce_lon[used]
    terms = place_terms(lat, lon, _middle(lat, lon), degree)
    vertical = (values[:, :, None] * terms[:, None, :]).reshape(len(used), -1)
    return Design(
        receiver=unknowns.receiver_row[used], satellite=unknowns.satellite_row[used], factor=-per_ns[used],
        slant=vertical * rays.mapping[used, None], vertical=vertical, first=first * terms.shape[1],
        high=layer.slant(_expected_feet(choices))[0][used],
        starts=np.concatenate([np.flatnonzero(np.diff(first, prepend=-1)), [len(first)]]),
        biases=len(unknowns), splines=splines, terms=terms.shape[1], degree=degree,
    ), used  # fmt: skip


def _places(rays: Rays, used: Ints) -> int:
    """How many receivers carry the adjustment."""
    return len({rays.receivers[number].name for number in np.unique(rays.receiver[used])})


def _middle(lat: Floats, lon: Floats) -> tuple[float, float]:
    """The middle of the pierce points, also where longitudes run past 180 degrees."""
    turned = np.exp(1j * np.radians(lon))
    return float(np.mean(lat)), float(np.degrees(np.angle(turned.mean())))


def _spherical_receivers(rays: Rays) -> tuple[Floats, Floats]:
    """Geocentric latitude and longitude [deg] of each ray's receiver."""
    position = np.array([receiver.position_m for receiver in rays.receivers])
    lat = np.degrees(np.arctan2(position[:, 2], np.hypot(position[:, 0], position[:, 1])))
    lon = np.degrees(np.arctan2(position[:, 1], position[:, 0]))
    return lat[rays.receiver], lon[rays.receiver]


def _penalty(design: Design, choices: AdjustmentChoices) -> Knowledge:
    """Weak knowledge of the content and of the high layer: keeps corners that no ray visits from running away."""
    of_degree = np.array([100.0, 60.0, 40.0, 20.0, 10.0])[design.term_degree]  # TECU per (10 deg)^degree
    weight = np.append(np.tile(1.0 / of_degree**2, design.splines), 1.0 / choices.high_layer_sigma**2)
    right = np.zeros(len(weight))
    right[-1] = choices.high_layer * weight[-1]
    return Knowledge(np.arange(design.biases, design.size), np.diag(weight), right)


@dataclass(frozen=True)
class _Estimate:
    x: Floats
    covariance: Floats
    moved: Floats  # (K, unknowns) by one sigma of each thing the model may be off by
    residual: Floats
    arc_effect: Floats  # per arc of the thinned part, or per piece of it in a span of the day
    arc_share: Floats  # of the effect, the share that is the arc's own level
    arc_sigma: Floats  # of the level after the adjustment
    arc_of_row: Ints
    arc_numbers: Ints
    model_sigma: Floats
    hour: Ints
    widened: float
    exponent: float  # how the plasmasphere grows toward its feet, and sigma
    exponent_sigma: float


def _iterate(
    part: Rays, design: Design, span: Ints, layer: HighLayer, knowledge: list[Knowledge],
    choices: AdjustmentChoices,
) -> _Estimate:  # fmt: skip
    """Robust, variance-adapting least squares with arc effects eliminated.

    span  (N,) of the day, where receiver biases are found per few hours.  An arc that reaches over several is cut into
          parts with levels of their own: a bias that moves steadily must be told by the levels of many arcs, since the
          steps within one arc see only what lies about the boundary.  The parts together weigh as the arc did.
    """
    arc_numbers, arc_of_row = np.unique(part.arc * (int(span.max()) + 1) + span, return_inverse=True)
    arc_of_row, arc_numbers = arc_of_row.ravel(), arc_numbers // (int(span.max()) + 1)
    pieces = np.bincount(arc_numbers)[arc_numbers]
    arcs = len(arc_numbers)
    first = np.unique(arc_of_row, return_index=True)[1]
    level = part.level_sigma[first]
    receiver, receiver_of_arc = part.receiver, part.receiver[first]
    hour = ((part.time - part.time.min()).astype("timedelta64[ns]").astype(np.int64) // 3_600_000_000_000).astype(int)
    model = np.full(hour.max() + 1, 1.0)  # vertical, TECU; found from the residuals of each hour
    model_arc = 0.5  # slant-level error of the model along an arc, TECU; found from the scatter of arc effects
    relative = relative_mapping_sigma(part.mapping, part.shell_height_m, choices.shell_height_sigma_m)
    loosen_arc, loosen_row = np.ones(arcs), np.ones(len(part))
    # A receiver whose levels or rows scatter more than is told of them gets larger sigmas, itself and for the others.
    worse_arc, worse_row = np.ones(len(part.receivers)), np.ones(len(part.receivers))
    vertical_content = np.zeros(len(part))
    x = np.zeros(design.size)
    widened = 1.0
    exponent, exponent_sigma = _expected_feet(choices), choices.foot_exponent_sigma
    few = len(np.unique(part.receiver)) < 4
    for turn in range(choices.rounds):
        told = part.noise_sigma**2 + (part.mapping * model[hour]) ** 2
        told += (part.mapping * relative * np.maximum(vertical_content, 0.0)) ** 2
        own = told * worse_row[receiver] ** 2
        weight = 1.0 / (own * loosen_row**2 * widened)
        arc_variance = pieces * (level**2 + model_arc**2) * (loosen_arc * worse_arc[receiver_of_arc]) ** 2
        normal = Normal(design, weight, arc_of_row, arc_variance, knowledge)
        x, effect = normal.solve(part.stec)
        residual = part.stec - design.predict(x)
        inside = residual - effect[arc_of_row]
        vertical_content = design.smooth(x)
        # How far the smooth content strays from the real one, hour by hour (robust).
        scaled = np.abs(inside) / part.mapping
        model = np.array([
            max(0.05, 1.4826 * float(np.median(scaled[hour == h]))) if np.any(hour == h) else 1.0
            for h in range(hour.max() + 1)
        ])  # fmt: skip
        model_arc = float(np.sqrt(np.clip(np.median(effect**2) / 0.455 - np.median(level**2), 0.1**2, 5.0**2)))
        ratio = np.abs(inside) / np.sqrt(told)
        worse_row = _scatter_by(receiver, ratio, len(worse_row))
        ratio = ratio / worse_row[receiver]
        loosen_row = np.sqrt(np.maximum(1.0, ratio / choices.robust_limit))
        loosen_row[ratio > 8.0] *= 10.0  # far outside: as good as left out
        widened = _err_together(part, inside / np.sqrt(own))
        strength = np.abs(effect) / np.sqrt(level**2 + model_arc**2)
        worse_arc = _scatter_by(receiver_of_arc, strength, len(worse_arc))
        strength = strength / worse_arc[receiver_of_arc]
        loosen_arc = np.sqrt(np.maximum(1.0, strength / choices.robust_limit))
        if turn == 0:
            loosen_row = np.minimum(loosen_row, 3.0)  # the first residuals still hold the whole model
        elif choices.foot_exponent is None and turn < choices.rounds - 1:
            change = layer.slant(exponent)[1] * x[-1]
            step, exponent_sigma = _foot_step(normal, design, residual, change, exponent, few, choices)
            exponent = float(np.clip(exponent + step, *_FEET))
            design = replace(design, high=layer.slant(exponent)[0])
    amplitude = float(x[-1])
    disturbances = [
        part.mapping * relative * vertical_content,  # the height a single shell stands for
        _doubt(layer.slant, exponent, exponent_sigma, amplitude, choices),  # the shape of the plasmasphere
    ]
    moved = np.array([normal.respond(disturbance) for disturbance in disturbances])
    covariance = normal.covariance()
    level = level * worse_arc[receiver_of_arc]
    share = level**2 / (level**2 + model_arc**2)
    remaining = 1.0 / (1.0 / arc_variance + normal.mass)
    arc_sigma = np.sqrt(level**2 * (1.0 - share) + share**2 * np.minimum(remaining, level**2))
    return _Estimate(
        x, covariance, moved, residual, effect, share, arc_sigma, arc_of_row, arc_numbers, model, hour, widened,
        exponent, exponent_sigma,
    )  # fmt: skip


# Feet between none and three times as steep as expected: what the shapes were worked out for, and a little beyond.
_FEET = (-0.5, 2.5)


def _expected_feet(choices: AdjustmentChoices) -> float:
    return FOOT_EXPONENT if choices.foot_exponent is None else choices.foot_exponent


def _foot_step(
    normal: Normal, design: Design, residual: Floats, change: Floats, exponent: float, few: bool,
    choices: AdjustmentChoices,
) -> tuple[float, float]:  # fmt: skip
    """By how much the foot exponent should grow, by what the rays have left over, and its sigma.

    change  (N,) slant content [TECU] per unit of the exponent.  One Gauss-Newton step beside all other unknowns.
    few     there are fewer than four receivers
    """
    away = normal.weigh(change - design.predict(normal.respond(change)))
    told = choices.foot_exponent_sigma**-2
    known = float(change @ away) + told
    asked = float(change @ normal.weigh(residual)) + told * (FOOT_EXPONENT - exponent)
    rest = min(FOOT_EXPONENT_REST_FEW if few else FOOT_EXPONENT_REST, choices.foot_exponent_sigma)
    return asked / known, float(np.hypot(known**-0.5, rest))


def _doubt(
    shape: Callable[[float], tuple[Floats, Floats]], exponent: float, sigma: float, amplitude: float,
    choices: AdjustmentChoices,
) -> Floats:  # fmt: skip
    """One sigma of what the high layer may be off by, per ray [TECU]: growth toward the feet, the mean of both ways.

    A plasmasphere of another shape is taken for a weaker or no layer of this one, and pulls the biases all the same: so
    the doubt goes with the amplitude found and with what may hide from it.  Where the amplitude is held instead, it is
    as far off as it is from the usual one, and as that strays.
    """
    if choices.high_layer_sigma < 0.01:
        usual = AdjustmentChoices()
        return np.asarray(np.hypot(choices.high_layer - usual.high_layer, usual.high_layer_sigma) * shape(exponent)[0])
    change = 0.5 * (shape(exponent + sigma)[0] - shape(exponent - sigma)[0])
    return np.asarray(np.hypot(amplitude, HIDDEN_AMPLITUDE) * change)


def _scatter_by(group: Ints, ratio: Floats, groups: int) -> Floats:
    """By how much the ratios |value| / sigma of a group scatter more than promised: robust, at least 1."""
    found = np.ones(groups)
    for number in np.unique(group):
        found[number] = max(1.0, 1.4826 * float(np.median(ratio[group == number])))
    return found


def _err_together(part: Rays, normalised: Floats) -> float:
    """By how much the row variances must grow because neighbours err together.

    The design effect (Kish 1965) of the residuals: those of all receivers on one satellite within an hour belong
    together.
    """
    hour = ((part.time - part.time.min()).astype("timedelta64[ns]").astype(np.int64) // 3_600_000_000_000).astype(int)
    cluster = np.unique(part.satellite * (hour.max() + 1) + hour, return_inverse=True)[1].ravel()
    calm = np.clip(normalised, -4.0, 4.0)
    return max(1.0, float(np.sum(np.bincount(cluster, calm) ** 2) / np.sum(calm**2)))


# ---------------------------------------------------------------------------------------------- the result


def _calibration(
    rays: Rays, part: Rays, used: Ints, per_ns: Floats, unknowns: Unknowns, datum: Datum, estimate: _Estimate,
    design: Design, layer: HighLayer, of_receiver: Floats, choices: AdjustmentChoices,
) -> Calibration:  # fmt: skip
    biases = design.biases
    value = estimate.x[:biases]
    sigma = np.sqrt(np.diag(estimate.covariance) + np.sum(estimate.moved[:, :biases] ** 2, axis=0))
    start, end = _validity(part, unknowns, choices)
    table = levels.table(unknowns, rays, value, sigma, start, end, datum.summary)
    bias_rows = np.stack([unknowns.receiver_row, unknowns.satellite_row], axis=1)
    r, s = bias_rows[:, 0], bias_rows[:, 1]
    # The level an arc was found to be off, as far as it is the arc's own; arcs below the limit keep their level.
    correction = np.zeros(int(rays.arc.max(initial=-1)) + 1)
    pieces = np.maximum(np.bincount(estimate.arc_numbers, minlength=len(correction)), 1)
    of_piece = estimate.arc_effect * estimate.arc_share / pieces[estimate.arc_numbers]
    np.add.at(correction, estimate.arc_numbers, of_piece)
    arc_sigma = np.full(len(correction), np.nan)
    arc_sigma[estimate.arc_numbers] = estimate.arc_sigma
    of_ray = arc_sigma[rays.arc]
    of_ray = np.where(np.isfinite(of_ray), of_ray, rays.level_sigma)
    c = estimate.covariance
    variance = per_ns**2 * (c[r, r] + c[s, s] + 2.0 * c[r, s])
    amplitude = float(estimate.x[-1])
    bias = -per_ns * (of_receiver + value[s])
    slant, above = layer.slant(estimate.exponent)[0], layer.above(estimate.exponent)[0]
    leanings = _leanings(
        rays, per_ns, bias_rows, estimate, layer, rays.stec - bias - amplitude * slant, choices
    )
    summary = _summary(rays, part, used, per_ns, unknowns, datum, estimate, choices)
    return Calibration(
        biases=table,
        ray_bias=bias + correction[rays.arc],
        ray_bias_sigma=np.sqrt(np.maximum(variance, 0.0)),
        receiver_sigma=_receiver_sigma(rays, per_ns, unknowns, used, sigma),
        summary=summary,
        high_layer=amplitude * slant,
        high_layer_vertical=amplitude * above,
        arc_sigma=of_ray,
        ray_bias_rows=bias_rows,
        ray_per_ns=-per_ns,
        covariance=estimate.covariance,
        datum_of_row=_words_of_rows(datum, table, choices),
        shell_height_sigma_m=choices.shell_height_sigma_m,
        leanings=leanings,
    )


def _validity(part: Rays, unknowns: Unknowns, choices: AdjustmentChoices) -> tuple[Times, Times]:
    """The span of every bias: the day's data, or the hours of its block."""
    start, end = part.time.min(), part.time.max()
    starts, ends = np.full(len(unknowns), start), np.full(len(unknowns), end)
    if choices.drift_hours is not None:
        span = np.timedelta64(round(choices.drift_hours * 3600e9), "ns")
        receivers = np.array([kind == "receiver" for kind in unknowns.kind])
        starts[receivers] = start + unknowns.block[receivers] * span
        ends[receivers] = np.minimum(starts[receivers] + span, end)
    return starts, ends


def _words_of_rows(datum: Datum, table: Biases, choices: AdjustmentChoices) -> tuple[str, ...]:
    """What the level of each bias refers to; of receivers found per few hours also the hours (GPS time)."""
    if choices.drift_hours is None:
        return datum.of_row
    first, last = (np.datetime_as_string(times, unit="m") for times in (table.start, table.end))
    return tuple(
        f"{first[row][11:]} to {last[row][11:]}: {words}" if table.kind[row] == "receiver" else words
        for row, words in enumerate(datum.of_row)
    )


def _receiver_sigma(rays: Rays, per_ns: Floats, unknowns: Unknowns, used: Ints, sigma: Floats) -> Floats:
    """Per receiver, the largest sigma [TECU] of its biases that rays of the adjustment meet."""
    rows, points = np.unique(unknowns.receiver_row[used], return_counts=True)
    total = np.bincount(unknowns.receiver_row[used], per_ns[used])[rows]
    owner = np.zeros(len(unknowns), dtype=np.int64)
    owner[unknowns.receiver_row] = rays.receiver
    found = np.zeros(len(rays.receivers))
    np.maximum.at(found, owner[rows], total / points * sigma[rows])
    return found


def _summary(
    rays: Rays, part: Rays, used: Ints, per_ns: Floats, unknowns: Unknowns, datum: Datum, estimate: _Estimate,
    choices: AdjustmentChoices,
) -> dict[str, Any]:  # fmt: skip
    """Plain facts of the adjustment; `notes` are sentences on what could not be known or does not hold still."""
    inside = (estimate.residual - estimate.arc_effect[estimate.arc_of_row]) / part.mapping
    start = part.time.min()
    hours = {
        str(start + np.timedelta64(int(h) * 3600, "s")): round(float(estimate.model_sigma[h]), 3)
        for h in np.unique(estimate.hour)
    }
    drifts = _drifts(rays, part, used, per_ns, unknowns, estimate)
    places = _places(rays, used)
    return {
        "rays_used": len(part),
        "receivers": places,
        "degree": choices.degree_network if places >= 4 else choices.degree_single,
        "residual_rms_tecu": float(np.sqrt(np.mean(inside**2))),
        "residual_median_tecu": float(1.4826 * np.median(np.abs(inside))),
        "smooth_content_sigma_by_hour_tecu": hours,
        "high_layer_amplitude": round(float(estimate.x[-1]), 3),
        "high_layer_foot_exponent": round(estimate.exponent, 3),
        "high_layer_foot_exponent_sigma": round(estimate.exponent_sigma, 3),
        "residuals_err_together": round(estimate.widened, 2),
        "datum": datum.summary,
        "drifting": drifts,
        "notes": [
            *datum.notes,
            *_wrong_records(part, used, per_ns, unknowns, datum, estimate),
            *(_drift_sentence(one) for one in drifts),
        ],
        "alone": places == 1,
    }


# A held bias is told to be wrong from so many ns and so many sigmas on.  Receivers of unlike make see one satellite's
# codes differently by up to about 1 ns (seen here: block IIF on C1C), which is no fault of the record.
_WRONG_NS, _WRONG_SIGMAS = 1.5, 6.0


def _wrong_records(
    part: Rays, used: Ints, per_ns: Floats, unknowns: Unknowns, datum: Datum, estimate: _Estimate
) -> list[str]:
    """Sentences on satellites held at a published bias that the rays contradict."""
    held = np.array([words.startswith("held at") for words in datum.of_row], dtype=bool)
    rows = np.intersect1d(np.flatnonzero(held), unknowns.satellite_row[used])
    left = left_on(unknowns.satellite_row[used], part.arc, estimate.residual, -per_ns[used], rows)
    return [
        f"{unknowns.name[row]} {part.pairs[unknowns.pair[row]].name} is {datum.of_row[row]}, but its rays ask for "
        f"{more:+.1f} ns on top; leave the record out if it is of another day or another satellite of that number"
        for row, (more, sigma) in left.items()
        if abs(more) > max(_WRONG_NS, _WRONG_SIGMAS * sigma)
    ]


def _drifts(
    rays: Rays, part: Rays, used: Ints, per_ns: Floats, unknowns: Unknowns, estimate: _Estimate
) -> list[dict[str, Any]]:  # fmt: skip
    """The receivers whose bias moved within the day, as plain facts."""
    pair = unknowns.pair[unknowns.receiver_row[used]]
    key = part.receiver * len(rays.pairs) + pair
    seconds = (part.time - part.time.min()).astype("timedelta64[ns]").astype(np.int64) / 1e9
    found: list[Drift] = outstanding(wanderings(key, part.arc, seconds, estimate.residual, -per_ns[used]))
    return [
        {
            "receiver": rays.receivers[one.row // len(rays.pairs)].name,
            "system": rays.pairs[one.row % len(rays.pairs)].system,
            "pair": rays.pairs[one.row % len(rays.pairs)].name,
            "rms_ns": round(one.rms_ns, 3),
            "range_ns": round(one.range_ns, 3),
            "hours": [round(float(h) / 3600.0, 2) for h in one.starts_s],
            "offset_ns": [round(float(v), 3) for v in one.block_ns],
            "offset_sigma_ns": [round(float(v), 3) for v in one.block_sigma_ns],
        }
        for one in found
    ]


def _drift_sentence(one: Mapping[str, Any]) -> str:
    return (
        f"{one['receiver']}: the {one['system']} {one['pair']} bias moves within the day by {one['range_ns']:.2f} ns "
        "at least; one value per day is not good enough for it (drift_hours finds one per few hours)"
    )


def _leanings(
    rays: Rays, per_ns: Floats, rows: Ints, estimate: _Estimate, layer: HighLayer, low_slant: Floats,
    choices: AdjustmentChoices,
) -> Floats:  # fmt: skip
    """How each ray's vertical content moves when the model is off by one sigma, (2, rays) [TECU].

    First the height that the single shell stands for, second how the plasmasphere grows toward its feet.  Each moves
    the biases, the amplitude of the high layer, and the way from slant to vertical together.
    """
    relative = relative_mapping_sigma(rays.mapping, rays.shell_height_m, choices.shell_height_sigma_m)
    moved, amplitude = estimate.moved, float(estimate.x[-1])
    slant, above = layer.slant(estimate.exponent)[0], layer.above(estimate.exponent)[0]
    slant_step, above_step = (
        _doubt(shape, estimate.exponent, estimate.exponent_sigma, amplitude, choices)
        for shape in (layer.slant, layer.above)
    )
    by_bias = per_ns * (moved[:, rows[:, 0]] + moved[:, rows[:, 1]]) / rays.mapping
    by_amplitude = moved[:, -1:] * (above - slant / rays.mapping)
    leanings = by_bias + by_amplitude
    leanings[0] += relative * low_slant / rays.mapping
    leanings[1] += slant_step / rays.mapping - above_step
    return np.asarray(leanings)
