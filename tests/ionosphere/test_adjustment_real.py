"""The adjustment on real measurement files, against what agencies and satellites publish."""

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from tests.conftest import Evidence

from skylag import chain, formats
from skylag.chain import Choices
from skylag.ionosphere.adjustment import AdjustmentChoices, apply, solve
from skylag.ionosphere.bias_algebra import from_group_delays, join, pair_bias
from skylag.ionosphere.geometry import modified_mapping
from skylag.tables import Biases, Calibration, Ephemerides, Floats, PreciseOrbits, Rays, Signals, concatenate

pytestmark = pytest.mark.open_data


def rays_of(observations: Sequence[Path], orbits: Sequence[Path]) -> tuple[Rays, list[Ephemerides | PreciseOrbits]]:
    """The rays of some files, and the orbit sources, tabulated ones first."""
    tables = [formats.read(path).table for path in orbits]
    sources = [t for t in tables if isinstance(t, PreciseOrbits)] + [t for t in tables if isinstance(t, Ephemerides)]
    parts = []
    for path in observations:
        signals = formats.read(path).table
        assert isinstance(signals, Signals)
        parts.append(chain.receiver_day(signals, sources, Choices(), 400e3).rays)
    return concatenate(parts), sources


def beside(calibration: Calibration, published: Biases, system: str, code1: str) -> Floats:
    """Satellite biases found less those published [ns], as far as both know them."""
    table = calibration.biases
    middle = table.start[0] + (table.end[0] - table.start[0]) // 2
    found = []
    for row in np.flatnonzero((table.kind == "satellite") & (table.system == system) & (table.code1 == code1)):
        told = pair_bias(published, "satellite", str(table.name[row]), system, code1, str(table.code2[row]), middle)
        if told is not None:
            found.append(float(table.value_ns[row]) - told[0])
    return np.array(found)


@pytest.fixture(scope="module")
def esbc(open_data: Path) -> tuple[Rays, list[Ephemerides | PreciseOrbits]]:
    """One receiver in Denmark on 2020-06-25: GPS, Galileo, BeiDou, GLONASS, QZSS."""
    folder = open_data / "2020-177"
    return rays_of(sorted((folder / "obs").glob("ESBC*")), sorted((folder / "nav").glob("ESBC*")))


def test_one_receiver_against_broadcast_group_delays(
    esbc: tuple[Rays, list[Ephemerides | PreciseOrbits]], evidence: Evidence
) -> None:
    """Five constellations in one adjustment; broadcast delays are rounded to 0.47 ns (GPS) and 0.23 ns steps."""
    rays, sources = esbc
    calibration = solve(rays, None, None, chain.channels_of(sources))
    broadcast = join([from_group_delays(s) for s in sources if isinstance(s, Ephemerides)])
    gps, galileo = beside(calibration, broadcast, "G", "C1W"), beside(calibration, broadcast, "E", "C1C")
    assert len(gps) >= 30 and len(galileo) >= 20
    evidence("ESBC 2020-06-25: GPS C1W-C2W against T_GD, RMS about the mean", source="broadcast T_GD, IS-GPS-200",
             expected=0.30, got=float(np.std(gps)), tolerance=0, unit="ns", at_most=True)  # fmt: skip
    evidence("ESBC 2020-06-25: Galileo C1C-C5Q against BGD, RMS about the mean", source="broadcast BGD(E1,E5a)",
             expected=0.35, got=float(np.std(galileo)), tolerance=0, unit="ns", at_most=True)  # fmt: skip


def test_beidou_held_at_its_group_delays(
    esbc: tuple[Rays, list[Ephemerides | PreciseOrbits]], evidence: Evidence
) -> None:
    """The delays of the two generations stand 6 ns apart in level: with a receiver bias each, BeiDou tells the content
    that GPS tells; with one for both it would be off by some 10 TECU, one way for each generation."""
    rays, sources = esbc
    channels = chain.channels_of(sources)
    broadcast = join([from_group_delays(s) for s in sources if isinstance(s, Ephemerides)])
    calibration = solve(rays, broadcast, None, channels)
    table = calibration.biases
    rows = np.flatnonzero((table.kind == "receiver") & (table.system == "C"))
    assert [calibration.datum_of_row[row].split(":")[0] for row in rows] == ["BeiDou-2", "BeiDou-3"]
    assert 5.0 < table.value_ns[rows[0]] - table.value_ns[rows[1]] < 7.5
    assert not [note for note in calibration.summary["notes"] if note.startswith("C")]
    samples = apply(calibration, rays)
    number = np.array([int(str(name)[1:]) if str(name)[0] == "C" else 0 for name in rays.satellites])[rays.satellite]
    system = np.array([pair.system for pair in rays.pairs])[rays.pair]
    hour = (rays.time - rays.time.min()).astype("timedelta64[s]").astype(int) // 3600
    for words, own in (("BeiDou-2", (number > 0) & (number <= 18)), ("BeiDou-3", number > 18)):
        steps = []
        for h in range(24):
            here = (rays.elevation > 30.0) & (hour == h)
            if (here & own).sum() > 20 and (here & (system == "G")).sum() > 20:
                steps.append(np.median(samples.vtec[here & own]) - np.median(samples.vtec[here & (system == "G")]))
        assert len(steps) > 8
        evidence(f"ESBC 2020-06-25: {words} held at its group delays, content less that of GPS, median of hours",
                 source="broadcast TGD1 (BDS-SIS-ICD) and T_GD (IS-GPS-200)", expected=0.0,
                 got=float(np.median(steps)), tolerance=0.7, unit="TECU")  # fmt: skip


