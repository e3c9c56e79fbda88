"""Points, routes and areas as the places that must be looked at: every cell of the map that they touch.

Straight lines in latitude and longitude, also across 180 degrees.  Never looks at a map: only its step counts.
"""

from collections.abc import Iterator, Sequence

import numpy as np

from skylag.errors import Refused
from skylag.tables import Floats

SHAPES = {
    "points": "places apart, each as it is", "route": "the way from place to place", "area": "all inside the corners",
}  # fmt: skip
MOST_PLACES = 400
MOST_CORNERS = 100  # of a route or an area
MOST_STEPS = 8000  # of half a cell, on the way from place to place: each of the most places twenty times
Place = tuple[float, float]
Cell = tuple[int, int]


def places_of(
    points: Sequence[Place], shape: str, step_deg: float, node: Place = (0.0, 0.0)
) -> tuple[Place, ...]:
    """The places (lat, lon) of a shape: the points themselves first, then what lies between or inside, once a cell.

    step_deg  of the map; between two places of a route lies at most half of it; node: middle of any cell of the map
    Raises Refused for an unknown shape, too few points, a route or area of more than 100 corners or a way of more than
    8000 half cells before any of it is made, and for more than 400 places as soon as there are.
    """
    if shape not in SHAPES:
        raise Refused(f"shape {shape} is not known; choose from {', '.join(SHAPES)}", name="shape", value=shape,
                      allowed=tuple(SHAPES))  # fmt: skip
    least = {"points": 1, "route": 2, "area": 3}[shape]
    if len(points) < least:
        raise Refused(
            f"shape {shape} needs {least} places, there are {len(points)}; add some, or choose another shape",
            name="places", value=len(points), allowed=f"{least} or more",
        )  # fmt: skip
    most = MOST_PLACES if shape == "points" else MOST_CORNERS
    if len(points) > most:
        raise Refused(
            f"shape {shape} takes at most {most} places, there are {len(points)}; leave some out, or ask in parts",
            name="places", value=len(points), allowed=most,
        )  # fmt: skip
    if shape == "points":
        return tuple((float(lat), float(lon)) for lat, lon in points)
    lat = np.array([point[0] for point in points], dtype=np.float64)
    lon = np.unwrap(np.array([point[1] for point in points], dtype=np.float64), period=360.0)
    lat, lon = lat - node[0], lon - node[1]  # from here on the middles of cells are multiples of the step
    if shape == "area":
        lat, lon = np.append(lat, lat[0]), np.append(lon, lon[0])
        if abs(lon[-1] - np.unwrap(lon, period=360.0)[-1]) > 1e-6 or np.ptp(lon) > 180.0:
            raise Refused("the area spans more than half the Earth; draw a smaller one", name="places",
                          value=float(np.ptp(lon)), allowed="less than 180 degrees of longitude")  # fmt: skip
    # The corners themselves come first, then what lies between, then what lies inside.
    cells = dict(zip(_cells(lat, lon, step_deg), zip(lat.tolist(), lon.tolist(), strict=True), strict=True))
    _add(cells, *_along(lat, lon, 0.5 * step_deg), step_deg, shape)
    if shape == "area":
        for in_lat, in_lon in _inside(lat, lon, step_deg):
            _add(cells, in_lat, in_lon, step_deg, shape)
    return tuple((a + node[0], (b + node[1] + 180.0) % 360.0 - 180.0) for a, b in cells.values())


def _cells(lat: Floats, lon: Floats, step_deg: float) -> Iterator[Cell]:
    rows, columns = np.round(lat / step_deg).astype(int), np.round(lon / step_deg).astype(int)
    return zip(rows.tolist(), columns.tolist(), strict=True)


def _add(cells: dict[Cell, Place], lat: Floats, lon: Floats, step_deg: float, shape: str) -> None:
    """Add places in cells that have none yet.  Raises Refused as soon as there are too many cells."""
    for cell, a, b in zip(_cells(lat, lon, step_deg), lat.tolist(), lon.tolist(), strict=True):
        cells.setdefault(cell, (a, b))
        if len(cells) > MOST_PLACES:
            raise Refused(
                f"the {shape} touches more than {MOST_PLACES} cells of the map, which is the most that can be looked "
                "at together; make it smaller, or ask in parts",
                name="places", value=f"more than {MOST_PLACES} cells", allowed=MOST_PLACES,
            )  # fmt: skip


def _along(lat: Floats, lon: Floats, most_deg: float) -> tuple[Floats, Floats]:
    """Places along lines, at most so far apart.  Raises Refused, before any is made, for more than 8000."""
    counts = np.maximum(1, np.ceil(np.maximum(np.abs(np.diff(lat)), np.abs(np.diff(lon))) / most_deg))
    if counts.sum() > MOST_STEPS:
        raise Refused(
            f"the way from place to place is {counts.sum():.0f} half cells of the map long, at most {MOST_STEPS} can "
            "be followed; look at the order of latitude and longitude, or ask in parts",
            name="places", value=int(counts.sum()), allowed=MOST_STEPS,
        )  # fmt: skip
    pieces_lat, pieces_lon = [lat[:1]], [lon[:1]]
    for k, count in enumerate(counts.astype(int)):
        share = np.arange(1, count + 1) / count
        pieces_lat.append(lat[k] + share * (lat[k + 1] - lat[k]))
        pieces_lon.append(lon[k] + share * (lon[k + 1] - lon[k]))
    return np.concatenate(pieces_lat), np.concatenate(pieces_lon)


def _inside(lat: Floats, lon: Floats, step_deg: float) -> Iterator[tuple[Floats, Floats]]:
    """Nodes of the map inside a closed ring, in pieces of a row: from each odd crossing of the row to the next even."""
    for row in np.arange(np.ceil(lat.min() / step_deg), np.floor(lat.max() / step_deg) + 1) * step_deg:
        k = np.flatnonzero((row < lat[:-1]) != (row < lat[1:]))
        crossings = np.sort(lon[k] + (row - lat[k]) / (lat[k + 1] - lat[k]) * (lon[k + 1] - lon[k]))
        for west, east in zip(crossings[::2], crossings[1::2], strict=True):
            columns = np.arange(np.ceil(west / step_deg), np.ceil(east / step_deg)) * step_deg
            yield np.full(len(columns), row), columns
