"""Lines of equal vertical delay of one map as GeoJSON (RFC 7946).

Only where a line of sight carries all four cells around, and their delay is known well enough to count as seen; a line
ends where nobody looks.  Between the middles of cells
the delay is taken as linear along the sides (marching squares: Lorensen and Cline 1987, in the plane).  Never smooths,
never closes a gap.
"""

import json
from collections.abc import Mapping
from typing import Any

import numpy as np

from skylag.constants import L1_M_PER_TECU
from skylag.errors import Refused
from skylag.formats.delimited import utc_text
from skylag.tables import Fields, Floats

_MOST_LEVELS = 400
# Sides of a square of cells, by the corners they join: south-west 0, south-east 1, north-east 2, north-west 3.
_SIDES = ((0, 1), (1, 2), (2, 3), (3, 0))


def to_geojson(fields: Fields, number: int, step_m: float, about: Mapping[str, Any], unseen_sigma_m: float) -> str:
    """A feature per line: longitude first, -180 to 180; the delay [m], the content [TECU], its sigma along the line.

    number  of the map in `fields`; step_m between levels
    about   members of the collection, such as `simulated` and `caution`
    unseen_sigma_m  sigma of the delay beyond which it counts as not seen: no line runs through there
    Raises Refused for a step that is not above zero or makes more than 400 levels.
    """
    sigma = fields.vtec_sigma[number].astype(np.float64) * L1_M_PER_TECU
    seen = (fields.support[number] > 0) & (fields.vtec_sigma[number] * L1_M_PER_TECU <= unseen_sigma_m)
    delay = np.where(seen, fields.vtec[number], np.nan).astype(np.float64) * L1_M_PER_TECU
    features: list[dict[str, Any]] = []
    time = utc_text(fields.times[number])
    for level in _levels(delay, step_m):
        for line in lines_of(delay, level):
            lon = np.interp(line[:, 1], np.arange(len(fields.lons)), fields.lons)
            lat = np.interp(line[:, 0], np.arange(len(fields.lats)), fields.lats)
            nearest = sigma[np.rint(line[:, 0]).astype(int), np.rint(line[:, 1]).astype(int)]
            properties = {
                "vertical_delay_m": round(level, 4), "vtec_tecu": round(level / L1_M_PER_TECU, 3),
                "vertical_delay_sigma_m": round(float(np.median(nearest)), 3), "time_utc": time,
            }  # fmt: skip
            pieces = _within_180(lon, lat)
            shape = {"type": "LineString", "coordinates": pieces[0]} if len(pieces) == 1 else {
                "type": "MultiLineString", "coordinates": pieces}  # fmt: skip
            features.append({"type": "Feature", "geometry": shape, "properties": properties})
    return json.dumps(
        {"type": "FeatureCollection", **about, "time_utc": time, "features": features}, allow_nan=False
    )


def _levels(delay: Floats, step_m: float) -> list[float]:
    if not (np.isfinite(step_m) and step_m > 0.0):
        raise Refused(f"step between lines: {step_m:g} m; give more than 0", name="step_m", value=step_m, allowed="> 0")
    known = delay[np.isfinite(delay)]
    if not len(known):
        return []
    first, last = np.ceil(known.min() / step_m), np.floor(known.max() / step_m)
    if last - first >= _MOST_LEVELS:
        raise Refused(
            f"step between lines: {step_m:g} m makes {int(last - first) + 1} levels on this map; {_MOST_LEVELS} are "
            "the most",
            name="step_m", value=step_m, allowed=f"at least {np.ptp(known) / _MOST_LEVELS:.3g}",
        )  # fmt: skip
    return [float(k * step_m) for k in np.arange(first, last + 1)]


def lines_of(values: Floats, level: float) -> list[Floats]:
    """Lines of a level as (points, 2) of row and column, fractional; a closed one ends where it began.

    A value equal to the level counts as above it.
    """
    corners = np.stack([values[:-1, :-1], values[:-1, 1:], values[1:, 1:], values[1:, :-1]], axis=-1)
    above = corners >= level
    whole = np.isfinite(corners).all(axis=-1)
    mixed = np.argwhere(whole & above.any(axis=-1) & ~above.all(axis=-1))
    # Each crossed side has a name that its two squares share; each square joins two sides, or two pairs.
    neighbours: dict[tuple[int, int, int], list[tuple[int, int, int]]] = {}
    for row, column in mixed.tolist():
        high = above[row, column]
        crossed = [k for k, (a, b) in enumerate(_SIDES) if high[a] != high[b]]
        if len(crossed) == 4 and (float(corners[row, column].mean()) >= level) == bool(high[0]):
            # A saddle: what is in the middle goes with the south-west corner.
            crossed = [0, 1, 2, 3]
        elif len(crossed) == 4:
            crossed = [3, 0, 1, 2]
        for one, other in zip(crossed[::2], crossed[1::2], strict=True):
            p, q = _side(row, column, one), _side(row, column, other)
            neighbours.setdefault(p, []).append(q)
            neighbours.setdefault(q, []).append(p)
    lines = []
    while neighbours:
        start = next((p for p, others in neighbours.items() if len(others) == 1), next(iter(neighbours)))
        line, here = [start], start
        while neighbours.get(here):
            there = neighbours[here].pop()
            neighbours[there].remove(here)
            if not neighbours[here]:
                del neighbours[here]
            line.append(there)
            here = there
        neighbours.pop(here, None)
        lines.append(np.array([_point(values, level, side) for side in line]))
    return lines


def _side(row: int, column: int, number: int) -> tuple[int, int, int]:
    """A side of a square by its western or southern end: row, column, 0 along the row or 1 along the column."""
    return ((row, column, 0), (row, column + 1, 1), (row + 1, column, 0), (row, column, 1))[number]


def _point(values: Floats, level: float, side: tuple[int, int, int]) -> tuple[float, float]:
    row, column, upward = side
    near = float(values[row, column])
    far = float(values[row + upward, column + 1 - upward])
    share = (level - near) / (far - near)
    return (row + share, float(column)) if upward else (float(row), column + share)


def _within_180(lon: Floats, lat: Floats) -> list[list[list[float]]]:
    """The line's points with longitudes from -180 to 180, cut where it crosses the antimeridian."""
    turn = np.floor((lon + 180.0) / 360.0)
    pieces: list[list[list[float]]] = [[]]
    for k in range(len(lon)):
        if k and turn[k] != turn[k - 1]:
            edge = 360.0 * max(turn[k], turn[k - 1]) - 180.0
            share = (edge - lon[k - 1]) / (lon[k] - lon[k - 1])
            at = round(float(lat[k - 1] + share * (lat[k] - lat[k - 1])), 4)
            side = 180.0 if turn[k] > turn[k - 1] else -180.0
            pieces[-1].append([side, at])
            pieces.append([[-side, at]])
        pieces[-1].append([round(float(lon[k] - 360.0 * turn[k]), 4), round(float(lat[k]), 4)])
    return pieces
