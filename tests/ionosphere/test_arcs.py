"""Combinations, slips and levels: against published numbers, on made phases, and on a real day.

Real days: the open data of Esbjerg, 25 June 2020 (quiet), and Cachoeira Paulista, 1 January 2004.
"""

from collections.abc import Callable
from dataclasses import fields, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.signal import lfilter
from tests.conftest import reference_rows

from invented.network import small_world
from skylag import formats
from skylag.constants import SPEED_OF_LIGHT_M_S, carrier_hz
from skylag.ionosphere import combinations, geometry, levels, orbits
from skylag.ionosphere.arcs import (
    ArcChoices,
    cut,
    geometry_free,
    melbourne_wuebbena,
    reasons,
    slip_list,
    tecu_per_metre,
)
from skylag.ionosphere.pairs import choose
from skylag.tables import ARC_BEGAN, Arcs, Ephemerides, Floats, Observations, Receiver, SignalPair, Signals

Evidence = Callable[..., None]
L1, L2 = carrier_hz("G", "1"), carrier_hz("G", "2")
MILLISECOND_M = SPEED_OF_LIGHT_M_S * 1e-3


def made(
    rng: np.random.Generator, epochs: int = 240, satellites: int = 8, interval_s: float = 30.0, storm: float = 0.0
) -> Observations:
    """A receiver with smooth geometry, a smooth ionosphere (and a ragged one of `storm` TECU per step), no slips."""
    time = np.arange(epochs) * interval_s
    turn, tilt = rng.uniform(0, 6, satellites), rng.uniform(0.6, 1.2, satellites)
    distance = 2.2e7 + 2e6 * tilt * np.sin(1.4e-4 * time[:, None] + turn)
    clock = np.cumsum(rng.standard_normal(epochs))[:, None] * 3.0
    content = 20.0 + 10.0 * np.sin(2e-4 * time[:, None] + turn)
    content = content + storm * np.cumsum(rng.standard_normal((epochs, satellites)), axis=0)
    delay1, delay2 = 40.3e16 / L1**2 * content, 40.3e16 / L2**2 * content
    base, shape = distance + clock, (epochs, satellites)
    whole = rng.integers(-1000, 1000, (2, satellites))
    return Observations(
        receiver=Receiver("MADE", (6378137.0, 0.0, 0.0)),
        times=np.datetime64("2031-03-12", "ns") + (time * 1e9).astype("timedelta64[ns]"),
        satellites=np.array([f"G{k + 1:02d}" for k in range(satellites)]),
        pairs={"G": SignalPair("G", "C1W", "C2W", "L1W", "L2W")},
        f1_hz=np.full(satellites, L1),
        f2_hz=np.full(satellites, L2),
        code1=base + delay1 + 0.3 * rng.standard_normal(shape),
        code2=base + delay2 + 0.3 * rng.standard_normal(shape),
        phase1=base - delay1 + 0.002 * rng.standard_normal(shape) + whole[0] * SPEED_OF_LIGHT_M_S / L1,
        phase2=base - delay2 + 0.002 * rng.standard_normal(shape) + whole[1] * SPEED_OF_LIGHT_M_S / L2,
        lock1=np.zeros(shape, dtype=np.uint8),
        lock2=np.zeros(shape, dtype=np.uint8),
        snr1=np.full(shape, 45.0),
        resets=np.zeros(epochs, dtype=bool),
        interval_s=interval_s,
    )


def slip(observations: Observations, epoch: int, column: int, cycles: tuple[float, float]) -> Observations:
    """The same with a slip put in."""
    first, second = observations.phase1.copy(), observations.phase2.copy()
    first[epoch:, column] += cycles[0] * SPEED_OF_LIGHT_M_S / observations.f1_hz[column]
    second[epoch:, column] += cycles[1] * SPEED_OF_LIGHT_M_S / observations.f2_hz[column]
    return replace(observations, phase1=first, phase2=second)


