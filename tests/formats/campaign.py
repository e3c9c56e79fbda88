"""A campaign of changed files: each ends in a table with problems or in a named error, soon and in little memory.

    python -m tests.formats.campaign --keep FOLDER [--count 200000]

runs in one process, a thousand inputs at a time; what is done stands in FOLDER/done.jsonl, so that a second start goes
on where the first ended.  An input that breaks a rule is kept beside it.  Inputs are made of small files of every kind
that is read, of the sample days and of cuts of real files, where there are any.
"""

import argparse
import gzip
import json
import os
import resource
import signal
import sys
import time
from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from tests.conftest import ROOT, open_data_folder
from tests.formats.changes import BYTE_CHANGES, TEXT_CHANGES, WRAPPERS, Change, compact, traps
from tests.formats.navigation_text import GLONASS_STATE_KM, INVENTED, header, orbit_values, record
from tests.formats.test_biases import HEAD as BIAS_HEAD
from tests.formats.test_biases import ROWS as BIAS_ROWS
from tests.formats.test_biases import TAIL as BIAS_TAIL
from tests.formats.test_indices import DAYS, card, daily_line
from tests.formats.test_ionex import SAMPLE as MAPS
from tests.formats.test_sp3 import BODY as ORBIT_BODY
from tests.formats.test_sp3 import HEAD as ORBIT_HEAD
from tests.properties.rinex_text import labelled, simple, type_lines, write

from skylag import formats
from skylag.errors import FormatError
from skylag.tables import Ephemerides, PreciseOrbits, Signals

LONGEST_S = 2.0
LARGEST_BYTES = 2**30
MOST_LISTED = 450  # problems: 200 of the parser, as many of wrappers at most, and the counted rest
SHARD = 1000

# How often each kind is drawn; wrapped ones are of all kinds.
SHARES = {"observations": 40, "wrapped": 17, "navigation": 17, "orbits": 9, "biases": 8, "ionex": 4, "indices": 4,
          "traps": 1}  # fmt: skip


# ------------------------------------------------------------------------------------------------ what is changed


def _observations() -> list[bytes]:
    """Small files of each version, with a power failure, an event and a change of types."""
    out = []
    for version in (2.11, 3.04, 4.00):
        text = simple(version, satellites=[f"G{n:02d}" for n in range(1, 15)], epochs=6)
        text.epochs[2].flag = 1
        text.extra = [
            labelled("  2 R01  1 R02 -4", "GLONASS SLOT / FRQ #"),
            labelled("    30.000", "INTERVAL"),
            labelled("     1     1", "WAVELENGTH FACT L1/2")
            if version < 3
            else labelled("G   10  1 C1C", "SYS / SCALE FACTOR"),
        ]
        lines = write(text).decode().split("\n")
        event = [labelled("A CHANGE", "COMMENT"), *type_lines(version, text.types)]
        mark = f"{'':28}4{len(event):3d}" if version < 3 else f">{'':30}4{len(event):3d}"
        starts = [k for k, line in enumerate(lines) if line.startswith((" 31  5 10", "> 2031"))]
        lines[starts[3] : starts[3]] = [mark, *event]
        out.append("\n".join(lines).encode())
    return out


def _navigation() -> list[bytes]:
    kepler = orbit_values(INVENTED)
    state = [*GLONASS_STATE_KM[:3], 0.0, *GLONASS_STATE_KM[3:6], 1.0, *GLONASS_STATE_KM[6:], 0.0]
    epoch = "2020-06-25 12:00:00"
    out = []
    for version, kind in ((2.11, "N"), (3.05, "N"), (4.00, "N")):
        text = header(version, kind, extra=(("GPSA   1.0E-08  1.0E-08 -6.0E-08 -6.0E-08", "IONOSPHERIC CORR"),))
        for name in ("G05", "G07") if version < 3 else ("G05", "E11", "C19", "J02"):
            text += record(name, epoch, kepler, version, heading="LNAV" if version >= 4 else "")
        if version >= 3:
            text += record("R03", epoch, list(state), version, heading="FDMA" if version >= 4 else "")
        if version >= 4:
            text += record("G09", epoch, orbit_values(INVENTED, 36), version, heading="CNV2")
            text += "> ION G05 LNAV\n" + " " * 4 + "2020 06 25 12 00 00" + f"{1e-8:19.12E}" * 3 + "\n"
        out.append(text.encode())
    return out


def _first_lines(data: bytes, count: int) -> bytes:
    return b"\n".join(data.split(b"\n", count)[:count]) + b"\n"


def _opened(path: Path) -> bytes:
    data = path.read_bytes()
    return gzip.decompress(data) if data[:2] == b"\x1f\x8b" else data


def _behind_header(data: bytes, lines: int) -> bytes:
    end = data.count(b"\n", 0, max(data.find(b"END OF HEADER"), 0)) + 1
    return _first_lines(data, end + lines)


