"""What the adjustment left over: receivers whose bias moved within the day, satellites whose held bias is wrong.

A bias that moves leaves the same residual on all satellites of that receiver and signal pair for hours.  So does an
error of the smooth content, only weaker and on all pairs and neighbours alike; a receiver is therefore told to drift
only where it stands out from the others of the day, or far above its own chance where it is alone.  Never changes a
bias; the adjustment estimates moving biases on request (`AdjustmentChoices.drift_hours`).
"""

from dataclasses import dataclass

import numpy as np

from skylag.tables import Floats, Ints

BLOCK_S = 3.0 * 3600.0
# A block of hours counts from so many arcs on; a drift is told from so large, so significant, so far above the others.
_ARCS, _SMALLEST_NS, _SIGNIFICANT, _ABOVE_OTHERS = 3, 0.15, 4.0, 3.0


@dataclass(frozen=True)
class Drift:
    """How far the bias of a receiver row wandered about its mean of the day.

    rms_ns of the block means less what chance makes, range_ns from lowest to highest block, strength: mean square of
    the block means over their sigmas; starts_s, block_ns, block_sigma_ns per block
    """

    row: int
    rms_ns: float
    range_ns: float
    strength: float
    starts_s: Floats
    block_ns: Floats
    block_sigma_ns: Floats


def wanderings(receiver_row: Ints, arc: Ints, seconds: Floats, residual: Floats, factor: Floats) -> list[Drift]:
    """The wandering of every receiver row that is seen in three blocks or more.

    receiver_row, arc (N,) numbers; seconds (N,) of the day; residual (N,) slant content [TECU], arc levels included;
    factor (N,) content [TECU] per ns of bias
    """
    block = (seconds // BLOCK_S).astype(np.int64)
    blocks = int(block.max(initial=0)) + 1
    value = residual / factor
    arcs = int(arc.max(initial=0)) + 1
    key, cell_of_row = np.unique((receiver_row * blocks + block) * arcs + arc, return_inverse=True)
    cell_of_row = cell_of_row.ravel()
    cell = np.stack([key // (arcs * blocks), key // arcs % blocks], axis=1)
    points = np.bincount(cell_of_row)
    mean = np.bincount(cell_of_row, value) / points
    whole = points >= 0.25 * np.median(points)
    cell, mean = cell[whole], mean[whole]
    found = []
    for row in np.unique(cell[:, 0]):
        own = cell[:, 0] == row
        of_block, of_cell = cell[own, 1], mean[own]
        count = np.bincount(of_block, minlength=blocks)
        good = np.flatnonzero(count >= _ARCS)
        if len(good) < 3:
            continue
        kept = np.isin(of_block, good)
        of_block, of_cell = of_block[kept], of_cell[kept]
        middle = np.array([np.median(of_cell[of_block == b]) for b in good])
        inside = of_cell - middle[np.searchsorted(good, of_block)]
        spread = 1.4826 * float(np.median(np.abs(inside))) + 1e-3
        # The median of n values is 1.25 times less sure than their mean.
        sigma = 1.25 * spread / np.sqrt(count[good])
        weight = sigma**-2
        middle = middle - np.sum(weight * middle) / np.sum(weight)
        strength = float(np.sum((middle / sigma) ** 2) / (len(good) - 1))
        rms = float(np.sqrt(max(0.0, np.mean(middle**2) - np.mean(sigma**2))))
        found.append(Drift(int(row), rms, float(np.ptp(middle)), strength, np.asarray(good * BLOCK_S), middle, sigma))
    return found


def left_on(
    row_of_ray: Ints, arc: Ints, residual: Floats, factor: Floats, rows: Ints
) -> dict[int, tuple[float, float]]:  # fmt: skip
    """Per bias row asked for, the bias [ns] its rays would rather have more, and the sigma of that.

    row_of_ray, arc (N,) numbers; residual (N,) slant content [TECU], arc levels included; factor (N,) TECU per ns
    """
    found = {}
    for row in rows:
        own = row_of_ray == row
        number, place = np.unique(arc[own], return_inverse=True)
        if len(number) < _ARCS:
            continue
        of_arc = np.bincount(place.ravel(), residual[own] / factor[own]) / np.bincount(place.ravel())
        middle = float(np.median(of_arc))
        spread = 1.4826 * float(np.median(np.abs(of_arc - middle))) + 1e-3
        found[int(row)] = (middle, 1.25 * spread / np.sqrt(len(number)))
    return found


def outstanding(found: list[Drift]) -> list[Drift]:
    """Those that stand out: large, significant, and above the others of the day."""
    if not found:
        return []
    usual = float(np.median([one.rms_ns for one in found])) if len(found) >= 4 else 0.0
    return [
        one for one in found
        if one.rms_ns > max(_SMALLEST_NS, _ABOVE_OTHERS * usual) and one.strength > _SIGNIFICANT
    ]  # fmt: skip
