"""The units of work: one receiver-day, one network day.  Reads with `formats`, computes with `chain`.

Units are top-level functions with picklable arguments, so that any standard Executor can run them.  A bad input file is
named and left out; the rest goes on.  Never writes to the archive: whoever asked keeps the products.
"""

import errno
import os
import platform
import re
import time
from collections import Counter
from collections.abc import Callable, Iterable, Mapping, Sequence
from concurrent.futures import Executor, as_completed
from dataclasses import asdict, dataclass, field, replace
from datetime import date
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from threadpoolctl import threadpool_limits

from skylag import chain, formats
from skylag.chain import DRAW, Choices, ReceiverDay
from skylag.errors import FormatError, NotEnough, SkylagError
from skylag.formats.glance import glance
from skylag.ionosphere import bias_algebra
from skylag.ionosphere import left_out as left_out_receivers
from skylag.ionosphere.datum import DRAWN_WITHIN_DAYS
from skylag.ionosphere.field import Hour, Made, make
from skylag.ionosphere.pairs import wanted_codes
from skylag.tables import (
    Biases,
    Ephemerides,
    Origin,
    PreciseOrbits,
    Problem,
    Products,
    Reading,
    Region,
    Signals,
    concatenate,
)
from skylag.timescales import day_of

if TYPE_CHECKING:
    from skylag.archive import Archive  # workers need no database

# Biases of an earlier day, by the name of the region and the day; None where there are none (`earlier_biases`).
Earlier = Callable[[str, np.datetime64], Biases | None]
Read = Callable[..., Reading]  # as `formats.read`
# Told the stage, the share of it done (0 to 1), and a word on what is being done.
Progress = Callable[[str, float, str], None]

_STATION_NAME = re.compile(r"^([A-Z0-9]{4}\d{2}[A-Z]{3})_|^([A-Za-z0-9]{4})\d{3}[0-9a-xA-X]\d{0,2}\.", re.ASCII)
_NOT_DATA = (".toml", ".md")  # a region file and a note may lie beside the data
_NO_INPUT = {  # what is read, but not for making a day; and what it is good for
    "ionex": "holds a published map (IONEX), which a network day does not use; `skylag compare` lays it beside the day",
}
_LIBRARIES = ("numpy", "scipy", "hatanaka", "pandas", "xarray", "sqlalchemy")


@dataclass(frozen=True)
class LeftOut:
    """An input that was not used, and why."""

    path: str
    line: int
    reason: str

    def __str__(self) -> str:
        return f"{self.path}:{self.line}: {self.reason}" if self.line else f"{self.path}: {self.reason}"


@dataclass(frozen=True)
class Inputs:
    """The files of a job, sorted by what they hold."""

    observations: Mapping[str, tuple[str, ...]]  # station key of the name -> paths
    orbits: tuple[str, ...]
    biases: tuple[str, ...]
    left_out: tuple[LeftOut, ...]
    files: tuple[Mapping[str, Any], ...]
    days: Mapping[str, np.datetime64 | None]  # observation file -> day of its first epoch, as far as its header tells
    invented: bool  # an observation file says that its data are invented


@dataclass(frozen=True)
class DayResult:
    """The products of a day, and what was left out or noticed on the way."""

    products: Products
    left_out: tuple[LeftOut, ...]
    problems: tuple[Problem, ...]


@dataclass
class _Clock:
    """Wall-clock seconds per stage."""

    seconds: dict[str, float] = field(default_factory=dict)
    stage: str = ""
    since: float = 0.0

    def enter(self, stage: str) -> None:
        now = time.perf_counter()
        if self.stage:
            self.seconds[self.stage] = self.seconds.get(self.stage, 0.0) + now - self.since
        self.stage, self.since = stage, now


