"""Stretches of strained or broken cells that touch in space and time, as events with extent, worst value and cause.

Made from states and flags as a day is kept, for any use.  Never sees an event in what is unseen.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.ndimage import distance_transform_edt, find_objects, label

from skylag.constants import KM_PER_DEG
from skylag.events import Event
from skylag.impact.states import carried, nearest_cells, with_its_sigma
from skylag.impact.uses import JudgedUse, owners
from skylag.tables import STATE_NAMES, STRAINED, UNSEEN, Bytes, Fields, Flag, Floats, Ints, Region

AS_STORED = "all corrections"  # name of the day's own states, by the region's thresholds


@dataclass(frozen=True)
class EventChoices:
    """What counts as one event.

    join_steps   calm epochs that may lie between two parts of one event
    least_cells  cell-epochs below which a stretch is left out
    """

    join_steps: int = 1
    least_cells: int = 4


def of_day(
    fields: Fields, flags: Sequence[Flag], region: Region, choices: EventChoices | None = None
) -> tuple[Event, ...]:
    """Events by the day's own states (`fields.state`)."""
    owner = np.maximum(owners(fields, flags, region), -1)
    return _events(AS_STORED, fields.state, owner, None, fields, flags, region, choices or EventChoices())


def of_use(
    judged: JudgedUse, fields: Fields, flags: Sequence[Flag], region: Region, choices: EventChoices | None = None
) -> tuple[Event, ...]:
    """Events by the states for a use."""
    return _events(
        judged.use.name, judged.states, judged.owner, judged.measure, fields, flags, region, choices or EventChoices()
    )


def _events(
    use: str, states: Bytes, owner: Ints, measure: Floats | None, fields: Fields, flags: Sequence[Flag],
    region: Region, choices: EventChoices,
) -> tuple[Event, ...]:  # fmt: skip
    """Stretches that touch, parted by the flag that explains them: a front and the patch behind it are two events.

    Cells that no flag explains go with the nearest explained cell of their stretch; a stretch without any is its own.
    """
    fields = carried(fields)  # what nobody saw is no worst value
    alarmed = states >= STRAINED
    bridged = alarmed.copy()
    for shift in range(2, choices.join_steps + 2):
        # A short calm gap of a cell joins what lies before and after, but is not itself counted as bad.
        for inside in range(1, shift):
            if len(alarmed) > shift:
                bridged[inside : len(alarmed) - shift + inside] |= alarmed[:-shift] & alarmed[shift:]
    marks, _ = label(bridged, structure=np.ones((3, 3, 3)))
    group = np.where(alarmed, -1 - marks, 0)  # stretches without a flag have negative numbers, flags positive ones
    for number, box in enumerate(find_objects(marks), start=1):
        mine = (marks[box] == number) & alarmed[box]
        explained = mine & (owner[box] >= 0)
        if not explained.any():
            continue
        nearest = distance_transform_edt(~explained, return_distances=False, return_indices=True)
        group[box] = np.where(mine, owner[box][tuple(nearest)] + 1, group[box])
    step = fields.times[1] - fields.times[0] if len(fields.times) > 1 else np.timedelta64(300, "s")
    found = []
    for name in np.unique(group[alarmed]):
        epochs, rows, columns = np.nonzero(group == name)
        if len(epochs) < choices.least_cells:
            continue
        box = tuple(slice(int(axis.min()), int(axis.max()) + 1) for axis in (epochs, rows, columns))
        lead = int(name) - 1 if name > 0 else None
        found.append(_event(use, box, group[box] == name, states, lead, measure, fields, flags, region, step))
    return tuple(sorted(found, key=lambda one: (one.start, one.lat, one.lon)))


