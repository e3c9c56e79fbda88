"""Nouns of what happens: ragged patches, arrivals of fronts, receivers at fault, and events in a day's states.

Never finds or writes one itself: see `irregularity`, `fronts` and `faults` in `ionosphere`, `impact.events`,
`formats.events`.
"""

from dataclasses import dataclass

import numpy as np

from skylag.errors import Refused
from skylag.tables import FLAG_KINDS, STATE_NAMES, Floats, Ints, Times


@dataclass(frozen=True)
class Patch:
    """A place and span where content fluctuates: irregular, not merely steep.

    index [TECU/min]: the highest and the median ROTI inside; radius_km holds nine tenths of the ragged windows;
    slips and losses: arcs broken and signals lost inside; planar: (chi-square, limit) of the planar fit around it,
    NaN where too few; drift [m/s] and direction [deg, toward] are NaN where they cannot be told.
    """

    start: np.datetime64
    end: np.datetime64
    lat: float
    lon: float
    radius_km: float
    index_highest: float
    index_median: float
    windows: int
    receivers: tuple[str, ...]
    satellites: tuple[str, ...]
    slips: int
    losses: int
    planar: tuple[float, float]
    drift_m_s: float
    drift_sigma_m_s: float
    drift_heading_deg: float
    confirmed: bool
    window_time: Times  # middles of the ragged windows
    window_lat: Floats
    window_lon: Floats


@dataclass(frozen=True)
class Patches:
    """All patches of a day, the ragged windows behind them, and the index over the whole day.

    times (B,) starts of 5-minute windows; index (B, C) ROTI [TECU/min] per line of sight, NaN where unknown;
    receiver, satellite (C,); lat, lon (B, C) pierce points; aatr (receivers, hours) [TECU/min].
    """

    patches: tuple[Patch, ...]
    times: Times
    receiver: Ints
    satellite: Ints
    index: Floats
    lat: Floats
    lon: Floats
    aatr: Floats
    breaks: Ints  # (B, receivers) arcs broken without a long silence
    losses: Ints  # (B, receivers) signals lost above the elevation limit


@dataclass(frozen=True)
class Arrival:
    """When a front is expected at a place, said at `made` from what was seen until then; and what came of it.

    sigma_s is the spread; `seen` is when it did pass (NaT when nobody saw), came_true None while unknown.
    """

    front: int
    place: str
    made: np.datetime64
    expected: np.datetime64
    sigma_s: float
    seen: np.datetime64
    came_true: bool | None


@dataclass(frozen=True)
class Fault:
    """A receiver whose data disagree with its neighbours for a span: never weather."""

    start: np.datetime64
    end: np.datetime64
    receiver: str
    lat: float
    lon: float
    why: str


@dataclass(frozen=True)
class Event:
    """A stretch of strained or broken cells that touch in space and time.

    use          name of the use it is judged for
    start, end   GPS time; south, north, west, east [deg] of the middles of its cells
    lat, lon, worst_time   where and when it is worst; state: the worst
    slope, sigma [mm/km] of the worst witness, NaN where there is none
    cells, cell_epochs, area_km2   cells ever touched, cells times epochs, ground they cover
    cause        of FLAG_KINDS, or "map" where the map alone says so; reason: the sentence
    flags        row numbers of the day's flags that stand behind it; confirmed: one of them is confirmed
    sites        names of the sites it reaches
    """

    use: str
    start: np.datetime64
    end: np.datetime64
    south: float
    north: float
    west: float
    east: float
    lat: float
    lon: float
    worst_time: np.datetime64
    state: str
    slope: float
    sigma: float
    cells: int
    cell_epochs: int
    area_km2: float
    cause: str
    reason: str
    flags: tuple[int, ...]
    confirmed: bool
    sites: tuple[str, ...]

    def __post_init__(self) -> None:
        for held, rule in (
            (self.state in STATE_NAMES[2:], "an event is strained or broken"),
            (self.cause in (*FLAG_KINDS, "map"), f"cause must be map or one of {FLAG_KINDS}"),
            (self.start < self.end, "an event must last"),
        ):
            if not held:
                raise Refused(f"Event: {rule}", name="Event", allowed=rule)