def without(observations: Observations, names: tuple[str, ...], rows: Any, columns: Any) -> Observations:
    """The same with some values missing."""
    gone: dict[str, Floats] = {}
    for name in names:
        gone[name] = getattr(observations, name).copy()
        gone[name][rows, columns] = np.nan
    return replace(observations, **gone)


PHASES, CODES = ("phase1", "phase2"), ("code1", "code2")


def began(arcs: Arcs, column: int) -> list[tuple[int, str]]:
    """First epoch and reason of each arc of one satellite."""
    rows = np.flatnonzero(arcs.arc_satellite == column)
    return [(int(arcs.arc_start[r]), ARC_BEGAN[arcs.arc_began[r]]) for r in rows]


# ------------------------------------------------------------------------------------------------- published numbers


@pytest.mark.parametrize("row", reference_rows("carrier_pairs.csv"), ids=lambda row: row["pair"])
def test_factors_of_pairs(row: dict[str, str], evidence: Evidence) -> None:
    f1, f2 = (np.float64(carrier_hz(row["system"], row[band], int(row["channel"]))) for band in ("band1", "band2"))
    per_metre = float(tecu_per_metre(np.asarray(f1), np.asarray(f2)))
    one, nothing = np.ones(1), np.zeros(1)
    share = combinations.ionosphere_free(one, nothing, np.atleast_1d(f1), np.atleast_1d(f2))[0]
    wide = combinations.wide_lane(one, one, nothing, nothing, np.atleast_1d(f1), np.atleast_1d(f2))[0]
    got = {"m_per_tecu": 1.0 / per_metre, "tecu_per_m": per_metre, "tecu_per_ns": per_metre * SPEED_OF_LIGHT_M_S * 1e-9,
           "wide_lane_m": 1.0 / wide, "share": share}  # fmt: skip
    if row["channel"] != "0":
        del got["m_per_tecu"]  # the source gives it per carrier there
    for name, value in got.items():
        if row[name]:
            evidence(f"{row['pair']}: {name}", source="signal specifications (references 1.2, 1.3)",
                     expected=float(row[name]), got=float(value),
                     tolerance=0.51 * 10.0 ** -len(row[name].partition(".")[2]))  # fmt: skip


def test_weights_of_the_wide_lane(evidence: Evidence) -> None:
    f1, f2, one, nothing = np.full(1, L1), np.full(1, L2), np.ones(1), np.zeros(1)
    length = SPEED_OF_LIGHT_M_S / (L1 - L2)
    for name, place, expected in (
        ("phase 1", 0, 77 / 17), ("phase 2", 1, -60 / 17), ("code 1", 2, -77 / 137), ("code 2", 3, -60 / 137),
    ):  # fmt: skip
        four = [nothing, nothing, nothing, nothing]
        four[place] = one
        got = float(combinations.wide_lane(*four, f1, f2)[0]) * length
        evidence(f"GPS L1-L2 wide lane: weight of {name}", source="Melbourne 1985, Wuebbena 1985 (references 2.1)",
                 expected=expected, got=got, tolerance=1e-9)  # fmt: skip


