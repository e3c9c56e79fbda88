"""Who stands behind what is said: single lines of sight near a place, and what each receiver gave day by day.

Chooses and thins what the archive holds; never computes a number that was not stored, and never encodes.
"""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from skylag.archive import DayRecord
from skylag.constants import L1_M_PER_TECU
from skylag.tables import Biases, Flag, Floats, Samples, Times
from skylag.web.nearby import great_circle_km

# A page draws a few curves well and a hundred badly.
MOST_SATELLITES = 4
MOST_OF_ONE_SATELLITE = 5
FEWEST_POINTS = 5
THIN_TO_S = 60.0
REACH_KM = 250.0


@dataclass(frozen=True)
class Sightline:
    """One receiver's line to one satellite over a span: vertical delay [m] at its pierce points.

    distance_km  nearest approach of the pierce point to the place asked about
    change_m     largest less smallest delay of the span
    """

    receiver: str
    satellite: str
    times: Times
    delay_m: Floats
    sigma_m: float
    lat: Floats
    lon: Floats
    elevation: float
    distance_km: float
    change_m: float


def near(samples: Samples, lat: float, lon: float) -> tuple[Sightline, ...]:
    """Lines that pass near a place, by satellite: those satellites first that change most, nearest lines of each first.

    The change is taken within arcs, so that a new level is no change; gaps between arcs stay gaps (NaN).
    """
    rays = samples.rays
    if not len(rays):
        return ()
    away_km = great_circle_km(rays.pierce_lat, rays.pierce_lon, lat, lon)
    every = max(1, round(THIN_TO_S / max(rays.interval_s, 1.0)))
    # The same epochs for every line, so that two receivers compare.
    _, epoch = np.unique(rays.time, return_inverse=True)
    key = rays.receiver * len(rays.satellites) + rays.satellite
    lines: list[Sightline] = []
    for one in np.unique(key[away_km <= REACH_KM]):
        rows = np.flatnonzero(key == one)
        rows = rows[np.argsort(rays.time[rows], kind="stable")]
        kept = rows[epoch[rows] % every == 0]
        if len(kept) < FEWEST_POINTS:
            continue
        delay = samples.vtec[kept] * L1_M_PER_TECU
        change = max(float(np.ptp(delay[rays.arc[kept] == arc])) for arc in np.unique(rays.arc[kept]))
        breaks = np.flatnonzero(np.diff(rays.arc[kept]) != 0) + 1
        lines.append(
            Sightline(
                receiver=rays.receivers[int(rays.receiver[kept[0]])].name,
                satellite=str(rays.satellites[int(rays.satellite[kept[0]])]),
                times=np.insert(rays.time[kept], breaks, rays.time[kept][breaks]),
                delay_m=np.insert(delay, breaks, np.nan),
                sigma_m=float(np.median(samples.sigma[kept])) * L1_M_PER_TECU,
                lat=np.insert(rays.pierce_lat[kept], breaks, np.nan),
                lon=np.insert(rays.pierce_lon[kept], breaks, np.nan),
                elevation=float(np.median(rays.elevation[kept])),
                distance_km=float(away_km[rows].min()),
                change_m=change,
            )
        )
    groups: dict[str, list[Sightline]] = {}
    for line in sorted(lines, key=lambda line: line.distance_km):
        groups.setdefault(line.satellite, []).append(line)
    # A satellite that two receivers see says more than one that a single receiver sees.
    worth = sorted(groups.values(), key=lambda g: (len(g) < 2, -max(line.change_m for line in g)))
    return tuple(line for group in worth[:MOST_SATELLITES] for line in group[:MOST_OF_ONE_SATELLITE])


@dataclass(frozen=True)
class ReceiverDay:
    """One receiver on one day.

    received           share of the day's epochs that it has data for; NaN where not told
    gaps, slips, resets  arcs that began so
    left_out_rms_tecu  how far the field of the others misses its lines of sight, NaN where not computed
    left_out_sigma_tecu  how far it may: what that field and the lines of sight state, more for a receiver far away
    faults             what was said of it by flags of the kind fault
    biases             (signal pair, value [ns], sigma [ns])
    """

    name: str
    received: float
    satellites: int | None
    rays: int | None
    arcs: int | None
    gaps: int | None
    slips: int | None
    resets: int | None
    level_sigma_tecu: float
    left_out_rms_tecu: float
    left_out_sigma_tecu: float
    faults: tuple[str, ...]
    biases: tuple[tuple[str, float, float], ...]


@dataclass(frozen=True)
class DayNetwork:
    """All receivers of one day."""

    region: str
    day: np.datetime64
    simulated: bool
    receivers: tuple[ReceiverDay, ...]


def network_of(record: DayRecord, biases: Biases, flags: Sequence[Flag]) -> DayNetwork:
    """The receivers of a stored day, in the order of their names."""
    counts = record.origin.counts
    facts = {str(one.get("receiver")): one for one in counts.get("by_receiver", ()) if isinstance(one, Mapping)}
    foretold = counts.get("receivers_left_out")
    foretold = foretold.get("by_receiver", {}) if isinstance(foretold, Mapping) else {}
    # Biases per few hours: the mean of a day's spans stands for the day.
    told: dict[str, dict[str, list[tuple[float, float]]]] = {}
    for n in np.flatnonzero(biases.kind == "receiver"):
        pair = f"{biases.system[n]} {biases.code1[n]}-{biases.code2[n]}"
        of_one = told.setdefault(str(biases.name[n]), {}).setdefault(pair, [])
        of_one.append((float(biases.value_ns[n]), float(biases.sigma_ns[n])))
    names = sorted({*facts, *(receiver.name for receiver in record.receivers)})
    return DayNetwork(
        region=record.head.region,
        day=record.head.day,
        simulated=record.origin.simulated,
        receivers=tuple(
            _receiver(name, facts.get(name, {}), foretold.get(name, {}), told.get(name, {}), flags) for name in names
        ),
    )


def _receiver(
    name: str,
    facts: Mapping[str, Any],
    foretold: Mapping[str, Any],
    told: Mapping[str, list[tuple[float, float]]],
    flags: Sequence[Flag],
) -> ReceiverDay:
    began = facts.get("arcs_began")
    began = began if isinstance(began, Mapping) else {}

    def count(table: Mapping[str, Any], key: str) -> int | None:
        return int(table[key]) if key in table else None

    epochs, interval_s = facts.get("epochs"), facts.get("interval_s")
    return ReceiverDay(
        name=name,
        received=min(1.0, epochs * interval_s / 86400.0) if epochs is not None and interval_s else math.nan,
        satellites=count(facts, "satellites"), rays=count(facts, "rays"), arcs=count(facts, "arcs"),
        gaps=count(began, "gap"), slips=count(facts, "slips"), resets=count(began, "reset"),
        level_sigma_tecu=float(facts.get("level_sigma_median_tecu", math.nan)),
        left_out_rms_tecu=float(foretold.get("rms_tecu", math.nan)),
        left_out_sigma_tecu=float(foretold.get("sigma_tecu", math.nan)),
        faults=tuple(flag.evidence for flag in flags if flag.kind == "fault" and name in flag.evidence),
        biases=tuple(
            (pair, float(np.mean([v for v, _ in spans])), float(np.mean([s for _, s in spans])))
            for pair, spans in sorted(told.items())
        ),
    )  # fmt: skip