def overhead(rays: Rays, channels: dict[str, int]) -> Floats:
    """Weighted vertical content above 40 deg per quarter of an hour [TECU] from an adjustment of these rays alone."""
    calibration = solve(rays, None, None, channels)
    samples = apply(calibration, rays)
    high = rays.elevation > 40.0
    quarter = (rays.time - rays.time[0].astype("datetime64[D]")).astype("timedelta64[s]").astype(np.int64) // 900
    weight = np.where(high, samples.sigma**-2, 0.0)
    with np.errstate(invalid="ignore"):
        total = np.bincount(quarter, weight * samples.vtec, minlength=96) / np.bincount(quarter, weight, minlength=96)
    return np.asarray(total)


def test_two_constellations_tell_the_same_content(
    esbc: tuple[Rays, list[Ephemerides | PreciseOrbits]], evidence: Evidence
) -> None:
    """GPS alone and Galileo alone: two adjustments without a common number, over one receiver.

    The mean difference is one draw of both levels, each known to 0.6 TECU."""
    rays, sources = esbc
    systems = np.array([pair.system for pair in rays.pairs])[rays.pair]
    channels = chain.channels_of(sources)
    difference = overhead(rays.where(systems == "G"), channels) - overhead(rays.where(systems == "E"), channels)
    difference = difference[np.isfinite(difference)]
    assert len(difference) > 80
    evidence("ESBC 2020-06-25: GPS-only less Galileo-only vertical content, RMS of quarter hours",
             source="two constellations over one receiver", expected=0.5,
             got=float(np.sqrt(np.mean(difference**2))), tolerance=0, unit="TECU", at_most=True)  # fmt: skip


@pytest.mark.slow
def test_network_against_a_bias_product(open_data: Path, evidence: Evidence) -> None:
    """Five receivers in the Netherlands, one in Switzerland, GPS and GLONASS, 2021-01-01; the product is of 77 days
    later, so it is opened to any day for this test."""
    folder = open_data / "2021-001"
    rays, sources = rays_of(sorted((folder / "obs").glob("*")), sorted((folder / "nav").glob("*")))
    product = formats.read(next((folder / "bias").glob("*OSB*"))).table
    assert isinstance(product, Biases)
    never = np.full(len(product), np.datetime64("NaT", "ns"))
    product = replace(product, start=never, end=never)
    channels = chain.channels_of(sources)
    free = solve(rays, None, None, channels)
    gps = beside(free, product, "G", "C1W")
    assert len(gps) >= 30
    evidence("Netherlands 2021-01-01: GPS C1W-C2W against CODE OSB of 2021-03-19, RMS about the mean",
             source="CODE rapid OSB 2021-078", expected=0.30, got=float(np.std(gps)), tolerance=0, unit="ns",
             at_most=True)  # fmt: skip
    held = solve(rays, product, None, channels)
    table = held.biases
    satellites = (table.kind == "satellite") & (table.system == "G")
    assert np.abs(beside(held, product, "G", "C1W")).max() < 1e-3
    assert np.abs(beside(held, product, "G", "C1C")).max() < 1e-3
    assert {held.datum_of_row[row] for row in np.flatnonzero(satellites)} == {
        "held at COD COD0OPSRAP_20210780000_01D_01D_OSB.BIA.gz"
    }
    assert held.summary["notes"] == []
    # One satellite's group delay of that day is off against the product by -3.4 ns about the mean of the others; held
    # at it, its rays must say so.
    broadcast = join([from_group_delays(s) for s in sources if isinstance(s, Ephemerides)])
    told = [note for note in solve(rays, broadcast, None, channels).summary["notes"] if "rays ask for" in note]
    assert [note.split()[0] for note in told] == ["G14"]
    evidence("Netherlands 2021-01-01: G14 held at its group delay, what its rays ask for on top",
             source="CODE OSB of 2021-03-19 less T_GD, about the mean of all", expected=3.4,
             got=float(told[0].split("ask for ")[1].split(" ns")[0]), tolerance=0.6, unit="ns")  # fmt: skip
    # The level of the content must not depend on whether the product is held.
    step = apply(held, rays).vtec - apply(free, rays).vtec
    high = rays.elevation > 40.0
    evidence("Netherlands 2021-01-01: content with the product held less without", source="CODE rapid OSB 2021-078",
             expected=0.0, got=float(np.median(step[high])), tolerance=0.5, unit="TECU")  # fmt: skip


