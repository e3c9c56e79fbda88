"""Cut one receiver's observations into arcs free of cycle slips, and level each arc to its codes.

Slips are sought in the geometry-free phase (steps against the running rate) and in the Melbourne-Wuebbena combination
(steps of a moving mean), each with a threshold that follows the noise found around the epoch, so that a storm's fast
change is not cut to shreds.  Loss-of-lock bits lower the thresholds; alone they cut nothing.  Never repairs a slip: it
starts a new arc and says why.  Needs no orbits; elevations, where given, only weight the levelling.
"""

import itertools
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.ndimage import median_filter

from skylag.constants import REFRACTION_M3_S2, SPEED_OF_LIGHT_M_S, TECU
from skylag.tables import ARC_BEGAN, Arcs, Bools, Floats, Ints, Observations

_FIRST, _GAP, _SLIP, _RESET = (ARC_BEGAN.index(word) for word in ("first", "gap", "slip", "reset"))


@dataclass(frozen=True)
class ArcChoices:
    """How arcs are cut and levelled.

    longest_gap_s   a longer silence of a satellite ends the arc (common practice: 2 to 5 minutes)
    shortest_arc_s  shorter arcs cannot be levelled and are dropped (common practice: 10 to 30 minutes)
    phase_step_tecu smallest geometry-free step called a slip; equal slips (1, 1) make 0.45 to 0.52 TECU
    noise_factor    how many times the running scatter a step must exceed
    level_block_s   code multipath is taken as common within a block of this length (common practice: 5 to 15 minutes)
    """

    longest_gap_s: float = 180.0
    shortest_arc_s: float = 600.0
    phase_step_tecu: float = 0.25
    noise_factor: float = 5.0
    widelane_step: float = 0.5
    widelane_factor: float = 4.0
    level_block_s: float = 900.0


def tecu_per_metre(f1_hz: Floats, f2_hz: Floats) -> Floats:
    """Slant content [TECU] per metre of P2 - P1 (or L1 - L2) on two carriers; same shape.

    9.519643 for GPS L1-L2.  From I = 40.3 STEC / f^2 (IS-GPS-200, IONEX practice).
    """
    return np.asarray(1.0 / (REFRACTION_M3_S2 * TECU * (1.0 / f2_hz**2 - 1.0 / f1_hz**2)))


def geometry_free(observations: Observations) -> tuple[Floats, Floats]:
    """Phase and code geometry-free content [TECU], each (E, S): L1 - L2 and P2 - P1, biases and ambiguities inside."""
    factor = tecu_per_metre(observations.f1_hz, observations.f2_hz)
    phase = (observations.phase1 - observations.phase2) * factor
    code = (observations.code2 - observations.code1) * factor
    return phase, code


def melbourne_wuebbena(observations: Observations) -> Floats:
    """The Melbourne-Wuebbena combination in wide-lane cycles (E, S); free of geometry, clocks and ionosphere.

    Melbourne 1985; Wuebbena 1985.
    """
    f1, f2 = observations.f1_hz, observations.f2_hz
    phase = (f1 * observations.phase1 - f2 * observations.phase2) / (f1 - f2)
    code = (f1 * observations.code1 + f2 * observations.code2) / (f1 + f2)
    return np.asarray((phase - code) * (f1 - f2) / SPEED_OF_LIGHT_M_S)


def clock_jumps(observations: Observations) -> Ints:
    """Whole milliseconds by which the codes of all satellites step against their phases, per epoch (E,).

    Receivers that keep their clock near GPS time by millisecond jumps often step the codes and not the phases
    (common practice); such a step is no slip of any satellite.
    """
    millisecond_m = SPEED_OF_LIGHT_M_S * 1e-3
    step = np.diff(observations.code1 - observations.phase1, axis=0)
    enough = np.isfinite(step).sum(axis=1) >= 3
    jumps = np.zeros(len(observations.times), dtype=np.int64)
    if enough.any():
        middle = np.nanmedian(step[enough], axis=1)
        whole = np.rint(middle / millisecond_m)
        near = np.abs(middle - whole * millisecond_m) < 100.0  # metres: slips and code noise are far below
        jumps[1:][enough] = np.where(near, whole, 0).astype(np.int64)
    return jumps


