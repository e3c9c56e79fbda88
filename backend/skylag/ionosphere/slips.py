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
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from skylag.constants import L1_M_PER_TECU, SPEED_OF_LIGHT_M_S
from skylag.ionosphere.combinations import slip_effect, tecu_per_metre
from skylag.ionosphere.phase_steps import (
    BLOCK,
    CLOCK_SATELLITES,
    DIM_M,
    FLOOR_M,
    LEAST,
    SHORT,
    SMOOTH,
    Series,
    Steps,
    degree_for,
    kernel,
    measure,
    on_grid,
    steps_beside,
    wide_steps,
    widened,
    worth_a_look,
)
from skylag.ionosphere.slopes import MODEL_SPEED_M_S, MODEL_WORST
from skylag.tables import ARC_BEGAN, Bools, Floats, Ints, Observations

FIRST, GAP, SLIP, RESET = (ARC_BEGAN.index(word) for word in ("first", "gap", "slip", "reset"))

# No wall of the published threat space changes slant content faster: 425 mm/km (Datta-Barua et al. 2010) at 750 m/s
# (from memory) is 0.32 m/s of delay on 1575.42 MHz.  What does is a slip or a fault.  Seen were 0.35 TECU/s (J. Global
# Positioning Systems 2018, 16:5); a limit there tears walls of 200 mm/km at 300 m/s to pieces.
FASTEST_TECU_S = MODEL_WORST * MODEL_SPEED_M_S[1] / 1e6 / L1_M_PER_TECU
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


def find(observations: Observations, choices: ArcChoices) -> Stretches:
    """The stretches of constant ambiguities of one receiver-day."""
    series, row_of = on_grid(observations)
    found: list[Steps] = []
    impossible = _impossible(series)
    series.begin |= impossible
    left, right = series.runs()
    measure(series, left, right)
    columns = np.arange(series.present.shape[1])
    # Slips found make the noise around them known better, so that the satellites that had some are looked at again.
    for _ in range(3):
        steps = worth_a_look(series, left, right, columns)
        seen = len(found)
        for _ in range(8):
            slips = _accept(series, steps, left, right, choices)
            if not len(slips.row):
                break
            found.append(slips)
            series.begin[slips.row, slips.column] = True
            touched = np.unique(slips.column)
            left[:, touched], right[:, touched] = series.runs(touched)
            steps = steps_beside(series, slips, left, right)
        if len(found) == seen:
            break
        columns = np.unique(np.concatenate([slips.column for slips in found[seen:]]))
    slipped = impossible
    for slips in found:
        slipped[slips.row, slips.column] = True
    lonely = _drop_lonely(series, slipped)
    joined, told = _join(series, slipped, choices)
    return _collect(observations, series, row_of, slipped, told, lonely, joined, choices)


def _impossible(series: Series) -> Bools:
    """Epochs into which L1 - L2 changes faster than any ionosphere makes it; the epoch before is there too."""
    change = np.diff(series.difference, axis=0) * tecu_per_metre(series.f1, series.f2)
    with np.errstate(invalid="ignore"):
        return np.vstack([
            np.zeros((1, series.difference.shape[1]), dtype=bool),
            np.abs(change) > FASTEST_TECU_S * series.interval_s + 1.0,
        ])  # fmt: skip


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


def _fit(series: Series, steps: Steps) -> _Fit:
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


