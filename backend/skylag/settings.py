"""What a person sets: the region file and the environment, as frozen values, read once at a door.

The only place that reads environment variables and region files.  Never reaches into the science.
"""

import argparse
import math
import os
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, fields, replace
from pathlib import Path
from typing import Any, NoReturn
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from skylag.chain import BROADCAST, CLIMATOLOGICAL, DRAW, HOLD, IGNORE, Choices
from skylag.errors import FormatError, Refused
from skylag.ionosphere.geometry import MODIFIED_SINGLE_LAYER, SINGLE_LAYER
from skylag.spelling import SITE_KINDS, kind_trouble
from skylag.tables import USE_KINDS, Region, Site, Thresholds, Use


@dataclass(frozen=True)
class Settings:
    """Settings of a service; each may be given as an environment variable SKYLAG_<NAME IN CAPITALS>.

    archive   folder of the embedded archive, or a PostgreSQL URL
    host, port  where the page is served
    workers   `local:N` processes, `threads:N`, or `dask://host:port`
    """

    archive: str = "skylag-archive"
    host: str = "127.0.0.1"
    port: int = 8017
    workers: str = ""


@dataclass(frozen=True)
class Estimation:
    """How biases and levels are found, in words that a command line, a region file and a queued task can hold.

    mapping              from slant to vertical: "single" layer, or "modified" single layer (then without a high layer)
    shell_height_km      of the shell, 100 to 1000; 0: the region's
    published_biases     satellites of bias files: "hold" at them, "draw" upon them as of another day, or "ignore" them
    earlier_days         0, or how many days back the archive is asked for biases to draw upon
    bias_walk_ns_per_day  by how much a bias that is drawn upon may have walked in a day, 0.01 to 5
    drift_hours          0: one bias per receiver and day; or one per so many hours, 1 to 24
    repair_slips         repair cycle slips whose whole numbers are certain, instead of cutting the arc
    background           what maps fade into where nobody looks: the model "broadcast" in the navigation files (the
                         climatological one where they tell none), or always the "climatological" one
    solar_flux           of the climatological model: solar flux at 10.7 cm, 60 to 300; 0: a mean day's, 63.7
    """

    mapping: str = "single"
    shell_height_km: float = 0.0
    published_biases: str = HOLD
    earlier_days: int = 0
    bias_walk_ns_per_day: float = 0.1
    drift_hours: float = 0.0
    repair_slips: bool = False
    background: str = BROADCAST
    solar_flux: float = 0.0

    def __post_init__(self) -> None:
        for name, allowed in WORDS.items():
            if getattr(self, name) not in allowed:
                _refuse(name, getattr(self, name), " or ".join(allowed))
        for name, (least, most, zero) in RANGES.items():
            value = getattr(self, name)
            if isinstance(value, bool) or not isinstance(value, int | float):
                _refuse(name, value, "a number")
            if not (least <= value <= most or (zero and value == 0)):
                _refuse(name, value, f"{least:g} to {most:g}" + (", or 0" if zero else ""))
        if self.earlier_days != int(self.earlier_days):
            _refuse("earlier_days", self.earlier_days, "a whole number of days")
        if not isinstance(self.repair_slips, bool):
            _refuse("repair_slips", self.repair_slips, "true or false")

    def choices(self, base: Choices | None = None) -> Choices:
        """The choices of a day that say the same."""
        base = base or Choices()
        adjustment = replace(base.adjustment, drift_hours=self.drift_hours or None)
        if self.mapping == "modified":
            # This mapping was fitted with a plasmasphere in it: a high layer beside it would count it twice.  What the
            # layer leaves undone is not known: calibrated on invented skies, as a height that strays by 200 km.
            adjustment = replace(adjustment, high_layer=0.0, high_layer_sigma=1e-3, shell_height_sigma_m=200e3)
        return replace(
            base,
            mapping_function=MODIFIED_SINGLE_LAYER if self.mapping == "modified" else SINGLE_LAYER,
            shell_height_km=self.shell_height_km or None,
            published_biases=self.published_biases,
            earlier_days=int(self.earlier_days),
            bias_walk_ns_per_day=self.bias_walk_ns_per_day,
            adjustment=adjustment,
            arcs=replace(base.arcs, repair=self.repair_slips),
            background=self.background,
            solar_flux=self.solar_flux,
        )


