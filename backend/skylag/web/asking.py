"""What a request asks for, from the text of its address: days, instants, boxes, layers.

Instants in addresses are UTC, ISO 8601; inside they are GPS time.  A wrong one is refused in words.
"""

from datetime import UTC, datetime

import numpy as np

from skylag import timescales
from skylag.errors import Refused
from skylag.web import payloads


def instant(text: str, name: str) -> np.datetime64:
    """GPS time of a UTC instant like 2031-05-11T05:30:00Z; no zone means UTC."""
    try:
        # A plus sign in an address that was not escaped arrives as a space.
        when = datetime.fromisoformat(text.strip().replace(" ", "+") if text.count(":") > 2 else text.strip())
        if when.tzinfo is not None:
            when = when.astimezone(UTC).replace(tzinfo=None)
        if not 1980 <= when.year <= 2200:
            raise ValueError(text)
    except (ValueError, OverflowError) as cause:
        raise Refused(
            f"{name}={text}: an instant is written in UTC like 2031-05-11T05:30:00Z, from 1980 to 2200",
            name=name, value=text, allowed="ISO 8601, UTC",
        ) from cause  # fmt: skip
    return np.datetime64(timescales.utc_to_gps(np.datetime64(when, "us").astype("datetime64[ns]")).item(), "ns")


def day(text: str) -> str:
    """A GPS-time day like 2031-05-11."""
    try:
        if len(text) != 10:
            raise ValueError(text)
        return str(np.datetime64(text, "D"))
    except ValueError as cause:
        raise Refused(
            f"day {text}: a day is written like 2031-05-11", name="day", value=text, allowed="YYYY-MM-DD"
        ) from cause


def layers(text: str) -> tuple[str, ...]:
    """Names of map layers, separated by commas; every one must be in the vocabulary of maps."""
    names = tuple(dict.fromkeys(part.strip() for part in text.split(",") if part.strip()))
    for name in names:
        if name not in payloads.LAYERS:
            raise Refused(
                f"layers={name}: there is no such layer; choose from {', '.join(payloads.LAYERS)}",
                name="layers", value=name, allowed=tuple(payloads.LAYERS),
            )  # fmt: skip
    return names or payloads.USUAL_LAYERS


def place(lat: float, lon: float) -> tuple[float, float]:
    """A place in degrees; latitude from -90 to 90, longitude from -180 to 360."""
    return (_within("lat", lat, -90.0, 90.0), _within("lon", lon, -180.0, 360.0))


def box(south: float, north: float, west: float, east: float) -> tuple[float, float, float, float]:
    """A box in degrees: south below north, west below east."""
    _within("south", south, -90.0, 90.0)
    _within("north", north, -90.0, 90.0)
    _within("west", west, -180.0, 360.0)
    _within("east", east, -180.0, 540.0)
    if not (south < north and west < east <= west + 360.0):
        raise Refused(
            f"box {south}, {north}, {west}, {east}: south must be below north, west below east, at most 360 apart",
            name="box", value=[south, north, west, east], allowed="south < north, west < east",
        )  # fmt: skip
    return south, north, west, east


def _within(name: str, value: float, low: float, high: float) -> float:
    if not low <= value <= high:
        raise Refused(
            f"{name}={value}: must be from {low:g} to {high:g}",
            name=name, value=str(value), allowed=f"{low:g} to {high:g}",
        )  # fmt: skip
    return value