def _accept(series: Series, steps: Steps, left: Ints, right: Ints, choices: ArcChoices) -> Steps:
    """The steps that are slips, the strongest alone among neighbours."""
    with np.errstate(invalid="ignore"):
        in_geometry = np.abs(steps.geometry) / steps.geometry_sigma
        in_difference = np.abs(steps.difference) / steps.difference_sigma
        in_wide = np.abs(steps.wide) / steps.wide_sigma
        blind = ~np.isfinite(in_geometry)
        dim = blind | (steps.geometry_sigma > DIM_M)
        told = series.told[steps.row, steps.column]
        loud = in_geometry > np.where(told, 3.0, 4.5)
        loud |= ((dim | (in_geometry > 2.0)) & (in_difference > 5.0)) | (blind & (in_wide > 4.0))
        needed = np.where(told, choices.told_significance, choices.significance)
        loud &= sum(np.nan_to_num(part) ** 2 for part in (in_geometry, in_difference, in_wide)) > needed
    steps = steps.take(loud)
    blind, dim, needed = blind[loud], dim[loud], needed[loud]
    in_geometry, in_difference = in_geometry[loud], np.nan_to_num(in_difference[loud])
    size, large = np.nan_to_num(np.abs(steps.difference)), np.nan_to_num(np.abs(steps.geometry))
    fit = _fit(series, steps)
    ragged = np.flatnonzero(fit.none - fit.chi > needed)
    wide = steps.take(ragged)
    again = _fit(series, widened(series, wide, left, right, np.zeros(len(ragged), dtype=np.int64)))
    whole = np.zeros(len(steps.row), dtype=bool)
    whole[ragged] = (again.none - again.chi > needed[ragged]) & _agrees(again, needed[ragged])
    with np.errstate(invalid="ignore"):
        # No whole numbers, but a step that neither ionosphere nor geometry makes: half cycles, or a receiver at fault.
        broken = (in_geometry > 8.0) & (large > 0.06) & (in_difference > 6.0) & (size > 0.03)
        broken |= (in_geometry > 8.0) & (large > 1.0)
        # Without the other satellites' help the ionosphere may bend L1 - L2 by itself: it must be a step well outside.
        # L1 - L2 may be bent by the ionosphere: it decides where the geometry says the same, or cannot tell at all.
        effect = slip_effect(fit.cycles[:, 0], fit.cycles[:, 1], series.f1[steps.column], series.f2[steps.column])[1]
        agreed = in_geometry**2 - ((steps.geometry - effect) / steps.geometry_sigma) ** 2
        borne = (in_geometry > 4.5) | ((in_difference > 6.0) & (size > 0.025) & (dim | (agreed > 6.0)))
        borne |= blind & (np.abs(steps.wide) > 0.7)
        torn = blind & (in_difference > 10.0) & (size > 0.08)
    good = (whole & borne) | broken | torn
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


def _drop_lonely(series: Series, slipped: Bools) -> int:
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


def _join(series: Series, slipped: Bools, choices: ArcChoices) -> tuple[int, tuple[Steps, _Fit]]:
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
    filled = series.filled
    for k in range(count):
        r, c, h, block = int(row[k]), int(column[k]), int(hole[k]), int(row[k]) // BLOCK
        b, a = int(min(before[k], SHORT)), int(min(after[k], SHORT))
        if a + b >= 4:
            weights = kernel(b, a, h, degree_for(b, a, 2), SHORT)[SHORT - b : SHORT + a]
            place = np.concatenate([np.arange(-b, 0) - h, np.arange(a)])
            bend[k] = weights @ series.difference[r + place, c]
            seen = _seen_elsewhere(series, weights, place, r, c, h, int(before[k]), int(after[k]))
            bend_sigma[k] = max(seen, series.unit["difference"][block, c] * np.linalg.norm(weights), FLOOR_M)
        b, a = int(min(before[k], reach)), int(min(after[k], reach))
        if b >= 2 and a >= 2 and a + b >= LEAST:
            weights = kernel(b, a, h, SMOOTH, reach)[reach - b : reach + a]
            place = np.concatenate([np.arange(-b, 0) - h, np.arange(a)])
            sums = weights @ filled[r + place]
            others = (left[r] >= b + h) & (right[r] >= a)
            if others.sum() >= CLOCK_SATELLITES:
                step[k] = sums[c] - np.median(sums[others])
                step_sigma[k] = max(float(series.unit["geometry"][block, c] * np.linalg.norm(weights)), FLOOR_M)
    wide, wide_sigma = _wide_across(series, row, column, hole, before, after)
    steps = Steps(row, column, bend, bend_sigma, step, step_sigma, wide, wide_sigma)
    steps = widened(series, steps, left, right, hole)
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
    series: Series, weights: Floats, place: Ints, row: int, column: int, hole: int, before: int, after: int
) -> float:
    """Scatter [m] that the same bridge of L1 - L2 shows over epochs beside the gap where nothing is missing."""
    span = int(place[-1] - place[0]) + 1
    shifts = [*range(row - hole - min(before, 30), row - hole - span + 1), *range(row, row + min(after, 30) - span + 1)]
    if len(shifts) < 6:
        return 0.0
    index = np.array(shifts)[:, None] + (place - place[0])
    return float(1.4826 * np.median(np.abs(series.difference[index, column] @ weights)))


def _wide_across(
    series: Series, row: Ints, column: Ints, hole: Ints, before: Ints, after: Ints
) -> tuple[Floats, Floats]:
    """The wide-lane step across gaps: the gap's own epochs are empty and count for nothing."""
    return wide_steps(series, row, column, before + hole, after, 24)


# ---------------------------------------------------------------------------------------------- results


def _collect(
    observations: Observations, series: Series, row_of: Ints, slipped: Bools, told: tuple[Steps, _Fit],
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
