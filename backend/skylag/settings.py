"""What a person sets: the region file and the environment, as frozen values, read once at a door.

The only place that reads environment variables and region files.  Never reaches into the science.
"""

import os
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any

from skylag.errors import FormatError, Refused
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


def read_region(path: Path) -> Region:
    """The region of a region.toml: [region] with its rectangle, [[site]] entries, optional [thresholds] and [[use]].

    Raises FormatError where the file is missing or no TOML, Refused where a value is outside its range.
    """
    try:
        content = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as trouble:
        raise FormatError(f"{path}: cannot be read ({trouble.strerror})", path=str(path), line=0) from trouble
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as trouble:
        raise FormatError(f"{path}: is no TOML ({trouble})", path=str(path), line=0) from trouble
    box = content.get("region")
    if not isinstance(box, dict):
        raise FormatError(f"{path}: has no [region] table; see README, 'Your own region'", path=str(path), line=0)
    known = {item.name for item in fields(Region)} - {"sites", "thresholds", "uses"}
    unknown = sorted(set(box) - known)
    if unknown:
        raise Refused(
            f"{path}: [region] knows nothing of {', '.join(unknown)}; it may hold {', '.join(sorted(known))}",
            name=unknown[0], value=box[unknown[0]], allowed=sorted(known),
        )  # fmt: skip
    missing = [name for name in ("name", "south", "north", "west", "east") if name not in box]
    if missing:
        raise Refused(f"{path}: [region] lacks {', '.join(missing)}", name=missing[0], value=None, allowed="a value")
    numbers = {"south", "north", "west", "east", "step_deg", "shell_height_km"}
    values = {name: _number(path, name, value) if name in numbers else str(value) for name, value in box.items()}
    sites = tuple(_site(path, entry) for entry in content.get("site", []))
    limits = content.get("thresholds", {})
    allowed = {item.name for item in fields(Thresholds)}
    for name in limits:
        if name not in allowed:
            raise Refused(
                f"{path}: [thresholds] knows nothing of {name}; it may hold {', '.join(sorted(allowed))}",
                name=name, value=limits[name], allowed=sorted(allowed),
            )  # fmt: skip
    thresholds = Thresholds(**{name: _number(path, name, value) for name, value in limits.items()})
    uses = tuple(_use(path, entry) for entry in content.get("use", []))
    names = [use.name for use in uses]
    if len(set(names)) < len(names):
        raise Refused(f"{path}: two [[use]] have one name", name="use", value=names, allowed="names apart")
    return Region(**values, sites=sites, thresholds=thresholds, uses=uses)  # type: ignore[arg-type]


def _number(path: Path, name: str, value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise Refused(f"{path}: {name} must be a number, not {value!r}", name=name, value=value, allowed="a number")
    return float(value)


def _site(path: Path, entry: Mapping[str, Any]) -> Site:
    missing = [name for name in ("name", "lat", "lon") if name not in entry]
    if missing:
        raise Refused(f"{path}: a [[site]] lacks {', '.join(missing)}", name=missing[0], value=None, allowed="a value")
    lat, lon = _number(path, "lat", entry["lat"]), _number(path, "lon", entry["lon"])
    if not (-90 <= lat <= 90 and -180 <= lon <= 360):
        raise Refused(
            f"{path}: site {entry['name']} stands at {lat}, {lon}; latitude is -90 to 90, longitude -180 to 360",
            name="site", value=[lat, lon], allowed="-90..90, -180..360",
        )  # fmt: skip
    return Site(name=str(entry["name"]), lat=lat, lon=lon, kind=str(entry.get("kind", "site")))


def _use(path: Path, entry: Mapping[str, Any]) -> Use:
    """One [[use]]: name and kind, and what differs from the published values."""
    known = {item.name for item in fields(Use)}
    unknown = sorted(set(entry) - known)
    if unknown:
        raise Refused(
            f"{path}: a [[use]] knows nothing of {', '.join(unknown)}; it may hold {', '.join(sorted(known))}",
            name=unknown[0], value=entry[unknown[0]], allowed=sorted(known),
        )  # fmt: skip
    missing = [name for name in ("name", "kind") if name not in entry]
    if missing:
        raise Refused(
            f"{path}: a [[use]] lacks {', '.join(missing)}; kinds are {', '.join(USE_KINDS)}",
            name=missing[0], value=None, allowed="a value",
        )  # fmt: skip
    words = {name: str(entry[name]) for name in ("name", "kind")}
    numbers = {name: _number(path, name, value) for name, value in entry.items() if name not in words}
    return Use(**words, **numbers)  # type: ignore[arg-type]
