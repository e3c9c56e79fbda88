"""Events as files for people who script: CSV, GeoJSON (RFC 7946) and JSON.

Times leave as UTC, unknown numbers as empty cells or null.  Never decides what an event is.
"""

import csv
import io
import json
from collections.abc import Sequence
from typing import Any

import numpy as np

from skylag.events import Event
from skylag.formats.delimited import utc_text

COLUMNS = ("use", "start_utc", "end_utc", "state", "cause", "confirmed", "south_deg", "north_deg", "west_deg",
           "east_deg", "worst_lat_deg", "worst_lon_deg", "worst_utc", "slope_mm_per_km", "sigma_mm_per_km", "cells",
           "cell_epochs", "area_km2", "sites", "flags", "reason")  # fmt: skip


def facts(event: Event) -> dict[str, Any]:
    """One event with the names and units it leaves by; None for what is not known."""
    return {
        "use": event.use, "start_utc": utc_text(event.start), "end_utc": utc_text(event.end), "state": event.state,
        "cause": event.cause, "confirmed": event.confirmed, "south_deg": _round(event.south, 3),
        "north_deg": _round(event.north, 3), "west_deg": _round(event.west, 3), "east_deg": _round(event.east, 3),
        "worst_lat_deg": _round(event.lat, 3), "worst_lon_deg": _round(event.lon, 3),
        "worst_utc": utc_text(event.worst_time), "slope_mm_per_km": _round(event.slope, 1),
        "sigma_mm_per_km": _round(event.sigma, 1), "cells": event.cells, "cell_epochs": event.cell_epochs,
        "area_km2": _round(event.area_km2, 0), "sites": list(event.sites), "flags": list(event.flags),
        "reason": event.reason,
    }  # fmt: skip


def to_csv(events: Sequence[Event]) -> str:
    """One row per event; sites and rows of the day's flags are separated by semicolons."""
    out = io.StringIO()
    writer = csv.DictWriter(out, COLUMNS, lineterminator="\n")
    writer.writeheader()
    for event in events:
        row = facts(event)
        row["confirmed"] = "true" if event.confirmed else "false"
        row["sites"] = ";".join(event.sites)
        row["flags"] = ";".join(str(number) for number in event.flags)
        writer.writerow({key: _harmless("" if value is None else value) for key, value in row.items()})
    return out.getvalue()


def to_geojson(events: Sequence[Event], simulated: bool) -> str:
    """A feature per event: the box around the middles of its cells, longitude first; east past 180 is cut by nobody."""
    features = []
    for event in events:
        s, n, w, e = (_round(v, 3) for v in (event.south, event.north, event.west, event.east))
        box = [[[w, s], [e, s], [e, n], [w, n], [w, s]]]
        geometry: dict[str, Any] = {"type": "Polygon", "coordinates": box}
        if s == n or w == e:  # one row or one cell of the map has no area
            geometry = {"type": "Point", "coordinates": [w, s]}
            if (s, w) != (n, e):
                geometry = {"type": "LineString", "coordinates": [[w, s], [e, n]]}
        features.append({"type": "Feature", "geometry": geometry, "properties": facts(event)})
    return json.dumps({"type": "FeatureCollection", "simulated": simulated, "features": features}, allow_nan=False)


def to_json(events: Sequence[Event], simulated: bool) -> str:
    """A list of objects under `events`."""
    return json.dumps({"simulated": simulated, "events": [facts(event) for event in events]}, allow_nan=False)


def _round(value: float, digits: int) -> float | None:
    return round(float(value), digits) if np.isfinite(value) else None


def _harmless(value: Any) -> Any:
    """Text that a spreadsheet would take for a formula gets a leading apostrophe."""
    return "'" + value if isinstance(value, str) and value[:1] in ("=", "+", "@", "-", "\t") else value