def cut(observations: Observations, choices: ArcChoices | None = None, elevation_deg: Floats | None = None) -> Arcs:
    """Arcs of one receiver-day, levelled to the codes.

    elevation_deg  (E, S) or None; weights the levelling by the square of its sine where given
    Sources: slip tests after Blewitt 1990 (GRL 17, 199-202), made robust here; levelling is common practice.
    """
    choices = choices or ArcChoices()
    phase, code = geometry_free(observations)
    jump_m = np.cumsum(clock_jumps(observations)) * (SPEED_OF_LIGHT_M_S * 1e-3)
    wide = melbourne_wuebbena(observations)
    # The jump adds the same metres to both codes: their difference is untouched, the wide lane is not.
    wide += jump_m[:, None] * ((observations.f1_hz - observations.f2_hz) / SPEED_OF_LIGHT_M_S)[None, :]
    usable = np.isfinite(phase) & np.isfinite(code) & np.isfinite(wide)
    # Half-cycle ambiguities unresolved (RINEX LLI bit 1): the phase may be off by half a cycle at this epoch only.
    half_cycle = ((observations.lock1 | observations.lock2) & 2) > 0
    usable &= ~half_cycle
    seconds = (observations.times - observations.times[0]).astype("timedelta64[ns]").astype(np.int64) / 1e9
    reset_count = np.cumsum(observations.resets)
    lost = ((observations.lock1 | observations.lock2) & 1) > 0

    arc = np.full(phase.shape, -1, dtype=np.int64)
    rows: list[tuple[int, int, int, int, int]] = []
    short = 0
    for column in range(phase.shape[1]):
        at = np.flatnonzero(usable[:, column])
        if len(at) < 2:
            continue
        why = _breaks(
            phase[at, column], wide[at, column], seconds[at], reset_count[at], lost[at, column],
            observations.interval_s, choices,
            SPEED_OF_LIGHT_M_S / observations.f1_hz[column], SPEED_OF_LIGHT_M_S / observations.f2_hz[column],
        )  # fmt: skip
        starts = np.flatnonzero(why >= 0)
        for start, end in zip(starts, [*starts[1:], len(at)], strict=True):
            if seconds[at[end - 1]] - seconds[at[start]] < choices.shortest_arc_s or end - start < 10:
                short += int(end - start)
                continue
            arc[at[start:end], column] = len(rows)
            rows.append((column, int(at[start]), int(at[end - 1]), int(why[start]), int(end - start)))
    summary = np.array(rows, dtype=np.int64).reshape(-1, 5)
    levels, level_sigma, noise, rejected = _levels(phase, code, arc, summary, seconds, elevation_deg, choices)
    stec = np.where(arc >= 0, phase + np.where(arc >= 0, levels[arc], 0.0) if len(rows) else np.nan, np.nan)
    return Arcs(
        observations=observations,
        stec=stec,
        stec_phase=np.where(arc >= 0, phase, np.nan),
        arc=arc,
        arc_satellite=summary[:, 0],
        arc_start=summary[:, 1],
        arc_end=summary[:, 2],
        arc_began=summary[:, 3].astype(np.uint8),
        arc_level_sigma=level_sigma,
        arc_noise=noise,
        arc_points=summary[:, 4],
        rejected={"points of short arcs": short, "code points at fault": rejected},
    )


# ---------------------------------------------------------------------------------------------- slips