WORDS = {
    "mapping": ("single", "modified"), "published_biases": (HOLD, DRAW, IGNORE),
    "background": (BROADCAST, CLIMATOLOGICAL),
}  # fmt: skip
# Least, most, and whether 0 says "not at all".
RANGES = {
    "shell_height_km": (100.0, 1000.0, True), "earlier_days": (1, 60, True),
    "bias_walk_ns_per_day": (0.01, 5.0, False), "drift_hours": (1.0, 24.0, True),
    "solar_flux": (60.0, 300.0, True),
}  # fmt: skip


def _refuse(name: str, value: object, allowed: str) -> NoReturn:
    raise Refused(f"{name}: {value!r}; it may be {allowed}", name=name, value=value, allowed=allowed)


def read_estimation(path: Path) -> Estimation:
    """The [estimation] table of a region file, the usual way where there is none.

    Raises FormatError where the file is missing or no TOML, Refused where a value is outside its range.
    """
    content = _toml(path).get("estimation", {})
    known = {item.name for item in fields(Estimation)}
    unknown = sorted(set(content) - known) if isinstance(content, dict) else ["it is no table"]
    if unknown:
        raise Refused(
            f"{path}: [estimation] knows nothing of {', '.join(unknown)}; it may hold {', '.join(sorted(known))}",
            name=unknown[0], value=content, allowed=sorted(known),
        )  # fmt: skip
    try:
        return Estimation(**content)
    except Refused as trouble:
        raise Refused(f"{path}: [estimation] {trouble.message}", **trouble.details) from None


def add_kept_day(parser: argparse.ArgumentParser, without: str = "the newest day without") -> None:
    """Add what names a kept day; `without` tells what it is where no day is named."""
    parser.add_argument("--archive", default="", metavar="PLACE", help="folder, or a PostgreSQL URL")
    parser.add_argument("--region", default="", metavar="NAME", help="of several regions in the archive, this one")
    parser.add_argument("--day", default="", metavar="YYYY-MM-DD", help=without)


def add_estimation(parser: argparse.ArgumentParser) -> None:
    """Add the options of `Estimation` to a command; what is not given is as the region file says, or as usual."""
    group = parser.add_argument_group(
        "how biases and levels are found",
        "Defaults suit a network of the middle latitudes. A region file may hold the same\n"
        "in a table [estimation] (README, Your own region); what is given here wins.",
    )
    group.add_argument(
        "--mapping", choices=WORDS["mapping"],
        help="slant to vertical: single thin layer, with a plasmasphere above it found from the data (single); or the "
        "modified single layer of global maps, without one",
    )  # fmt: skip
    group.add_argument("--shell-height-km", type=float, metavar="KM", help="of the thin shell, 100 to 1000 (400)")
    group.add_argument(
        "--published-biases", choices=WORDS["published_biases"],
        help="satellites in bias files: hold them there (hold), draw upon them as biases of another day that may have "
        "walked since (draw), or do without (ignore)",
    )  # fmt: skip
    group.add_argument(
        "--earlier-days", type=int, metavar="DAYS",
        help="draw upon the biases of the newest day of this region that the archive keeps from up to so many days "
        "before, 1 to 60 (0: do not); bias files in use come first",
    )  # fmt: skip
    group.add_argument(
        "--bias-walk-ns-per-day", type=float, metavar="NS",
        help="how far a bias that is drawn upon may walk in a day, 0.01 to 5 (0.1)",
    )  # fmt: skip
    group.add_argument(
        "--drift-hours", type=float, metavar="HOURS",
        help="a receiver bias per so many hours, 1 to 24, for receivers that are told to drift (0: one a day)",
    )  # fmt: skip
    group.add_argument(
        "--repair-slips", action=argparse.BooleanOptionalAction, default=None,
        help="repair cycle slips whose whole numbers are certain, instead of cutting there (no)",
    )  # fmt: skip
    group.add_argument(
        "--background", choices=WORDS["background"],
        help="what maps fade into where no line of sight passes: the model that the navigation files broadcast "
        "(broadcast; climatological where they tell none), or always the climatological one; unseen either way",
    )  # fmt: skip
    group.add_argument(
        "--solar-flux", type=float, metavar="SFU",
        help="of the climatological model: solar radio flux at 10.7 cm, 60 to 300 (0: a mean day, 63.7)",
    )  # fmt: skip


