"""Slips found and levels believed, against what was put into the invented days.

Quick: a few receivers, with other chance than the committed days.  Slow: all receivers of the three days.
"""

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field

import numpy as np
import pytest

from invented import constellations
from invented.network import SEED, Truth, simulate
from skylag.constants import SPEED_OF_LIGHT_M_S
from skylag.ionosphere.arcs import ArcChoices, cut, tecu_per_metre
from skylag.ionosphere.pairs import choose
from skylag.tables import ARC_BEGAN, Arcs, Bools, Signals

Evidence = Callable[..., None]
TARGETS = "targets of issue 4; invented days with their truth"
NEAR = 2  # epochs by which a cut may miss the slip


@dataclass
class Score:
    """What was found of what was put in."""

    slips: int = 0
    missed: list[str] = field(default_factory=list)
    large: int = 0
    large_missed: int = 0
    false: list[str] = field(default_factory=list)
    torn: int = 0  # changes of ambiguity inside an arc
    needless: int = 0  # short gaps over which nothing changed, not bridged
    bridged: int = 0
    hours: float = 0.0
    ratio: list[float] = field(default_factory=list)  # level errors over their sigmas
    error: list[float] = field(default_factory=list)
    named: int = 0


def judge(score: Score, signals: Signals, truth: Truth, seed: int = SEED) -> Arcs:
    """Cut one receiver's span and compare with the truth; faults and five minutes about them count for nothing."""
    observations, _ = choose(signals)
    arcs = cut(observations, None, truth.elevation)
    place = {str(name): number for number, name in enumerate(observations.satellites)}
    fault = np.zeros(len(truth.times), dtype=bool)
    for start, end in truth.faults:
        margin = np.timedelta64(300, "s")
        fault |= (truth.times >= start - margin) & (truth.times <= end + margin)
    listed: dict[int, list[int]] = {}
    told = {(slip["satellite"], slip["time"]): slip["cycles"] for slip in arcs.slips}
    for slip in truth.slips:
        epoch, column = int(np.searchsorted(truth.times, slip.time)), place[slip.satellite]
        listed.setdefault(column, []).append(epoch)
        if fault[epoch] or not truth.elevation[epoch, column] >= 10.0:
            continue
        large = max(abs(slip.cycles1), abs(slip.cycles2)) >= 2
        missed = _same_arc(arcs, epoch, column)
        score.slips += 1
        score.large += large
        score.large_missed += large and missed
        score.named += told.get((slip.satellite, slip.time)) == (slip.cycles1, slip.cycles2)
        if missed:
            score.missed.append(f"{truth.receiver.name} {slip}")
    _judge_cuts(score, arcs, truth, fault, listed)
    _judge_levels(score, arcs, truth, fault, seed)
    score.hours += len(truth.times) * observations.interval_s / 3600.0
    score.bridged += arcs.rejected["gaps joined"]
    return arcs


def _same_arc(arcs: Arcs, epoch: int, column: int) -> bool:
    before, after = arcs.arc[: max(epoch - NEAR + 1, 0), column], arcs.arc[epoch + NEAR :, column]
    before, after = before[before >= 0], after[after >= 0]
    return bool(len(before) and len(after) and before[-1] == after[0])


def _judge_cuts(score: Score, arcs: Arcs, truth: Truth, fault: Bools, listed: dict[int, list[int]]) -> None:
    for row, (column, epoch) in enumerate(zip(arcs.arc_satellite, arcs.arc_start, strict=True)):
        inside = np.flatnonzero(arcs.arc[:, column] == row)
        changes = np.flatnonzero(np.diff(truth.ambiguity[inside, column]) != 0)
        score.torn += int(np.sum(~fault[inside[changes]]))
        earlier = np.flatnonzero(truth.ambiguity[:epoch, column] >= 0)
        if fault[epoch] or not len(earlier):
            continue
        same = truth.ambiguity[earlier[-1], column] == truth.ambiguity[epoch, column]
        near = any(earlier[-1] - NEAR <= other <= epoch + NEAR for other in listed.get(int(column), []))
        why = ARC_BEGAN[arcs.arc_began[row]]
        if why == "slip" and same and not near:
            name = arcs.observations.satellites[column]
            score.false.append(f"{truth.receiver.name} {name} {truth.times[epoch]}")
        short = truth.times[epoch] - truth.times[earlier[-1]] <= np.timedelta64(180, "s")
        score.needless += why == "gap" and bool(same and short and not near)


def _judge_levels(score: Score, arcs: Arcs, truth: Truth, fault: Bools, seed: int) -> None:
    observations = arcs.observations
    sky = constellations.constellation(seed)
    number = {str(name): k for k, name in enumerate(sky.satellites)}
    factor = tecu_per_metre(observations.f1_hz, observations.f2_hz)
    for row, column in enumerate(arcs.arc_satellite):
        inside = np.flatnonzero((arcs.arc[:, column] == row) & np.isfinite(truth.stec[:, column]))
        if fault[inside].any():
            continue
        name = str(observations.satellites[column])
        pair = observations.pairs[name[0]]
        bias_ns = [truth.bias_ns[name[0], code] + sky.bias_ns[code][number[name]] for code in (pair.code1, pair.code2)]
        bias = (bias_ns[1] - bias_ns[0]) * 1e-9 * SPEED_OF_LIGHT_M_S * factor[column]
        error = float(np.median(arcs.stec[inside, column] - truth.stec[inside, column]) - bias)
        score.error.append(error)
        score.ratio.append(error / float(arcs.arc_level_sigma[row]))


