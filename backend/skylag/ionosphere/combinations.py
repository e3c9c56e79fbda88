"""Combinations of codes and phases on two carriers that show one thing and hide the rest.

Geometry-free phase and code show the ionosphere, Melbourne-Wuebbena the wide-lane ambiguity, the ionosphere-free phase
the geometry; each takes metres and gives metres, cycles or TECU as its name says.  Never decides what is a slip.
"""

import numpy as np

from skylag.constants import REFRACTION_M3_S2, SPEED_OF_LIGHT_M_S, TECU
from skylag.tables import Floats, Ints, Observations

_MILLISECOND_M = SPEED_OF_LIGHT_M_S * 1e-3


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


def ionosphere_free(first: Floats, second: Floats, f1_hz: Floats, f2_hz: Floats) -> Floats:
    """The ionosphere-free combination [m] of two phases or two codes [m]; first-order ionosphere cancels.

    Common practice (IS-GPS-200, 20.3.3.3.3.3, for codes).
    """
    share = f1_hz**2 / (f1_hz**2 - f2_hz**2)
    return np.asarray(share * first - (share - 1.0) * second)


def melbourne_wuebbena(observations: Observations) -> Floats:
    """The Melbourne-Wuebbena combination in wide-lane cycles (E, S); free of geometry, clocks and ionosphere.

    Melbourne 1985; Wuebbena 1985.
    """
    return wide_lane(
        observations.phase1, observations.phase2, observations.code1, observations.code2,
        observations.f1_hz, observations.f2_hz,
    )  # fmt: skip


def wide_lane(phase1: Floats, phase2: Floats, code1: Floats, code2: Floats, f1_hz: Floats, f2_hz: Floats) -> Floats:
    """Melbourne-Wuebbena of phases and codes [m], in wide-lane cycles."""
    phase = (f1_hz * phase1 - f2_hz * phase2) / (f1_hz - f2_hz)
    code = (f1_hz * code1 + f2_hz * code2) / (f1_hz + f2_hz)
    return np.asarray((phase - code) * (f1_hz - f2_hz) / SPEED_OF_LIGHT_M_S)


def slip_effect(
    cycles1: Floats | Ints, cycles2: Floats | Ints, f1_hz: Floats, f2_hz: Floats
) -> tuple[Floats, Floats, Floats]:
    """What a slip does: step of L1 - L2 [m], of the ionosphere-free phase [m], of the wide lane [cycles]."""
    first, second = cycles1 * (SPEED_OF_LIGHT_M_S / f1_hz), cycles2 * (SPEED_OF_LIGHT_M_S / f2_hz)
    return (
        np.asarray(first - second),
        ionosphere_free(first, second, f1_hz, f2_hz),
        np.asarray(cycles1 - cycles2, dtype=np.float64),
    )


def clock_jumps(observations: Observations) -> Ints:
    """Whole milliseconds by which the codes of all satellites step against their phases, per epoch (E,).

    Receivers that keep their clock near GPS time by millisecond jumps often step the codes and not the phases
    (common practice); such a step is no slip of any satellite.
    """
    step = np.diff(observations.code1 - observations.phase1, axis=0)
    return _whole_milliseconds(step, len(observations.times), 100.0)  # code noise and slips are far below


def millisecond_steps(observations: Observations) -> Ints:
    """Whole milliseconds by which each satellite's codes have stepped against both its phases so far (E, S).

    A clock set back in the codes steps all satellites; some receivers step the phases of one satellite alone when its
    ambiguity is resolved anew (seen in a file of 2004).  Either way L1 - L2 stays as it is: no slip.
    """
    apart = observations.code1 - observations.phase1
    difference = observations.phase1 - observations.phase2
    valid = np.isfinite(apart) & np.isfinite(difference)
    rows = np.arange(len(apart))[:, None]
    last = np.full(apart.shape, -1)
    last[1:] = np.maximum.accumulate(np.where(valid, rows, -1), axis=0)[:-1]
    row, column = np.nonzero(valid & (last >= 0))
    before = last[row, column]
    step = apart[row, column] - apart[before, column]
    whole = np.rint(step / _MILLISECOND_M)
    near = (whole != 0) & (np.abs(step - whole * _MILLISECOND_M) < 100.0)
    near &= np.abs(difference[row, column] - difference[before, column]) < 3.0
    steps = np.zeros(apart.shape, dtype=np.int64)
    steps[row[near], column[near]] = whole[near].astype(np.int64)
    return np.asarray(np.cumsum(steps, axis=0))


def tag_jumps(observations: Observations) -> Ints:
    """Whole milliseconds by which the codes of all satellites step, per epoch (E,), whatever the phases do.

    The instant of measurement moves by as much the other way, so that every phase is off by its range rate times that.
    The rate of the code is carried on from the epoch before: its change within an interval is far below 300 km.
    """
    step = np.diff(observations.code1, axis=0)
    change = np.full_like(step, np.nan)
    change[1:] = step[1:] - step[:-1]
    jumps = _whole_milliseconds(change, len(observations.times), 2e4)
    # A jump shows once more, with the other sign, in the difference after it.
    for epoch in np.flatnonzero(jumps[:-1]):
        if jumps[epoch]:
            jumps[epoch + 1] += jumps[epoch]
    return jumps


def _whole_milliseconds(step_m: Floats, epochs: int, tolerance_m: float) -> Ints:
    """Nearest whole milliseconds of the middle of the satellites' steps (E - 1, S), 0 where it is not near one."""
    jumps = np.zeros(epochs, dtype=np.int64)
    suspect = np.isfinite(step_m).sum(axis=1) >= 3
    with np.errstate(invalid="ignore"):
        suspect &= (np.abs(step_m) > 0.5 * _MILLISECOND_M).any(axis=1)
    if suspect.any():
        middle = np.nanmedian(step_m[suspect], axis=1)
        whole = np.rint(middle / _MILLISECOND_M)
        near = np.abs(middle - whole * _MILLISECOND_M) < tolerance_m
        jumps[1:][suspect] = np.where(near, whole, 0).astype(np.int64)
    return jumps
