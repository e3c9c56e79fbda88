"""Real observation files: their counts against a scan by another program, their values against georinex."""

import gzip
import re
import warnings
from collections.abc import Callable
from functools import lru_cache
from pathlib import Path

import hatanaka
import numpy as np
import pytest
from tests.conftest import open_data_folder

from skylag import formats
from skylag.formats import rinex_obs
from skylag.tables import Signals

pytestmark = pytest.mark.open_data

SCAN = "manifest of the open data: an epoch-by-epoch scan with another program"


def _rows() -> list[tuple[str, str, float, int, dict[str, int], tuple[int, int]]]:
    """File, RINEX version and counts of every observation file the manifest describes."""
    path = open_data_folder() / "MANIFEST.md"
    if not path.is_file():
        return []
    rows = []
    day = ""
    for line in path.read_text(encoding="utf-8").splitlines():
        if found := re.match(r"## (\d{4}-\d{3})", line):
            day = found[1]
        cells = [c.strip() for c in line.strip("|").split("|")]
        if len(cells) == 10 and re.fullmatch(r"\d\.\d\d", cells[3]):
            seen = {word[0]: int(word[1:]) for word in cells[8].split()}
            dual, every = (int(part) for part in cells[9].split("/"))
            rows.append((f"{day}/obs/{cells[0]}", cells[3], float(cells[4]), int(cells[6]), seen, (dual, every)))
    return rows


ROWS = _rows()


@lru_cache(maxsize=2)
def whole(path: Path) -> formats.Reading:
    return formats.read(path)


def table_of(path: Path) -> Signals:
    table = whole(path).table
    assert isinstance(table, Signals)
    return table


def test_the_manifest_is_understood(open_data: Path) -> None:
    assert len(ROWS) == len(list(open_data.glob("*/obs/*")))


def _on_band(table: Signals, kind: str, band: str, system: str) -> np.ndarray:
    """Where (epoch, satellite of the system) any observation of a kind on a band is there."""
    mine = np.char.startswith(table.satellites, system)
    there = np.zeros((len(table.times), int(mine.sum())), dtype=bool)
    for code, values in table.values.items():
        if code[:2] == kind + band:
            there |= np.isfinite(values[:, mine])
    return there


def _written_as_zero(path: Path) -> int:
    """GPS records of NYA1 with code and phase on L1 and L2 filled, of which some read .000: missing by the format.

    The scan counted what is not blank.  Columns: C1C L1C D1C S1C C2W L2W D2W S2W C2X L2X, each 16 wide from column 4.
    """
    count = 0
    for line in hatanaka.decompress(path).decode("ascii").splitlines():
        if line.startswith("G") and line[1:3].isdigit():
            fields = [line[3 + 16 * k : 17 + 16 * k].strip() for k in (0, 1, 4, 5, 8, 9)]
            numbers = [float(f) if f else 0.0 for f in fields]
            filled = all(fields[:2]) and (all(fields[2:4]) or all(fields[4:6]))
            there = all(numbers[:2]) and any(numbers[2::2]) and any(numbers[3::2])
            count += filled and not there
    return count


