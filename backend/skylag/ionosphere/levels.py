"""Level each arc of phases to its codes.

The level is the weighted mean of code minus phase.  Code multipath lasts minutes to an hour, so the sigma follows from
means over blocks, never from the number of points.  Bursts and hours of bad code are left out and counted.  Never
touches the phases; needs no orbits, though elevations, where given, weight the codes.
"""

import numpy as np

from skylag.tables import Floats, Ints


def level(
    phase: Floats,
    code: Floats,
    arc: Ints,
    summary: Ints,
    seconds: Floats,
    elevation_deg: Floats | None,
    level_block_s: float,
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
        both = np.isfinite(code[at, column])
        at = at[both]
        gap = code[at, column] - phase[at, column]
        weight = np.ones(len(at))
        if elevation_deg is not None:
            weight = np.clip(np.sin(np.radians(np.nan_to_num(elevation_deg[at, column], nan=10.0))), 0.05, 1.0) ** 2
        middle = np.median(gap)
        spread = 1.4826 * np.median(np.abs(gap - middle) * np.sqrt(weight)) + 0.05
        good = np.abs(gap - middle) * np.sqrt(weight) < 5.0 * spread
        at_fault += int(np.sum(~good))
        gap, weight, block = gap[good], weight[good], ((seconds[at] - seconds[at[0]]) // level_block_s)[good]
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
