"""Level each arc of phases to its codes.

The level is the weighted mean of code minus phase.  How noisy codes are at which elevation, and how much of their
noise outlives a quarter of an hour, is measured on all arcs of the receiver's day; so the sigma follows from means over
blocks and never from the number of points.  Bursts and quarter hours of bad code are left out and counted.  Never
touches the phases; needs no orbits, though elevations, where given, weight the codes.
"""

from dataclasses import dataclass

import numpy as np

from skylag.tables import Bools, Floats, Ints

_BURST = 5.0  # a code so many sigmas off is at fault (common practice: 3 to 5)
_BAD_SHARE = 0.3  # a block with so many of its codes at fault is left out whole
_USUAL_RATIO = 0.3  # variance of a block's mean over that of a point, before it is measured (0.55 squared)
_USUAL_WEIGHT = 4.0  # as if from so many blocks


@dataclass(frozen=True)
class Levels:
    """What arcs are levelled by: values (A,) in TECU, and how many code points were left out.

    level, sigma  to add to the phase, and how sure
    noise         scatter of the arc's code minus phase, weighted
    bursts, bad_blocks  single codes at fault, and codes of blocks left out whole
    """

    level: Floats
    sigma: Floats
    noise: Floats
    bursts: int
    bad_blocks: int


@dataclass
class _Codes:
    """Code minus phase of all arcs in a row (P,)."""

    arc: Ints
    gap: Floats  # TECU
    steep: Floats  # 1 / sin^2 of the elevation, 1 where none is known
    block: Ints  # numbered through all arcs
    group: Ints  # constellation
    good: Bools
    weight: Floats


def level(
    phase: Floats, code: Floats, arc: Ints, arcs: int, seconds: Floats, group: Ints, elevation_deg: Floats | None,
    block_s: float, interval_s: float,
) -> Levels:  # fmt: skip
    """Levels of a receiver's arcs.

    phase, code  (E, S) geometry-free content [TECU]; arc (E, S) arc numbers below `arcs`, -1 for none
    seconds (E,) of time; group (S,) constellation number, since code noise belongs to the signals
    """
    if not arcs:
        return Levels(np.zeros(0), np.zeros(0), np.zeros(0), 0, 0)
    codes, of_block = _gather(phase, code, arc, seconds, group, elevation_deg, block_s)
    bursts, bad = 0, 0
    for _ in range(2):
        mean, variance = _centre(codes, arcs)
        off = np.abs(codes.gap - mean[codes.arc]) * np.sqrt(codes.weight / variance[codes.arc])
        wrong = codes.good & (off > _BURST)
        share = np.bincount(codes.block, wrong | ~codes.good) / np.bincount(codes.block)
        spoiled = (share > _BAD_SHARE)[codes.block]
        # An arc with nothing but spoiled blocks keeps the better part of its codes: its noise tells the rest.
        spoiled &= (np.bincount(codes.arc, ~spoiled & ~wrong, minlength=arcs) >= 10)[codes.arc]
        bursts += int(np.sum(wrong & ~spoiled))
        bad += int(np.sum(codes.good & spoiled))
        codes.good &= ~(wrong | spoiled)
        codes.weight = _weights(codes, mean)
    mean, variance = _centre(codes, arcs)
    sigma = _sigmas(codes, of_block, mean, variance, arcs, block_s, interval_s)
    return Levels(mean, sigma, np.sqrt(variance / _usual_weight(codes, arcs)), bursts, bad)


