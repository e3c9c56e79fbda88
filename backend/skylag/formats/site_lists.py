"""Lists of sites from CSV or GeoJSON text.  A bad line is named and left out; a text that is no list is refused.

CSV: a heading line with name, lat, lon and perhaps kind, in any order, separated by comma, semicolon or tab.  GeoJSON
(RFC 7946): points, with `name` and perhaps `kind` among their properties; of other shapes the middle of their box.
"""

import csv
import io
import json
import math
from collections.abc import Iterator
from typing import Any

from skylag.errors import FormatError
from skylag.spelling import kind_trouble
from skylag.tables import Problem, Site

_NAMES = {
    "name": ("name", "site", "id"), "lat": ("lat", "latitude", "lat_deg"),
    "lon": ("lon", "lng", "long", "longitude", "lon_deg"), "kind": ("kind", "type"),
}  # fmt: skip
_MOST_SITES = 5000


def sites_from(text: str, path: str = "sites") -> tuple[tuple[Site, ...], tuple[Problem, ...]]:
    """Sites and problems of a text; path only names it in messages.  A name that comes twice is left
    out, and so is a kind that is nearly a known one.

    Raises FormatError where the text is neither.
    """
    rows = _from_geojson(text, path) if text.lstrip()[:1] in ("{", "[") else _from_csv(text, path)
    sites: dict[str, Site] = {}
    problems: list[Problem] = []
    for line, name, lat, lon, kind in rows:
        what = ""
        if not name:
            what = "has no name"
        elif name in sites:
            what = f"the name {name} came before"
        elif not (math.isfinite(lat) and math.isfinite(lon)):
            what = f"{name} has no place"
        elif not (-90 <= lat <= 90 and -180 <= lon <= 360):
            what = f"{name} stands at {lat:g}, {lon:g}; latitude is -90 to 90, longitude -180 to 360"
        elif trouble := kind_trouble(kind):
            what = f"{name}: {trouble}"
        elif len(sites) >= _MOST_SITES:
            what = f"more than {_MOST_SITES} sites"
        if what:
            problems.append(Problem(path, line, what))
            continue
        sites[name] = Site(name, lat, lon, kind or "site")
    return tuple(sites.values()), tuple(problems)


def _number(text: Any) -> float:
    try:
        return float(str(text).strip().replace(",", "."))
    except ValueError:
        return math.nan


def _from_csv(text: str, path: str) -> Iterator[tuple[int, str, float, float, str]]:
    lines = text.lstrip("\ufeff").splitlines()
    first = next((number for number, line in enumerate(lines) if line.strip() and not line.startswith("#")), None)
    if first is None:
        raise FormatError(f"{path}: is empty; it needs a heading line with name, lat and lon", path=path, line=0)
    separator = max(",;\t", key=lines[first].count)
    try:
        rows = list(csv.reader(io.StringIO("\n".join(lines[first:])), delimiter=separator))
    except csv.Error as cause:
        raise FormatError(f"{path}: is no table ({cause})", path=path, line=first + 1) from cause
    heading = [cell.strip().lower() for cell in rows[0]]
    column = {
        wanted: next((heading.index(word) for word in words if word in heading), -1) for wanted, words in _NAMES.items()
    }
    missing = [name for name in ("name", "lat", "lon") if column[name] < 0]
    if missing:
        raise FormatError(
            f"{path}:{first + 1}: the heading lacks {', '.join(missing)}; write name,lat,lon,kind", path=path,
            line=first + 1,
        )  # fmt: skip
    for number, row in enumerate(rows[1:], start=first + 2):
        if not any(cell.strip() for cell in row) or row[0].startswith("#"):
            continue
        cell = {name: row[at].strip() if 0 <= at < len(row) else "" for name, at in column.items()}
        yield number, cell["name"], _number(cell["lat"]), _number(cell["lon"]), cell["kind"]


def _from_geojson(text: str, path: str) -> Iterator[tuple[int, str, float, float, str]]:
    try:
        content = json.loads(text)
    except (ValueError, RecursionError) as cause:
        raise FormatError(f"{path}: is no JSON ({cause})", path=path, line=0) from cause
    features = content.get("features") if isinstance(content, dict) else None
    if not isinstance(features, list):
        raise FormatError(f"{path}: has no features; it must be a GeoJSON FeatureCollection", path=path, line=0)
    for number, feature in enumerate(features, start=1):
        facts = feature.get("properties") if isinstance(feature, dict) else None
        shape = feature.get("geometry") if isinstance(feature, dict) else None
        told = {str(key).lower(): value for key, value in facts.items()} if isinstance(facts, dict) else {}
        name, kind = (_told(told, _NAMES[wanted]) for wanted in ("name", "kind"))
        pairs = list(_pairs(shape.get("coordinates") if isinstance(shape, dict) else None))
        lon, lat = (0.5 * (min(v) + max(v)) for v in zip(*pairs, strict=True)) if pairs else (math.nan, math.nan)
        yield number, name, lat, lon, kind


def _told(facts: dict[str, Any], words: tuple[str, ...]) -> str:
    """The first of some properties that is there, as text."""
    return next((str(facts[word]).strip() for word in words if facts.get(word)), "")


def _pairs(coordinates: Any, depth: int = 0) -> Iterator[tuple[float, float]]:
    """All longitude-latitude pairs of a geometry."""
    if not isinstance(coordinates, list) or depth > 5:
        return
    if len(coordinates) >= 2 and all(type(one) in (int, float) for one in coordinates[:2]):
        yield float(coordinates[0]), float(coordinates[1])
        return
    for one in coordinates:
        yield from _pairs(one, depth + 1)
