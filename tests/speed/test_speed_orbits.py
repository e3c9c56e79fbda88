"""Budgets of navigation files and satellite positions; run with -m speed."""

import gzip
from pathlib import Path

import numpy as np
import pytest

from skylag.formats import rinex_nav, sp3
from skylag.ionosphere import orbits
from skylag.tables import Ephemerides, PreciseOrbits

pytestmark = [pytest.mark.speed, pytest.mark.open_data]
DAY = np.datetime64("2020-06-25", "ns") + 30 * np.arange(2880).astype("timedelta64[s]")
RECEIVER_M = (3582104.9, 532590.2, 5232755.1)


@pytest.fixture(scope="module")
def navigation(open_data: Path) -> bytes:
    return gzip.decompress((open_data / "2020-177/nav/ESBC00DNK_R_20201770000_01D_MN.rnx.gz").read_bytes())


@pytest.fixture(scope="module")
def records(navigation: bytes) -> Ephemerides:
    table = rinex_nav.parse(navigation, "nav").table
    assert isinstance(table, Ephemerides)
    return table


def test_a_mixed_navigation_file_of_a_day(benchmark, navigation: bytes) -> None:  # type: ignore[no-untyped-def]
    benchmark(rinex_nav.parse, navigation, "nav")
    assert benchmark.stats["min"] < 0.5


def test_broadcast_positions_of_100_satellites_over_a_day(benchmark, records: Ephemerides) -> None:  # type: ignore[no-untyped-def]
    names = np.unique(records.satellites)[:100]
    got = benchmark(orbits.positions, records, names, DAY)
    assert got.shape == (2880, 100, 3)
    assert benchmark.stats["min"] < 0.5


def test_precise_positions_over_a_day(benchmark, open_data: Path) -> None:  # type: ignore[no-untyped-def]
    path = open_data / "2020-177/sp3/GRG0MGXFIN_20201770000_01D_15M_ORB.SP3.gz"
    table = sp3.parse(gzip.decompress(path.read_bytes()), path.name).table
    assert isinstance(table, PreciseOrbits)
    benchmark(orbits.positions, table, table.satellites, DAY)
    assert benchmark.stats["min"] < 0.5


def test_positions_as_seen_from_a_receiver(benchmark, records: Ephemerides) -> None:  # type: ignore[no-untyped-def]
    names = np.unique(records.satellites)[:100]
    benchmark(orbits.seen_from, records, names, DAY, RECEIVER_M)
    assert benchmark.stats["min"] < 1.0