@pytest.mark.parametrize(
    ("cycles", "wide", "metres", "tecu"),
    [((1, 0), 1, 0.190294, 1.811528), ((0, 1), -1, -0.244210, -2.324794), ((1, 1), 0, -0.053917, -0.513266),
     ((4, 3), 1, 0.028544, 0.271729), ((9, 7), 2, 0.003172, 0.030192), ((77, 60), 17, 0.0, 0.0)],
)  # fmt: skip
def test_what_slips_do(cycles: tuple[int, int], wide: int, metres: float, tecu: float, evidence: Evidence,
                       rng: np.random.Generator) -> None:  # fmt: skip
    """The table of slips of GPS, by a slip put into observations and taken out again."""
    whole = made(rng)
    slipped = slip(whole, 100, 2, cycles)
    phase = [geometry_free(one)[0][100:, 2] for one in (slipped, whole)]
    source = "carriers of IS-GPS-200 (references 2.2)"
    step = float(np.mean(phase[0] - phase[1]))
    name = f"GPS slip of {cycles[0]} and {cycles[1]} cycles"
    evidence(f"{name}: geometry-free", source=source, expected=tecu, got=step, tolerance=1.5e-6, unit="TECU")
    per_metre = float(tecu_per_metre(np.asarray(L1), np.asarray(L2)))
    evidence(f"{name}: L1 - L2", source=source, expected=metres, got=step / per_metre, tolerance=6e-7, unit="m")
    lanes = [melbourne_wuebbena(one)[100:, 2] for one in (slipped, whole)]
    evidence(f"{name}: wide lane", source=source, expected=wide, got=float(np.mean(lanes[0] - lanes[1])),
             tolerance=1e-6, unit="cycles")  # fmt: skip
    found = cut(slipped)
    assert [(slip["satellite"], slip["cycles"]) for slip in found.slips] == [("G03", cycles)]
    assert began(found, 2) == [(0, "first"), (100, "slip")]
    assert slip_list(found) == ((whole.times[100], "G03"),)


def test_a_millisecond_in_the_wide_lane(evidence: Evidence, rng: np.random.Generator) -> None:
    """Codes stepping by one millisecond: 347820 wide-lane cycles for every GPS satellite, and no slip at all."""
    whole = made(rng)
    codes = {name: getattr(whole, name).copy() for name in CODES}
    for values in codes.values():
        values[120:] += MILLISECOND_M
    jumped = replace(whole, **codes)
    step = float(np.median((melbourne_wuebbena(whole) - melbourne_wuebbena(jumped))[120:]))
    evidence("wide lane over a millisecond", source="347.82 MHz times 1 ms (references 2.4)", expected=347820, got=step,
             tolerance=1e-3, unit="cycles")  # fmt: skip
    assert np.flatnonzero(combinations.clock_jumps(jumped)).tolist() == [120]
    assert combinations.clock_jumps(jumped)[120] == 1
    assert reasons(cut(jumped))["slip"] == 0


def test_level_of_five_points(evidence: Evidence) -> None:
    """A worked levelling: five epochs of phase and code at five elevations, weights by the square of the sine."""
    phase = np.array([[10.0], [10.5], [11.2], [12.0], [13.1]])
    code = np.array([[52.3], [50.1], [53.8], [53.0], [56.5]])
    elevation = np.array([[15.0], [20.0], [30.0], [40.0], [60.0]])
    rest = (np.zeros((5, 1), dtype=np.int64), 1, np.arange(5) * 30.0, np.zeros(1, dtype=np.int64))
    source = "worked by hand (references 2.5)"
    weighted = levels.level(phase, code, *rest, elevation, 900.0, 30.0)
    evidence("level with weights", source=source, expected=42.329447190, got=float(weighted.level[0]), tolerance=1e-8,
             unit="TECU")  # fmt: skip
    # The source divides the squares by the number of points, the code by one less.
    evidence("weighted scatter about the level", source=source, expected=1.246016, unit="TECU",
             got=float(weighted.noise[0] * np.sqrt(4 / 5)), tolerance=1e-6)  # fmt: skip
    plain = levels.level(phase, code, *rest, None, 900.0, 30.0)
    evidence("level without weights", source=source, expected=41.78, got=float(plain.level[0]), tolerance=1e-8,
             unit="TECU")  # fmt: skip


# ------------------------------------------------------------------------------------------------- made phases


def test_nothing_to_cut(rng: np.random.Generator) -> None:
    """No slip, no cut; not even where the ionosphere runs wild by one TECU a step."""
    for storm in (0.0, 0.2, 1.0):
        arcs = cut(made(rng, storm=storm))
        assert reasons(arcs) == {"first": 8, "gap": 0, "slip": 0, "reset": 0, "clock": 0, "outlier": 0}
        assert arcs.arc_points.tolist() == [240] * 8