def _breaks(
    phase: Floats,
    wide: Floats,
    seconds: Floats,
    resets: Ints,
    lost: Bools,
    interval_s: float,
    choices: ArcChoices,
    wavelength1_m: float,
    wavelength2_m: float,
) -> npt.NDArray[np.int8]:
    """Why an arc begins at each usable point of one satellite: a code of ARC_BEGAN, or -1 where the arc goes on."""
    why = np.full(len(phase), -1, dtype=np.int8)
    why[0] = _FIRST
    gap = np.diff(seconds)
    why[1:][gap > max(choices.longest_gap_s, 1.5 * interval_s)] = _GAP
    why[1:][np.diff(resets) > 0] = _RESET
    edges = [*np.flatnonzero(why >= 0), len(phase)]
    for start, end in itertools.pairwise(edges):
        part = slice(start, end)
        slips = _slips(
            phase[part], wide[part], seconds[part], lost[part], interval_s, choices, wavelength1_m, wavelength2_m
        )
        why[start:end][slips] = _SLIP
    return why


def _running_scatter(values: Floats, width: int) -> Floats:
    """Robust running standard deviation of a zero-centred series (1.4826 times the running median of |values|)."""
    return np.asarray(1.4826 * median_filter(np.abs(values), size=min(width, 2 * len(values) - 1), mode="nearest"))


def _phase_steps(phase: Floats, steps: Floats) -> tuple[Floats, Floats, Floats]:
    """Per point: how far its increment lies outside the range of its neighbours' increments; running scatter; the step.

    The increment into a point is compared with the two before and the two after: a kink of the rate, as at the edge of
    a front, lies within their range, a slip alone stands out.  All in TECU.
    """
    rate = np.diff(phase) / steps
    n = len(rate)
    padded = np.concatenate([np.full(2, np.nan), rate, np.full(2, np.nan)])
    neighbours = np.stack([padded[0:n], padded[1 : n + 1], padded[3 : n + 3], padded[4 : n + 4]])
    low, high = np.nanmin(neighbours, axis=0), np.nanmax(neighbours, axis=0)
    outside = np.where(rate > high, rate - high, np.where(rate < low, rate - low, 0.0))
    bend = np.zeros(n)
    if n >= 3:
        bend[1:-1] = rate[1:-1] - 0.5 * (rate[:-2] + rate[2:])
        bend[0], bend[-1] = bend[1], bend[-2]
    scatter = _running_scatter(bend, 41) / np.sqrt(1.5)
    step = rate - np.nanmedian(neighbours, axis=0)
    return outside * steps, scatter * np.sqrt(steps), step * steps


def _slips(
    phase: Floats,
    wide: Floats,
    seconds: Floats,
    lost: Bools,
    interval_s: float,
    choices: ArcChoices,
    wavelength1_m: float,
    wavelength2_m: float,
) -> Ints:
    """Points of one gapless stretch at which a slip is found."""
    n = len(phase)
    if n < 6:
        return np.flatnonzero(lost[1:]) + 1
    found = np.zeros(n, dtype=bool)
    steps = np.maximum(np.rint(np.diff(seconds) / interval_s), 1.0)
    relax = np.where(lost[1:], 0.6, 1.0)
    clean = phase.copy()
    for _ in range(3):
        outside, scatter, step = _phase_steps(clean, steps)
        limit = np.maximum(choices.phase_step_tecu, choices.noise_factor * scatter) * relax
        new = (np.abs(outside) > limit) & ~found[1:]
        if not new.any():
            break
        found[1:] |= new
        # Take the steps out so that a slip next door is judged against whole neighbours.
        clean[1:] -= np.cumsum(np.where(new, step, 0.0))
    _, scatter, step = _phase_steps(clean, steps)
    found |= _wide_lane_slips(wide, found, lost, step, scatter, choices, wavelength1_m, wavelength2_m)
    return np.flatnonzero(found)