@pytest.mark.parametrize("row", ROWS, ids=[row[0] for row in ROWS])
def test_counts(row: tuple, open_data: Path, evidence: Callable[..., None]) -> None:
    """Epochs, spacing, satellites, and GPS satellite-epochs with code and phase on L1 and L2, of every file."""
    name, version, spacing, epochs, seen, (dual, every) = row
    reading = whole(open_data / name)
    table = table_of(open_data / name)
    short = Path(name).name.split(".")[0][:19]
    assert f"{reading.header['version']:.2f}" == version
    assert not reading.problems, [str(p) for p in reading.problems[:5]]
    evidence(f"{short}: epochs", source=SCAN, expected=epochs, got=len(table.times), tolerance=0)
    evidence(f"{short}: spacing", source=SCAN, expected=spacing, got=table.interval_s, tolerance=0, unit="s")
    bands = {kind + band: _on_band(table, kind, band, "G") for kind in "CL" for band in "125"}
    both = bands["C1"] & bands["L1"] & bands["C2"] & bands["L2"]
    got = int(both.sum())
    if "NYA1" in name:
        zeros = _written_as_zero(open_data / name)
        assert zeros > 0
        got += zeros
    evidence(f"{short}: GPS satellite-epochs on L1 and L2", source=SCAN, expected=dual, got=got, tolerance=0)
    assert got <= int(np.any(list(bands.values()), axis=0).sum()) + 100 <= every + 100
    for system, second in (("G", "25"), ("E", "5678"), ("J", "25")):
        if system in seen:
            first = _on_band(table, "L", "1", system).any(axis=0)
            other = np.any([_on_band(table, "L", band, system).any(axis=0) for band in second], axis=0)
            evidence(f"{short}: satellites of {system} on two frequencies", source=SCAN, expected=seen[system],
                     got=int((first & other).sum()), tolerance=0)  # fmt: skip


# ------------------------------------------------------------------------------------------------ georinex


def _epoch_marks(text: bytes, body: int) -> list[int]:
    """Where the epochs of a text begin."""
    if text[5:6] in b"34":
        return [m.start() + 1 for m in re.finditer(rb"\n>", text[body - 1 :])]
    pattern = rb"\n [ \d]\d [ \d]\d [ \d]\d [ \d]\d [ \d]\d[ \d]{3}\.\d{7}  0"
    return [m.start() + 1 for m in re.finditer(pattern, text[body - 1 :])]


def _cut(text: bytes, epochs: int, skip: int) -> bytes:
    """The header and some epochs from the middle of a file."""
    body = text.index(b"\n", text.index(b"END OF HEADER")) + 1
    marks = _epoch_marks(text, body)
    return text[:body] + text[body - 1 + marks[skip] : body - 1 + marks[skip + epochs]]


