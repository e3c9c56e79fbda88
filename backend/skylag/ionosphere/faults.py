"""Receivers whose data part from their neighbours': slip storms, raggedness and levels that nobody else saw.

Weather is shared by neighbours; a fault is not.  Each test asks that one receiver stands out while the others are calm
at the same time, so that a storm over the whole network blames nobody.  Never repairs or removes anything.
"""

from dataclasses import dataclass

import numpy as np

from skylag.constants import KM_PER_DEG
from skylag.events import Fault, Patches
from skylag.ionosphere.field import plane_km
from skylag.ionosphere.sightlines import lay_out, middle
from skylag.tables import Bools, Floats, Fronts, Ints, Rays, Samples, Slopes

WINDOW_S = 300.0


@dataclass(frozen=True)
class FaultChoices:
    """When a receiver is called at fault.

    storm_breaks     arcs broken within half an hour, and `storm_times` more than the second worst receiver's and than
                     its own through the day
    chronic_breaks   arcs broken in a day, and `storm_times` more than the usual receiver's
    alone_pairs      steep pair slopes within a window that all include the receiver
    same_place_km    and another receiver's line of sight, whose pierce point is that near, says otherwise by level_tecu
    absent_share, absent_s  lines of sight fewer than this share of the usual receiver's, for so long
    ragged_share     share of its windows that are ragged, while of the others' fewer than calm_share are
    ragged_s         for at least so long: a wall passes sooner, and over an outer receiver alone
    level_tecu       its vertical level against a plane through the others', and level_times the second worst
    level_s          for at least so long
    join_s           spans nearer than this are one
    """

    storm_breaks: int = 8
    storm_times: float = 3.0
    chronic_breaks: int = 60
    alone_pairs: int = 8
    same_place_km: float = 100.0
    absent_share: float = 0.35
    absent_s: float = 900.0
    ragged_tecu_min: float = 0.5
    ragged_share: float = 0.5
    calm_share: float = 0.1
    ragged_s: float = 900.0
    level_tecu: float = 4.0
    level_times: float = 2.5
    level_s: float = 1200.0
    join_s: float = 1800.0


def find(
    rays: Rays,
    samples: Samples,
    patches: Patches,
    slopes: Slopes | None = None,
    fronts: Fronts | None = None,
    choices: FaultChoices | None = None,
) -> tuple[Fault, ...]:
    """Faults of a network day; none where fewer than three receivers leave nobody to compare with."""
    choices = choices or FaultChoices()
    if len(rays.receivers) < 3 or len(patches.times) == 0:
        return ()
    storm = _slip_storms(patches.breaks, choices)
    ragged = _ragged_alone(patches, len(rays.receivers), choices)
    level, size = _level_alone(rays, samples, patches, choices)
    absent = _absent_alone(rays, patches, choices)
    apart = _slopes_alone(slopes, fronts, patches, len(rays.receivers), choices)
    apart &= _contradicted(apart, rays, samples, patches, choices)
    x, y, z = np.array([receiver.position_m for receiver in rays.receivers]).T
    lat, lon = np.degrees(np.arctan2(z, np.hypot(x, y))), np.degrees(np.arctan2(y, x))
    faults = []
    total = np.where(storm, 0, patches.breaks).sum(axis=0)
    chronic = total > np.maximum(choices.chronic_breaks, choices.storm_times * np.median(total))
    for number in np.flatnonzero(chronic).tolist():
        name = rays.receivers[number].name
        faults.append(Fault(
            start=patches.times[0],
            end=patches.times[-1] + np.timedelta64(round(WINDOW_S), "s"),
            receiver=name,
            lat=float(lat[number]),
            lon=float(lon[number]),
            why=f"{name}: {int(total[number])} arcs broken through the day, the usual receiver {np.median(total):.0f}",
        ))  # fmt: skip
    for number, receiver in enumerate(rays.receivers):
        for first, last in _spans((storm | ragged | level | apart | absent)[:, number], choices.join_s):
            window = slice(first, last + 1)
            reasons = []
            if storm[window, number].any():
                reasons.append(f"{int(patches.breaks[window, number].sum())} broken arcs")
            if ragged[window, number].any():
                reasons.append("phases ragged on most of its lines of sight")
            if absent[window, number].any():
                reasons.append("no or hardly any usable lines of sight")
            if apart[window, number].any():
                reasons.append("every steep slope seen includes it")
            if level[window, number].any():
                reasons.append(f"level off by {np.nanmax(np.abs(size[window, number])):.0f} TECU")
            faults.append(Fault(
                start=patches.times[first],
                end=patches.times[last] + np.timedelta64(round(WINDOW_S), "s"),
                receiver=receiver.name,
                lat=float(lat[number]),
                lon=float(lon[number]),
                why=f"{receiver.name}: {', '.join(reasons)}, while its neighbours are calm",
            ))  # fmt: skip
    return tuple(sorted(faults, key=lambda fault: fault.start))