def _wide_lane_slips(
    wide: Floats,
    known: Bools,
    lost: Bools,
    phase_step: Floats,
    phase_scatter: Floats,
    choices: ArcChoices,
    wavelength1_m: float,
    wavelength2_m: float,
) -> Bools:
    """Points where the moving mean of the wide lane steps by a whole number of cycles, other than those known."""
    n = len(wide)
    found = np.zeros(n, dtype=bool)
    difference = np.diff(wide)
    if known.any():
        difference = difference[~known[1:]]
    if len(difference) < 5:
        return found
    single = np.full(n, 0.0)
    noise = _running_scatter(difference, 41) / np.sqrt(2.0)
    single[1:][~known[1:]] = noise
    single[1:][known[1:]] = np.median(noise)
    single[0] = single[1]
    stack = [(int(a), int(b)) for a, b in zip([0, *np.flatnonzero(known)], [*np.flatnonzero(known), n], strict=True)]
    while stack:
        start, end = stack.pop()
        if end - start < 12:
            continue
        k, accepted = _strongest_step(
            wide[start:end], single[start:end], lost[start:end], phase_step[start : end - 1],
            phase_scatter[start : end - 1], choices, wavelength1_m, wavelength2_m,
        )  # fmt: skip
        if accepted:
            found[start + k] = True
            stack += [(start, start + k), (start + k, end)]
    return found


def _strongest_step(
    wide: Floats,
    single: Floats,
    lost: Bools,
    phase_step: Floats,
    phase_scatter: Floats,
    choices: ArcChoices,
    wavelength1_m: float,
    wavelength2_m: float,
    window: int = 20,
) -> tuple[int, bool]:
    """The point of the most significant step of the moving mean, and whether it is a slip.

    Multipath is correlated over minutes, so the mean of n points is taken to be as good as that of n / 3.
    """
    n = len(wide)
    centre = median_filter(wide, size=min(21, n), mode="nearest")
    clipped = np.clip(wide, centre - 4 * single, centre + 4 * single)
    total = np.concatenate([[0.0], np.cumsum(clipped)])
    square = np.concatenate([[0.0], np.cumsum(single**2)])
    k = np.arange(4, n - 3)
    before, after = np.minimum(k, window), np.minimum(n - k, window)
    mean_before = (total[k] - total[k - before]) / before
    mean_after = (total[k + after] - total[k]) / after
    variance = 3.0 * ((square[k] - square[k - before]) / before**2 + (square[k + after] - square[k]) / after**2)
    step = mean_after - mean_before
    sigma = np.sqrt(variance + 0.05**2)
    strength = np.abs(step) / sigma * np.where(lost[k], 1.3, 1.0)
    best = int(np.argmax(strength))
    if strength[best] < choices.widelane_factor or abs(step[best]) < choices.widelane_step:
        return int(k[best]), False
    # The step of the mean peaks within a few points of the slip; the phase tells which.
    near = np.arange(max(best - 3, 0), min(best + 4, len(k)))
    cycles = np.rint(step[best])
    quiet = 5.0 * np.median(phase_scatter[k[near] - 1]) < 0.6
    if cycles == 0 or (quiet and not _whole(cycles, phase_step[k[near] - 1], wavelength1_m, wavelength2_m)):
        return int(k[best]), False
    if abs(step[best] - cycles) > 3.0 * sigma[best] + 0.25:
        return int(k[best]), False
    marked = near[lost[k[near]]]
    return int(k[marked[0]] if len(marked) else k[best]), True


def _whole(cycles: float, phase_step_tecu: Floats, wavelength1_m: float, wavelength2_m: float) -> bool:
    """Can whole cycles on both carriers make this wide-lane step and one of these geometry-free steps?

    With N1 - N2 = cycles and w1 N1 - w2 N2 = g follows N1 = (cycles w2 - g) / (w2 - w1).  A burst of bad code steps the
    wide lane and leaves the phase as it was: then N1 is rarely whole.
    """
    f1, f2 = SPEED_OF_LIGHT_M_S / wavelength1_m, SPEED_OF_LIGHT_M_S / wavelength2_m
    g = phase_step_tecu / tecu_per_metre(np.asarray(f1), np.asarray(f2))
    first = (cycles * wavelength2_m - g) / (wavelength2_m - wavelength1_m)
    return bool(np.any(np.abs(first - np.rint(first)) < 0.3))


# ---------------------------------------------------------------------------------------------- levelling


