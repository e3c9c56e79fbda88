"""Events, and arrivals of fronts, as files for people who script: CSV, GeoJSON (RFC 7946) and JSON.

Times leave as UTC, unknown numbers as empty cells or null.  Never decides what an event is.
"""

import csv
import io
import json
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from skylag.events import Arrival, Event
from skylag.formats.delimited import harmless, utc_text

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
        writer.writerow({key: harmless("" if value is None else value) for key, value in row.items()})
    return out.getvalue()


def to_geojson(events: Sequence[Event], about: Mapping[str, Any]) -> str:
    """A feature per event: the box around the middles of its cells, longitude first, from -180 to 180.

    A box across the antimeridian is cut there in two, so that no part crosses it (RFC 7946, section 3.1.9); its `bbox`
    then has a western edge greater than the eastern one (section 5.2).  about: members of the collection, such as
    `simulated` and `caution`.
    """
    features = [
        {"type": "Feature", "bbox": _bounds(event), "geometry": _shape(event), "properties": facts(event)}
        for event in events
    ]
    return json.dumps({"type": "FeatureCollection", **about, "features": features}, allow_nan=False)


def _bounds(event: Event) -> list[float]:
    """West, south, east, north [deg]; west is greater than east where the antimeridian lies between."""
    west, east = _spans(event)[0][0], _spans(event)[-1][1]
    return [west, round(event.south, 3), east, round(event.north, 3)]


def _spans(event: Event) -> list[tuple[float, float]]:
    """Spans of longitude [deg] within -180 to 180 that an event covers, west to east: one, or two where it is cut."""
    width = event.east - event.west
    if width >= 360.0:
        return [(-180.0, 180.0)]
    west = (event.west + 180.0) % 360.0 - 180.0
    east = west + width
    if width > 0.0 and east > 180.0:
        return [(round(west, 3), 180.0), (-180.0, round(east - 360.0, 3))]
    return [(round(west, 3), round(east, 3))]


def _shape(event: Event) -> dict[str, Any]:
    """The box as GeoJSON: a polygon, or a line or point where it has one row or one cell; several parts where cut."""
    s, n = round(event.south, 3), round(event.north, 3)
    spans = _spans(event)
    parts: list[Any]
    if s == n and event.west == event.east:
        return {"type": "Point", "coordinates": [spans[0][0], s]}
    if s == n or event.west == event.east:
        whole, parts = "LineString", [[[w, s], [e, n]] for w, e in spans]
    else:  # the outer ring runs against the clock (section 3.1.6)
        whole, parts = "Polygon", [[[[w, s], [e, s], [e, n], [w, n], [w, s]]] for w, e in spans]
    if len(parts) == 1:
        return {"type": whole, "coordinates": parts[0]}
    return {"type": f"Multi{whole}", "coordinates": parts}


def line(lons: Sequence[float], lats: Sequence[float]) -> dict[str, Any]:
    """A track [deg] as GeoJSON, cut where it crosses the antimeridian: there two parts meet at 180 and -180."""
    parts: list[list[list[float]]] = [[]]
    before: tuple[float, float] | None = None
    for lon, lat in zip(lons, lats, strict=True):
        here = (float(lon) + 180.0) % 360.0 - 180.0
        if before is not None and abs(here - before[0]) > 180.0:
            side = 180.0 if before[0] > 0.0 else -180.0
            share = (side - before[0]) / (here + 2.0 * side - before[0])
            crossing = round(before[1] + share * (float(lat) - before[1]), 4)
            parts[-1].append([side, crossing])
            parts.append([[-side, crossing]])
        parts[-1].append([round(here, 4), round(float(lat), 4)])
        before = here, float(lat)
    if len(parts) == 1:
        return {"type": "LineString", "coordinates": parts[0]}
    return {"type": "MultiLineString", "coordinates": parts}


def to_json(events: Sequence[Event], about: Mapping[str, Any]) -> str:
    """A list of objects under `events`, beside the members of `about`."""
    return json.dumps({**about, "events": [facts(event) for event in events]}, allow_nan=False)


ARRIVAL_COLUMNS = ("flag", "site", "made_utc", "expected_utc", "sigma_s", "seen_utc", "came_true")


def arrival_facts(arrival: Arrival, flag_rows: Sequence[int]) -> dict[str, Any]:
    """One forecast; None for what nobody saw.  flag_rows: row numbers of the day's flags that are its fronts."""
    known = arrival.front < len(flag_rows)
    return {
        "flag": flag_rows[arrival.front] if known else None, "site": arrival.place,
        "made_utc": utc_text(arrival.made), "expected_utc": utc_text(arrival.expected),
        "sigma_s": _round(arrival.sigma_s, 0), "seen_utc": None if np.isnat(arrival.seen) else utc_text(arrival.seen),
        "came_true": arrival.came_true,
    }  # fmt: skip


def arrivals_to_csv(arrivals: Sequence[Arrival], flag_rows: Sequence[int]) -> str:
    """One row per forecast; came_true is empty while unknown."""
    out = io.StringIO()
    writer = csv.DictWriter(out, ARRIVAL_COLUMNS, lineterminator="\n")
    writer.writeheader()
    for arrival in arrivals:
        row = arrival_facts(arrival, flag_rows)
        row["came_true"] = "" if arrival.came_true is None else str(arrival.came_true).lower()
        writer.writerow({key: harmless("" if value is None else value) for key, value in row.items()})
    return out.getvalue()


def arrivals_to_json(arrivals: Sequence[Arrival], flag_rows: Sequence[int], about: Mapping[str, Any]) -> str:
    """How many were told, could be checked and came true within two sigmas; a list of objects under `arrivals`; and
    the members of `about`.
    """
    checked = [one for one in arrivals if one.came_true is not None]
    table = [arrival_facts(arrival, flag_rows) for arrival in arrivals]
    return json.dumps({
        **about, "told": len(arrivals), "checked": len(checked),
        "came_true": sum(1 for one in checked if one.came_true), "arrivals": table,
    }, allow_nan=False)  # fmt: skip


def _round(value: float, digits: int) -> float | None:
    return round(float(value), digits) if np.isfinite(value) else None