# Vertical content up to 2000 km over ZIMM on 2015-08-23 at 01, 02, 03, 04 UT, F10.7 = 106: the climatology IRI by way
# of PyIRI 0.1.7, run once for this test (CCIR coefficients).  Months scatter by some 20 to 30 % about such values.
NIGHT_TECU = (4.3, 3.7, 3.2, 3.3)
# What the plasmasphere above 2000 km adds there; from memory of comparisons at middle latitudes, 0.5 to 1.5.
ABOVE_TECU = 1.0


def test_level_of_one_receiver_on_a_real_day(open_data: Path, evidence: Evidence) -> None:
    """ZIMM alone on 2015-08-23, satellites held at CODE's monthly values, the receiver found in two ways.

    Modelled as CODE does, with the modified single layer and no plasmasphere of its own, the receiver comes out at
    CODE's value to a tenth of a nanosecond: so codes, levels and satellites are read alike.  With our own models it is
    some 1.2 ns lower.  On invented days with known truth the former reads too high by 0.4 ns in the mean and 0.8 ns RMS
    (tests/simulated/test_other_plasmaspheres.py), and before dawn, where next to nothing but the level is left, its
    content lies 2.2 TECU above climatology, ours 1.1 below.  Our own sigma does not cover the difference."""
    folder = open_data / "2015-235"
    tables = [formats.read(folder / "bias" / name).table for name in ("P1C11508.DCB", "P1P21508_ALL.DCB")]
    product = join([table for table in tables if isinstance(table, Biases)])
    rays, _ = rays_of(sorted((folder / "obs").glob("ZIMM2350*")), sorted((folder / "sp3").glob("*")))
    told = pair_bias(product, "receiver", "ZIMM", "G", "C1W", "C2W", np.datetime64("2015-08-23T12", "ns"))
    assert told is not None
    as_code = replace(rays, mapping=modified_mapping(rays.elevation))
    hour = (rays.time - np.datetime64("2015-08-23", "ns")) // np.timedelta64(3600, "s")
    dark = (rays.elevation > 60.0) & (hour >= 1) & (hour < 5)
    value, sigma, night = [], [], []
    for part, choices in ((as_code, AdjustmentChoices(high_layer=0.0, high_layer_sigma=1e-3)), (rays, None)):
        calibration = solve(part, product, choices)
        assert np.abs(beside(calibration, product, "G", "C1C")).max() < 1e-3
        (row,) = np.flatnonzero(calibration.biases.kind == "receiver")
        value.append(float(calibration.biases.value_ns[row]))
        sigma.append(float(calibration.biases.sigma_ns[row]))
        night.append(float(np.median(apply(calibration, part).vtec[dark])))
    print(f"receiver {value} +- {sigma} ns, content before dawn {night} TECU")
    source = "CODE P1P21508_ALL.DCB (monthly, P1-P2)"
    evidence("ZIMM 2015-08-23: receiver bias, satellites held; modified single layer, no high layer", source=source,
             expected=told[0], got=value[0], tolerance=0.25, unit="ns")  # fmt: skip
    # 1.5 ns is fixed, so that no larger sigma makes it easier; ours is off by four of its own.
    evidence("ZIMM 2015-08-23: receiver bias, satellites held; single and high layer (1.2 ns off is 4 own sigmas)",
             source=f"{source}; within 1.5 ns: a bound of this project", expected=told[0], got=value[1], tolerance=1.5,
             unit="ns")  # fmt: skip
    assert 3.5 < abs(value[1] - told[0]) / sigma[1] < 4.5, "what the row above and the known limits tell"
    assert sigma[1] < 0.5 and sigma[0] < 1.0, "honest is not the same as vast"
    usual = float(np.mean(NIGHT_TECU)) + ABOVE_TECU
    evidence("ZIMM 2015-08-23: vertical content from 01 to 05 UT", source="IRI (PyIRI 0.1.7), 1 TECU above 2000 km",
             expected=usual, got=night[1], tolerance=1.5, unit="TECU")  # fmt: skip
    assert night[0] - usual > 1.5, "what the published level would make of the night"
