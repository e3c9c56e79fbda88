"""The one door through which files come in: wrappers, kinds, names, pieces, and files that are not what they say."""

import bz2
import gzip
import hashlib
import io
import zipfile
from collections.abc import Callable
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context
from pathlib import Path
from typing import Any

import hatanaka
import ncompress
import numpy as np
import pytest
from tests.formats.navigation_text import INVENTED, orbit_values, record
from tests.formats.navigation_text import header as navigation_header
from tests.properties.rinex_text import Text, labelled, simple, write

from skylag import formats
from skylag.errors import FormatError, NotEnough, Refused
from skylag.formats import PARSERS, kind_of, wrappers
from skylag.formats.glance import glance
from skylag.tables import Biases, Ephemerides, PreciseOrbits, Reading, Signals


def zipped(data: bytes, *names: str) -> bytes:
    out = io.BytesIO()
    with zipfile.ZipFile(out, "w", zipfile.ZIP_DEFLATED) as folder:
        for name in names or ("wren1300.31o",):
            folder.writestr(name, data)
    return out.getvalue()


def compressed(data: bytes) -> bytes:
    return bytes(ncompress.compress(data))


WRAPPERS: dict[str, Callable[[bytes], bytes]] = {
    "plain": lambda data: data,
    "gz": gzip.compress,
    "two gz members": lambda data: gzip.compress(data[:500]) + gzip.compress(data[500:]),
    "Z": compressed,
    "bz2": bz2.compress,
    "zip": zipped,
    "gz in zip": lambda data: zipped(gzip.compress(data)),
}


def signals(reading: Reading) -> Signals:
    assert isinstance(reading.table, Signals)
    return reading.table


def same(a: Signals, b: Signals) -> bool:
    return (
        np.array_equal(a.times, b.times)
        and np.array_equal(a.satellites, b.satellites)
        and set(a.values) == set(b.values)
        and all(np.array_equal(a.values[c], b.values[c], equal_nan=True) for c in a.values)
        and all(np.array_equal(a.lock[c], b.lock[c]) for c in a.lock)
    )


# ------------------------------------------------------------------------------------------------ wrappers


@pytest.mark.parametrize("wrapper", WRAPPERS)
@pytest.mark.parametrize("compact", [False, True])
@pytest.mark.parametrize("version", [2.11, 3.04, 4.00])
def test_every_wrapper(wrapper: str, compact: bool, version: float, tmp_path: Path) -> None:
    """Whatever the name: Compact RINEX 1.0 comes of RINEX 2, 3.0 of RINEX 3 and 4."""
    text = write(simple(version))
    inner = hatanaka.rnx2crx(text) if compact else text
    if compact:
        assert inner[:3] == (b"1.0" if version < 3 else b"3.0")
    place = tmp_path / "named after nothing.pdf"
    place.write_bytes(WRAPPERS[wrapper](inner))
    reading = formats.read(place)
    assert not reading.problems
    assert reading.header["kind"] == "observations"
    plain = tmp_path / "plain.rnx"
    plain.write_bytes(text)
    assert same(signals(reading), signals(formats.read(plain)))


@pytest.fixture(scope="module")
def noisy_text() -> bytes:
    """Two megabytes that do not pack well: bzip2 works in blocks of nearly one."""
    rng = np.random.default_rng(20310510)
    text = simple(satellites=[f"G{n:02d}" for n in range(1, 11)], epochs=2400)
    for epoch in text.epochs:
        for name, cells in epoch.satellites.items():
            noise = np.round(rng.uniform(2e7, 3e7, len(cells)), 3)
            epoch.satellites[name] = [(float(value), None, None) for value in noise]
    return write(text)