def _spread(text: bytes, day: Signals, blocks: int, epochs: int) -> tuple[bytes, int]:
    """The header and some epochs at the beginning, the end and evenly between, and one of each satellite not in these.

    day  the table of the whole text, of as many epochs; also given back: how many epochs were taken
    """
    body = text.index(b"\n", text.index(b"END OF HEADER")) + 1
    marks = [*_epoch_marks(text, body), len(text) - body + 1]
    assert len(marks) == len(day.times) + 1
    last = len(marks) - 1 - epochs
    chosen = {round(k * last / (blocks - 1)) + j for k in range(blocks) for j in range(epochs)}
    there = np.any([np.isfinite(values) for values in day.values.values()], axis=0)
    for column in range(len(day.satellites)):
        seen = np.flatnonzero(there[:, column])
        if len(seen) and not there[sorted(chosen), column].any():
            chosen.add(int(seen[len(seen) // 2]))
    return text[:body] + b"".join(text[body - 1 + marks[k] : body - 1 + marks[k + 1]] for k in sorted(chosen)), len(
        chosen
    )


CASES = [
    pytest.param("2020-177/obs/ESBC00DNK_R_20201770000_01D_30S_MO.crx.gz", "GECJR", 1486, marks=pytest.mark.slow),
    ("2018-200/obs/CEBR00ESP_R_20182000000_01D_30S_MO.crx.gz", "GECR", 1900),
    ("2024-090/obs/KIRU00SWE_R_20240900000_01D_30S_MO.rnx.gz", "GECR", 100),
    pytest.param("2024-127/obs/NYA100NOR_S_20241270000_01D_30S_MO.crx.gz", "GECR", 1500, marks=pytest.mark.slow),
    pytest.param("2024-209/obs/AJAC00FRA_R_20242090000_01D_30S_MO.crx.gz", "GECR", 2500, marks=pytest.mark.slow),
    ("2021-001/obs/rovn0010.21d.gz", "GR", 1200),
    pytest.param("2021-001/obs/delf0010.21d.gz", "GR", 300, marks=pytest.mark.slow),
    pytest.param("2021-001/obs/wsra0010.21d.gz", "GR", 2000, marks=pytest.mark.slow),
    ("2021-001/obs/zimm0010.21o.gz", "G", 1000),
    pytest.param("2015-235/obs/ZIMM2350.15O.gz", "G", 1800, marks=pytest.mark.slow),
    ("2004-001/obs/chpi0010.04o.gz", "G", 600),
]


def name_of(case: tuple) -> str:
    values = getattr(case, "values", case)
    return str(values[0])[9:]


@pytest.mark.parametrize(("name", "systems", "skip"), CASES, ids=[name_of(case) for case in CASES])
def test_values_equal_georinex(
    name: str, systems: str, skip: int, open_data: Path, tmp_path: Path, evidence: Callable[..., None]
) -> None:
    """Twelve epochs from the middle of the day, every satellite and every signal, and the lock digits of phases."""
    import georinex

    text = _cut(hatanaka.decompress(open_data / name), 12, skip)
    compared, differing = compare(text, name, systems, 12, tmp_path)
    short = Path(name).name.split(".")[0][:12]
    assert compared > 500
    evidence(
        f"{short} {name[:8]}: values that differ, of {compared} on 12 epochs, {systems}",
        source=f"georinex {georinex.__version__} on the same cut", expected=0, got=differing, tolerance=0,
    )  # fmt: skip


# All files but two have GLONASS; georinex reads whatever the letters of the file are.
EVERY = [(row[0], "G" if row[0].rsplit("/", 1)[1].lower().startswith(("zimm", "chpi")) else
          "GR" if float(row[1]) < 3 else "GECRJ") for row in ROWS]  # fmt: skip


@pytest.mark.slow
@pytest.mark.parametrize(("name", "systems"), EVERY, ids=[case[0][9:] for case in EVERY])
def test_values_of_every_satellite_of_every_file_equal_georinex(
    name: str, systems: str, open_data: Path, tmp_path: Path, evidence: Callable[..., None]
) -> None:
    """Twenty-five pairs of epochs from the first to the last of each file and of every satellite, all signals."""
    import georinex

    day = table_of(open_data / name)
    text, epochs = _spread(hatanaka.decompress(open_data / name), day, 25, 2)
    there = rinex_obs.parse(text, name).table
    assert isinstance(there, Signals)
    seen = np.any([np.isfinite(values).any(axis=0) for values in day.values.values()], axis=0)
    assert np.isin(day.satellites[seen], there.satellites).all()
    compared, differing = compare(text, name, systems, epochs, tmp_path)
    count = sum(str(s)[0] in systems for s in day.satellites[seen])
    short = Path(name).name.split(".")[0][:19]
    evidence(
        f"{short} {name[:8]}: values that differ, of {compared} on {epochs} epochs over the file, {systems}, "
        f"all {count} satellites",
        source=f"georinex {georinex.__version__} on the same epochs", expected=0, got=differing, tolerance=0,
    )  # fmt: skip


def compare(text: bytes, name: str, systems: str, epochs: int, tmp_path: Path) -> tuple[int, int]:
    """How many values (and lock digits) were compared with georinex's on the same text, and how many differ."""
    import georinex

    place = tmp_path / "cut.rnx"
    place.write_bytes(text)
    reading = rinex_obs.parse(text, name)
    table = reading.table
    assert isinstance(table, Signals)
    assert len(table.times) == epochs
    compared = differing = missed = 0
    header = rinex_obs.Header()
    lines = [(k, line) for k, line in enumerate(text.decode("latin-1").splitlines()[:400])]
    end = next(k for k, line in lines if "END OF HEADER" in line)
    rinex_obs.rinex_header.absorb(header, lines[:end], name)
    for system in sorted({str(s)[0] for s in table.satellites} & set(systems)):
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            theirs = georinex.load(place, use=system, useindicators=True)
        declared = header.types.get(system, header.types.get("", []))
        names = dict(zip(declared, header.names(system), strict=True))
        times = theirs.time.values.astype("datetime64[ns]")
        rows = np.searchsorted(table.times, times)  # theirs lists the epochs in which the constellation appears
        assert np.array_equal(times, table.times[rows])
        others = np.setdiff1d(np.arange(epochs), rows)
        of_system = np.char.startswith(table.satellites, system)
        assert not any(np.isfinite(values[np.ix_(others, of_system)]).any() for values in table.values.values())
        satellites = [str(sv) for sv in theirs.sv.values]
        alone = of_system & ~np.isin(table.satellites, satellites)
        assert not any(np.isfinite(values[:, alone]).any() for values in table.values.values())
        columns = [list(table.satellites).index(sv) for sv in satellites]
        for kind, code in names.items():
            if not code or code[0] not in "CLS" or kind not in theirs:
                continue
            if code not in table.values:
                missed += int(np.isfinite(np.where(theirs[kind].values == 0, np.nan, theirs[kind].values)).sum())
                continue
            there = np.where(theirs[kind].values == 0.0, np.nan, theirs[kind].values)
            here = table.values[code][np.ix_(rows, columns)]
            compared += int(np.isfinite(there).sum())
            differing += int((~((here == there) | (np.isnan(here) & np.isnan(there)))).sum())
            if code[0] == "L" and f"{kind}lli" in theirs:
                lock = np.nan_to_num(theirs[f"{kind}lli"].values)
                differing += int((lock != table.lock[code][np.ix_(rows, columns)])[np.isfinite(there)].sum())
    assert missed == 0
    return compared, differing


@pytest.mark.parametrize(
    "name",
    ["2021-001/obs/zimm0010.21o.gz", "2024-090/obs/KIRU00SWE_R_20240900000_01D_30S_MO.rnx.gz",
     "2004-001/obs/chpi0010.04o.gz"],
)  # fmt: skip
def test_header_facts_equal_georinex(name: str, open_data: Path, tmp_path: Path, evidence: Callable[..., None]) -> None:
    """Version, marker, position, receiver, interval, first epoch, types of observation, GLONASS channels."""
    import georinex

    text = gzip.decompress((open_data / name).read_bytes())
    text = text[: text.index(b"END OF HEADER") + 40_000]
    place = tmp_path / "head.rnx"
    place.write_bytes(text)
    theirs = georinex.rinexheader(place)
    reading = rinex_obs.parse(text, name)
    table = reading.table
    assert isinstance(table, Signals)
    header = rinex_obs.Header()
    lines = list(enumerate(text.decode("latin-1").splitlines()))
    end = next(k for k, line in lines if "END OF HEADER" in line)
    rinex_obs.rinex_header.absorb(header, lines[:end], name)
    types = theirs["fields"]
    words = theirs.get("GLONASS SLOT / FRQ #", "")
    channels = {slot: int(k) for slot, k in re.findall(r"(R\d\d) +(-?\d+)", words)}
    same = {
        "version": reading.header["version"] == theirs["version"],
        "marker": table.receiver.name == theirs["MARKER NAME"].strip(),
        "position": list(table.receiver.position_m) == theirs["position"],
        "receiver": table.receiver.type == theirs.get("rxmodel", table.receiver.type),
        "interval": reading.header["stated_interval_s"] == theirs["interval"],
        "first epoch": table.times[0] == np.datetime64(theirs["t0"], "ns"),
        "types": header.types == (types if isinstance(types, dict) else {"": types}),
        "channels": dict(table.channels) == channels,
    }
    evidence(f"header facts that differ, of {len(same)} of {Path(name).name}",
             source=f"georinex {georinex.__version__} on the same file", expected=0,
             got=len(same) - sum(same.values()), tolerance=0)  # fmt: skip