def sort_inputs(paths: Iterable[Path]) -> Inputs:
    """Look into every file (folders are searched) and sort by kind; what is of no use is left out with a reason.

    Raises FormatError where a path does not exist, or may not be looked into.
    """
    observations: dict[str, list[str]] = {}
    orbits: list[str] = []
    biases: list[str] = []
    files: list[Mapping[str, Any]] = []
    seen: dict[str, str] = {}
    days: dict[str, np.datetime64 | None] = {}
    any_invented = False
    found, left_out = _all_files(paths)
    for path in found:
        try:
            kind, mark, first_day, invented = glance(path)[:4]
        except SkylagError as trouble:
            left_out.append(_left_out(path, trouble))
            continue
        if mark["sha256"] in seen:
            left_out.append(LeftOut(str(path), 0, f"is the same file as {seen[mark['sha256']]}"))
            continue
        seen[mark["sha256"]] = str(path)
        files.append({**mark, "name": path.name, "kind": kind})
        if kind == "observations":
            observations.setdefault(_station_key(path), []).append(str(path))
            days[str(path)] = first_day
            any_invented |= invented
        elif kind in ("navigation", "orbits"):
            orbits.append(str(path))
        elif kind == "biases":
            biases.append(str(path))
        elif kind in ("unknown", "empty"):
            # The reader knows the line and the reason better than the glance.
            try:
                formats.read(path)
                left_out.append(LeftOut(str(path), 0, "is of no use here"))
            except SkylagError as trouble:
                left_out.append(_left_out(path, trouble))
        else:
            why = _NO_INPUT.get(kind, f"holds {kind}, which a network day does not use")
            left_out.append(LeftOut(str(path), 0, why))
    return Inputs(
        {key: tuple(sorted(names)) for key, names in sorted(observations.items())}, tuple(orbits), tuple(biases),
        tuple(left_out), tuple(files), days, any_invented,
    )  # fmt: skip


def _all_files(paths: Iterable[Path]) -> tuple[list[Path], list[LeftOut]]:
    """Files that are named or lie in folders that are, and what may not be looked into below these.

    Raises FormatError for a path that does not exist or may not be looked into.
    """
    found: list[Path] = []
    barred: list[LeftOut] = []
    for path in paths:
        try:
            if path.is_dir():
                files, below = _within(path)
                found += files
                barred += below
            elif path.exists():
                found.append(path)
            else:
                raise FormatError(f"{path}: there is no such file or folder", path=str(path), line=0)
        except OSError as trouble:
            raise FormatError(f"{path}: {_BARRED} ({trouble.strerror})", path=str(path), line=0) from trouble
    return list(dict.fromkeys(found)), barred


_BARRED = "may not be read; change its rights, or take the files from elsewhere"


def _within(folder: Path) -> tuple[list[Path], list[LeftOut]]:
    """Files of a folder and those below it, in order, and the folders below it that may not be looked into.

    A folder may hold the region, notes and truth beside the data: hidden files and these are passed over.  Raises
    OSError where the folder itself may not be looked into.
    """
    found: list[Path] = []
    barred: list[LeftOut] = []

    def bar(trouble: OSError) -> None:
        if Path(trouble.filename) == folder:
            raise trouble
        barred.append(LeftOut(str(trouble.filename), 0, f"{_BARRED} ({trouble.strerror})"))

    for place, _, names in os.walk(folder, onerror=bar):
        if not os.access(place, os.X_OK):  # its names may be read, its files not
            bar(PermissionError(errno.EACCES, os.strerror(errno.EACCES), place))
            continue
        inside = [Path(place) / name for name in names]
        found += [p for p in inside if p.is_file() and not p.name.startswith(".") and p.suffix not in _NOT_DATA]
    return sorted(found), sorted(barred, key=str)


def _station_key(path: Path) -> str:
    """What of the name tells the receiver, in both naming conventions; the whole name where neither is followed."""
    match = _STATION_NAME.match(path.name)
    return (match.group(1) or match.group(2)).upper() if match else path.name


def _left_out(path: Path, trouble: SkylagError) -> LeftOut:
    """Path, line and reason of a file that cannot be used; the message without the path it may begin with."""
    text = trouble.message
    for start in (f"{path}:", f"{path.name}:"):
        if text.startswith(start):
            text = text[len(start) :].lstrip("0123456789: ")
    return LeftOut(str(path), int(trouble.details.get("line", 0) or 0), text)