@lru_cache(maxsize=1)
def seeds() -> dict[str, list[bytes]]:
    """Whole small files by kind."""
    kinds = {
        "observations": _observations(),
        "navigation": _navigation(),
        "orbits": [(ORBIT_HEAD + ORBIT_BODY).encode()],
        "biases": [(BIAS_HEAD + BIAS_ROWS + BIAS_TAIL).encode()],
        "ionex": [MAPS.encode()],
        "indices": [
            "\n".join(daily_line(row) for row in DAYS).encode(),
            "\n".join(card(row) for row in DAYS).encode(),
        ],
    }
    sample = ROOT / "sample_data" / "2031-03-12"
    for path in sorted(sample.glob("*MN.rnx.gz"))[:1]:
        kinds["navigation"].append(_behind_header(_opened(path), 60))
    for path in sorted(sample.glob("*MO.crx.gz"))[:1]:
        import hatanaka

        kinds["observations"].append(_behind_header(hatanaka.decompress(path), 90))
    kinds["observations"] += [_behind_header(data, 100) for data in _real("obs", 6)]
    kinds["navigation"] += [_behind_header(data, 70) for data in _real("nav", 8)]
    kinds["orbits"] += [_first_lines(data, 90) for data in _real("sp3", 4)]
    kinds["biases"] += [_first_lines(data, 120) for data in _real("bias", 5)]
    kinds["ionex"] += [_first_lines(data, 150) for data in _real("ionex", 1)]
    return kinds


def _real(folder: str, most: int) -> list[bytes]:
    """Texts of real files, one of each name's shape."""
    import hatanaka

    shapes: dict[str, Path] = {}
    for path in sorted(open_data_folder().glob(f"*/{folder}/*")):
        shapes.setdefault(f"{path.parts[-3]} {path.suffixes[0]} {path.name[-10:]}", path)
    return [hatanaka.decompress(path) if folder == "obs" else _opened(path) for path in list(shapes.values())[:most]]


@lru_cache(maxsize=1)
def _compacted() -> list[bytes]:
    return [compact(data) for data in seeds()["observations"][:3]]


def _wrapped(rng: np.random.Generator) -> tuple[bytes, list[str]]:
    """A text, compact or not, that came to harm before it was wrapped, or afterwards, or both."""
    kinds = seeds()
    files = _compacted() if rng.random() < 0.5 else kinds[list(kinds)[rng.integers(len(kinds))]]
    data, names = files[rng.integers(len(files))], []
    if rng.random() < 0.7:
        data, names = _changed(data, TEXT_CHANGES, rng)
    if rng.random() < 0.8:
        data = WRAPPERS[rng.integers(len(WRAPPERS))](data)
        if rng.random() < 0.4:
            data, more = _changed(data, BYTE_CHANGES, rng)
            names += more
    return data, ["wrapped", *names]


def _changed(data: bytes, changes: tuple[Change, ...], rng: np.random.Generator) -> tuple[bytes, list[str]]:
    names = []
    for _ in range(int(rng.choice([1, 1, 1, 2, 4]))):
        change = changes[rng.integers(len(changes))]
        names.append(change.__name__)
        if data:
            data = change(data, rng)
    return data, names


@lru_cache(maxsize=1)
def _traps() -> list[bytes]:
    return traps(seeds()["observations"][0]) + traps(seeds()["observations"][1])


def case(kind: str, rng: np.random.Generator) -> tuple[bytes, list[str]]:
    """One changed input, and the names of its changes."""
    if kind == "wrapped":
        return _wrapped(rng)
    files = _traps() if kind == "traps" else seeds()[kind]
    data = files[rng.integers(len(files))]
    if kind == "traps" and rng.random() < 0.5:
        return data, ["trap"]
    return _changed(data, BYTE_CHANGES if kind == "traps" else TEXT_CHANGES, rng)


# ------------------------------------------------------------------------------------------------ the rules


class Broken(Exception):
    """A rule was broken by an input."""


@contextmanager
def _no_longer_than(seconds: float) -> Iterator[None]:
    """Processor time after which what runs is given up."""

    def stop(*_: object) -> None:
        raise Broken(f"still at it after {seconds:g} s")

    before = signal.signal(signal.SIGVTALRM, stop)
    signal.setitimer(signal.ITIMER_VIRTUAL, seconds)
    try:
        yield
    finally:
        signal.setitimer(signal.ITIMER_VIRTUAL, 0)
        signal.signal(signal.SIGVTALRM, before)


def spent_s() -> float:
    """Processor time of this process and of the decoders it started."""
    times = os.times()
    return times.user + times.system + times.children_user + times.children_system


def peak_bytes() -> int:
    """Largest memory that this process, or a decoder it started, ever took."""
    unit = 1 if sys.platform == "darwin" else 1024
    who = (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN)
    return max(resource.getrusage(one).ru_maxrss for one in who) * unit