def scored(days: Iterable[tuple[str, tuple[str, ...] | None, tuple[float, float], float, int]]) -> Score:
    """Simulate and judge: (day, receivers, hours, interval, seed) each."""
    score = Score()
    for day, receivers, hours, interval_s, seed in days:
        world = simulate(day, receivers, hours, interval_s, seed)
        for signals, truth in zip(world.signals, world.truth, strict=True):
            judge(score, signals, truth, seed)
    return score


@pytest.fixture(scope="module")
def storm() -> Score:
    """Five hours about the wall and the patch, chance apart from the committed days."""
    return scored([("2031-03-12", ("FENN", "KELM", "SKAR", "LURB"), (5.5, 10.5), 30.0, 51)])


@pytest.fixture(scope="module")
def calm() -> Score:
    """A calm day of three receivers, one with three times the code multipath, one whose clock jumps."""
    return scored([("2031-03-11", ("TWSK", "SKAR", "LURB"), (0.0, 24.0), 30.0, 53)])


def test_slips_of_a_storm(storm: Score) -> None:
    assert storm.slips > 25
    assert len(storm.missed) <= 0.05 * storm.slips, storm.missed
    assert storm.large_missed <= 0.01 * storm.large
    assert storm.torn == 0


def test_a_storm_is_not_cut_to_shreds(storm: Score) -> None:
    """No cut but where a slip was put in, within a wall of 28 TECU and a patch of ragged content."""
    assert len(storm.false) <= storm.hours / 6.0, storm.false


def test_slips_of_a_calm_day(calm: Score) -> None:
    assert calm.slips > 75
    assert len(calm.missed) <= 0.05 * calm.slips, calm.missed
    assert calm.large_missed <= 0.01 * calm.large
    assert len(calm.false) <= calm.hours / 6.0, calm.false
    assert calm.torn == 0
    assert calm.named >= 0.9 * calm.slips, "the cycles of a slip are told"


def test_short_gaps_of_a_calm_day(calm: Score) -> None:
    """Gaps up to three minutes over which the ambiguities held are bridged."""
    assert calm.bridged >= 10
    assert calm.needless <= 0.2 * calm.bridged


def test_levels_of_a_calm_day(calm: Score) -> None:
    """Errors of levels over their sigmas."""
    assert 0.8 < np.std(calm.ratio) < 1.2
    assert np.mean(np.abs(calm.ratio) > 3.0) < 0.02


@pytest.mark.parametrize(
    ("interval_s", "hours", "receivers"),
    [(1.0, (6.9, 7.4), ("FENN",)), (10.0, (6.5, 9.0), ("FENN", "KELM")), (60.0, (0.0, 12.0), ("FENN", "LURB"))],
)
def test_other_intervals(interval_s: float, hours: tuple[float, float], receivers: tuple[str, ...]) -> None:
    """From a second to a minute, in the storm."""
    score = scored([("2031-03-12", receivers, hours, interval_s, 54)])
    assert score.torn == 0
    assert not score.missed
    assert len(score.false) <= max(1.0, score.hours / 6.0), score.false


def test_repair_leaves_the_content_true() -> None:
    """Where slips are taken out, the phases change as the true content does."""
    world = simulate("2031-03-11", ("MRGT",), (0.0, 8.0), 30.0, 55)
    observations, _ = choose(world.signals[0])
    truth = world.truth[0]
    arcs = cut(observations, ArcChoices(repair=True), truth.elevation)
    assert arcs.rejected["slips repaired"] >= 0.8 * len(truth.slips) > 5
    for row, column in enumerate(arcs.arc_satellite):
        inside = np.flatnonzero((arcs.arc[:, column] == row) & np.isfinite(truth.stec[:, column]))
        wander = np.diff(arcs.stec_phase[inside, column] - truth.stec[inside, column])
        assert np.max(np.abs(wander)) < 0.5


@pytest.mark.slow
@pytest.mark.parametrize("day", ["2031-03-11", "2031-03-12", "2031-03-13"])
def test_a_committed_day(day: str, evidence: Evidence) -> None:
    """All fourteen receivers of a committed day."""
    score = scored([(day, None, (0.0, 24.0), 30.0, SEED)])
    print(day, score.slips, score.missed, score.false, np.std(score.ratio), np.std(score.error), score.named)
    evidence(f"{day}: slips above 10 degrees missed", source=TARGETS, expected=5.0, at_most=True, tolerance=0,
             got=100 * len(score.missed) / score.slips, unit="%")  # fmt: skip
    evidence(f"{day}: slips of 2 cycles and more missed", source=TARGETS, expected=1.0, at_most=True, tolerance=0,
             got=100 * score.large_missed / score.large, unit="%")  # fmt: skip
    evidence(f"{day}: false cuts per receiver in six hours", source=TARGETS, expected=1.0, at_most=True, tolerance=0,
             got=len(score.false) / (score.hours / 6.0))  # fmt: skip
    evidence(f"{day}: level errors over their sigmas, standard deviation", source="0.8 to 1.2, issue 4", expected=1.0,
             got=float(np.std(score.ratio)), tolerance=0.2)  # fmt: skip
    assert score.torn == 0
