"""Which two signals are used together: preference, fullness, what a person chose, GLONASS channels, the words."""

from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np
import pytest

from skylag import formats
from skylag.constants import SPEED_OF_LIGHT_M_S, carrier_hz
from skylag.errors import NotEnough, Refused
from skylag.ionosphere.pairs import USABLE_PAIRS, choose, parse_wanted, wanted_codes
from skylag.tables import Receiver, Signals


def signals(
    codes: Mapping[str, float], satellites: Sequence[str] = ("G01", "G02"), channels: Mapping[str, int] | None = None
) -> Signals:
    """Signals of ten epochs; each name with the share of epochs it is there."""
    values, lock = {}, {}
    for number, (name, share) in enumerate(codes.items()):
        values[name] = np.full((10, len(satellites)), 100.0 + number)
        values[name][round(10 * share) :] = np.nan
        if name[0] == "L":
            lock[name] = np.full((10, len(satellites)), number % 4, dtype=np.uint8)
    return Signals(
        receiver=Receiver("ARDN00XBS", (6378137.0, 0.0, 0.0)),
        times=np.datetime64("2031-03-12", "ns") + np.arange(10) * np.timedelta64(30, "s"),
        satellites=np.array(satellites), values=values, lock=lock, channels=dict(channels or {}),
        resets=np.zeros(10, dtype=bool), interval_s=30.0,
    )  # fmt: skip


def named(codes: str, share: float = 1.0) -> dict[str, float]:
    return dict.fromkeys(codes.split(), share)


@pytest.mark.parametrize(
    ("system", "codes", "pair"),
    [
        ("G", "C1C C1W L1C C2W L2W", "C1W-C2W"),
        ("G", "C1C L1C C2W L2W C2L L2L", "C1C-C2W"),
        ("G", "C1C L1C C2L L2L C5Q L5Q", "C1C-C2L"),
        ("G", "C1C L1C C5X L5X", "C1C-C5X"),
        ("E", "C1C L1C C5Q L5Q C7Q L7Q", "C1C-C5Q"),
        ("E", "C1X L1X C7X L7X", "C1X-C7X"),
        ("C", "C2I L2I C7I L7I C6I L6I", "C2I-C6I"),
        ("C", "C2I L2I C7I L7I", "C2I-C7I"),
        ("C", "C1P L1P C5P L5P", "C1P-C5P"),
        ("J", "C1C L1C C2L L2L", "C1C-C2L"),
    ],
)
def test_the_best_pair_at_hand(system: str, codes: str, pair: str) -> None:
    observations, notes = choose(signals(named(codes), (f"{system}01", f"{system}02")))
    assert observations.pairs[system].name == pair
    assert notes == ()


def test_a_thin_pair_gives_way() -> None:
    """A better pair that fills less than 7/10 of the fullest is passed over; just above, it stays."""
    full = named("C1C L1C C2W L2W")
    thin, _ = choose(signals(full | {"C1W": 0.5}))
    assert thin.pairs["G"].name == "C1C-C2W"
    enough, _ = choose(signals(full | {"C1W": 0.8}))
    assert enough.pairs["G"].name == "C1W-C2W"


def test_phases_go_with_their_code() -> None:
    """The code's own phase; where it is missing, the fullest of the band."""
    own, _ = choose(signals(named("C1C L1C C2W L2W C2L L2L")))
    assert (own.pairs["G"].phase1, own.pairs["G"].phase2) == ("L1C", "L2W")
    borrowed, _ = choose(signals(named("C1W L1C C2W L2L") | {"L1W": 0.2}))
    assert (borrowed.pairs["G"].phase1, borrowed.pairs["G"].phase2) == ("L1C", "L2L")


def test_metres_locks_and_strength() -> None:
    codes = named("C1W L1W C2W L2W S1W")
    observations, _ = choose(signals(codes))
    assert np.all(observations.code1 == 100.0)
    assert np.all(observations.snr1 == 104.0)
    assert np.allclose(observations.phase1, 101.0 * SPEED_OF_LIGHT_M_S / 1575.42e6, rtol=1e-15)
    assert np.allclose(observations.phase2, 103.0 * SPEED_OF_LIGHT_M_S / 1227.60e6, rtol=1e-15)
    assert set(observations.lock1.ravel()) == {1}
    assert set(observations.lock2.ravel()) == {3}