def _read_each(paths: Sequence[str]) -> tuple[list[Any], list[Problem], list[LeftOut]]:
    """The tables of the files, the problems met, and the files that could not be read."""
    tables: list[Any] = []
    problems: list[Problem] = []
    left_out: list[LeftOut] = []
    for path in paths:
        try:
            reading = formats.read(Path(path))
        except SkylagError as trouble:
            left_out.append(_left_out(Path(path), trouble))
            continue
        problems += reading.problems
        tables.append(reading.table)
    return tables, problems, left_out


def read_orbits(paths: Sequence[str]) -> tuple[list[Ephemerides | PreciseOrbits], list[Problem], list[LeftOut]]:
    """Orbit sources, tabulated ones first; problems met; files left out."""
    tables, problems, left_out = _read_each(paths)
    tabulated = [table for table in tables if isinstance(table, PreciseOrbits)]
    return [*tabulated, *(table for table in tables if isinstance(table, Ephemerides))], problems, left_out


def read_biases(
    paths: Sequence[str], day: np.datetime64, within_days: float = 0.0
) -> tuple[Biases | None, list[Problem], list[LeftOut], list[LeftOut]]:
    """All published biases as one table, None where there are none; problems met; files left out; files of other days.

    day          of files of several days only those of this day are used, or of up to `within_days` away
    Files of other days are among those left out where none is of the day: then their biases are missed.
    """
    known: list[Biases] = []
    problems: list[Problem] = []
    left_out: list[LeftOut] = []
    others: list[LeftOut] = []
    for path in paths:
        tables, more_problems, more_left_out = _read_each([path])
        problems += more_problems
        left_out += more_left_out
        for table in tables:
            if isinstance(table, Biases):
                if bias_algebra.of_day(table, day, within_days):
                    known.append(table)
                else:
                    others.append(LeftOut(path, 0, _of_other_days(table, day, within_days)))
    if not known:
        return None, problems, [*left_out, *others], others
    return replace(bias_algebra.join(known), datum="as published"), problems, left_out, others


def _of_other_days(biases: Biases, day: np.datetime64, within_days: float) -> str:
    """Why biases cannot be used on a day, and what would take them."""
    if not len(biases):
        return "tells no bias"
    first, last = str(biases.start.min())[:10], str((biases.end - np.timedelta64(1, "s")).max())[:10]
    span = first if first == last else f"{first} to {last}"
    if within_days:
        return f"its biases are of {span}, more than {within_days:g} days from {day}: too far to draw upon"
    near = bias_algebra.of_day(biases, day, DRAWN_WITHIN_DAYS)
    hint = "; --published-biases draw draws upon them" if near else ""
    return f"its biases are of {span}, not of {day}: satellites are not held at them{hint}"


def earlier_biases(archive: "Archive", within_days: int) -> Earlier:
    """What tells the biases of the newest day kept before a day, if it is at most so many days back.

    Days that are still being added to are passed over.  The source of the table says which day it is.
    """

    def ask(region: str, day: np.datetime64) -> Biases | None:
        first, last = day - np.timedelta64(within_days, "D"), day - np.timedelta64(1, "D")
        whole = [head for head in archive.days(region, first, last) if not head.provisional]
        if not whole:
            return None
        found = archive.biases(region, whole[0].day, whole[0].version)
        return replace(found, source=f"network day {whole[0].day}") if len(found) else None

    return ask


@dataclass(frozen=True)
class ReceiverResult:
    """What one receiver-day unit gives back: small enough to travel between processes."""

    key: str
    day: ReceiverDay | None
    problems: tuple[Problem, ...]
    left_out: tuple[LeftOut, ...]


def receiver_unit(
    key: str,
    paths: Sequence[str],
    day: np.datetime64,
    sources: Sequence[Ephemerides | PreciseOrbits],
    choices: Choices,
    shell_height_m: float,
    read: Read = formats.read,
) -> ReceiverResult:
    """Read the files of one receiver and take the wanted day to rays.

    read  `formats.read`, or what gives the same but has read some files before
    """
    with threadpool_limits(1):
        return _receiver_unit(key, paths, day, sources, choices, shell_height_m, read)


