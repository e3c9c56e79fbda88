"""Points, routes and areas as the places that must be looked at: every cell of the map that they touch.

Straight lines in latitude and longitude, also across 180 degrees.  Never looks at a map: only its step counts.
"""

from collections.abc import Sequence

import numpy as np

from skylag.errors import Refused
from skylag.tables import Bools, Floats

SHAPES = {
    "points": "places apart, each as it is", "route": "the way from place to place", "area": "all inside the corners",
}  # fmt: skip
MOST_PLACES = 400
Place = tuple[float, float]


def places_of(
    points: Sequence[Place], shape: str, step_deg: float, node: Place = (0.0, 0.0)
) -> tuple[Place, ...]:
    """The places (lat, lon) of a shape: the points themselves first, then what lies between or inside, once a cell.

    step_deg  of the map; between two places of a route lies at most half of it; node: middle of any cell of the map
    Raises Refused for an unknown shape, too few points, or more than 400 places.
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
    if shape == "points":
        found = [tuple(map(float, point)) for point in points]
        return _at_most(tuple((lat, lon) for lat, lon in found), shape)
    lat = np.array([point[0] for point in points], dtype=np.float64)
    lon = np.unwrap(np.array([point[1] for point in points], dtype=np.float64), period=360.0)
    lat, lon = lat - node[0], lon - node[1]  # from here on the middles of cells are multiples of the step
    if shape == "area":
        lat, lon = np.append(lat, lat[0]), np.append(lon, lon[0])
        if abs(lon[-1] - np.unwrap(lon, period=360.0)[-1]) > 1e-6 or np.ptp(lon) > 180.0:
            raise Refused("the area spans more than half the Earth; draw a smaller one", name="places",
                          value=float(np.ptp(lon)), allowed="less than 180 degrees of longitude")  # fmt: skip
    along_lat, along_lon = _along(lat, lon, 0.5 * step_deg)
    if shape == "area":
        in_lat, in_lon = _inside(lat, lon, step_deg)
        along_lat, along_lon = np.append(along_lat, in_lat), np.append(along_lon, in_lon)
    cells: dict[tuple[int, int], Place] = {}
    rows, columns = np.round(along_lat / step_deg).astype(int), np.round(along_lon / step_deg).astype(int)
    own = {(round(la / step_deg), round(lo / step_deg)): (float(la), float(lo))
           for la, lo in zip(lat, lon, strict=True)}  # fmt: skip
    cells.update(own)
    for cell, a, b in zip(zip(rows.tolist(), columns.tolist(), strict=True), along_lat, along_lon, strict=True):
        cells.setdefault(cell, (float(a), float(b)))
    turned = tuple((a + node[0], (b + node[1] + 180.0) % 360.0 - 180.0) for a, b in cells.values())
    return _at_most(turned, shape)


def _at_most(places: tuple[Place, ...], shape: str) -> tuple[Place, ...]:
    if len(places) > MOST_PLACES:
        raise Refused(
            f"the {shape} touches {len(places)} cells of the map, at most {MOST_PLACES} can be looked at together; "
            "make it smaller, or ask in parts",
            name="places", value=len(places), allowed=MOST_PLACES,
        )  # fmt: skip
    return places


def _along(lat: Floats, lon: Floats, most_deg: float) -> tuple[Floats, Floats]:
    """Places along lines, at most so far apart."""
    pieces_lat, pieces_lon = [lat[:1]], [lon[:1]]
    for k in range(len(lat) - 1):
        count = max(1, int(np.ceil(max(abs(lat[k + 1] - lat[k]), abs(lon[k + 1] - lon[k])) / most_deg)))
        if count > 4 * MOST_PLACES:
            raise Refused(
                "the way from place to place is longer than any map; look at the order of latitude and longitude",
                name="places", value=count, allowed=4 * MOST_PLACES,
            )  # fmt: skip
        share = np.arange(1, count + 1) / count
        pieces_lat.append(lat[k] + share * (lat[k + 1] - lat[k]))
        pieces_lon.append(lon[k] + share * (lon[k + 1] - lon[k]))
    return np.concatenate(pieces_lat), np.concatenate(pieces_lon)


def _inside(lat: Floats, lon: Floats, step_deg: float) -> tuple[Floats, Floats]:
    """Nodes of the map inside a closed ring."""
    rows = np.arange(np.ceil(lat.min() / step_deg), np.floor(lat.max() / step_deg) + 1) * step_deg
    columns = np.arange(np.ceil(lon.min() / step_deg), np.floor(lon.max() / step_deg) + 1) * step_deg
    grid_lon, grid_lat = np.meshgrid(columns, rows)
    inside = within(grid_lat.ravel(), grid_lon.ravel(), lat, lon)
    return grid_lat.ravel()[inside], grid_lon.ravel()[inside]


def within(lat: Floats, lon: Floats, ring_lat: Floats, ring_lon: Floats) -> Bools:
    """Whether places lie inside a closed ring: how often a line toward the east crosses it, odd or even."""
    odd: Bools = np.zeros(len(lat), dtype=bool)
    for k in range(len(ring_lat) - 1):
        a, b = (ring_lat[k], ring_lon[k]), (ring_lat[k + 1], ring_lon[k + 1])
        if a[0] == b[0]:
            continue
        between = (lat < a[0]) != (lat < b[0])
        crossing = a[1] + (lat - a[0]) / (b[0] - a[0]) * (b[1] - a[1])
        odd ^= between & (lon < crossing)
    return odd