def _event(
    use: str, box: Any, member: Any, states: Bytes, lead: int | None, measure: Floats | None, fields: Fields,
    flags: Sequence[Flag], region: Region, step: Any,
) -> Event:  # fmt: skip
    """One event from its cells."""
    touched = member.any(axis=0)
    epochs = np.flatnonzero(member.any(axis=(1, 2))) + box[0].start
    rows, columns = np.nonzero(touched)
    rows, columns = rows + box[1].start, columns + box[2].start
    start, end = fields.times[epochs[0]], fields.times[epochs[-1]] + step
    worst = int(states[box][member].max())
    behind = _behind(box, member, lead, fields, flags, start, end)
    height = np.where(member & (states[box] == worst), _height(box, measure, fields), -np.inf)
    at = np.unravel_index(int(np.argmax(height)), height.shape)
    place = tuple(int(part.start + where) for part, where in zip(box, at, strict=True))
    slope, sigma = float(fields.slope[place]), float(fields.slope_sigma[place])
    if lead is not None and not slope > flags[lead].slope_mm_per_km and np.isfinite(flags[lead].slope_mm_per_km):
        slope, sigma = flags[lead].slope_mm_per_km, flags[lead].sigma_mm_per_km
    cause = flags[lead].kind if lead is not None else "map"
    reason = flags[lead].evidence if lead is not None else (
        f"the map is steep over {int(touched.sum())} cells, up to {with_its_sigma(slope, sigma)} mm/km"
        if np.isfinite(slope) else f"slopes between receivers nearby reach over {int(touched.sum())} cells"
    )  # fmt: skip
    reason += _lost_sight(states, epochs, box, member)
    sides = fields.lats, fields.lons
    spacing = [abs(float(axis[1] - axis[0])) if len(axis) > 1 else region.step_deg for axis in sides]
    area = float((np.cos(np.radians(fields.lats[rows])) * spacing[0] * spacing[1]).sum() * KM_PER_DEG**2)
    return Event(
        use=use, start=start, end=end,
        south=float(fields.lats[rows].min()), north=float(fields.lats[rows].max()),
        west=float(fields.lons[columns].min()), east=float(fields.lons[columns].max()),
        lat=float(fields.lats[place[1]]), lon=float(fields.lons[place[2]]), worst_time=fields.times[place[0]],
        state=STATE_NAMES[worst], slope=slope, sigma=sigma, cells=int(touched.sum()), cell_epochs=int(member.sum()),
        area_km2=area, cause=cause, reason=reason, flags=tuple(behind),
        confirmed=any(flags[n].confirmed for n in behind), sites=_sites(box, touched, fields, region),
    )  # fmt: skip


def _lost_sight(states: Bytes, epochs: Ints, box: Any, member: Any) -> str:
    """Said of an event that ends because nobody looks any more: half or more of its last cells turn unseen."""
    last = int(epochs[-1])
    if last + 1 >= len(states):
        return ""
    cells = states[last + 1, box[1], box[2]][member[last - box[0].start]]
    lost = int((cells == UNSEEN).sum())
    return f"; {lost} of its last {len(cells)} cells turn unseen: it may have gone on" if 2 * lost >= len(cells) else ""


def _height(box: Any, measure: Floats | None, fields: Fields) -> Floats:
    """How bad each cell is by the map, finite everywhere: 0 where the map does not know."""
    values = fields.slope[box] if measure is None else measure[box]
    return np.nan_to_num(np.asarray(values, dtype=np.float64), nan=0.0)


def _behind(
    box: Any, member: Any, lead: int | None, fields: Fields, flags: Sequence[Flag], start: Any, end: Any
) -> list[int]:
    """Flags behind an event: the one that explains it, and slopes whose place lies in it while they last."""
    spoken = set() if lead is None else {lead}
    rows, columns = np.nonzero(member.any(axis=0))
    lats, lons = fields.lats[rows + box[1].start], fields.lons[columns + box[2].start]
    for number, flag in enumerate(flags):
        if flag.kind != "slope" or not (flag.start <= end and flag.end >= start):
            continue
        turn = (lons - flag.lon + 180.0) % 360.0 - 180.0
        apart = np.hypot(lats - flag.lat, turn * np.cos(np.radians(flag.lat))) * KM_PER_DEG
        if apart.min() <= 75.0:
            spoken.add(number)
    return sorted(spoken)


def _sites(box: Any, touched: Any, fields: Fields, region: Region) -> tuple[str, ...]:
    """Names of sites in the cells of an event."""
    if not region.sites:
        return ()
    lat = np.array([site.lat for site in region.sites], dtype=np.float64)
    lon = np.array([site.lon for site in region.sites], dtype=np.float64)
    row, column, inside = nearest_cells(fields, lat, lon)
    names = []
    for number, site in enumerate(region.sites):
        r, c = int(row[number]) - box[1].start, int(column[number]) - box[2].start
        if inside[number] and 0 <= r < touched.shape[0] and 0 <= c < touched.shape[1] and touched[r, c]:
            names.append(site.name)
    return tuple(names)