def hour_unit(hour: Hour) -> Made:
    """The maps of one hour, on one thread of linear algebra."""
    with threadpool_limits(1):
        return make(hour)


def left_out_unit(hour: Hour) -> left_out_receivers.Rows:
    """The receivers of one hour, each foretold by all others, on one thread of linear algebra."""
    with threadpool_limits(1):
        return left_out_receivers.of_hour(hour)


# What the recipe makes hour by hour -> the unit of work that does so in another process.
_UNITS: Mapping[Callable[[Hour], Any], Callable[[Hour], Any]] = {
    make: hour_unit, left_out_receivers.of_hour: left_out_unit,
}  # fmt: skip


def _receiver_unit(
    key: str,
    paths: Sequence[str],
    day: np.datetime64,
    sources: Sequence[Ephemerides | PreciseOrbits],
    choices: Choices,
    shell_height_m: float,
    read: Read,
) -> ReceiverResult:
    problems: list[Problem] = []
    left_out: list[LeftOut] = []
    pieces: list[Signals] = []
    wanted = wanted_codes(choices.signals)
    for path in paths:
        try:
            reading = read(Path(path), wanted=wanted, thin_to_s=choices.thin_to_s)
            signals = reading.table
            if not isinstance(signals, Signals):
                raise FormatError(f"{path}: is no observation file", path=path, line=0)
            kept = _on_day(signals, day)
            if kept is None:
                days = sorted({str(d) for d in day_of(signals.times)})
                raise FormatError(
                    f"{path}: is of another day ({', '.join(days)}, not {day}); give --date to choose",
                    path=path, line=0,
                )  # fmt: skip
            problems += reading.problems
            pieces.append(kept)
        except SkylagError as trouble:
            left_out.append(_left_out(Path(path), trouble))
    if not pieces:
        return ReceiverResult(key, None, tuple(problems), tuple(left_out))
    try:
        signals = formats.merge(pieces) if len(pieces) > 1 else pieces[0]
        made = chain.receiver_day(signals, sources, choices, shell_height_m)
    except SkylagError as trouble:
        left_out.append(LeftOut(paths[0], 0, trouble.message))
        return ReceiverResult(key, None, tuple(problems), tuple(left_out))
    return ReceiverResult(key, made, tuple(problems), tuple(left_out))


def _on_day(signals: Signals, day: np.datetime64) -> Signals | None:
    """The epochs of one GPS-time day; None where there are fewer than ten."""
    inside = day_of(signals.times) == day
    if inside.sum() < 10:
        return None
    if inside.all():
        return signals
    return replace(
        signals, times=signals.times[inside], resets=signals.resets[inside],
        values={name: values[inside] for name, values in signals.values.items()},
        lock={name: values[inside] for name, values in signals.lock.items()},
    )  # fmt: skip


def likely_day(inputs: Inputs) -> np.datetime64:
    """The day that most observation files begin on.

    Raises NotEnough where no header tells one.
    """
    days = Counter(day for day in inputs.days.values() if day is not None)
    if not days:
        raise NotEnough(
            "no observation file among the inputs tells its day (TIME OF FIRST OBS); give --date",
            had=0, needed=1, where="inputs",
        )  # fmt: skip
    most = max(days.values())
    return min(day for day, count in days.items() if count == most)