def end_of(data: bytes, name: str, thin_to_s: float | None) -> str:
    """How reading an input ends: clean, problems or error; raises Broken where a rule is not kept."""
    begin = spent_s()
    try:
        with _no_longer_than(5 * LONGEST_S):
            reading = formats.read_bytes(data, name, thin_to_s=thin_to_s)
    except FormatError as error:
        end = "error"
        if not str(error.details.get("path", "")).startswith(name) or not isinstance(error.details.get("line"), int):
            raise Broken(f"the error names no place: {error}") from error
    except Broken:
        raise
    except BaseException as error:
        raise Broken(f"raised {error!r}") from error
    else:
        end = "problems" if reading.problems else "clean"
        table = reading.table
        if isinstance(table, Signals) and (
            not len(table.times) or any(np.isinf(values).any() for values in table.values.values())
        ):
            raise Broken("a table without epochs, or with infinite values")
        if isinstance(table, Ephemerides) and not np.isfinite(table.kepler[table.satellites.astype("U1") != "R"]).all():
            raise Broken("an orbit that is no number")
        if isinstance(table, PreciseOrbits) and np.isinf(table.position_m).any():
            raise Broken("a position that is infinite")
        if len(reading.problems) > MOST_LISTED:
            raise Broken(f"{len(reading.problems)} problems")
        if not all(p.path.startswith(name) and p.what and p.done and p.line >= 0 for p in reading.problems):
            raise Broken(f"a problem names no place: {reading.problems[0]}")
    spent = spent_s() - begin
    if spent > LONGEST_S:
        raise Broken(f"took {spent:.1f} s")
    return end


def run(count: int, seed: int, keep: Path, kinds: tuple[str, ...] = tuple(SHARES)) -> dict[str, Any]:
    """So many changed inputs: how they ended by kind, the longest time, the peak of memory, what broke a rule."""
    rng = np.random.default_rng(seed)
    shares = np.array([SHARES[kind] for kind in kinds], dtype=float)
    ends: Counter[str] = Counter()
    broken: list[str] = []
    longest = 0.0
    _compacted()  # made before the clock runs, as the seeds are
    if SHARES.get("traps") and "traps" in kinds:
        _traps()
    for k in range(count):
        kind = str(rng.choice(kinds, p=shares / shares.sum()))
        data, names = case(kind, rng)
        begin, before = spent_s(), peak_bytes()
        try:
            end = end_of(data, "changed", 60.0 if k % 7 == 0 else None)
            grown = peak_bytes() - before
            if grown > LARGEST_BYTES:
                raise Broken(f"{grown / 2**20:.0f} MiB more memory")
        except Broken as rule:
            place = keep / f"seed{seed}_case{k}_{kind}"
            place.write_bytes(data)
            broken.append(f"case {k} of seed {seed} ({kind}: {', '.join(names)}): {rule}; its input is {place}")
            end = "broken"
        ends[f"{kind} {end}"] += 1
        longest = max(longest, spent_s() - begin)
    return {"seed": seed, "count": count, "ends": dict(ends), "longest_s": round(longest, 2),
            "peak_mib": round(peak_bytes() / 2**20), "broken": broken}  # fmt: skip


# ------------------------------------------------------------------------------------------------ the command


def main(words: list[str] | None = None) -> int:
    """Run what is not yet done, and tell how all ended."""
    parser = argparse.ArgumentParser(description="Read changed files until so many were read.")
    parser.add_argument("--count", type=int, default=200_000)
    parser.add_argument("--keep", type=Path, required=True, help="folder for what is done and for inputs that break")
    parser.add_argument("--first-seed", type=int, default=0)
    chosen = parser.parse_args(words)
    chosen.keep.mkdir(parents=True, exist_ok=True)
    done = chosen.keep / "done.jsonl"
    lines: list[dict[str, Any]] = [json.loads(line) for line in done.read_text().splitlines()] if done.is_file() else []
    had = {line["seed"] for line in lines}
    for seed in range(chosen.first_seed, chosen.first_seed + -(-chosen.count // SHARD)):
        if seed in had:
            continue
        begin, wall = spent_s(), time.monotonic()
        line = run(SHARD, seed, chosen.keep)
        line |= {"processor_s": round(spent_s() - begin, 1), "wall_s": round(time.monotonic() - wall, 1)}
        lines.append(line)
        with done.open("a") as out:
            out.write(json.dumps(line) + "\n")
        for rule in line["broken"]:
            print(rule, flush=True)
    print(told(lines))
    return 1 if any(line["broken"] for line in lines) else 0


def told(lines: list[dict[str, Any]]) -> str:
    """The whole campaign in a few lines."""
    ends: Counter[str] = Counter()
    for line in lines:
        ends.update(line["ends"])
    rows = [f"{'kind':14} {'clean':>8} {'problems':>8} {'error':>8} {'broken':>8}"]
    for kind in SHARES:
        rows.append(f"{kind:14} " + " ".join(f"{ends[f'{kind} {end}']:8d}"
                                             for end in ("clean", "problems", "error", "broken")))  # fmt: skip
    rows.append(
        f"{sum(line['count'] for line in lines)} inputs, {sum(line['processor_s'] for line in lines):.0f} s of "
        f"processor time, longest {max(line['longest_s'] for line in lines):.2f} s, "
        f"peak {max(line['peak_mib'] for line in lines)} MiB"
    )
    return "\n".join(rows)


if __name__ == "__main__":
    sys.exit(main())
