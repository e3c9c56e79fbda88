"""Cut one receiver's observations into arcs free of cycle slips, and level each arc to its codes.

Where the phases slip is found by `slips`, what a level is worth by `levels`; here the pieces become arcs, each with the
reason why it began.  Needs no orbits; elevations, where given, only weight the levelling.
"""

import numpy as np

from skylag.ionosphere import levels, slips
from skylag.ionosphere.combinations import clock_jumps as clock_jumps
from skylag.ionosphere.combinations import geometry_free as geometry_free
from skylag.ionosphere.combinations import melbourne_wuebbena as melbourne_wuebbena
from skylag.ionosphere.combinations import tecu_per_metre as tecu_per_metre
from skylag.ionosphere.slips import ArcChoices as ArcChoices
from skylag.tables import ARC_BEGAN, Arcs, Floats, Observations

_LEAST_CODES = 10  # an arc with fewer epochs of both codes has no level


def cut(observations: Observations, choices: ArcChoices | None = None, elevation_deg: Floats | None = None) -> Arcs:
    """Arcs of one receiver-day, levelled to the codes.

    elevation_deg  (E, S) or None; weights the levelling by the square of its sine where given
    Epochs with both phases and without a code stay in their arc; only the level does without them.
    """
    choices = choices or ArcChoices()
    found = slips.find(observations, choices)
    phase, code = geometry_free(observations)
    if choices.repair:
        phase -= found.repair_m * tecu_per_metre(observations.f1_hz, observations.f2_hz)
    seconds = (observations.times - observations.times[0]).astype("timedelta64[ns]").astype(np.int64) / 1e9
    both = np.isfinite(code)
    arc = np.full(phase.shape, -1, dtype=np.int64)
    rows: list[tuple[int, int, int, int, int]] = []
    short = without = 0
    for column in range(phase.shape[1]):
        at = np.flatnonzero(found.used[:, column])
        if not len(at):
            continue
        why = found.began[at, column]
        starts = np.flatnonzero(why >= 0)
        for start, end in zip(starts, [*starts[1:], len(at)], strict=True):
            if seconds[at[end - 1]] - seconds[at[start]] < choices.shortest_arc_s:
                short += int(end - start)
                continue
            if np.count_nonzero(both[at[start:end], column]) < _LEAST_CODES:
                without += int(end - start)
                continue
            arc[at[start:end], column] = len(rows)
            rows.append((column, int(at[start]), int(at[end - 1]), int(why[start]), int(end - start)))
    summary = np.array(rows, dtype=np.int64).reshape(-1, 5)
    systems = np.unique([str(name)[0] for name in observations.satellites], return_inverse=True)[1]
    levelled = levels.level(
        phase, code, arc, len(rows), seconds, systems, elevation_deg, choices.level_block_s, observations.interval_s
    )
    stec = np.where(arc >= 0, phase + levelled.level[arc], np.nan) if rows else np.full(phase.shape, np.nan)
    return Arcs(
        observations=observations,
        stec=stec,
        stec_phase=np.where(arc >= 0, phase, np.nan),
        arc=arc,
        arc_satellite=summary[:, 0],
        arc_start=summary[:, 1],
        arc_end=summary[:, 2],
        arc_began=summary[:, 3].astype(np.uint8),
        arc_level_sigma=levelled.sigma,
        arc_noise=levelled.noise,
        arc_points=summary[:, 4],
        rejected={
            "points of short arcs": short,
            "points of arcs without both codes": without,
            "code points at fault": levelled.bursts,
            "code points of bad quarter hours": levelled.bad_blocks,
            **found.counts,
        },
        slips=found.slips,
    )


def slip_list(arcs: Arcs) -> tuple[tuple[np.datetime64, str], ...]:
    """Time and satellite of every arc that began with a slip."""
    rows = np.flatnonzero(arcs.arc_began == slips.SLIP)
    times = arcs.observations.times
    names = arcs.observations.satellites
    return tuple((times[arcs.arc_start[r]], str(names[arcs.arc_satellite[r]])) for r in rows)


def reasons(arcs: Arcs) -> dict[str, int]:
    """How many arcs began for each reason."""
    counts = np.bincount(arcs.arc_began, minlength=len(ARC_BEGAN))
    return {word: int(counts[code]) for code, word in enumerate(ARC_BEGAN)}