def network_day(
    paths: Iterable[Path],
    *,
    region: Region | None = None,
    day: date | None = None,
    choices: Choices | None = None,
    executor: Executor,
    simulated: bool = False,
    progress: Progress | None = None,
    earlier: Earlier | None = None,
) -> DayResult:
    """From files and folders to the products of one network day.

    earlier  where biases of an earlier day are asked for, if `choices.earlier_days` wants them (`earlier_biases`)
    Raises NotEnough where no receiver can be used, FormatError where a path does not exist or may not be
    looked into.
    """
    tell = progress or (lambda stage, share, word: None)
    choices = choices or Choices()
    clock = _Clock()
    clock.enter("look")
    tell("look", 0.0, "looking at the files")
    inputs = sort_inputs(paths)
    if not inputs.observations:
        raise NotEnough(
            "no observation file is among the inputs; give RINEX observation files or folders of them"
            + "".join(f"\n  {item}" for item in inputs.left_out),
            had=0, needed=1, where="inputs", left_out=[str(item) for item in inputs.left_out],
        )  # fmt: skip
    wanted_day = np.datetime64(day.isoformat(), "D") if day is not None else likely_day(inputs)
    clock.enter("orbits")
    tell("orbits", 0.0, "orbits and biases")
    sources, problems, left_out = read_orbits(inputs.orbits)
    within_days = DRAWN_WITHIN_DAYS if choices.published_biases == DRAW else 0.0
    prior, more_problems, more_left_out, of_other_days = read_biases(inputs.biases, wanted_day, within_days)
    problems += more_problems
    left_out = [*inputs.left_out, *left_out, *more_left_out]
    if not sources:
        raise NotEnough(
            "no usable navigation or SP3 file is among the inputs; without orbits nothing can be placed"
            + "".join(f"\n  {item}" for item in left_out),
            had=0, needed=1, where="inputs", left_out=[str(item) for item in left_out],
        )  # fmt: skip
    clock.enter("receivers")
    shell_height_m = 1000.0 * (choices.shell_height_km or (region.shell_height_km if region else 400.0))
    results = _receivers(inputs, wanted_day, sources, choices, shell_height_m, executor, tell)
    for result in results:
        problems += result.problems
        left_out += result.left_out
    usable = [result.day for result in results if result.day is not None]
    usable = _one_of_each(usable, left_out)
    if not usable:
        raise NotEnough(
            f"no receiver of {wanted_day} can be used" + "".join(f"\n  {item}" for item in left_out),
            had=0, needed=1, where=str(wanted_day), left_out=[str(item) for item in left_out],
        )  # fmt: skip
    rays = concatenate([item.rays for item in usable])
    receivers = tuple(item.receiver for item in usable)
    place = replace(region or chain.region_around(receivers), shell_height_km=shell_height_m / 1000.0)
    channels = chain.channels_of(sources)
    for item in usable:  # the receiver's own header knows best, as in choosing its signals
        channels.update(item.facts.get("glonass_channels", {}))

    before = earlier(place.name, wanted_day) if earlier is not None and choices.earlier_days else None
    prior, of_adjustment, said = chain.known_biases(choices, prior, before)
    choices = replace(choices, adjustment=of_adjustment)
    if choices.earlier_days and prior is None:
        said += (f"no day of {place.name} within {choices.earlier_days} days before is kept: no earlier biases",)

    def stage(name: str, share: float) -> None:
        if share == 0.0:
            clock.enter(name)
        tell(name, share, "")

    # The matrices are small: threads of the linear algebra only get in each other's way (a busy machine took 40 times
    # the processor time with two of them).
    with threadpool_limits(1):
        made = chain.estimate(
            rays, place, wanted_day, choices, prior, channels, stage,
            chain.background_of(sources, choices),
            lambda make, hours: executor.map(_UNITS[make], hours),
        )  # fmt: skip
    clock.enter("")
    # A whole file weighs more than a satellite of a receiver; the page shows the first notes at once.
    warnings = [*made.warnings, *said, *(f"left out: {item}" for item in left_out)]
    warnings += [note for item in usable for note in item.notes]
    origin = Origin(
        inputs=_with_use(inputs.files, [*left_out, *of_other_days]),
        options=_options(choices, place, wanted_day),
        versions=versions(),
        timings_s={name: round(seconds, 3) for name, seconds in clock.seconds.items()},
        counts={
            "receivers": len(receivers), "rays": len(rays), "arcs": int(sum(item.facts["arcs"] for item in usable)),
            "slips": int(sum(item.facts["slips"] for item in usable)), "maps": len(made.fields.times),
            "flags": len(made.flags), "problems": len(problems), "left_out": len(left_out),
            "by_receiver": [dict(item.facts) for item in usable], **dict(made.facts),
            "broadcast_ionosphere": _broadcast_ionosphere(sources),
        },
        warnings=tuple(warnings),
        simulated=simulated or inputs.invented,
    )  # fmt: skip
    products = Products(
        region=place, day=wanted_day, receivers=receivers, calibration=made.calibration, samples=made.samples,
        fields=made.fields, flags=made.flags, site_states=made.site_states, site_reasons=made.site_reasons,
        origin=origin,
    )  # fmt: skip
    return DayResult(products, tuple(left_out), tuple(problems))


