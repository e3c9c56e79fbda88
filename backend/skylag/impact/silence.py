"""Who was silent when, and for which places that counts: around a silent receiver nothing is said to hold.

Silent: a receiver that gave data before, and none for longer than a span.  Its neighbours may still look across the
places near it from afar, but what is small and near its ground would pass unnoticed.  A place goes with the receiver
nearest to itself, which may be another than that of the middle of its cell.  A day is kept with these spans as plain
facts (GPS time); one that was kept without them tells of no silence but in its maps.
"""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt

from skylag.ionosphere.geometry import geodetic
from skylag.tables import Bools, Floats, Ints, Receiver, Times

FACTS = "silent"  # among the counts of a day
SILENT = "has been silent since"


@dataclass(frozen=True)
class Span:
    """A receiver (its row number), since when it gave nothing, and the first and last map that finds it silent."""

    receiver: int
    since: np.datetime64
    first: np.datetime64
    last: np.datetime64


@dataclass(frozen=True)
class Silences:
    """The receivers of a day, lats and lons (R,) [deg], and the spans of their silence."""

    names: tuple[str, ...]
    lats: Floats
    lons: Floats
    spans: tuple[Span, ...]

    def nearest(self, lats: npt.ArrayLike, lons: npt.ArrayLike) -> Ints:
        """Row number of the receiver nearest to each place; of the shape of the places."""
        lat, lon = np.asarray(lats, dtype=np.float64)[..., None], np.asarray(lons, dtype=np.float64)[..., None]
        east = (lon - self.lons + 180.0) % 360.0 - 180.0
        return np.asarray(np.argmin(np.hypot(lat - self.lats, east * np.cos(np.radians(lat))), axis=-1))

    def over(self, lats: npt.ArrayLike, lons: npt.ArrayLike, times: Times) -> Bools:
        """(T, *places) whether the receiver nearest to a place is silent at a time."""
        shape = np.broadcast_shapes(np.shape(lats), np.shape(lons))
        found: Bools = np.zeros((len(times), *shape), dtype=bool)
        if self.spans:
            nearest = self.nearest(lats, lons)
            for span in self.spans:
                now = (times >= span.first) & (times <= span.last)
                found |= now.reshape(-1, *(1 for _ in shape)) & (nearest == span.receiver)
        return found

    def told(self, lat: float, lon: float, times: Times) -> list[str]:
        """Per time the sentence on a silent receiver nearest to a place, "" where it is not."""
        said = [""] * len(times)
        nearest = int(self.nearest(lat, lon)) if self.spans else -1
        for span in self.spans:
            if span.receiver == nearest:
                since = np.datetime_as_string(span.since, unit="m")
                for row in np.flatnonzero((times >= span.first) & (times <= span.last)):
                    said[row] = f"{self.names[nearest]}, the nearest receiver, {SILENT} {since} GPS time"
        return said


def find(receivers: Sequence[Receiver], data: Sequence[Times], times: Times, limits: Sequence[Any]) -> Silences:
    """The silences of a day.

    data  per receiver the times of its data, sorted; times (T,) of the maps; limits: per receiver the span
    """
    spans: list[Span] = []
    for number, had in enumerate(data):
        before = np.searchsorted(had, times, side="right") - 1
        known = before >= 0
        since = np.where(known, had[before] if len(had) else np.datetime64("NaT"), np.datetime64("NaT", "ns"))
        silent = known & (times - since > limits[number])
        edges = np.flatnonzero(np.diff(np.concatenate([[False], silent, [False]]).astype(np.int8)))
        for first, last in pairwise(edges.tolist()):
            if not silent[first]:
                continue
            # Of one run, each stretch with data of its own before it.
            anew = first + 1 + np.flatnonzero(since[first + 1 : last] != since[first : last - 1])
            cuts = [first, *anew.tolist(), last]
            spans += [Span(number, since[a], times[a], times[b - 1]) for a, b in pairwise(cuts)]
    return _of(receivers, spans)


def facts(silences: Silences) -> list[dict[str, str]]:
    """What a day is kept with."""
    return [
        {"receiver": silences.names[one.receiver], "since": str(one.since), "first": str(one.first),
         "last": str(one.last)}
        for one in silences.spans
    ]  # fmt: skip


def of_facts(counts: Mapping[str, Any], receivers: Sequence[Receiver]) -> Silences:
    """The silences among the facts of a kept day."""
    number = {receiver.name: row for row, receiver in enumerate(receivers)}
    spans = [
        Span(number[row["receiver"]], *(np.datetime64(row[name], "ns") for name in ("since", "first", "last")))
        for row in counts.get(FACTS, ()) if row["receiver"] in number
    ]  # fmt: skip
    return _of(receivers, spans)


def _of(receivers: Sequence[Receiver], spans: Iterable[Span]) -> Silences:
    places = np.array([geodetic(np.asarray(one.position_m))[:2] for one in receivers], dtype=np.float64).reshape(-1, 2)
    return Silences(tuple(one.name for one in receivers), places[:, 0], places[:, 1], tuple(spans))
