"""Steps of a receiver's phases, epoch by epoch, in three combinations, with the noise they are judged by.

L1 - L2 and the ionosphere-free phase are fitted by a polynomial before and after an epoch, whose step between the two
is measured; the wide lane's step is that of its medians.  The receiver's clock is the middle of all satellites' steps.
Never decides what is a slip: that is for `slips`.
"""

from dataclasses import dataclass, field, replace
from functools import cached_property, lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.ndimage import correlate1d

from skylag.constants import SPEED_OF_LIGHT_M_S
from skylag.ionosphere.combinations import ionosphere_free, millisecond_steps, tag_jumps, wide_lane
from skylag.tables import Bools, Floats, Ints, Observations

SMOOTH = 4  # degree of the geometry within a window of a few minutes
LEAST = 7  # points a window needs for that degree and a step
CLOCK_SATELLITES = 5  # the receiver's clock is the middle of at least so many
BLOCK = 40  # epochs over which the noise of phases is taken as one
_BLOCK_LEAST = 16  # steps that tell the noise of a block
DIM_M = 0.03  # a noisier ionosphere-free step does not tell the smallest slip, 0.1 m
FLOOR_M = 0.003  # phases are never trusted beyond this


@dataclass
class Series:
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

    @cached_property
    def filled(self) -> Floats:
        """The ionosphere-free phase with zeros where there is none."""
        return np.asarray(np.nan_to_num(self.geometry))

    def runs(self, columns: Ints | slice = slice(None)) -> tuple[Ints, Ints]:
        """Points of the same stretch before each point, and from it on, itself counted (G, columns)."""
        present, begin = self.present[:, columns], self.begin[:, columns]
        rows = np.arange(len(present), dtype=np.int32)[:, None]
        start = np.maximum.accumulate(np.where(begin, rows, 0), axis=0)
        last = present.copy()
        last[:-1] &= ~present[1:] | begin[1:]
        end = np.minimum.accumulate(np.where(last, rows, len(rows) - 1)[::-1], axis=0)[::-1]
        return np.where(present, rows - start, 0), np.where(present, end - rows + 1, 0)


@dataclass
class Steps:
    """Steps at chosen points (n,): place, step and sigma in each combination."""

    row: Ints
    column: Ints
    difference: Floats
    difference_sigma: Floats
    geometry: Floats
    geometry_sigma: Floats
    wide: Floats
    wide_sigma: Floats

    def take(self, chosen: npt.NDArray[Any]) -> "Steps":
        return Steps(**{name: values[chosen] for name, values in vars(self).items()})


# ---------------------------------------------------------------------------------------------- the grid


