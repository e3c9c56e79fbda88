"""Where a receiver's phases slip: breaks between stretches of constant ambiguities, each with its reason.

Three combinations are asked together: L1 - L2 (quiet to millimetres, but moved by the ionosphere), the ionosphere-free
phase (moved by no storm; geometry is smooth, the receiver's clock is the middle of all satellites), and the wide lane
(needs no smoothness, but codes).  Each epoch's step is measured between a fit before and a fit after it, so that time
runs both ways.  A step is a slip where whole cycles on both carriers explain all three and no step does not; pairs
that hide in one combination stand out in another, and a storm, which moves only the first, cuts nothing.
Loss-of-lock bits make a slip easier to believe and cut nothing alone.  Knows no orbits.  Repairs only when asked to,
and only where one pair of whole numbers is left.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.ndimage import correlate1d

from skylag.constants import SPEED_OF_LIGHT_M_S
from skylag.ionosphere.combinations import (
    ionosphere_free,
    millisecond_steps,
    slip_effect,
    tag_jumps,
    tecu_per_metre,
    wide_lane,
)
from skylag.tables import ARC_BEGAN, Bools, Floats, Ints, Observations

FIRST, GAP, SLIP, RESET = (ARC_BEGAN.index(word) for word in ("first", "gap", "slip", "reset"))

_SMOOTH = 4  # degree of the geometry within a window of a few minutes
_LEAST = 7  # points a window needs for that degree and a step
_CLOCK_SATELLITES = 5  # the receiver's clock is the middle of at least so many
_BLOCK = 40  # epochs over which the noise of phases is taken as one
_BLOCK_LEAST = 16  # steps that tell the noise of a block
_FLOOR_M = 0.003  # phases are never trusted beyond this
_AGREE = 16.0  # chi-square of three steps about the whole numbers that explain them


@dataclass(frozen=True)
class ArcChoices:
    """How arcs are cut and levelled.

    longest_gap_s      a longer silence of a satellite ends the arc (common practice: 2 to 5 minutes)
    shortest_arc_s     shorter arcs cannot be levelled and are dropped (common practice: 10 to 30 minutes)
    significance       chi-square by which a slip must explain the steps better than none does
    told_significance  the same where the file sets the loss-of-lock bit
    repair             take slips out, instead of cutting, where their whole numbers are certain
    level_block_s      code multipath is common within a block of this length (common practice: 5 to 15 minutes)
    """

    longest_gap_s: float = 180.0
    shortest_arc_s: float = 600.0
    significance: float = 30.0
    told_significance: float = 15.0
    repair: bool = False
    level_block_s: float = 900.0


@dataclass(frozen=True)
class Stretches:
    """What slip finding gives for one receiver-day.

    used      (E, S) phases belong to a stretch
    began     (E, S) code of ARC_BEGAN where a stretch begins, -1 elsewhere
    repair_m  (E, S) metres to take off L1 - L2 for slips repaired; zero where none was asked for
    slips     one mapping per slip: time, satellite, cycles (or None where no whole numbers fit), size_tecu, seen_by
    counts    what was joined, repaired, dropped
    """

    used: Bools
    began: npt.NDArray[np.int8]
    repair_m: Floats
    slips: tuple[Mapping[str, Any], ...]
    counts: Mapping[str, int]


@dataclass
class _Series:
    """Combinations on a regular grid of epochs (G, S); NaN where there is no phase."""

    difference: Floats  # L1 - L2 [m]
    geometry: Floats  # ionosphere-free phase [m], at evenly spaced instants
    wide: Floats  # wide lane [cycles], NaN without code
    present: Bools
    told: Bools
    begin: Bools
    reset: Ints  # (G,) running count of power failures
    f1: Floats
    f2: Floats
    interval_s: float
    reach: int  # points on either side of a step
    step: Floats = field(default_factory=lambda: np.zeros((0, 0)))  # of `geometry`, from whole windows
    fifth: Floats = field(default_factory=lambda: np.zeros((0, 0)))  # fifth differences of `geometry`
    bend: Floats = field(default_factory=lambda: np.zeros((0, 0)))  # the same of `difference`
    promise: float = np.nan  # noise of one point over scatter of fifth differences
    unit: dict[str, Floats] = field(default_factory=dict)  # noise of one point, per block of epochs

    def runs(self) -> tuple[Ints, Ints]:
        """Points of the same stretch before each point, and from it on, itself counted (G, S)."""
        rows = np.arange(len(self.present), dtype=np.int32)[:, None]
        start = np.maximum.accumulate(np.where(self.begin, rows, 0), axis=0)
        last = self.present.copy()
        last[:-1] &= ~self.present[1:] | self.begin[1:]
        end = np.minimum.accumulate(np.where(last, rows, len(rows) - 1)[::-1], axis=0)[::-1]
        return np.where(self.present, rows - start, 0), np.where(self.present, end - rows + 1, 0)


@dataclass
class _Steps:
    """Steps at chosen points (n,): place, step and sigma in each combination."""

    row: Ints
    column: Ints
    difference: Floats
    difference_sigma: Floats
    geometry: Floats
    geometry_sigma: Floats
    wide: Floats
    wide_sigma: Floats

    def take(self, chosen: npt.NDArray[Any]) -> "_Steps":
        return _Steps(**{name: values[chosen] for name, values in vars(self).items()})


def find(observations: Observations, choices: ArcChoices) -> Stretches:
    """The stretches of constant ambiguities of one receiver-day."""
    series, row_of = _on_grid(observations)
    found: list[_Steps] = []
    left, right = series.runs()
    _measure(series, left, right)
    columns = np.arange(series.present.shape[1])
    # Slips found make the noise around them known better, so that the satellites that had some are looked at again.
    for _ in range(3):
        steps = _worth_a_look(series, left, right, columns)
        seen = len(found)
        for _ in range(8):
            slips = _accept(series, steps, left, right, choices)
            if not len(slips.row):
                break
            found.append(slips)
            series.begin[slips.row, slips.column] = True
            left, right = series.runs()
            steps = _steps_beside(series, slips, left, right)
        if len(found) == seen:
            break
        columns = np.unique(np.concatenate([slips.column for slips in found[seen:]]))
    slipped = np.zeros(series.present.shape, dtype=bool)
    for slips in found:
        slipped[slips.row, slips.column] = True
    lonely = _drop_lonely(series, slipped)
    joined, told = _join(series, slipped, choices)
    return _collect(observations, series, row_of, slipped, told, lonely, joined, choices)


# ---------------------------------------------------------------------------------------------- the grid


def _on_grid(observations: Observations) -> tuple[_Series, Ints]:
    """The combinations on evenly spaced epochs, and the grid row of each epoch."""
    elapsed = (observations.times - observations.times[0]).astype("timedelta64[ns]").astype(np.int64) / 1e9
    row_of = np.rint(elapsed / observations.interval_s).astype(np.int64)
    if len(row_of) > 1 and np.any(np.diff(row_of) < 1):
        row_of = np.arange(len(elapsed))
    shape = (int(row_of[-1]) + 1, len(observations.satellites))
    f1, f2 = observations.f1_hz, observations.f2_hz

    def spread(values: Floats) -> Floats:
        if shape == values.shape:
            return np.array(values)
        out = np.full(shape, np.nan)
        out[row_of] = values
        return out

    # Half-cycle ambiguities unresolved (RINEX LLI bit 1): the phase may be off by half a cycle at this epoch only.
    lock = observations.lock1 | observations.lock2
    present = np.isfinite(observations.phase1) & np.isfinite(observations.phase2) & ((lock & 2) == 0)
    geometry = ionosphere_free(observations.phase1, observations.phase2, f1, f2)
    geometry[~present] = np.nan
    geometry = spread(geometry)
    # A clock set back by a millisecond moves the instant of measurement: phases are put back to evenly spaced ones.
    tags_s = np.cumsum(tag_jumps(observations)) * 1e-3
    if tags_s.any():
        at_row = np.searchsorted(row_of, np.arange(shape[0]), side="right") - 1
        geometry += _rate(geometry, observations.interval_s) * tags_s[at_row][:, None]
    difference = observations.phase1 - observations.phase2
    difference[~present] = np.nan
    code1, code2 = observations.code1, observations.code2
    wide = wide_lane(observations.phase1, observations.phase2, *_both_codes(code1, code2, difference, f1, f2), f1, f2)
    # Whole milliseconds between codes and phases leave L1 - L2 untouched, the others not.
    milliseconds = millisecond_steps(observations)
    if milliseconds.any():
        wide += milliseconds * (1e-3 * (f1 - f2))[None, :]
        geometry += spread(np.where(present, milliseconds, 0) * (SPEED_OF_LIGHT_M_S * 1e-3))
    wide[~present] = np.nan
    on_grid = np.zeros(shape, dtype=bool)
    on_grid[row_of] = present
    told = np.zeros(shape, dtype=bool)
    told[row_of] = (lock & 1) > 0
    reset = np.zeros(shape[0], dtype=np.int64)
    reset[row_of] = observations.resets
    reset = np.cumsum(reset)
    begin = on_grid.copy()
    begin[1:] &= ~on_grid[:-1] | (np.diff(reset) > 0)[:, None]
    reach = int(np.clip(300.0 // observations.interval_s, 4, 8))
    series = _Series(
        difference=spread(difference), geometry=geometry, wide=spread(wide), present=on_grid, told=told, begin=begin,
        reset=reset, f1=f1, f2=f2, interval_s=observations.interval_s, reach=reach,
    )  # fmt: skip
    return series, row_of


def _rate(values: Floats, interval_s: float) -> Floats:
    """Rate of change along time, from the neighbours at hand; zero where there is none."""
    forward = np.full_like(values, np.nan)
    forward[:-1] = np.diff(values, axis=0)
    backward = np.full_like(values, np.nan)
    backward[1:] = forward[:-1]
    both = 0.5 * (forward + backward)
    rate = np.where(np.isfinite(both), both, np.where(np.isfinite(forward), forward, backward))
    return np.asarray(np.nan_to_num(rate) / interval_s)


def _both_codes(code1: Floats, code2: Floats, difference: Floats, f1: Floats, f2: Floats) -> tuple[Floats, Floats]:
    """The codes, a missing one replaced by the other, moved by the phases' own ionosphere.

    P2 - P1 and L1 - L2 differ by a constant as long as the phases do not slip; it is taken from ten epochs around.
    With one code alone this is phase minus code on that carrier, freed of the ionosphere.
    """
    one = np.isfinite(code1) ^ np.isfinite(code2)
    one &= np.isfinite(difference)
    if not one.any():
        return code1, code2
    apart = code2 - code1 - difference
    row, column = np.nonzero(one)
    window = np.clip(row[:, None] + np.arange(-10, 11), 0, len(code1) - 1)
    near = apart[window, column[:, None]]
    known = np.isfinite(near).any(axis=1)
    row, column = row[known], column[known]
    constant = np.nanmedian(near[known], axis=1) + difference[row, column]
    code1, code2 = code1.copy(), code2.copy()
    first = np.isfinite(code1[row, column])
    code2[row[first], column[first]] = code1[row[first], column[first]] + constant[first]
    code1[row[~first], column[~first]] = code2[row[~first], column[~first]] - constant[~first]
    return code1, code2


# ---------------------------------------------------------------------------------------------- steps


@lru_cache(maxsize=4096)
def _kernel(before: int, after: int, hole: int, degree: int, reach: int) -> Floats:
    """Weights (2 reach,) that give the step between `before` points and `after` points, a hole of epochs between.

    Least squares of a polynomial and a step; places not used weigh zero.
    """
    time = np.concatenate([np.arange(-before, 0), np.arange(after) + hole]) + 0.5 - hole / 2.0
    time = time / (before + after)
    design = np.stack([time > 0, *(time**power for power in range(degree + 1))], axis=1)
    weights = np.zeros(2 * reach)
    weights[reach - before : reach + after] = np.linalg.pinv(design.astype(float))[0]
    return weights


def _degree(before: int, after: int, highest: int) -> int:
    """Degree that a step between so few points allows: one point more than there are unknowns, or as many."""
    return min(highest, before + after - 3)


def _middle(values: Floats, valid: Bools) -> tuple[Floats, Ints]:
    """Median over the valid values of each row, and how many there are; NaN where none."""
    count = valid.sum(axis=1)
    ordered = np.sort(np.where(valid, values, np.inf), axis=1)
    rows = np.arange(len(values))
    low, high = np.maximum(count - 1, 0) // 2, np.minimum(count // 2, values.shape[1] - 1)
    with np.errstate(invalid="ignore"):
        middle = 0.5 * (ordered[rows, low] + ordered[rows, high])
    return np.where(count > 0, middle, np.nan), count


_SHORT = 4  # points on either side for L1 - L2, which a storm bends


_FIFTH = np.array([-1.0, 5.0, -10.0, 10.0, -5.0, 1.0])  # fifth differences: free of geometry, few epochs long


def _measure(series: _Series, left: Ints, right: Ints) -> None:
    """Steps of L1 - L2 and of the ionosphere-free phase wherever a whole window is at hand (G, S)."""
    reach = series.reach
    step = correlate1d(
        np.nan_to_num(series.geometry), _kernel(reach, reach, 0, _SMOOTH, reach), axis=0, mode="constant"
    )
    clock, count = _middle(step, (left >= reach) & (right >= reach))
    step -= np.where(count >= _CLOCK_SATELLITES, clock, np.nan)[:, None]
    series.step = step
    fifth = correlate1d(np.nan_to_num(series.geometry), _FIFTH, axis=0, mode="constant")
    clock, count = _middle(fifth, (left >= 3) & (right >= 3))
    series.fifth = fifth - np.where(count >= _CLOCK_SATELLITES, clock, np.nan)[:, None]
    short = _kernel(_SHORT, _SHORT, 0, 2, _SHORT)
    series.bend = correlate1d(np.nan_to_num(series.difference), short, axis=0, mode="constant")
    shape = (-(-len(step) // _BLOCK), step.shape[1])
    series.unit = {"geometry": np.full(shape, np.nan), "difference": np.full(shape, np.nan)}


def _worth_a_look(series: _Series, left: Ints, right: Ints, columns: Ints) -> _Steps:
    """Steps of these satellites that stand out, or were measured without a whole window; noise is found on the way."""
    reach, epochs = series.reach, len(series.present)
    left_here, right_here = left[:, columns], right[:, columns]
    step, bend = series.step[:, columns], series.bend[:, columns]
    whole = (left_here >= reach) & (right_here >= reach)
    norm = float(np.linalg.norm(_kernel(reach, reach, 0, _SMOOTH, reach)))
    short_norm = float(np.linalg.norm(_kernel(_SHORT, _SHORT, 0, 2, _SHORT)))
    unit = _noise(step, whole & np.isfinite(step)) / norm
    # Slips spoil fifth differences for six epochs only; what they promise of the longer windows is learned on the way.
    fifth = series.fifth[:, columns]
    quick = _noise(fifth, (left_here >= 3) & (right_here >= 3) & np.isfinite(fifth))
    if columns.size == series.present.shape[1]:
        known = np.isfinite(unit / quick)
        series.promise = 1.3 * float(np.median((unit / quick)[known])) if known.any() else np.nan
    unit = np.fmin(unit, series.promise * quick)
    short_unit = _noise(bend, (left_here >= _SHORT) & (right_here >= _SHORT)) / short_norm
    series.unit["geometry"][:, columns], series.unit["difference"][:, columns] = unit, short_unit
    sigma = np.maximum(np.repeat(unit, _BLOCK, axis=0)[:epochs] * norm, _FLOOR_M)
    bend_sigma = np.maximum(np.repeat(short_unit, _BLOCK, axis=0)[:epochs] * short_norm, _FLOOR_M)
    blind = np.asarray(~np.isfinite(series.step).any(axis=1))
    with np.errstate(invalid="ignore"):
        loud = np.abs(step) > np.where(series.told[:, columns], 3.0, 4.5) * sigma
        loud |= ~np.isfinite(step) & (np.abs(bend) > 4.5 * bend_sigma)
    at_hand = series.present[:, columns] & (left_here >= 1) & (right_here >= 1)
    row, column = np.nonzero(at_hand & (loud | ~whole | blind[:, None]))
    return _steps_at(series, row, columns[column], left, right)


def _steps_beside(series: _Series, slips: _Steps, left: Ints, right: Ints) -> _Steps:
    """Steps at the points whose windows a new edge has shortened."""
    reach = max(series.reach, _SHORT)
    row = (slips.row[:, None] + np.arange(-reach, reach + 1)).ravel()
    column = np.repeat(slips.column, 2 * reach + 1)
    inside = (row >= 0) & (row < len(series.present))
    place = np.unique(row[inside] * series.present.shape[1] + column[inside])
    row, column = np.divmod(place, series.present.shape[1])
    fit = series.present[row, column] & (left[row, column] >= 1) & (right[row, column] >= 1)
    return _steps_at(series, row[fit], column[fit], left, right)


def _noise(steps: Floats, valid: Bools) -> Floats:
    """Robust scatter of steps per block of epochs and satellite (B, S), smoothed over neighbours; NaN filled in.

    A slip touches six to sixteen epochs of a block: the lower two fifths stay clean of it.
    """
    blocks = -(-len(steps) // _BLOCK)
    padded = np.full((blocks * _BLOCK, steps.shape[1]), np.inf)
    padded[: len(steps)] = np.where(valid, np.abs(steps), np.inf)
    shaped = padded.reshape(blocks, _BLOCK, -1)
    shaped.sort(axis=1)
    count = np.isfinite(shaped).sum(axis=1)
    middle = np.take_along_axis(shaped, (2 * count[:, None, :]) // 5, axis=1)[:, 0]
    square = np.where(count >= _BLOCK_LEAST, middle, 0.0) ** 2
    weight = np.where(count >= _BLOCK_LEAST, count, 0).astype(float)
    total, mass = square * weight, weight.copy()
    total[1:] += 0.5 * (square * weight)[:-1]
    total[:-1] += 0.5 * (square * weight)[1:]
    mass[1:] += 0.5 * weight[:-1]
    mass[:-1] += 0.5 * weight[1:]
    with np.errstate(invalid="ignore", divide="ignore"):
        scatter = 1.9069 * np.sqrt(total / mass)  # two fifths of a normal sample lie within 0.5244 sigma
    known = np.isfinite(scatter)
    # A stretch too short to measure itself is taken to be twice as noisy as the receiver's usual one.
    usual = 2.0 * float(np.median(scatter[known])) if known.any() else np.nan
    return np.asarray(np.where(known, scatter, usual))


def _steps_at(series: _Series, row: Ints, column: Ints, left: Ints, right: Ints) -> _Steps:
    """Steps of all three combinations at given points, each from as many points as the stretch allows."""
    before, after = left[row, column], right[row, column]
    block = row // _BLOCK
    bend, bend_norm = _short_steps(series, row, column, before, after)
    step, step_norm = _geometry_steps(series, row, column, before, after, left, right)
    wide, wide_sigma = _wide_steps(series, row, column, before, after)
    return _Steps(
        row=row, column=column, difference=bend,
        difference_sigma=np.maximum(series.unit["difference"][block, column] * bend_norm, _FLOOR_M),
        geometry=step,
        geometry_sigma=np.maximum(series.unit["geometry"][block, column] * step_norm, _FLOOR_M),
        wide=wide, wide_sigma=wide_sigma,
    )  # fmt: skip


def _short_steps(series: _Series, row: Ints, column: Ints, before: Ints, after: Ints) -> tuple[Floats, Floats]:
    """Step of L1 - L2 [m] and the norm of its weights."""
    b, a = np.minimum(before, _SHORT), np.minimum(after, _SHORT)
    kind = b * 10 + a
    weights = np.full((len(row), 2 * _SHORT), np.nan)
    for one in np.unique(kind[a + b >= 4]):
        b1, a1 = divmod(int(one), 10)
        weights[kind == one] = _kernel(b1, a1, 0, _degree(b1, a1, 2), _SHORT)
    window = np.clip(row[:, None] + np.arange(-_SHORT, _SHORT), 0, len(series.present) - 1)
    values = np.where(weights != 0.0, series.difference[window, column[:, None]], 0.0)
    return np.einsum("nk,nk->n", weights, values), np.linalg.norm(weights, axis=1)


def _geometry_steps(
    series: _Series, row: Ints, column: Ints, before: Ints, after: Ints, left: Ints, right: Ints
) -> tuple[Floats, Floats]:
    """Step of the ionosphere-free phase [m] against the receiver's clock, and the norm of its weights."""
    reach = series.reach
    step, norm = np.full(len(row), np.nan), np.full(len(row), np.nan)
    b, a = np.minimum(before, reach), np.minimum(after, reach)
    fit = (b >= 2) & (a >= 2) & (a + b >= _LEAST)
    filled = np.nan_to_num(series.geometry)
    kind = b * 100 + a
    for one in np.unique(kind[fit]):
        b1, a1 = divmod(int(one), 100)
        weights = _kernel(b1, a1, 0, _SMOOTH, reach)[reach - b1 : reach + a1]
        here = np.flatnonzero(fit & (kind == one))
        rows, back = np.unique(row[here], return_inverse=True)
        sums = np.zeros((len(rows), filled.shape[1]))
        for offset, weight in zip(range(-b1, a1), weights, strict=True):
            sums += weight * filled[rows + offset]
        clock, count = _middle(sums, (left[rows] >= b1) & (right[rows] >= a1))
        clock = np.where(count >= _CLOCK_SATELLITES, clock, np.nan)
        step[here] = sums[back, column[here]] - clock[back]
        norm[here] = np.linalg.norm(weights)
    return step, norm