@pytest.mark.parametrize("cycles", [(1, 1), (-1, -1), (1, 0), (0, 1), (9, 7), (77, 60), (4, 3), (5, 4)])
def test_slips_in_a_wild_ionosphere(cycles: tuple[int, int], rng: np.random.Generator) -> None:
    """Half a TECU of an equal slip drowns in L1 - L2 that moves by one TECU a step; the geometry shows it."""
    arcs = cut(slip(made(rng, storm=1.0), 90, 3, cycles))
    assert began(arcs, 3) == [(0, "first"), (90, "slip")]
    assert len(arcs.slips) == 1
    assert "ionosphere-free" in arcs.slips[0]["seen_by"]


def test_slips_close_to_each_other_and_to_the_edges(rng: np.random.Generator) -> None:
    places = ((4, (1, 0)), (60, (840, 655)), (65, (-1, -1)), (70, (77, 60)), (236, (0, 1)))
    observations = made(rng)
    for epoch, cycles in places:
        observations = slip(observations, epoch, 5, cycles)
    arcs = cut(observations, ArcChoices(shortest_arc_s=0.0))
    found = [(int(np.searchsorted(observations.times, slip["time"])), slip["cycles"]) for slip in arcs.slips]
    assert found == list(places)


def test_loss_of_lock_bits_cut_nothing_alone(rng: np.random.Generator) -> None:
    observations = made(rng)
    lock = observations.lock1.copy()
    lock[::7] = 1
    assert reasons(cut(replace(observations, lock1=lock)))["slip"] == 0


def test_half_cycles_are_not_used(rng: np.random.Generator) -> None:
    """Bit 1 of the loss-of-lock digit: the phase of this epoch may be off by half a cycle."""
    observations = slip(slip(made(rng), 50, 1, (0.5, 0)), 53, 1, (-0.5, 0))
    lock = observations.lock1.copy()
    lock[50:53, 1] = 2
    arcs = cut(replace(observations, lock1=lock))
    assert (arcs.arc[50:53, 1] == -1).all()
    assert began(arcs, 1) == [(0, "first")]


def test_half_a_cycle_unannounced(rng: np.random.Generator) -> None:
    """No whole numbers fit, but neither sky nor clock makes such a step."""
    arcs = cut(slip(made(rng), 80, 1, (0.5, 0.0)))
    assert began(arcs, 1) == [(0, "first"), (80, "slip")]
    assert arcs.slips[0]["cycles"] is None


def test_short_gaps(rng: np.random.Generator) -> None:
    """A gap is bridged where the phases carry on, and not where they slipped in it, or it lasted too long."""
    whole = made(rng)
    joined = cut(without(whole, PHASES, slice(100, 105), 2))
    assert began(joined, 2) == [(0, "first")]
    assert joined.rejected["gaps joined"] == 1
    for cycles in ((1, 1), (9, 7), (77, 60), (-31, 16)):
        arcs = cut(without(slip(whole, 103, 2, cycles), PHASES, slice(100, 105), 2))
        assert began(arcs, 2) == [(0, "first"), (105, "gap")]
        assert arcs.slips[0]["cycles"] == cycles
    assert began(cut(without(whole, PHASES, slice(100, 106), 2)), 2) == [(0, "first"), (106, "gap")]


def test_gaps_in_a_wild_ionosphere_are_not_bridged_by_hope(rng: np.random.Generator) -> None:
    """Some TECU of change are likely in the gap, and hide an equal slip in L1 - L2: the geometry forbids the bridge."""
    false = 0
    for _ in range(10):
        whole = slip(made(rng, storm=2.0), 103, 2, (1, 1))
        false += len(began(cut(without(whole, PHASES, slice(100, 105), 2)), 2)) == 1
    assert false == 0