def _broadcast_ionosphere(sources: Sequence[Ephemerides | PreciseOrbits]) -> dict[str, list[float]]:
    """Coefficients of the broadcast models, as the first navigation file that tells each has them."""
    found: dict[str, list[float]] = {}
    for source in sources:
        if isinstance(source, Ephemerides):
            for name, values in source.ionosphere.items():
                found.setdefault(name, [float(value) for value in values])
    return found


def _receivers(
    inputs: Inputs, day: np.datetime64, sources: Sequence[Ephemerides | PreciseOrbits], choices: Choices,
    shell_height_m: float, executor: Executor, tell: Progress,
) -> list[ReceiverResult]:  # fmt: skip
    """All receiver-day units, run side by side, in the order of their names."""
    total = len(inputs.observations)
    tell("receivers", 0.0, f"{total} receivers")
    waiting = {
        executor.submit(receiver_unit, key, paths, day, sources, choices, shell_height_m): key
        for key, paths in inputs.observations.items()
    }
    done: dict[str, ReceiverResult] = {}
    for future in as_completed(waiting):
        key = waiting[future]
        done[key] = future.result()
        tell("receivers", len(done) / total, key)
    return [done[key] for key in inputs.observations]


def _one_of_each(days: list[ReceiverDay], left_out: list[LeftOut]) -> list[ReceiverDay]:
    """One entry per receiver name: two files of one receiver under unlike names must not count as two witnesses."""
    kept: dict[str, ReceiverDay] = {}
    for item in sorted(days, key=lambda d: -len(d.rays)):
        name = item.receiver.name
        if name in kept:
            left_out.append(LeftOut(name, 0, "a second set of files tells the same marker; the fuller one is used"))
        else:
            kept[name] = item
    return sorted(kept.values(), key=lambda d: d.receiver.name)


def _with_use(files: Sequence[Mapping[str, Any]], left_out: Sequence[LeftOut]) -> tuple[Mapping[str, Any], ...]:
    why = {Path(item.path).name: item.reason for item in left_out}
    return tuple({**mark, "used": mark["name"] not in why, "why_not": why.get(mark["name"], "")} for mark in files)


def _options(choices: Choices, region: Region, day: np.datetime64) -> dict[str, Any]:
    return {
        "day": str(day),
        "region": asdict(region),
        "signals": {system: "-".join(pair) for system, pair in choices.signals.items()},
        "minimum_elevation_deg": choices.minimum_elevation,
        "mapping_function": choices.mapping_function,
        "published_biases": choices.published_biases,
        "earlier_days": choices.earlier_days,
        "bias_walk_ns_per_day": choices.bias_walk_ns_per_day,
        "epoch_step_s": choices.epoch_step_s,
        "arcs": asdict(choices.arcs),
        "adjustment": asdict(choices.adjustment),
        "maps": asdict(choices.maps),
        "slopes": asdict(choices.slopes),
        "fronts": asdict(choices.fronts),
        "irregularity": asdict(choices.irregularity),
    }


def versions() -> dict[str, str]:
    """Versions of this program, Python, and the libraries that numbers pass through."""
    found = {"skylag": own_version(), "python": platform.python_version()}
    for name in _LIBRARIES:
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            continue
    return found


def own_version() -> str:
    """The installed version of this program."""
    try:
        return version("skylag")
    except PackageNotFoundError:
        return "unknown"