def _second(values: Floats | Ints) -> Floats:
    """Largest of the other receivers, for each receiver (B, R)."""
    ordered = np.sort(values, axis=1)
    top, next_one = ordered[:, -1:], ordered[:, -2:-1]
    return np.asarray(np.where(values == top, next_one, top), dtype=np.float64)


def _slip_storms(breaks: Ints, choices: FaultChoices) -> Bools:
    """(B, R) windows in whose half hour the receiver breaks many arcs and no other does."""
    size = max(1, round(1800.0 / WINDOW_S))
    padded = np.vstack([np.zeros((size // 2, breaks.shape[1]), dtype=np.int64), breaks,
                        np.zeros((size - size // 2, breaks.shape[1]), dtype=np.int64)])  # fmt: skip
    running = np.cumsum(padded, axis=0)
    total = (running[size:] - running[:-size])[: len(breaks)]
    own = (total >= choices.storm_breaks) & (total > choices.storm_times * _second(total))
    own &= total > choices.storm_times * total.mean(axis=0, keepdims=True)
    return np.asarray(own & (breaks > 0))


def _slopes_alone(
    slopes: Slopes | None, fronts: Fronts | None, patches: Patches, receivers: int, choices: FaultChoices
) -> Bools:
    """(B, R) windows where steep slopes to several neighbours, on several satellites, all include one receiver.

    Slopes on lines of sight that a front is crossing blame nobody: it reaches an outer receiver alone at first.
    """
    off = np.zeros((len(patches.times), receivers), dtype=bool)
    if slopes is None or len(slopes) == 0:
        return off
    pair = (slopes.other >= 0) & ~_crossed(slopes, fronts)
    window = np.clip(np.searchsorted(patches.times, slopes.time[pair], side="right") - 1, 0, len(patches.times) - 1)
    satellites = int(slopes.satellite.max()) + 1
    count = np.zeros((len(patches.times), receivers, satellites))
    np.add.at(count, (window, slopes.receiver[pair], slopes.satellite[pair]), 1)
    np.add.at(count, (window, slopes.other[pair], slopes.satellite[pair]), 1)
    total = count.sum(axis=2)
    all_pairs = total.sum(axis=1, keepdims=True) / 2.0
    # A wall is between many receivers; whoever is in every pair of the window stands alone.
    several = (count > 0).sum(axis=2) >= 2
    return np.asarray(several & (total >= choices.alone_pairs) & (total >= 0.95 * all_pairs))


def _contradicted(apart: Bools, rays: Rays, samples: Samples, patches: Patches, choices: FaultChoices) -> Bools:
    """(B, R) windows of `apart` in which others looked at the same place and saw something else.

    In a wide network a front may reach one receiver's lines of sight alone: whoever has no neighbour that looked where
    it looked cannot be contradicted, and is not blamed.  Most of its lines that have such a neighbour must differ from
    the nearest one, on two satellites at least.
    """
    told = np.zeros(apart.shape, dtype=bool)
    middle_ns = np.timedelta64(round(WINDOW_S * 0.5e9), "ns")
    half = np.timedelta64(round(max(0.5 * rays.interval_s, 0.5) * 1e9), "ns")
    order = np.argsort(rays.time, kind="stable")
    ordered = rays.time[order]
    for window in np.flatnonzero(apart.any(axis=1)):
        moment = patches.times[window] + middle_ns
        first, last = np.searchsorted(ordered, [moment - half, moment + half])
        now = order[first:last]
        now = now[rays.elevation[now] >= 20.0]
        for receiver in np.flatnonzero(apart[window]):
            own, others = now[rays.receiver[now] == receiver], now[rays.receiver[now] != receiver]
            if len(own) == 0 or len(others) == 0:
                continue
            turn = (rays.pierce_lon[own][:, None] - rays.pierce_lon[others][None, :] + 180.0) % 360.0 - 180.0
            north = rays.pierce_lat[own][:, None] - rays.pierce_lat[others][None, :]
            away = np.hypot(north, turn * np.cos(np.radians(rays.pierce_lat[own]))[:, None]) * KM_PER_DEG
            nearest = others[away.argmin(axis=1)]
            beside = away.min(axis=1) <= choices.same_place_km
            differs = np.abs(samples.vtec[own] - samples.vtec[nearest]) > choices.level_tecu
            told[window, receiver] = (
                beside.any() and differs[beside].mean() > 0.5
                and len(np.unique(rays.satellite[own[beside & differs]])) >= 2
            )  # fmt: skip
    return told


def _crossed(slopes: Slopes, fronts: Fronts | None) -> Bools:
    """Witnesses on a line of sight that belongs to a front, within half an hour of its crossing."""
    crossed = np.zeros(len(slopes), dtype=bool)
    if fronts is None:
        return crossed
    onsets = fronts.onsets.where(fronts.onsets.front >= 0)
    near = np.timedelta64(1800, "s")
    for receiver, satellite, time in zip(onsets.receiver, onsets.satellite, onsets.time, strict=True):
        rows = (slopes.satellite == satellite) & ((slopes.receiver == receiver) | (slopes.other == receiver))
        crossed |= rows & (np.abs(slopes.time - time) <= near)
    return crossed


def _absent_alone(rays: Rays, patches: Patches, choices: FaultChoices) -> Bools:
    """(B, R) windows of a silence: a receiver has few usable lines of sight where the others have their usual number.

    An outage and data too wild for any arc look alike here.
    """
    shape = (len(patches.times), len(rays.receivers))
    window = np.clip(np.searchsorted(patches.times, rays.time, side="right") - 1, 0, shape[0] - 1)
    high = rays.elevation >= 20.0
    count = np.bincount(window[high] * shape[1] + rays.receiver[high], minlength=shape[0] * shape[1]).reshape(shape)
    usual = np.median(count, axis=1, keepdims=True)
    few = (count < choices.absent_share * usual) & (usual > 0)
    few &= few.sum(axis=1, keepdims=True) <= max(1, shape[1] // 4)
    return _lasting(few, choices.absent_s)


def _ragged_alone(patches: Patches, receivers: int, choices: FaultChoices) -> Bools:
    """(B, R) windows where most lines of a receiver are ragged and hardly any of the others'."""
    with np.errstate(invalid="ignore"):
        high = patches.index >= choices.ragged_tecu_min
    known = np.isfinite(patches.index)
    owner = (patches.receiver[:, None] == np.arange(receivers)[None, :]).astype(np.int64)
    ragged, seen = high.astype(np.int64) @ owner, known.astype(np.int64) @ owner
    others_ragged, others_seen = ragged.sum(axis=1, keepdims=True) - ragged, seen.sum(axis=1, keepdims=True) - seen
    share = ragged / np.maximum(seen, 1)
    others = others_ragged / np.maximum(others_seen, 1)
    alone = (seen >= 3) & (share >= choices.ragged_share) & (others_seen >= 6) & (others <= choices.calm_share)
    return _lasting(alone, choices.ragged_s)


def _level_alone(rays: Rays, samples: Samples, patches: Patches, choices: FaultChoices) -> tuple[Bools, Floats]:
    """(B, R) windows where a receiver's level is off a plane through the others', and by how much [TECU].

    The level of a receiver is the median over its satellites of its content less the network's median for that
    satellite; the plane leaves the receiver itself out.
    """
    receivers = len(rays.receivers)
    blocks = len(patches.times)
    off, size = np.zeros((blocks, receivers), dtype=bool), np.full((blocks, receivers), np.nan)
    if receivers < 6:
        return off, size
    lines = lay_out(rays, WINDOW_S)
    vtec = lines.layer(np.where(rays.elevation >= 20.0, samples.vtec, np.nan))
    dense = np.full((len(lines.times), len(rays.satellites), receivers), np.nan)
    dense[:, lines.satellite, lines.receiver] = vtec
    ordered = np.sort(dense, axis=2)
    known = np.isfinite(ordered).sum(axis=2)
    usual = np.take_along_axis(ordered, (np.maximum(known - 1, 0) // 2)[..., None], axis=2)
    departure = np.sort(np.where((known >= 5)[..., None], dense - usual, np.nan), axis=1)
    count = np.isfinite(departure).sum(axis=1)
    level = np.take_along_axis(departure, (np.maximum(count - 1, 0) // 2)[:, None, :], axis=1)[:, 0, :]
    level[count < 4] = np.nan
    x, y, z = np.array([receiver.position_m for receiver in rays.receivers]).T
    east, north = plane_km(np.degrees(np.arctan2(z, np.hypot(x, y))), np.degrees(np.arctan2(y, x)), middle(rays))
    design = np.stack([np.ones(receivers), east / 100.0, north / 100.0], axis=1)
    weight = np.isfinite(level).astype(np.float64)
    normal = np.einsum("br,ri,rj->bij", weight, design, design) + 1e-6 * np.eye(3)
    inverse = np.linalg.inv(normal)
    plane = np.einsum("bij,br,rj->bi", inverse, np.nan_to_num(level), design)
    share = np.einsum("ri,bij,rj->br", design, inverse, design)
    left_out = (level - plane @ design.T) / np.maximum(1.0 - share, 0.1)
    left_out[weight.sum(axis=1) < 6] = np.nan
    height = np.nan_to_num(np.abs(left_out))
    bad = (height > choices.level_tecu) & (height > choices.level_times * _second(np.nan_to_num(np.abs(level))))
    at = np.clip(np.searchsorted(patches.times, lines.times, side="right") - 1, 0, blocks - 1)
    off[at] = bad
    size[at] = left_out
    return _lasting(off, choices.level_s), size


def _lasting(flags: Bools, least_s: float) -> Bools:
    """The stretches of True (B, R) that last so long."""
    lasting = np.array(flags)
    least = max(1, round(least_s / WINDOW_S))
    for number in range(flags.shape[1]):
        for first, last in _spans(flags[:, number], WINDOW_S):
            if last - first + 1 < least:
                lasting[first : last + 1, number] = False
    return lasting


def _spans(flags: Bools, join_s: float) -> list[tuple[int, int]]:
    """First and last windows of stretches of True, those nearer than join_s taken as one."""
    at = np.flatnonzero(flags)
    if len(at) == 0:
        return []
    cuts = np.flatnonzero(np.diff(at) * WINDOW_S > join_s)
    return [(int(part[0]), int(part[-1])) for part in np.split(at, cuts + 1)]