def test_power_failures(rng: np.random.Generator) -> None:
    """Every arc ends where the receiver lost power, gap or none."""
    observations = without(made(rng), PHASES, slice(100, 102), slice(0, 4))
    resets = np.zeros(240, dtype=bool)
    resets[101] = True
    arcs = cut(replace(observations, resets=resets))
    assert began(arcs, 0) == [(0, "first"), (102, "reset")]
    assert began(arcs, 7) == [(0, "first"), (101, "reset")]
    assert reasons(arcs)["reset"] == 8


@pytest.mark.parametrize("missing", [("code2",), ("code1",), CODES])
def test_codes_missing_for_a_while(missing: tuple[str, ...], rng: np.random.Generator) -> None:
    """Phases without a code stay in their arc, and a slip hidden in L1 - L2 is found among them."""
    observations = without(slip(made(rng), 100, 2, (9, 7)), missing, slice(92, 108), 2)
    arcs = cut(observations)
    assert began(arcs, 2) == [(0, "first"), (100, "slip")]
    assert np.isfinite(arcs.stec[92:108, 2]).all()


def test_a_missing_code_is_made_of_the_other(rng: np.random.Generator) -> None:
    """The wide lane goes on with one code: phase minus code, freed of the ionosphere by the phases."""
    from skylag.ionosphere.phase_steps import on_grid

    whole = made(rng, storm=0.3)
    full, _ = on_grid(whole)
    for name in CODES:
        part, _ = on_grid(without(whole, (name,), slice(92, 96), 2))
        assert np.std(part.wide[92:96, 2] - full.wide[92:96, 2]) < 1.0
        assert np.isfinite(part.wide[92:96, 2]).all()


def test_arcs_without_a_second_code_have_no_level(rng: np.random.Generator) -> None:
    arcs = cut(without(made(rng), ("code2",), slice(None), 4))
    assert began(arcs, 4) == []
    assert arcs.rejected["points of arcs without both codes"] == 240


def test_few_satellites(rng: np.random.Generator) -> None:
    """Three satellites tell no clock: L1 - L2 and the wide lane must do."""
    quiet = made(rng, satellites=3)
    assert reasons(cut(quiet))["slip"] == 0
    for cycles in ((1, 0), (1, 1), (2, -1), (37, -12), (77, 60)):
        arcs = cut(slip(quiet, 120, 1, cycles))
        assert [abs(start - 120) <= 3 for start, _ in began(arcs, 1)[1:]] == [True], cycles


def test_noisy_satellite_clocks_cut_nothing(rng: np.random.Generator) -> None:
    """A clock that wanders by 3 cm a step (an ageing caesium's) moves both phases: no slip."""
    observations = made(rng)
    walk = 0.03 * np.cumsum(rng.standard_normal((240, 8)), axis=0)
    moved = {name: getattr(observations, name) + walk for name in (*CODES, *PHASES)}
    assert reasons(cut(replace(observations, **moved)))["slip"] == 0
    assert began(cut(slip(replace(observations, **moved), 77, 0, (1, 1))), 0) == [(0, "first"), (77, "slip")]


def test_whole_milliseconds_of_one_satellite(rng: np.random.Generator) -> None:
    """Both phases of one satellite step by a millisecond, as in a file of 2004: L1 - L2 stays, so does the arc."""
    observations = made(rng)
    phases = {name: getattr(observations, name).copy() for name in PHASES}
    for values in phases.values():
        values[130:, 6] += 2 * MILLISECOND_M
    arcs = cut(replace(observations, **phases))
    assert reasons(arcs)["slip"] == 0
    assert not arcs.slips