@lru_cache(maxsize=4096)
def _remainder(before: int, after: int, hole: int, degree: int) -> tuple[Floats, int]:
    """Matrix that leaves what a polynomial and a step do not explain of a window's points; its degrees of freedom."""
    time = np.concatenate([np.arange(-before, 0), np.arange(after) + hole]) + 0.5 - hole / 2.0
    time = time / (before + after)
    design = np.stack([time > 0, *(time**power for power in range(degree + 1))], axis=1).astype(float)
    return np.eye(len(time)) - design @ np.linalg.pinv(design), max(0, before + after - degree - 2)


def _widened(series: _Series, steps: _Steps, left: Ints, right: Ints, hole: Ints) -> _Steps:
    """The steps, with sigmas widened where the points about them scatter more than the block's noise tells.

    Scintillation, and a slip next door, make a window ragged: what it says of a step is worth as much less.  The
    scatter of few points is drawn toward the block's by three degrees of freedom.
    """
    row, column = steps.row, steps.column
    before, after = left[row - hole - 1, column] + 1, right[row, column]
    filled = np.nan_to_num(series.geometry)
    widen = {"difference": np.ones(len(row)), "geometry": np.ones(len(row))}
    for name, reach, highest in (("difference", _SHORT, 2), ("geometry", series.reach, _SMOOTH)):
        b, a = np.minimum(before, reach), np.minimum(after, reach)
        fit = np.isfinite(getattr(steps, name))
        kind = (hole * 100 + b) * 100 + a
        unit = np.maximum(series.unit[name][row // _BLOCK, column], 1e-4)
        for one in np.unique(kind[fit]):
            a1, b1, h = int(one) % 100, int(one) // 100 % 100, int(one) // 10000
            matrix, freedom = _remainder(b1, a1, h, _degree(b1, a1, highest))
            here = np.flatnonzero(fit & (kind == one))
            place = row[here][:, None] + np.concatenate([np.arange(-b1, 0) - h, np.arange(a1)])
            if name == "difference":
                rest = series.difference[place, column[here][:, None]] @ matrix
            else:
                every = np.einsum("kl,nls->nks", matrix, filled[place])
                others = (left[row[here]] >= b1 + h) & (right[row[here]] >= a1)
                every = np.where(others[:, None, :], every, np.nan)
                own = np.einsum("kl,nl->nk", matrix, filled[place, column[here][:, None]])
                count = every.shape[1] * len(here)
                clock, _ = _middle(every.reshape(count, -1), np.isfinite(every).reshape(count, -1))
                rest = own - clock.reshape(len(here), -1)
            variance = (3.0 * unit[here] ** 2 + (rest**2).sum(axis=1)) / (3.0 + freedom)
            widen[name][here] = np.sqrt(np.maximum(1.0, variance / unit[here] ** 2))
    return replace(
        steps,
        difference_sigma=steps.difference_sigma * widen["difference"],
        geometry_sigma=steps.geometry_sigma * widen["geometry"],
    )


def _wide_steps(
    series: _Series, row: Ints, column: Ints, before: Ints, after: Ints, span: int = 20
) -> tuple[Floats, Floats]:
    """Step of the wide lane [cycles] between medians before and after, and its sigma; multipath lasts minutes."""
    offset = np.arange(-span, span)
    window = np.clip(row[:, None] + offset, 0, len(series.present) - 1)
    values = series.wide[window, column[:, None]]
    inside = (offset >= -before[:, None]) & (offset < after[:, None]) & np.isfinite(values)
    first, n_first = _middle(values[:, :span], inside[:, :span])
    second, n_second = _middle(values[:, span:], inside[:, span:])
    off = np.abs(values - np.concatenate([np.repeat(first[:, None], span, 1), np.repeat(second[:, None], span, 1)], 1))
    scatter, _ = _middle(off, inside)
    scatter = np.maximum(1.4826 * scatter, 0.1)
    variance = np.zeros(len(row))
    for count in (n_first, n_second):
        independent = np.maximum(1.0, count * series.interval_s / 180.0)
        variance = variance + 1.5 * scatter**2 / independent
    wide = second - first
    wide[(n_first < 3) | (n_second < 3)] = np.nan
    return wide, np.sqrt(variance + 0.15**2)


# ---------------------------------------------------------------------------------------------- decisions


@dataclass
class _Fit:
    """Best whole numbers for steps (n,): cycles (n, 2), their chi-square, that of no slip, that of the next best."""

    cycles: Ints
    chi: Floats
    none: Floats
    next_best: Floats

    def take(self, chosen: npt.NDArray[Any]) -> "_Fit":
        return _Fit(**{name: values[chosen] for name, values in vars(self).items()})


def _fit(series: _Series, steps: _Steps) -> _Fit:
    """Whole cycles on both carriers that explain the steps best, (0, 0) apart."""
    f1, f2 = series.f1[steps.column], series.f2[steps.column]
    w1, w2 = SPEED_OF_LIGHT_M_S / f1, SPEED_OF_LIGHT_M_S / f2
    share = f1**2 / (f1**2 - f2**2)
    effect = np.stack([np.stack([w1, -w2], 1), np.stack([share * w1, (1.0 - share) * w2], 1),
                       np.tile([1.0, -1.0], (len(w1), 1))], axis=1)  # fmt: skip
    seen = np.stack([steps.difference, steps.geometry, steps.wide], axis=1)
    sigma = np.stack([steps.difference_sigma, steps.geometry_sigma, steps.wide_sigma], axis=1)
    known = np.isfinite(seen) & np.isfinite(sigma)
    weight = np.where(known, 1.0 / np.where(known, sigma, 1.0) ** 2, 0.0)
    seen = np.where(known, seen, 0.0)
    normal = np.einsum("nki,nk,nkj->nij", effect, weight, effect) + 1e-9 * np.eye(2)
    right = np.einsum("nki,nk,nk->ni", effect, weight, seen)
    real = np.linalg.solve(normal, right[..., None])[..., 0]
    around = np.stack(np.meshgrid(np.arange(-4, 5), np.arange(-4, 5), indexing="ij"), axis=-1).reshape(-1, 2)
    whole = np.rint(real).astype(np.int64)[:, None, :] + around
    rest = seen[:, None, :] - np.einsum("nki,nmi->nmk", effect, whole.astype(float))
    chi = np.einsum("nmk,nk->nm", rest**2, weight)
    chi[(whole == 0).all(axis=2)] = np.inf
    best = np.argmin(chi, axis=1) if len(chi) else np.zeros(0, dtype=np.int64)
    rows = np.arange(len(chi))
    lowest = chi[rows, best]
    chi[rows, best] = np.inf
    none = np.einsum("nk,nk->n", seen**2, weight)
    next_best = np.minimum(chi.min(axis=1) if len(chi) else np.zeros(0), none)
    return _Fit(whole[rows, best], lowest, none, next_best)


def _agrees(fit: _Fit, needed: Floats | float) -> Bools:
    """Do the best whole numbers explain the steps: within noise, or roughly where no others come near?"""
    return np.asarray((fit.chi < _AGREE) | ((fit.chi < 2.5 * _AGREE) & (fit.next_best - fit.chi > 2.0 * needed)))


def _accept(series: _Series, steps: _Steps, left: Ints, right: Ints, choices: ArcChoices) -> _Steps:
    """The steps that are slips, the strongest alone among neighbours."""
    with np.errstate(invalid="ignore"):
        in_geometry = np.abs(steps.geometry) / steps.geometry_sigma
        in_difference = np.abs(steps.difference) / steps.difference_sigma
        in_wide = np.abs(steps.wide) / steps.wide_sigma
        blind = ~np.isfinite(in_geometry)
        told = series.told[steps.row, steps.column]
        loud = (in_geometry > np.where(told, 3.0, 4.5)) | (blind & ((in_difference > 4.5) | (in_wide > 4.0)))
    steps = steps.take(loud)
    told, blind = told[loud], blind[loud]
    in_geometry, in_difference = in_geometry[loud], np.nan_to_num(in_difference[loud])
    size, large = np.nan_to_num(np.abs(steps.difference)), np.nan_to_num(np.abs(steps.geometry))
    fit = _fit(series, steps)
    needed = np.where(told, choices.told_significance, choices.significance)
    ragged = np.flatnonzero(fit.none - fit.chi > needed)
    wide = steps.take(ragged)
    again = _fit(series, _widened(series, wide, left, right, np.zeros(len(ragged), dtype=np.int64)))
    whole = np.zeros(len(steps.row), dtype=bool)
    whole[ragged] = (again.none - again.chi > needed[ragged]) & _agrees(again, needed[ragged])
    with np.errstate(invalid="ignore"):
        # No whole numbers, but a step that neither ionosphere nor geometry makes: half cycles, or a receiver at fault.
        broken = (in_geometry > 8.0) & (large > 0.06) & (in_difference > 6.0) & (size > 0.03)
        broken |= (in_geometry > 8.0) & (large > 1.0)
        # Without the other satellites' help the ionosphere may bend L1 - L2 by itself: it must be a step well outside.
        alone = np.where((in_difference > 6.0) & (size > 0.025), True, np.abs(steps.wide) > 0.7)
        torn = blind & (in_difference > 10.0) & (size > 0.08)
    good = (whole & (~blind | alone)) | broken | torn
    steps, fit = steps.take(good), fit.take(good)
    # What no whole numbers explain may be the echo of a slip not yet taken out: it waits until there is none near.
    odd = ~whole[good]
    keep = np.zeros(len(steps.row), dtype=bool)
    taken: dict[int, list[int]] = {}
    for k in np.lexsort((-fit.none, odd)):
        near = taken.setdefault(int(steps.column[k]), [])
        apart = 2 * series.reach if odd[k] else series.reach
        if all(abs(int(steps.row[k]) - other) > apart for other in near):
            near.append(int(steps.row[k]))
            keep[k] = True
    return steps.take(keep)


# ---------------------------------------------------------------------------------------------- gaps


def _drop_lonely(series: _Series, slipped: Bools) -> int:
    """Take out points that stand alone between slips or gaps; returns how many."""
    left, right = series.runs()
    lonely = series.present & (left + right < 3)
    series.present &= ~lonely
    for values in (series.difference, series.geometry, series.wide):
        values[lonely] = np.nan
    series.begin &= series.present
    begin = series.present.copy()
    begin[1:] &= ~series.present[:-1]
    # Where a lonely point went, its successor begins after a gap, slipped or not.
    slipped &= series.present & ~begin
    series.begin |= begin
    return int(lonely.sum())


def _join(series: _Series, slipped: Bools, choices: ArcChoices) -> tuple[int, tuple[_Steps, _Fit]]:
    """Carry stretches on across short gaps where the phases do; returns how many, and slips with their whole numbers.

    Slips found are looked at once more, each apart from the others: one that shows no step any more is taken back.
    """
    reach = series.reach
    left, right = series.runs()
    row, column = np.nonzero(series.begin)
    order = np.lexsort((row, column))
    row, column = row[order], column[order]
    rows = np.arange(len(series.present))[:, None]
    last_seen = np.maximum.accumulate(np.where(series.present, rows, -1), axis=0)
    previous = np.where(row > 0, last_seen[np.maximum(row - 1, 0), column], -1)
    hole = row - previous - 1
    short = (previous >= 0) & ((row - previous) * series.interval_s <= choices.longest_gap_s + 1e-6)
    short &= series.reset[row] == series.reset[np.maximum(previous, 0)]
    row, column, hole = row[short], column[short], hole[short]
    before, after = left[row - hole - 1, column] + 1, right[row, column]
    count = len(row)
    bend, bend_sigma = np.full(count, np.nan), np.full(count, np.nan)
    step, step_sigma = np.full(count, np.nan), np.full(count, np.nan)
    filled = np.nan_to_num(series.geometry)
    for k in range(count):
        r, c, h, block = int(row[k]), int(column[k]), int(hole[k]), int(row[k]) // _BLOCK
        b, a = int(min(before[k], _SHORT)), int(min(after[k], _SHORT))
        if a + b >= 4:
            weights = _kernel(b, a, h, _degree(b, a, 2), _SHORT)[_SHORT - b : _SHORT + a]
            place = np.concatenate([np.arange(-b, 0) - h, np.arange(a)])
            bend[k] = weights @ series.difference[r + place, c]
            seen = _seen_elsewhere(series, weights, place, r, c, h, int(before[k]), int(after[k]))
            bend_sigma[k] = max(seen, series.unit["difference"][block, c] * np.linalg.norm(weights), _FLOOR_M)
        b, a = int(min(before[k], reach)), int(min(after[k], reach))
        if b >= 2 and a >= 2 and a + b >= _LEAST:
            weights = _kernel(b, a, h, _SMOOTH, reach)[reach - b : reach + a]
            place = np.concatenate([np.arange(-b, 0) - h, np.arange(a)])
            sums = weights @ filled[r + place]
            others = (left[r] >= b + h) & (right[r] >= a)
            if others.sum() >= _CLOCK_SATELLITES:
                step[k] = sums[c] - np.median(sums[others])
                step_sigma[k] = max(float(series.unit["geometry"][block, c] * np.linalg.norm(weights)), _FLOOR_M)
    wide, wide_sigma = _wide_across(series, row, column, hole, before, after)
    steps = _Steps(row, column, bend, bend_sigma, step, step_sigma, wide, wide_sigma)
    steps = _widened(series, steps, left, right, hole)
    fit = _fit(series, steps)
    quiet = (fit.none < _AGREE) & (fit.chi - fit.none > choices.told_significance) & np.isfinite(bend)
    series.begin[row[quiet], column[quiet]] = False
    was_slip = slipped[row, column]
    slipped[row[quiet], column[quiet]] = False
    known = _agrees(fit, choices.significance) & (fit.next_best - fit.chi > choices.told_significance)
    known &= np.isfinite(bend + step)
    fit.cycles[~known] = 0
    told = ~quiet & (known | was_slip)
    return int((quiet & ~was_slip).sum()), (steps.take(told), fit.take(told))


def _seen_elsewhere(
    series: _Series, weights: Floats, place: Ints, row: int, column: int, hole: int, before: int, after: int
) -> float:
    """Scatter [m] that the same bridge of L1 - L2 shows over epochs beside the gap where nothing is missing."""
    span = int(place[-1] - place[0]) + 1
    shifts = [*range(row - hole - min(before, 30), row - hole - span + 1), *range(row, row + min(after, 30) - span + 1)]
    if len(shifts) < 6:
        return 0.0
    index = np.array(shifts)[:, None] + (place - place[0])
    return float(1.4826 * np.median(np.abs(series.difference[index, column] @ weights)))


def _wide_across(
    series: _Series, row: Ints, column: Ints, hole: Ints, before: Ints, after: Ints
) -> tuple[Floats, Floats]:
    """The wide-lane step across gaps: the gap's own epochs are empty and count for nothing."""
    return _wide_steps(series, row, column, before + hole, after, 24)


# ---------------------------------------------------------------------------------------------- results


def _collect(
    observations: Observations, series: _Series, row_of: Ints, slipped: Bools, told: tuple[_Steps, _Fit],
    lonely: int, joined: int, choices: ArcChoices,
) -> Stretches:  # fmt: skip
    """Reasons, repairs and the list of slips, back on the receiver's own epochs."""
    began = np.full(series.present.shape, -1, dtype=np.int8)
    rows = np.arange(len(series.present))[:, None]
    last_seen = np.full(series.present.shape, -1)
    last_seen[1:] = np.maximum.accumulate(np.where(series.present, rows, -1), axis=0)[:-1]
    powered = (last_seen >= 0) & (series.reset[np.maximum(last_seen, 0)] < series.reset[:, None])
    began[series.begin] = GAP
    began[series.begin & slipped] = SLIP
    began[series.begin & powered] = RESET
    began[series.begin & (last_seen < 0)] = FIRST
    grid_to_epoch = np.full(len(series.present), -1)
    grid_to_epoch[row_of] = np.arange(len(row_of))
    repair = np.zeros(series.present.shape)
    repaired = 0
    listed: list[dict[str, Any]] = []
    factor = tecu_per_metre(series.f1, series.f2)
    steps, fit = told
    effect = slip_effect(fit.cycles[:, 0], fit.cycles[:, 1], series.f1[steps.column], series.f2[steps.column])[0]
    for k, (row, column) in enumerate(zip(steps.row.tolist(), steps.column.tolist(), strict=True)):
        if not series.present[row, column] or not series.begin[row, column] or began[row, column] in (FIRST, RESET):
            continue
        cycles = (int(fit.cycles[k, 0]), int(fit.cycles[k, 1]))
        known = cycles != (0, 0)
        size = float(effect[k]) if known else float(steps.difference[k])
        shown = {
            "L1-L2": abs(steps.difference[k]) / steps.difference_sigma[k],
            "ionosphere-free": abs(steps.geometry[k]) / steps.geometry_sigma[k],
            "wide lane": abs(steps.wide[k]) / steps.wide_sigma[k],
        }
        certain = known and fit.chi[k] < _AGREE and fit.next_best[k] - fit.chi[k] > choices.significance
        if choices.repair and certain:
            repair[row:, column] += size
            began[row, column] = -1
            repaired += 1
        listed.append({
            "time": observations.times[grid_to_epoch[row]], "satellite": str(observations.satellites[column]),
            "cycles": cycles if known else None, "size_tecu": size * float(factor[column]),
            "seen_by": tuple(name for name, strength in shown.items() if strength > 4.5),
            "certain": bool(certain), "repaired": bool(choices.repair and certain),
        })  # fmt: skip
    listed.sort(key=lambda slip: (slip["time"], slip["satellite"]))
    counts = {"gaps joined": joined, "slips repaired": repaired, "lonely points dropped": lonely}
    return Stretches(series.present[row_of], began[row_of], repair[row_of], tuple(listed), counts)