def on_grid(observations: Observations) -> tuple[Series, Ints]:
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
    series = Series(
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
def kernel(before: int, after: int, hole: int, degree: int, reach: int) -> Floats:
    """Weights (2 reach,) that give the step between `before` points and `after` points, a hole of epochs between.

    Least squares of a polynomial and a step; places not used weigh zero.
    """
    time = np.concatenate([np.arange(-before, 0), np.arange(after) + hole]) + 0.5 - hole / 2.0
    time = time / (before + after)
    design = np.stack([time > 0, *(time**power for power in range(degree + 1))], axis=1)
    weights = np.zeros(2 * reach)
    weights[reach - before : reach + after] = np.linalg.pinv(design.astype(float))[0]
    return weights


def degree_for(before: int, after: int, highest: int) -> int:
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


SHORT = 4  # points on either side for L1 - L2, which a storm bends


_FIFTH = np.array([-1.0, 5.0, -10.0, 10.0, -5.0, 1.0])  # fifth differences: free of geometry, few epochs long


def measure(series: Series, left: Ints, right: Ints) -> None:
    """Steps of L1 - L2 and of the ionosphere-free phase wherever a whole window is at hand (G, S)."""
    reach = series.reach
    step = correlate1d(series.filled, kernel(reach, reach, 0, SMOOTH, reach), axis=0, mode="constant")
    clock, count = _middle(step, (left >= reach) & (right >= reach))
    step -= np.where(count >= CLOCK_SATELLITES, clock, np.nan)[:, None]
    series.step = step
    fifth = correlate1d(series.filled, _FIFTH, axis=0, mode="constant")
    clock, count = _middle(fifth, (left >= 3) & (right >= 3))
    series.fifth = fifth - np.where(count >= CLOCK_SATELLITES, clock, np.nan)[:, None]
    short = kernel(SHORT, SHORT, 0, 2, SHORT)
    series.bend = correlate1d(np.nan_to_num(series.difference), short, axis=0, mode="constant")
    shape = (-(-len(step) // BLOCK), step.shape[1])
    series.unit = {"geometry": np.full(shape, np.nan), "difference": np.full(shape, np.nan)}


def worth_a_look(series: Series, left: Ints, right: Ints, columns: Ints) -> Steps:
    """Steps of these satellites that stand out, or were measured without a whole window; noise is found on the way."""
    reach, epochs = series.reach, len(series.present)
    left_here, right_here = left[:, columns], right[:, columns]
    step, bend = series.step[:, columns], series.bend[:, columns]
    whole = (left_here >= reach) & (right_here >= reach)
    norm = float(np.linalg.norm(kernel(reach, reach, 0, SMOOTH, reach)))
    short_norm = float(np.linalg.norm(kernel(SHORT, SHORT, 0, 2, SHORT)))
    unit = _noise(step, whole & np.isfinite(step)) / norm
    # Slips spoil fifth differences for six epochs only; what they promise of the longer windows is learned on the way.
    fifth = series.fifth[:, columns]
    quick = _noise(fifth, (left_here >= 3) & (right_here >= 3) & np.isfinite(fifth))
    if columns.size == series.present.shape[1]:
        known = np.isfinite(unit) & (quick > 0)
        series.promise = 1.3 * float(np.median(unit[known] / quick[known])) if known.any() else np.nan
    unit = np.fmin(unit, series.promise * quick)
    short_unit = _noise(bend, (left_here >= SHORT) & (right_here >= SHORT)) / short_norm
    series.unit["geometry"][:, columns], series.unit["difference"][:, columns] = unit, short_unit
    sigma = np.maximum(np.repeat(unit, BLOCK, axis=0)[:epochs] * norm, FLOOR_M)
    bend_sigma = np.maximum(np.repeat(short_unit, BLOCK, axis=0)[:epochs] * short_norm, FLOOR_M)
    blind = np.asarray(~np.isfinite(series.step).any(axis=1))
    with np.errstate(invalid="ignore"):
        loud = np.abs(step) > np.where(series.told[:, columns], 3.0, 4.5) * sigma
        dim = ~np.isfinite(step) | ~(sigma < DIM_M)
        loud |= (dim | (np.abs(step) > 2.0 * sigma)) & (np.abs(bend) > 5.0 * bend_sigma)
    at_hand = series.present[:, columns] & (left_here >= 1) & (right_here >= 1)
    row, column = np.nonzero(at_hand & (loud | ~whole | blind[:, None]))
    return _steps_at(series, row, columns[column], left, right)


def steps_beside(series: Series, slips: Steps, left: Ints, right: Ints) -> Steps:
    """Steps at the points whose windows a new edge has shortened."""
    reach = max(series.reach, SHORT)
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
    blocks = -(-len(steps) // BLOCK)
    padded = np.full((blocks * BLOCK, steps.shape[1]), np.inf)
    padded[: len(steps)] = np.where(valid, np.abs(steps), np.inf)
    shaped = padded.reshape(blocks, BLOCK, -1)
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


def _steps_at(series: Series, row: Ints, column: Ints, left: Ints, right: Ints) -> Steps:
    """Steps of all three combinations at given points, each from as many points as the stretch allows."""
    before, after = left[row, column], right[row, column]
    block = row // BLOCK
    bend, bend_norm = _short_steps(series, row, column, before, after)
    step, step_norm = _geometry_steps(series, row, column, before, after, left, right)
    wide, wide_sigma = wide_steps(series, row, column, before, after)
    return Steps(
        row=row, column=column, difference=bend,
        difference_sigma=np.maximum(series.unit["difference"][block, column] * bend_norm, FLOOR_M),
        geometry=step,
        geometry_sigma=np.maximum(series.unit["geometry"][block, column] * step_norm, FLOOR_M),
        wide=wide, wide_sigma=wide_sigma,
    )  # fmt: skip


def _short_steps(series: Series, row: Ints, column: Ints, before: Ints, after: Ints) -> tuple[Floats, Floats]:
    """Step of L1 - L2 [m] and the norm of its weights."""
    b, a = np.minimum(before, SHORT), np.minimum(after, SHORT)
    kind = b * 10 + a
    weights = np.full((len(row), 2 * SHORT), np.nan)
    for one in np.unique(kind[a + b >= 4]):
        b1, a1 = divmod(int(one), 10)
        weights[kind == one] = kernel(b1, a1, 0, degree_for(b1, a1, 2), SHORT)
    window = np.clip(row[:, None] + np.arange(-SHORT, SHORT), 0, len(series.present) - 1)
    values = np.where(weights != 0.0, series.difference[window, column[:, None]], 0.0)
    return np.einsum("nk,nk->n", weights, values), np.linalg.norm(weights, axis=1)


def _geometry_steps(
    series: Series, row: Ints, column: Ints, before: Ints, after: Ints, left: Ints, right: Ints
) -> tuple[Floats, Floats]:
    """Step of the ionosphere-free phase [m] against the receiver's clock, and the norm of its weights."""
    reach = series.reach
    step, norm = np.full(len(row), np.nan), np.full(len(row), np.nan)
    b, a = np.minimum(before, reach), np.minimum(after, reach)
    fit = (b >= 2) & (a >= 2) & (a + b >= LEAST)
    filled = series.filled
    kind = b * 100 + a
    for one in np.unique(kind[fit]):
        b1, a1 = divmod(int(one), 100)
        weights = kernel(b1, a1, 0, SMOOTH, reach)[reach - b1 : reach + a1]
        here = np.flatnonzero(fit & (kind == one))
        rows, back = np.unique(row[here], return_inverse=True)
        sums = np.zeros((len(rows), filled.shape[1]))
        for offset, weight in zip(range(-b1, a1), weights, strict=True):
            sums += weight * filled[rows + offset]
        clock, count = _middle(sums, (left[rows] >= b1) & (right[rows] >= a1))
        clock = np.where(count >= CLOCK_SATELLITES, clock, np.nan)
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


def widened(series: Series, steps: Steps, left: Ints, right: Ints, hole: Ints) -> Steps:
    """The steps, with sigmas widened where the points about them scatter more than the block's noise tells.

    Scintillation, and a slip next door, make a window ragged: what it says of a step is worth as much less.  The
    scatter of few points is drawn toward the block's by three degrees of freedom.
    """
    row, column = steps.row, steps.column
    before, after = left[row - hole - 1, column] + 1, right[row, column]
    filled = series.filled
    widen = {"difference": np.ones(len(row)), "geometry": np.ones(len(row))}
    for name, reach, highest in (("difference", SHORT, 2), ("geometry", series.reach, SMOOTH)):
        b, a = np.minimum(before, reach), np.minimum(after, reach)
        fit = np.isfinite(getattr(steps, name))
        kind = (hole * 100 + b) * 100 + a
        unit = np.maximum(series.unit[name][row // BLOCK, column], 1e-4)
        for one in np.unique(kind[fit]):
            a1, b1, h = int(one) % 100, int(one) // 100 % 100, int(one) // 10000
            matrix, freedom = _remainder(b1, a1, h, degree_for(b1, a1, highest))
            here = np.flatnonzero(fit & (kind == one))
            place = row[here][:, None] + np.concatenate([np.arange(-b1, 0) - h, np.arange(a1)])
            if name == "difference":
                rest = series.difference[place, column[here][:, None]] @ matrix
            else:
                every = np.matmul(matrix, filled[place])
                others = (left[row[here]] >= b1 + h) & (right[row[here]] >= a1)
                every = np.where(others[:, None, :], every, np.nan)
                own = filled[place, column[here][:, None]] @ matrix.T
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


def wide_steps(
    series: Series, row: Ints, column: Ints, before: Ints, after: Ints, span: int = 20
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