def test_repair_on_request(rng: np.random.Generator) -> None:
    """Whole numbers that are certain are taken out, and the arc goes on as if nothing had been."""
    whole = made(rng)
    slipped = slip(slip(whole, 100, 2, (-31, 16)), 180, 2, (1, 1))
    arcs = cut(slipped, ArcChoices(repair=True))
    assert began(arcs, 2) == [(0, "first")]
    assert arcs.rejected["slips repaired"] == 2
    assert [one["repaired"] for one in arcs.slips] == [True, True]
    straight = cut(whole)
    assert np.nanmax(np.abs(arcs.stec_phase[:, 2] - straight.stec_phase[:, 2])) < 1e-6
    assert not any(one["repaired"] for one in cut(slipped).slips)


def test_an_uncertain_slip_is_not_repaired(rng: np.random.Generator) -> None:
    """Beside a half cycle no whole numbers are certain."""
    arcs = cut(slip(made(rng), 100, 2, (0.5, 0.0)), ArcChoices(repair=True))
    assert began(arcs, 2) == [(0, "first"), (100, "slip")]


def test_bursts_and_a_spoiled_hour(rng: np.random.Generator) -> None:
    """Wild codes leave the level where it was, and are counted."""
    observations = made(rng, epochs=600)
    good = cut(observations)
    code = observations.code1.copy()
    code[40:46, 0] += 25.0
    code[200:320, 1] += 40.0 + 15.0 * rng.standard_normal(120)
    bad = cut(replace(observations, code1=code))
    change = np.nanmedian(bad.stec[:, :2] - good.stec[:, :2], axis=0)
    assert np.all(np.abs(change) < 2.0 * good.arc_level_sigma[:2])
    assert 5 <= bad.rejected["code points at fault"] <= 9
    assert 110 <= bad.rejected["code points of bad quarter hours"] <= 150


@pytest.mark.parametrize(("memory_s", "least", "most"), [(1.0, 0.6, 1.2), (240.0, 0.8, 1.2), (900.0, 0.8, 1.5)])
def test_sigma_of_levels_is_honest(memory_s: float, least: float, most: float) -> None:
    """Errors of levels over their sigmas, with code noise that fades at once, in minutes, in a quarter of an hour.

    Eight satellites tell little of the noise: where it fades at once, the sigma stays careful; where it lasts
    as long as a block, the sigma is too small by up to four tenths.
    """
    rng = np.random.default_rng(11)
    ratio: list[float] = []
    keep = np.exp(-30.0 / memory_s)
    for _ in range(12):
        observations = made(rng, epochs=int(rng.integers(150, 700)))
        noise = lfilter([np.sqrt(1.0 - keep**2)], [1.0, -keep], rng.standard_normal((2, 800, 8)), axis=1)
        noise = 0.5 * noise[:, -len(observations.times) :]
        noisy = replace(observations, code1=observations.code1 + noise[0], code2=observations.code2 + noise[1])
        arcs = cut(noisy)
        # `made` puts the codes at the true content: the phases' own level is told by the quiet codes to 0.1 TECU.
        phase, code = geometry_free(observations)
        error = np.nanmedian(arcs.stec - phase, axis=0) - np.mean(code - phase, axis=0)
        ratio.extend(error / arcs.arc_level_sigma)
    assert least < np.std(ratio) < most, np.std(ratio)


def test_short_arcs_are_dropped_and_counted(rng: np.random.Generator) -> None:
    observations = without(made(rng), PHASES, slice(15, None), 0)
    arcs = cut(observations)
    assert began(arcs, 0) == []
    assert arcs.rejected["points of short arcs"] == 15


def test_no_phase_is_lost() -> None:
    """Cutting loses no phase: every point is in an arc, in a short one, or counted as lonely."""
    world = small_world()
    for signals in world.signals[:2]:
        observations, _ = choose(signals)
        arcs = cut(observations)
        phases = int((np.isfinite(observations.phase1) & np.isfinite(observations.phase2)).sum())
        dropped = sum(arcs.rejected[name] for name in ("points of short arcs", "points of arcs without both codes",
                                                       "lonely points dropped"))  # fmt: skip
        assert int((arcs.arc >= 0).sum()) + dropped == phases
        assert int(arcs.arc_points.sum()) == int((arcs.arc >= 0).sum())