def test_what_a_person_chose() -> None:
    codes = named("C1C C1W L1C C2W L2W C5Q L5Q")
    assert choose(signals(codes), {"G": ("C1C", "C5Q")})[0].pairs["G"].name == "C1C-C5Q"
    both = signals(codes, ("E01", "G01"))
    observations, notes = choose(both, {"G": ("C1C", "C2L")})
    assert list(observations.pairs) == ["E"]
    assert observations.satellites.tolist() == ["E01"]
    assert notes == ("ARDN00XBS: no C1C-C2L signal pair of G in the file; G left out",)


def test_glonass_needs_its_channels() -> None:
    codes = named("C1P L1P C2P L2P")
    observations, notes = choose(signals(codes, ("R01", "R02", "R03"), {"R01": 1}), None, {"R02": -4})
    assert observations.satellites.tolist() == ["R01", "R02"]
    assert notes == ("ARDN00XBS: no GLONASS channel known for R03; left out",)
    assert observations.f1_hz.tolist() == [carrier_hz("R", "1", 1), carrier_hz("R", "1", -4)]
    assert observations.f2_hz.tolist() == [carrier_hz("R", "2", 1), carrier_hz("R", "2", -4)]


def test_the_file_knows_its_channels_better() -> None:
    """The observation file's own channel wins over the navigation file's."""
    one = signals(named("C1P L1P C2P L2P"), ("R01", "R02"), {"R01": 1, "R02": 2})
    assert choose(one, None, {"R01": -7})[0].f1_hz[0] == carrier_hz("R", "1", 1)


def test_nothing_usable() -> None:
    with pytest.raises(NotEnough) as refused:
        choose(signals(named("C1C L1C")))
    assert str(refused.value) == (
        "ARDN00XBS: no constellation has code and phase on two frequencies; the file must hold one of the pairs listed "
        "by `skylag day --help`"
    )


def test_unknown_constellations_are_left_alone() -> None:
    observations, _ = choose(signals(named("C1C L1C C2W L2W"), ("G01", "S20")))
    assert observations.satellites.tolist() == ["G01"]


@pytest.mark.parametrize(
    ("text", "part"),
    [
        ("G=C1W", "'G=C1W' is not a choice"),
        ("G:C1W-C2W", "'G:C1W-C2W' is not a choice"),
        ("X=C1W-C2W", "'X' is no constellation here"),
        ("G=C1C-C1W", "C1C-C1W is one band twice"),
        ("G=C1C-C7Q", "G has no band 7 (C7Q)"),
        ("G=L1C-L2W", "is not a choice"),
    ],
)
def test_choices_refused(text: str, part: str) -> None:
    with pytest.raises(Refused) as refused:
        parse_wanted(text)
    assert part in str(refused.value)


def test_choices_read() -> None:
    wanted = parse_wanted("G=C1W-C2W, E=C1C-C5Q,")
    assert wanted == {"G": ("C1W", "C2W"), "E": ("C1C", "C5Q")}
    assert parse_wanted("") == {}
    assert wanted_codes(wanted)["G"] == {"C1W", "C2W", "S1"}
    assert wanted_codes()["C"] >= {"C2I", "C6I", "C1P", "C5P"}


def test_every_usable_pair_has_two_carriers() -> None:
    for system, pairs in USABLE_PAIRS.items():
        for one, two in pairs:
            assert carrier_hz(system, one[1]) > carrier_hz(system, two[1]), (system, one, two)


@pytest.mark.open_data
@pytest.mark.parametrize(
    ("path", "pairs"),
    [
        ("2020-177/obs/ESBC00DNK_R_20201770000_01D_30S_MO.crx.gz", {"G": "C1W-C2W", "E": "C1C-C5Q", "C": "C2I-C6I"}),
        ("2024-127/obs/NYA100NOR_S_20241280000_01D_30S_MO.crx.gz", {"G": "C1C-C2W", "E": "C1X-C5X"}),
        ("2021-001/obs/zimm0010.21o.gz", {"G": "C1C-C2W"}),
    ],
)
def test_real_files(path: str, pairs: dict[str, str], open_data: Path) -> None:
    """What these receivers bring, by the headers of their files (list of the open data)."""
    table = formats.read(open_data / path, wanted=wanted_codes()).table
    assert isinstance(table, Signals)
    observations, _ = choose(table)
    assert {system: observations.pairs[system].name for system in pairs} == pairs