def estimation_from(options: argparse.Namespace, region: Path | None) -> Estimation:
    """What the command line gives, on top of the region file's [estimation].  Raises as `read_estimation` does."""
    found = read_estimation(region) if region else Estimation()
    given = {item.name: getattr(options, item.name, None) for item in fields(Estimation)}
    return replace(found, **{name: value for name, value in given.items() if value is not None})


def from_environment(environment: Mapping[str, str] | None = None) -> Settings:
    """Settings from SKYLAG_ARCHIVE, SKYLAG_HOST, SKYLAG_PORT and SKYLAG_WORKERS; defaults elsewhere.

    Raises Refused where the port is no number from 0 to 65535.
    """
    world = os.environ if environment is None else environment
    given: dict[str, Any] = {}
    for item in fields(Settings):
        text = world.get(f"SKYLAG_{item.name.upper()}", "").strip()
        if text:
            given[item.name] = text
    if "port" in given:
        given["port"] = port_number(given["port"])
    return Settings(**given)


def port_number(text: str) -> int:
    """A port from text; 0 means any free one.  Raises Refused outside 0 to 65535."""
    if not text.isdigit() or int(text) > 65535:
        raise Refused(
            f"port: {text!r} is not a port; give a whole number from 0 to 65535",
            name="port", value=text, allowed="0-65535",
        )  # fmt: skip
    return int(text)


def default_workers() -> str:
    """As many processes as cores."""
    return f"local:{os.cpu_count() or 1}"


# What a region file may hold, and how it is written.
_TABLES = {
    "region": "[region]", "site": "[[site]]", "estimation": "[estimation]", "thresholds": "[thresholds]",
    "use": "[[use]]",
}  # fmt: skip


def read_region(path: Path) -> Region:
    """The region of a region.toml: [region] with its rectangle, [[site]] entries, optional [thresholds] and [[use]].

    Raises FormatError where the file is missing or no TOML, Refused where a value is outside its range.
    """
    content = _toml(path)
    box = content.get("region")
    if not isinstance(box, dict):
        raise FormatError(f"{path}: has no [region] table; see README, 'Your own region'", path=str(path), line=0)
    strange = sorted(set(content) - set(_TABLES))
    if strange:
        raise Refused(
            f"{path}: knows nothing of {', '.join(strange)}; a region file may hold {', '.join(_TABLES.values())}",
            name=strange[0], value=None, allowed=list(_TABLES),
        )  # fmt: skip
    for name, written in _TABLES.items():
        wanted = list if written.startswith("[[") else dict
        if not isinstance(content.get(name, wanted()), wanted):
            raise Refused(f"{path}: write {name} as {written}", name=name, value=None, allowed=written)
    _only_known(path, "[region]", box, {item.name for item in fields(Region)} - {"sites", "thresholds", "uses"})
    missing = [name for name in ("name", "south", "north", "west", "east") if name not in box]
    if missing:
        raise Refused(f"{path}: [region] lacks {', '.join(missing)}", name=missing[0], value=None, allowed="a value")
    numbers = {"south", "north", "west", "east", "step_deg", "shell_height_km"}
    values = {name: _number(path, name, value) if name in numbers else str(value) for name, value in box.items()}
    sites = tuple(_site(path, entry) for entry in content.get("site", []))
    twice = sorted({site.name for site in sites if [other.name for other in sites].count(site.name) > 1})
    if twice:
        raise Refused(f"{path}: two [[site]] are named {twice[0]}", name="site", value=twice, allowed="names apart")
    limits = content.get("thresholds", {})
    _only_known(path, "[thresholds]", limits, {item.name for item in fields(Thresholds)})
    thresholds = _in_order(path, Thresholds(**{name: _number(path, name, limits[name]) for name in limits}))
    uses = tuple(_use(path, entry) for entry in content.get("use", []))
    names = [use.name for use in uses]
    if len(set(names)) < len(names):
        raise Refused(f"{path}: two [[use]] have one name", name="use", value=names, allowed="names apart")
    try:
        region = Region(**values, sites=sites, thresholds=thresholds, uses=uses)  # type: ignore[arg-type]
        ZoneInfo(region.timezone)
    except Refused as trouble:
        raise Refused(f"{path}: {trouble.message}", **trouble.details) from None
    except (ZoneInfoNotFoundError, ValueError, OSError):
        raise Refused(
            f"{path}: timezone {values['timezone']!r} is not known; write one like Australia/Melbourne or Etc/UTC",
            name="timezone", value=values["timezone"], allowed="a name of the time zone database",
        ) from None  # fmt: skip
    return region