def test_missing_epochs_in_the_file(rng: np.random.Generator) -> None:
    """Epochs absent from the file are a gap like any other."""
    observations = made(rng)
    keep = np.r_[0:100, 104:240]
    part = {field.name: getattr(observations, field.name)[keep] for field in fields(observations)
            if isinstance(getattr(observations, field.name), np.ndarray)
            and len(getattr(observations, field.name)) == 240}  # fmt: skip
    arcs = cut(replace(observations, **part))
    assert reasons(arcs)["first"] == 8
    assert len(arcs.arc_satellite) == 8 or reasons(arcs)["gap"] <= 8
    assert reasons(arcs)["slip"] == 0


def test_nothing_at_all(rng: np.random.Generator) -> None:
    """No phases, no arcs, no complaint."""
    arcs = cut(without(made(rng), PHASES, slice(None), slice(None)))
    assert len(arcs.arc_satellite) == 0
    assert np.isnan(arcs.stec).all()


# ------------------------------------------------------------------------------------------------- real days


@pytest.fixture(scope="module")
def esbjerg(open_data: Path) -> tuple[Observations, Floats]:
    """The quiet day of Esbjerg, five constellations, and elevations."""
    signals = formats.read(open_data / "2020-177/obs/ESBC00DNK_R_20201770000_01D_30S_MO.crx.gz").table
    navigation = formats.read(open_data / "2020-177/nav/ESBC00DNK_R_20201770000_01D_MN.rnx.gz").table
    assert isinstance(signals, Signals)
    assert isinstance(navigation, Ephemerides)
    channels = {str(s): int(c) for s, c in zip(navigation.satellites, navigation.channels, strict=True) if s[0] == "R"}
    observations, _ = choose(signals, {"G": ("C1C", "C2W")}, channels)
    positions = orbits.positions([navigation], observations.satellites, observations.times)
    return observations, geometry.look(signals.receiver.position_m, positions)[0]


@pytest.mark.open_data
def test_wide_lane_noise_of_a_real_day(esbjerg: tuple[Observations, Floats], evidence: Evidence) -> None:
    observations, elevation = esbjerg
    arcs = cut(observations, None, elevation)
    wide = np.where(elevation > 10.0, melbourne_wuebbena(observations), np.nan)
    scatter = []
    for row, column in enumerate(arcs.arc_satellite):
        values = wide[arcs.arc[:, column] == row, column]
        if observations.satellites[column][0] == "G" and np.isfinite(values).sum() >= 60:
            scatter.append(np.nanstd(values))
    source = "worked from the same open data, 57 arcs (references 2.1)"
    evidence("Esbjerg 2020-06-25, wide lane per arc: median", source=source, expected=0.18,
             got=float(np.median(scatter)), tolerance=0.03, unit="cycles")  # fmt: skip
    evidence("Esbjerg 2020-06-25, wide lane per arc: 95 of 100", source=source, expected=0.42,
             got=float(np.percentile(scatter, 95)), tolerance=0.08, unit="cycles")  # fmt: skip


@pytest.mark.open_data
def test_levels_of_a_real_day(esbjerg: tuple[Observations, Floats], evidence: Evidence) -> None:
    """Scatter of code minus phase about the level, and how few slips a quiet day has."""
    observations, elevation = esbjerg
    arcs = cut(observations, None, elevation)
    gps = np.array([observations.satellites[c][0] == "G" for c in arcs.arc_satellite]) & (arcs.arc_points > 120)
    source = "worked from the same open data (references 2.5)"
    evidence("Esbjerg 2020-06-25, code minus phase about the level: median", source=source, expected=2.35,
             got=float(np.median(arcs.arc_noise[gps])), tolerance=0.6, unit="TECU")  # fmt: skip
    assert reasons(arcs)["slip"] <= 12
    assert np.median(arcs.arc_level_sigma) < 1.0