@pytest.mark.parametrize("wrapper", ["gz", "bz2", "zip"])
def test_a_wrapper_cut_short_gives_what_it_held(wrapper: str, tmp_path: Path, noisy_text: bytes) -> None:
    packed = WRAPPERS[wrapper](noisy_text)
    place = tmp_path / "cut"
    place.write_bytes(packed[: len(packed) * 2 // 3])
    if wrapper == "zip":  # its list of contents is at the end
        with pytest.raises(FormatError, match="zip file cannot be unpacked"):
            formats.read(place)
        return
    reading = formats.read(place)
    assert 1000 < len(signals(reading).times) < 1700
    assert "cut short" in reading.problems[0].what


@pytest.mark.parametrize("version", [2.11, 3.04])
def test_compact_text_cut_short_gives_what_can_be_followed(version: float, tmp_path: Path) -> None:
    crx = hatanaka.rnx2crx(write(simple(version, epochs=100)))
    place = tmp_path / "cut.crx"
    place.write_bytes(crx[: len(crx) // 2])
    reading = formats.read(place)
    assert 30 < len(signals(reading).times) < 80
    assert "Hatanaka compression is damaged or cut short" in reading.problems[0].what
    assert reading.problems[0].line > 20


def test_compact_text_with_a_hole_goes_on_where_it_starts_anew(tmp_path: Path) -> None:
    lines = hatanaka.rnx2crx(write(simple(epochs=100)), reinit_every_nth=20).split(b"\n")
    starts = [k for k, line in enumerate(lines) if line.startswith(b"> 2031")]
    del lines[starts[1] + 12 : starts[1] + 20]
    place = tmp_path / "hole.crx"
    place.write_bytes(b"\n".join(lines))
    reading = formats.read(place)
    assert 70 < len(signals(reading).times) < 100
    assert reading.problems


@pytest.mark.parametrize("pack", [gzip.compress, bz2.compress, compressed, zipped])
def test_a_trap_that_swells_is_refused_early(pack: Callable[[bytes], bytes], tmp_path: Path) -> None:
    """80 MB of one letter pack into a fraction of a hundredth."""
    place = tmp_path / "trap"
    packed = pack(write(simple()) + b" " * 80_000_000)
    assert len(packed) < 400_000
    place.write_bytes(packed)
    with pytest.raises(FormatError, match="swell"):
        formats.read(place)


def test_wrappers_without_end_are_refused(tmp_path: Path) -> None:
    data = write(simple())
    for _ in range(9):
        data = gzip.compress(data)
    place = tmp_path / "onion.gz"
    place.write_bytes(data)
    with pytest.raises(FormatError, match="wrappers within each other"):
        formats.read(place)


@pytest.mark.parametrize("version", [2.11, 3.04])
@pytest.mark.parametrize("tail", [b"\x1a", b"\x1a\r\n", b"\0" * 5000, b"\n\0\0"], ids=["mark", "line", "zeros", "few"])
def test_what_old_systems_put_behind_a_text_costs_no_epoch(tail: bytes, version: float) -> None:
    data = write(simple(version))
    reading = formats.read_bytes(data + tail, "x")
    assert same(signals(reading), signals(formats.read_bytes(data, "x")))
    assert [problem.what for problem in reading.problems] == [f"{len(tail) + 1} filling bytes behind the text"]


def test_a_byte_order_mark_is_passed_over(tmp_path: Path) -> None:
    data = write(simple())
    place = tmp_path / "marked"
    for text in (data, hatanaka.rnx2crx(data)):
        marked = wrappers.BYTE_ORDER_MARK + text
        for packed in (marked, gzip.compress(marked)):
            reading = formats.read_bytes(packed, "x")
            assert reading.problems == ()
            assert same(signals(reading), signals(formats.read_bytes(data, "x")))
            place.write_bytes(packed)
            assert glance(place).kind == "observations"


def a_zip(**files: bytes) -> bytes:
    out = io.BytesIO()
    with zipfile.ZipFile(out, "w", zipfile.ZIP_DEFLATED) as folder:
        folder.mkdir("folder")
        for name, data in files.items():
            folder.writestr(f"folder/{name}", data)
    return out.getvalue()


def an_hour(hour: int, **more: Any) -> bytes:
    return write(simple(start=f"2031-05-10T{hour:02d}:00:00", epochs=120, **more))


def test_a_zip_of_hours_is_a_day_of_one_receiver(tmp_path: Path) -> None:
    hours = {"c": an_hour(2), "a": gzip.compress(an_hour(0)), "b": hatanaka.rnx2crx(an_hour(1)), "readme": b"hello"}
    place = tmp_path / "several.zip"
    place.write_bytes(a_zip(**hours))
    reading = formats.read(place, thin_to_s=60)
    table = reading.table
    assert isinstance(table, Signals)
    assert np.array_equal(table.times, np.datetime64("2031-05-10", "ns") + 60 * np.arange(180).astype("timedelta64[s]"))
    assert reading.header["pieces"] == 3
    assert len(reading.problems) == 1
    assert reading.problems[0].path == f"{place}/folder/readme"
    assert "no format known" in reading.problems[0].what
    whole = formats.merge([formats.read_bytes(an_hour(k), "x") for k in range(3)], thin_to_s=60)
    assert all(np.array_equal(table.values[code], whole.values[code], equal_nan=True) for code in whole.values)
    assert glance(place).kind == "observations"
    assert glance(place).day == np.datetime64("2031-05-10")


def test_problems_of_many_pieces_are_not_all_listed() -> None:
    bad = [an_hour(k).replace(b".123 ", b"x123 ") for k in range(3)]
    reading = formats.read_bytes(a_zip(a=bad[0], b=bad[1], c=bad[2]), "bad.zip")
    assert len(reading.problems) == 401
    assert "more problems in the files of the zip" in reading.problems[-1].what


def test_a_zip_of_several_receivers_asks_to_be_unpacked() -> None:
    with pytest.raises(FormatError, match=r"LARK is not WREN.*unpack"):
        formats.read_bytes(a_zip(a=an_hour(0), b=an_hour(0, marker="LARK")), "several.zip")


def test_what_lies_beside_observations_in_a_zip_is_told() -> None:
    kepler = orbit_values(INVENTED)
    nav = [(navigation_header(3.05) + record(name, "2020-06-25 12:00:00", kepler)).encode() for name in ("G05", "G06")]
    reading = formats.read_bytes(a_zip(nav=nav[0], obs=an_hour(0)), "both.zip")
    assert isinstance(reading.table, Signals)
    assert [str(problem) for problem in reading.problems] == [
        "both.zip: the zip holds navigation beside observations (left out; unpack it to use both)"
    ]
    reading = formats.read_bytes(a_zip(a=nav[0], b=nav[1]), "nav.zip")
    assert isinstance(reading.table, Ephemerides)
    assert list(reading.table.satellites) == ["G05", "G06"]
    assert reading.problems == ()


@pytest.mark.parametrize(
    ("packed", "words"),
    [
        (a_zip(a=b"hello", b=b"you"), "none holds observations"),
        (a_zip(), "holds 0 files"),
        (gzip.compress(a_zip(a=b"hello", b=b"you")), "within another wrapper"),
        (a_zip(**{f"a{k}": b" " for k in range(1001)}), "holds 1001 files"),
        (a_zip(**{f"a{k}": b" " * 2**20 for k in range(20)}), "swell to more"),
    ],
    ids=["no data", "nothing", "wrapped", "too many", "together too large"],
)
def test_a_zip_of_no_use_is_refused(packed: bytes, words: str) -> None:
    with pytest.raises(FormatError, match=words):
        formats.read_bytes(packed, "several.zip")


@pytest.mark.parametrize("head", [b"\x1f\x8b\x08\x00", b"\x1f\x9d\x90\x41", b"BZh91AY&SY", b"PK\x03\x04", b"\x1f\x9d"])
def test_damaged_wrappers_are_named(head: bytes, tmp_path: Path) -> None:
    place = tmp_path / "damaged"
    place.write_bytes(head + bytes(range(256)))
    with pytest.raises(FormatError) as caught:
        formats.read(place)
    assert str(place) in str(caught.value.details["path"])


# ------------------------------------------------------------------------------------------------ kinds


@pytest.mark.parametrize(
    ("head", "kind"),
    [
        (labelled("     2.11           OBSERVATION DATA    G (GPS)", "RINEX VERSION / TYPE"), "observations"),
        (labelled("     4.00           OBSERVATION DATA    M", "RINEX VERSION / TYPE"), "observations"),
        (labelled("3.0                 COMPACT RINEX FORMAT", "CRINEX VERS   / TYPE"), "observations"),
        (labelled("     2.11           N: GPS NAV DATA", "RINEX VERSION / TYPE"), "navigation"),
        (labelled("     2.10           GLONASS NAV DATA", "RINEX VERSION / TYPE"), "navigation"),
        (labelled("     4.01           NAVIGATION DATA     M", "RINEX VERSION / TYPE"), "navigation"),
        (labelled("     2.11           METEOROLOGICAL DATA", "RINEX VERSION / TYPE"), "unknown"),
        (labelled("     1.0            IONOSPHERE MAPS     GPS", "IONEX VERSION / TYPE"), "ionex"),
        ("#cP2031  5 10  0  0  0.00000000      96 ORBIT IGS20 HLM  XYZ", "orbits"),
        ("#dV2031  5 10  0  0  0.00000000      96 ORBIT IGS20 HLM  XYZ", "orbits"),
        ("%=BIA 1.00 XYZ 2031:130:00000 XYZ 2031:130:00000 2031:131:00000 R 00000100", "biases"),
        ("XYZ'S MONTHLY GNSS P1-P2 DCB SOLUTION, YEAR 2031, MONTH 05", "biases"),
        ("# Kp, ap and Ap of each day\n2031 05 10 36289 36289.5 2690  9 2.333", "indices"),
        ("<!DOCTYPE html>", "unknown"),
        ("", "unknown"),
        ("\x00\x01\x02", "unknown"),
    ],
)
def test_kinds_are_told_from_the_content(head: str, kind: str) -> None:
    assert kind_of(head.encode("latin-1")) == kind
    assert kind == "unknown" or kind in PARSERS


def test_every_real_file_is_of_its_folder(open_data: Path) -> None:
    """Folders of the open data say what is in them."""
    folders = {"obs": "observations", "nav": "navigation", "sp3": "orbits", "bias": "biases", "ionex": "ionex"}
    seen = set()
    for path in sorted(open_data.glob("*/*/*")):
        if path.parent.name in folders:
            packed = path.read_bytes()
            data = gzip.decompress(packed) if packed[:2] == b"\x1f\x8b" else packed
            assert kind_of(data) == folders[path.parent.name], path
            seen.add(path.parent.name)
    assert seen == set(folders)


def test_every_real_file_comes_in_by_this_door(open_data: Path) -> None:
    """Whatever is no observation: those have tests of their own."""
    tables = {"navigation": Ephemerides, "orbits": PreciseOrbits, "biases": Biases}
    met = set()
    for path in [*open_data.glob("*/nav/*"), *open_data.glob("*/sp3/*"), *open_data.glob("*/bias/*")]:
        reading = formats.read(path)
        met.add(reading.header["kind"])
        assert isinstance(reading.table, tables[reading.header["kind"]]), path
    assert met == set(tables)


def test_what_is_no_known_format_is_refused(tmp_path: Path) -> None:
    place = tmp_path / "page.rnx"
    place.write_text("<!DOCTYPE html>\n<title>Not found</title>\n")
    with pytest.raises(FormatError, match="begins with '<!DOCTYPE html>', which is no format known here") as caught:
        formats.read(place)
    assert caught.value.details == {"path": str(place), "line": 1}


@pytest.mark.parametrize("data", [b"", b"\n\n  \n"])
def test_an_empty_file_is_refused(data: bytes, tmp_path: Path) -> None:
    place = tmp_path / "nothing.rnx"
    place.write_bytes(data)
    with pytest.raises(FormatError, match="empty"):
        formats.read(place)


def test_a_file_that_is_not_there_and_a_folder(tmp_path: Path) -> None:
    for place in (tmp_path / "missing.rnx", tmp_path):
        with pytest.raises(FormatError, match="cannot be opened"):
            formats.read(place)


def test_problems_name_the_file_they_are_in(tmp_path: Path) -> None:
    place = tmp_path / "wren1300.31o"
    place.write_bytes(write(simple()) + b"rubbish\n")
    reading = formats.read(place)
    assert [p.path for p in reading.problems] == [str(place)]
    assert str(reading.problems[0]).startswith(f"{place}:{len(write(simple()).splitlines()) + 1}: ")


def test_the_fingerprint_is_of_the_file_as_it_lies(tmp_path: Path) -> None:
    place = tmp_path / "wren1300.31o.gz"
    place.write_bytes(gzip.compress(write(simple()), mtime=0))
    expected = hashlib.sha256(place.read_bytes()).hexdigest()
    assert formats.fingerprint(place) == {
        "name": "wren1300.31o.gz",
        "sha256": expected,
        "bytes": len(place.read_bytes()),
    }
    with pytest.raises(FormatError):
        formats.fingerprint(tmp_path / "missing")


def test_the_door_opens_in_worker_processes(tmp_path: Path) -> None:
    """What is read there, and what is refused there, comes back whole."""
    good, bad = tmp_path / "good.rnx", tmp_path / "bad.rnx"
    good.write_bytes(write(simple()))
    bad.write_text("nothing of the kind")
    with ProcessPoolExecutor(1, mp_context=get_context("spawn")) as workers:
        assert same(signals(workers.submit(formats.read, good).result()), signals(formats.read(good)))
        with pytest.raises(FormatError) as caught:
            workers.submit(formats.read, bad).result()
    assert caught.value.details["path"] == str(bad)


# ------------------------------------------------------------------------------------------------ pieces and thinning


def one(text: Text) -> Signals:
    from skylag.formats import rinex_obs

    return signals(rinex_obs.parse(write(text), "wren1300.31o"))


def test_hours_make_a_day() -> None:
    day = one(simple(epochs=40))
    pieces = [one(simple(epochs=40)) for _ in range(4)]
    quarters = [_slice(piece, slice(10 * k, 10 * k + 10)) for k, piece in enumerate(pieces)]
    order = [2, 0, 3, 1]
    assert same(formats.merge([quarters[k] for k in order]), day)


def _slice(table: Signals, rows: slice) -> Signals:
    return Signals(
        table.receiver,
        table.times[rows],
        table.satellites,
        {c: v[rows] for c, v in table.values.items()},
        {c: v[rows] for c, v in table.lock.items()},
        table.channels,
        table.resets[rows],
        table.interval_s,
    )


def test_overlaps_count_once_and_the_first_piece_is_believed() -> None:
    first, second = one(simple(epochs=4)), one(simple(epochs=6))
    second.values["C1C"][...] += 1.0
    second.lock["L1C"][2, 1] = 1
    joined = formats.merge([first, second])
    assert len(joined.times) == 6
    assert np.array_equal(joined.values["C1C"][:4], first.values["C1C"], equal_nan=True)
    assert np.array_equal(joined.values["C1C"][4:], second.values["C1C"][4:], equal_nan=True)
    assert joined.lock["L1C"][2, 1] == 1


def test_pieces_may_differ_in_satellites_and_signals() -> None:
    first = one(simple(satellites=["G05"], epochs=2))
    second = one(simple(satellites=["G12", "E11"], epochs=2, start="2031-05-10T00:01:00"))
    joined = formats.merge([first, second])
    assert list(joined.satellites) == ["E11", "G05", "G12"]
    assert np.isnan(joined.values["C5Q"][:2]).all()
    assert np.isfinite(joined.values["C5Q"][2:, 0]).all()
    assert np.isnan(joined.values["C1C"][2:, 1]).all()


def test_overlapping_pieces_with_wandering_clocks_are_one() -> None:
    """The same epochs, tagged a millisecond apart."""
    first = one(simple(epochs=3))
    second = one(simple(epochs=5, start="2031-05-10T00:00:00.001"))
    joined = formats.merge([first, second])
    assert len(joined.times) == 5
    assert joined.times[0] == first.times[0]


def test_only_one_receiver_makes_one_table() -> None:
    with pytest.raises(Refused, match="OTTR is not WREN"):
        formats.merge([one(simple()), one(simple(marker="OTTR"))])
    with pytest.raises(NotEnough):
        formats.merge([])
    assert len(formats.merge([one(simple()), one(simple(marker="WREN00XXX"))]).times) == 4


@pytest.mark.parametrize("version", [2.11, 3.04])
def test_thinning_keeps_locks_and_resets_of_what_it_drops(version: float) -> None:
    text = simple(version, satellites=["G05", "G12"], epochs=61, step_s=1.0)
    column = 1  # L1
    text.epochs[7].satellites["G05"][column] = (5.0, 1, None)  # lost between 0 and 30 s
    text.epochs[9].satellites["G12"][column] = (5.0, 2, None)  # a half cycle there says nothing of later epochs
    text.epochs[30].satellites["G12"][column] = (5.0, 2, None)
    text.epochs[45].flag = 1
    for thinned in (formats.thin(one(text), 30.0), _parse_thin(text, 30.0)):
        assert [str(t)[17:19] for t in thinned.times] == ["00", "30", "00"]
        assert thinned.lock["L1C"].tolist() == [[0, 0], [1, 2], [0, 0]]
        assert thinned.resets.tolist() == [False, False, True]
        assert thinned.interval_s == 30.0
        assert thinned.values["C1C"][1, 0] == one(text).values["C1C"][30, 0]


def _parse_thin(text: Text, spacing_s: float) -> Signals:
    from skylag.formats import rinex_obs

    return signals(rinex_obs.parse(write(text), "wren1300.31o", thin_to_s=spacing_s))


def test_thinning_while_reading_equals_thinning_afterwards(open_data: Path) -> None:
    path = open_data / "2021-001" / "obs" / "zimm0010.21o.gz"
    assert same(signals(formats.read(path, thin_to_s=300)), formats.thin(signals(formats.read(path)), 300))


def test_thinning_takes_the_nearest_epoch_and_knows_other_time_systems() -> None:
    wandering = simple(satellites=["G05"], epochs=5, start="2031-05-10T00:00:00.003")
    assert len(formats.thin(one(wandering), 60.0).times) == 3
    utc = simple(types={"R": ["C1C", "L1C"]}, satellites=["R05"], epochs=5, time_system="GLO")
    assert len(formats.thin(one(utc), 60.0).times) == 3
    assert len(formats.thin(one(simple()), 30.0).times) == 4
    assert len(formats.thin(one(simple()), 1.0).times) == 4
    with pytest.raises(Refused, match="positive"):
        formats.thin(one(simple()), 0.0)


def test_unwrap_leaves_plain_text_alone() -> None:
    data = write(simple())
    assert wrappers.unwrap(data, "x") == (data, [])