def _toml(path: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as trouble:
        raise FormatError(f"{path}: cannot be read ({trouble.strerror})", path=str(path), line=0) from trouble
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as trouble:
        raise FormatError(f"{path}: is no TOML ({trouble})", path=str(path), line=0) from trouble


def _number(path: Path, name: str, value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise Refused(f"{path}: {name} must be a number, not {value!r}", name=name, value=value, allowed="a number")
    return float(value)


def _in_order(path: Path, limits: Thresholds) -> Thresholds:
    """The same; Refused where a limit is none, or `broken` begins before `strained`."""
    for name in Thresholds.__dataclass_fields__:
        value = getattr(limits, name)
        least = getattr(limits, name.replace("broken", "strained")) if name.startswith("broken") else 0.0
        if not (math.isfinite(value) and value > 0.0 and value >= least):
            allowed = "a number above 0" + (f", {least:g} or more as strained begins there" if least else "")
            raise Refused(f"{path}: {name} is {value:g}; it must be {allowed}", name=name, value=value, allowed=allowed)
    return limits


def _only_known(path: Path, which: str, entry: Mapping[str, Any], known: set[str]) -> None:
    """Refused where an entry of a region file holds names that nothing reads."""
    unknown = sorted(set(entry) - known)
    if unknown:
        raise Refused(
            f"{path}: {which} knows nothing of {', '.join(unknown)}; it may hold {', '.join(sorted(known))}",
            name=unknown[0], value=entry[unknown[0]], allowed=sorted(known),
        )  # fmt: skip


def _site(path: Path, entry: Mapping[str, Any]) -> Site:
    which = f"site {entry['name']}" if "name" in entry else "a [[site]]"
    _only_known(path, which, entry, {item.name for item in fields(Site)})
    missing = [name for name in ("name", "lat", "lon") if name not in entry]
    if missing:
        raise Refused(f"{path}: {which} lacks {', '.join(missing)}", name=missing[0], value=None, allowed="a value")
    lat, lon = _number(path, "lat", entry["lat"]), _number(path, "lon", entry["lon"])
    if not (-90 <= lat <= 90 and -180 <= lon <= 360):
        raise Refused(
            f"{path}: site {entry['name']} stands at {lat}, {lon}; latitude is -90 to 90, longitude -180 to 360",
            name="site", value=[lat, lon], allowed="-90..90, -180..360",
        )  # fmt: skip
    kind = str(entry.get("kind", "site"))
    if trouble := kind_trouble(kind):
        raise Refused(f"{path}: site {entry['name']}: {trouble}", name="kind", value=kind, allowed=SITE_KINDS)
    return Site(name=str(entry["name"]), lat=lat, lon=lon, kind=kind)


def _use(path: Path, entry: Mapping[str, Any]) -> Use:
    """One [[use]]: name and kind, and what differs from the published values."""
    _only_known(path, "a [[use]]", entry, {item.name for item in fields(Use)})
    missing = [name for name in ("name", "kind") if name not in entry]
    if missing:
        raise Refused(
            f"{path}: a [[use]] lacks {', '.join(missing)}; kinds are {', '.join(USE_KINDS)}",
            name=missing[0], value=None, allowed="a value",
        )  # fmt: skip
    words = {name: str(entry[name]) for name in ("name", "kind")}
    numbers = {name: _number(path, name, value) for name, value in entry.items() if name not in words}
    return Use(**words, **numbers)  # type: ignore[arg-type]