SLIPS_OF = {
    "G": ((1, 0), (0, 1), (1, 1), (-1, -1), (9, 7), (77, 60), (4, 3), (2, 0), (0, -2), (5, 4)),
    "E": ((1, 0), (0, 1), (1, 1), (-1, -1), (4, 3), (154, 115), (8, 6), (2, 1)),
    "C": ((1, 0), (0, 1), (1, 1), (-1, -1), (5, 4), (2, 1)),
    "R": ((1, 0), (0, 1), (1, 1), (-1, -1), (9, 7), (4, 3), (5, 4)),
}


@pytest.mark.open_data
def test_slips_put_into_a_real_day(esbjerg: tuple[Observations, Floats], evidence: Evidence) -> None:
    """Some 240 slips put between the real phases, above 10 degrees, three epochs and more inside an arc."""
    observations, elevation = esbjerg
    before = cut(observations, None, elevation)
    inside = (before.arc >= 0) & (elevation > 10.0)
    for step in (-3, -2, -1, 1, 2, 3):
        inside &= np.roll(before.arc, step, axis=0) == before.arc
    rng = np.random.default_rng(3)
    places = np.argwhere(inside)
    put: list[tuple[int, int, tuple[int, int]]] = []
    slipped = observations
    for epoch, column in places[rng.permutation(len(places))[:250]]:
        kinds = SLIPS_OF.get(str(observations.satellites[column])[0])
        if kinds and all(abs(epoch - e) > 10 for e, c, _ in put if c == column):
            put.append((int(epoch), int(column), kinds[rng.integers(len(kinds))]))
            slipped = slip(slipped, *put[-1])
    arcs = cut(slipped, None, elevation)
    missed = [one for one in put if _same_arc(arcs, one[0], one[1])]
    large = [one for one in put if max(map(abs, one[2])) >= 2]
    assert len(put) > 200
    source = "targets of issue 4; slips put into open data"
    evidence("slips put into Esbjerg's day: missed", source=source, expected=5.0,
             got=100 * len(missed) / len(put), tolerance=0, at_most=True, unit="%")  # fmt: skip
    evidence("slips of 2 cycles and more put into Esbjerg's day: missed", source=source, expected=1.0, at_most=True,
             got=100 * sum(one in missed for one in large) / len(large), tolerance=0, unit="%")  # fmt: skip
    places_put = {(c, e + k) for e, c, _ in put for k in range(-2, 3)}
    old = set(zip(before.arc_satellite.tolist(), before.arc_start.tolist(), strict=True))
    extra = [start for row, start in enumerate(zip(arcs.arc_satellite.tolist(), arcs.arc_start.tolist(), strict=True))
             if ARC_BEGAN[arcs.arc_began[row]] == "slip" and start not in places_put | old]  # fmt: skip
    assert extra == []


def _same_arc(arcs: Arcs, epoch: int, column: int) -> bool:
    """Do the points around an epoch belong to one arc?"""
    before = arcs.arc[: max(epoch - 1, 0), column]
    after = arcs.arc[epoch + 2 :, column]
    before, after = before[before >= 0], after[after >= 0]
    return bool(len(before) and len(after) and before[-1] == after[0])


@pytest.mark.open_data
def test_millisecond_steps_of_a_real_day(open_data: Path) -> None:
    """Cachoeira Paulista 2004: twenty times the phases of one satellite step by whole milliseconds; none is a slip."""
    signals = formats.read(open_data / "2004-001/obs/chpi0010.04o.gz").table
    assert isinstance(signals, Signals)
    observations, _ = choose(signals)
    steps = np.diff(combinations.millisecond_steps(observations), axis=0)
    assert np.count_nonzero(steps) >= 15
    arcs = cut(observations)
    assert reasons(arcs)["slip"] <= 2