def _levels(
    phase: Floats,
    code: Floats,
    arc: Ints,
    summary: Ints,
    seconds: Floats,
    elevation_deg: Floats | None,
    choices: ArcChoices,
) -> tuple[Floats, Floats, Floats, int]:
    """Level of each arc, its sigma and the arc's code scatter [TECU], and how many code points were at fault.

    The level is the weighted mean of code minus phase.  Multipath is common within a block, so the sigma comes from the
    scatter of block means, drawn toward what the point scatter lets expect where blocks are few, and is widened by how
    far the halves of this receiver's long arcs disagree.
    """
    count = len(summary)
    level, sigma, noise = np.zeros(count), np.full(count, np.nan), np.full(count, np.nan)
    ratios: list[float] = []
    at_fault = 0
    for row in range(count):
        column, start, end = summary[row, 0], summary[row, 1], summary[row, 2]
        at = start + np.flatnonzero(arc[start : end + 1, column] == row)
        gap = code[at, column] - phase[at, column]
        weight = np.ones(len(at))
        if elevation_deg is not None:
            weight = np.clip(np.sin(np.radians(np.nan_to_num(elevation_deg[at, column], nan=10.0))), 0.05, 1.0) ** 2
        middle = np.median(gap)
        spread = 1.4826 * np.median(np.abs(gap - middle) * np.sqrt(weight)) + 0.05
        good = np.abs(gap - middle) * np.sqrt(weight) < 5.0 * spread
        at_fault += int(np.sum(~good))
        gap, weight, block = gap[good], weight[good], ((seconds[at] - seconds[at[0]]) // choices.level_block_s)[good]
        level[row], sigma[row], noise[row], blocks = _one_level(gap, weight, block.astype(np.int64))
        if blocks >= 6:
            first = block < np.median(block)
            one = _one_level(gap[first], weight[first], block[first].astype(np.int64))
            two = _one_level(gap[~first], weight[~first], (block[~first] - block[~first][0]).astype(np.int64))
            ratios.append((one[0] - two[0]) ** 2 / (one[1] ** 2 + two[1] ** 2))
    # How far the halves of long arcs disagree, against what their sigmas promise, tells how much multipath outlives a
    # block at this receiver on this day.
    if len(ratios) >= 5:
        sigma *= np.sqrt(max(1.0, float(np.mean(np.minimum(ratios, 16.0)))))
    return level, sigma, noise, at_fault


def _one_level(gap: Floats, weight: Floats, block: Ints) -> tuple[float, float, float, int]:
    """Weighted mean of code minus phase, its sigma, the scatter of the points, and the number of blocks in use."""
    block_weight = np.bincount(block, weight)
    full = block_weight > 0.2 * np.max(block_weight)
    block_mean = np.bincount(block, weight * gap)[full] / block_weight[full]
    block_weight = block_weight[full]
    level = np.sum(block_mean * block_weight) / np.sum(block_weight)
    scatter = np.sqrt(np.sum(weight * (gap - level) ** 2) / np.sum(weight))
    share = block_weight / np.sum(block_weight)
    effective = 1.0 / np.sum(share**2)
    expected = (0.5 * scatter) ** 2  # of a block mean; common practice at good sites
    seen = np.sum(share * (block_mean - level) ** 2)
    blocks = len(block_mean)
    of_block = (3.0 * expected + seen * blocks) / (blocks + 2.0)
    return float(level), float(np.sqrt(of_block / effective)), float(scatter), blocks


def slip_list(arcs: Arcs) -> tuple[tuple[np.datetime64, str], ...]:
    """Time and satellite of every arc that began with a slip."""
    rows = np.flatnonzero(arcs.arc_began == _SLIP)
    times = arcs.observations.times
    names = arcs.observations.satellites
    return tuple((times[arcs.arc_start[r]], str(names[arcs.arc_satellite[r]])) for r in rows)


def reasons(arcs: Arcs) -> dict[str, int]:
    """How many arcs began for each reason."""
    counts = np.bincount(arcs.arc_began, minlength=len(ARC_BEGAN))
    return {word: int(counts[code]) for code, word in enumerate(ARC_BEGAN)}