def _gather(
    phase: Floats, code: Floats, arc: Ints, seconds: Floats, group: Ints, elevation_deg: Floats | None, block_s: float
) -> tuple[_Codes, Ints]:
    """All codes with an arc, ordered by arc and time, and the arc of each block."""
    column, row = np.nonzero(((arc >= 0) & np.isfinite(code)).T)
    of_point = arc[row, column]
    order = np.argsort(of_point, kind="stable")
    row, column, of_point = row[order], column[order], of_point[order]
    new_arc = np.diff(of_point, prepend=-1) != 0
    begin = seconds[row[new_arc]][np.cumsum(new_arc) - 1]
    inside = ((seconds[row] - begin) // block_s).astype(np.int64)
    new_block = new_arc | (np.diff(inside, prepend=-1) != 0)
    steep = np.ones(len(row))
    if elevation_deg is not None:
        sine = np.sin(np.radians(np.nan_to_num(elevation_deg[row, column], nan=10.0)))
        steep = 1.0 / np.clip(sine, 0.05, 1.0) ** 2
    codes = _Codes(
        arc=of_point, gap=code[row, column] - phase[row, column], steep=steep, block=np.cumsum(new_block) - 1,
        group=group[column], good=np.ones(len(row), dtype=bool), weight=1.0 / steep,
    )  # fmt: skip
    return codes, of_point[new_block]


def _centre(codes: _Codes, arcs: int) -> tuple[Floats, Floats]:
    """Level of each arc, and the variance of a point of unit weight about it, both safe from outliers left.

    Starts from the median and takes two steps of a mean over the points near it.
    """
    middle, spread = np.zeros(arcs), np.ones(arcs)
    edges = np.searchsorted(codes.arc, np.arange(arcs + 1))
    for number in range(arcs):  # arcs, not points: a median each
        part = slice(edges[number], edges[number + 1])
        good = codes.good[part]
        if good.any():
            gap = codes.gap[part][good]
            middle[number] = np.median(gap)
            spread[number] = 1.4826 * np.median(np.abs(gap - middle[number]) * np.sqrt(codes.weight[part][good])) + 1e-3
    mean, variance = middle, spread**2
    for _ in range(2):
        near = codes.good & (np.abs(codes.gap - mean[codes.arc]) * np.sqrt(codes.weight) < 4.0 * spread[codes.arc])
        total = np.bincount(codes.arc, codes.weight * near, minlength=arcs)
        some = total > 0
        sums = np.bincount(codes.arc, codes.weight * codes.gap * near, minlength=arcs)
        mean = np.where(some, sums / np.where(some, total, 1.0), mean)
        square = np.bincount(codes.arc, codes.weight * near * (codes.gap - mean[codes.arc]) ** 2, minlength=arcs)
        points = np.maximum(np.bincount(codes.arc, near, minlength=arcs), 2)
        variance = np.maximum(square / (points - 1.0), 1e-6)
    return mean, variance


def _weights(codes: _Codes, mean: Floats) -> Floats:
    """Inverse variances from what the day shows: a constant part and one that grows toward the horizon."""
    weight = codes.weight.copy()
    square = (codes.gap - mean[codes.arc]) ** 2
    for one in np.unique(codes.group):
        here = codes.group == one
        use = here & codes.good
        if use.sum() < 200:
            continue
        x, y = codes.steep[use], square[use]
        # Least squares of y = a + b x, each point weighed by its own expected spread, which grows like x.
        w = 1.0 / x**2
        sums = [np.sum(w), np.sum(w * x), np.sum(w * x * x), np.sum(w * y), np.sum(w * x * y)]
        determinant = sums[0] * sums[2] - sums[1] ** 2
        level_part, horizon_part = 0.0, sums[4] / sums[2]
        if determinant > 1e-9 * sums[0] * sums[2]:
            level_part = (sums[3] * sums[2] - sums[4] * sums[1]) / determinant
            horizon_part = (sums[0] * sums[4] - sums[1] * sums[3]) / determinant
        floor = 0.02 * float(np.mean(y)) + 1e-6
        weight[here] = 1.0 / np.maximum(max(level_part, 0.0) + max(horizon_part, 0.0) * codes.steep[here], floor)
    return weight


def _usual_weight(codes: _Codes, arcs: int) -> Floats:
    """Mean weight of each arc's points."""
    count = np.maximum(np.bincount(codes.arc, codes.good, minlength=arcs), 1)
    return np.asarray(np.maximum(np.bincount(codes.arc, codes.weight * codes.good, minlength=arcs), 1e-12) / count)


def _sigmas(
    codes: _Codes, of_block: Ints, mean: Floats, variance: Floats, arcs: int, block_s: float, interval_s: float
) -> Floats:
    """Sigma of each level from how far the means of blocks scatter.

    `ratio`: variance of a whole block's mean over that of a point of the same weight, pooled over the receiver's day.
    An arc's own blocks speak too, the more of them there are; what neighbouring blocks have in common is told by all
    of the day's neighbours.  Where the halves of long arcs disagree by more than
    this promises, multipath outlives a block at this receiver, and all sigmas are widened.
    """
    blocks = len(of_block)
    count = np.bincount(codes.block, codes.good, minlength=blocks).astype(np.float64)
    mass = np.bincount(codes.block, codes.weight * codes.good, minlength=blocks).astype(np.float64)
    use = count > 0
    block_mean = np.where(use, np.bincount(codes.block, codes.weight * codes.good * codes.gap, minlength=blocks)
                          / np.where(use, mass, 1.0), 0.0)  # fmt: skip
    usual = np.where(use, mass / np.maximum(count, 1), 1.0)
    off = np.where(use, (block_mean - mean[of_block]) ** 2 * usual, 0.0)
    full = use & (count * interval_s > 0.5 * block_s)
    seen = np.bincount(of_block, off * full, minlength=arcs)
    freedom = np.maximum(np.bincount(of_block, full, minlength=arcs) - 1.0, 0.0).astype(np.float64)
    many = freedom >= 2
    # Points about the mean of a short arc lie closer than they should: they are as good as one sample in some minutes.
    samples = np.bincount(codes.arc, codes.good, minlength=arcs) * interval_s / (0.5 * block_s)
    usual_variance = float(np.sum(samples * variance) / max(float(np.sum(np.maximum(samples - 1.0, 0.1))), 0.1))
    variance = (samples * variance + 5.0 * usual_variance) / (np.maximum(samples - 1.0, 0.0) + 5.0)
    pooled = np.sum(seen[many] / variance[many]) + _USUAL_RATIO * _USUAL_WEIGHT
    ratio = pooled / (np.sum(freedom[many]) + _USUAL_WEIGHT)
    of_whole = (4.0 * ratio * variance + seen * (freedom > 0)) / (4.0 + freedom)
    # A block cut short averages less: its mean is worth no more than a single point at the least.
    length = np.maximum(count * interval_s / block_s, 1e-3)
    of_mean = np.minimum(of_whole[of_block] / np.minimum(length, 1.0), np.maximum(variance, of_whole)[of_block]) / usual
    common = _common(of_block, np.sqrt(usual) * (block_mean - mean[of_block]), full, of_whole, freedom)
    # Beyond its neighbour a block's memory is taken to fade as it began (first-order autoregression).
    of_mean = of_mean * (1.0 + 2.0 * common / (1.0 - common) * (freedom / (freedom + 1.0)))[of_block]
    total = np.bincount(of_block, mass, minlength=arcs)
    share = np.where(use, mass / np.where(total > 0, total, 1.0)[of_block], 0.0)
    sigma = np.sqrt(np.bincount(of_block, share**2 * of_mean, minlength=arcs))
    return np.asarray(sigma * _halves(of_block, block_mean, mass, of_mean, freedom, arcs))


def _common(of_block: Ints, off: Floats, full: Bools, of_whole: Floats, freedom: Floats) -> float:
    """Correlation of the means of neighbouring blocks, pooled over arcs of six blocks and more; from 0 to 0.5.

    Taking off the arc's own mean makes neighbours look opposed by one over the number of blocks: that is put back.
    """
    pair = full[1:] & full[:-1] & (of_block[1:] == of_block[:-1]) & (freedom[of_block[1:]] >= 5)
    if pair.sum() < 20:
        return 0.15  # of blocks of 900 s where multipath fades in 240 s
    unit = of_whole[of_block[1:][pair]]
    seen = off[1:][pair] * off[:-1][pair] / unit + 1.0 / (freedom[of_block[1:][pair]] + 1.0)
    return float(np.clip(np.mean(np.clip(seen, -9.0, 9.0)), 0.0, 0.5))


def _halves(of_block: Ints, block_mean: Floats, mass: Floats, of_mean: Floats, freedom: Floats, arcs: int) -> float:
    """How much farther the halves of long arcs lie apart than their sigmas promise, at least 1."""
    long = np.flatnonzero(freedom >= 5)
    if len(long) < 5:
        return 1.0
    first = np.searchsorted(of_block, np.arange(arcs))
    size = np.bincount(of_block, minlength=arcs)
    second = (np.arange(len(of_block)) - first[of_block]) >= (size // 2)[of_block]
    halves = []
    for half in (~second, second):
        total = np.maximum(np.bincount(of_block, mass * half, minlength=arcs), 1e-12)
        share = mass * half / total[of_block]
        halves.append((np.bincount(of_block, share * block_mean, minlength=arcs),
                       np.bincount(of_block, share**2 * of_mean, minlength=arcs)))  # fmt: skip
    (one, one_variance), (two, two_variance) = halves
    ratios = (one[long] - two[long]) ** 2 / np.maximum(one_variance[long] + two_variance[long], 1e-9)
    return float(np.sqrt(max(1.0, float(np.mean(np.minimum(ratios, 16.0))))))
