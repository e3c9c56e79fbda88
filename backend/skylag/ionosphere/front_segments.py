"""How a front's speed and heading change on its way: its line fitted anew in stretches of half an hour.

Each stretch starts from what the whole way says and leaves it only as far as its own lines of sight insist.  A wall
that changes its speed at once is found as two; where their lines meet as one ends and the other begins they are joined.
Never adds a line of sight to a front.
"""

from dataclasses import replace

import numpy as np

from skylag.tables import Floats, Front

SEGMENT_S = 1800.0
STEP_S = 900.0
_HEADING_RAD = np.radians(15.0)  # how far a stretch may part from the whole way by itself (one sigma)
_SPEED_SHARE, _SPEED_KM_S = 0.3, 0.03
_FEWEST = 6


def follow(
    along: Floats, ahead: Floats, sigma: Floats, t: Floats, line: tuple[float, float, float], scatter: float = 1.0
) -> Floats:
    """The stretches of a front (K, 7): middle [s], offset [km], speed [km/s], heading [rad] and their three sigmas.

    along, ahead  (N,) how far [km] each line of sight lay to the right of the foot and ahead of the whole way's line,
                  at the time t [s] at which it was crossed; sigma [km]
    line          offset [km] at t = 0, speed [km/s], heading [rad] of the whole way
    scatter       square of the usual ratio of `ahead` and `sigma`
    """
    offset, speed, heading = line
    rows = []
    first, last = float(t.min()), float(t.max())
    count = max(1, int(np.ceil((last - first - SEGMENT_S) / STEP_S - 1e-9)) + 1)
    prior = np.diag([0.0, _HEADING_RAD**-2, max(_SPEED_SHARE * speed, _SPEED_KM_S) ** -2])
    for number in range(count):
        start = first + number * STEP_S
        members = np.flatnonzero((t >= start) & (t <= start + SEGMENT_S))
        if len(members) < _FEWEST:
            continue
        middle = float(t[members].mean())
        design = np.stack([np.ones(len(members)), -along[members], t[members] - middle], axis=1)
        change: Floats = np.zeros(3)
        for _ in range(5):
            over = (ahead[members] - design @ change) / sigma[members]
            weight = np.minimum(1.0, 1.5 / np.maximum(np.abs(over), 1e-9)) / sigma[members] ** 2 / max(scatter, 0.05)
            normal = design.T @ (design * weight[:, None]) + prior
            change = np.asarray(np.linalg.solve(normal, design.T @ (weight * ahead[members])), dtype=np.float64)
        spread = np.sqrt(np.diag(np.linalg.inv(normal)))
        rows.append([
            middle, offset + speed * middle + change[0], speed + change[2], heading + change[1],
            spread[0], spread[2], spread[1],
        ])  # fmt: skip
    return np.array(rows, dtype=np.float64).reshape(-1, 7)


def line_at(segments: Floats, whole: tuple[float, float, float], t: Floats) -> tuple[Floats, Floats]:
    """Offset [km] and heading [rad] of the line at times [s].

    Between the middles of stretches in proportion, beyond the first and the last on with their own speed and heading;
    the whole way's line where there are no stretches.
    """
    t = np.asarray(t, dtype=np.float64)
    if len(segments) == 0:
        return whole[0] + whole[1] * t, np.full(t.shape, whole[2])
    middle = segments[:, 0]
    base = np.interp(t, middle, segments[:, 1])
    late, early = np.maximum(t - middle[-1], 0.0), np.minimum(t - middle[0], 0.0)
    return base + late * segments[-1, 2] + early * segments[0, 2], np.interp(t, middle, segments[:, 3])


# ---------------------------------------------------------------------------------------------- a wall in two pieces

_HANDOVER_S = 1200.0  # pieces overlap or lie apart in time by so much at most
_TURN_DEG = 10.0  # and differ by so much in heading at most, beside what their sigmas allow
_ALIKE = 0.35  # shares by which slope and jump may differ, beside what their sigmas allow


def meeting(first: Front, second: Front) -> np.datetime64 | None:
    """When the line of one front becomes that of a later one, where they are one wall; None where they are not.

    One wall: alike in what it brings, in slope and in heading; the second is seen from about when the first no longer
    is; and the two lines meet then, or never part by more than their places are known.
    """
    turned = abs((second.heading_deg - first.heading_deg + 180.0) % 360.0 - 180.0)
    if turned > _TURN_DEG + 3.0 * float(np.hypot(first.heading_sigma_deg, second.heading_sigma_deg)):
        return None
    if first.jump_tecu * second.jump_tecu <= 0.0 or not second.start > first.start:
        return None
    for one, other, one_sigma, other_sigma in (
        (first.slope, second.slope, first.slope_sigma, second.slope_sigma),
        (abs(first.jump_tecu), abs(second.jump_tecu), first.jump_sigma_tecu, second.jump_sigma_tecu),
    ):
        allowed = _ALIKE * max(one, other) + 2.0 * float(np.hypot(one_sigma, other_sigma))
        if not abs(one - other) <= min(allowed, 0.5 * max(one, other)):
            return None
    earliest, latest = (_seconds(moment - first.epoch) for moment in (second.start, first.end))
    if abs(earliest - latest) > _HANDOVER_S:
        return None
    earliest, latest = min(earliest, latest) - 0.5 * _HANDOVER_S, max(earliest, latest) + 0.5 * _HANDOVER_S
    pace = second.speed_m_s / 1000.0
    apart = second.offset_km - pace * _seconds(second.epoch - first.epoch) - first.offset_km  # at the first one's epoch
    faster = pace - first.speed_m_s / 1000.0
    near = 3.0 * float(np.hypot(first.sweep_km, second.sweep_km))
    middle = 0.5 * (earliest + latest)
    at = middle if abs(apart + faster * middle) <= near else (-apart / faster if faster != 0.0 else np.inf)
    if not earliest <= at <= latest:
        return None
    return np.datetime64(first.epoch + np.timedelta64(round(at * 1e9), "ns"))


def joined(first: Front, second: Front, at: np.datetime64) -> Front:
    """One front of two pieces that meet at a time: with the pace and heading of the later one, which foretell best."""
    share = first.onsets / (first.onsets + second.onsets)

    def both(name: str) -> tuple[float, float]:
        """Mean of both, by their lines of sight; its sigma holds half of what they differ by."""
        sigma_name = {"jump_tecu": "jump_sigma_tecu", "width_km": "width_sigma_km"}.get(name, f"{name}_sigma")
        values = np.array([getattr(first, name), getattr(second, name)], dtype=np.float64)
        sigmas = np.array([getattr(first, sigma_name), getattr(second, sigma_name)], dtype=np.float64)
        weights = np.array([share, 1.0 - share])
        return float(weights @ values), float(np.hypot(weights @ sigmas, 0.5 * (values[1] - values[0])))

    slope, slope_sigma = both("slope")
    width, width_sigma = both("width_km")
    jump, jump_sigma = both("jump_tecu")
    before = _nodes(first)
    before[:, 0] -= _seconds(second.epoch - first.epoch)
    after, moment = _nodes(second), _seconds(at - second.epoch)
    before, after = before[before[:, 0] < moment], after[after[:, 0] > moment]
    turn = np.array([moment, second.offset_km + second.speed_m_s / 1000.0 * moment, second.speed_m_s / 1000.0,
                     np.radians(second.heading_deg), second.offset_sigma_km, second.speed_sigma_m_s / 1000.0,
                     np.radians(second.heading_sigma_deg)])  # fmt: skip
    return replace(
        second,
        start=first.start, end=max(first.end, second.end),
        slope=slope, slope_sigma=slope_sigma, width_km=width, width_sigma_km=width_sigma,
        jump_tecu=jump, jump_sigma_tecu=jump_sigma,
        reach_km=(min(first.reach_km[0], second.reach_km[0]), max(first.reach_km[1], second.reach_km[1])),
        sweep_km=float(np.sqrt(share * first.sweep_km**2 + (1.0 - share) * second.sweep_km**2)),
        onsets=first.onsets + second.onsets,
        receivers=tuple(sorted({*first.receivers, *second.receivers})),
        satellites=tuple(sorted({*first.satellites, *second.satellites})),
        track=(*(p for p in first.track if p[0] <= at), *(p for p in second.track if p[0] > at)),
        segments=np.vstack([before, turn[None, :], after]),
    )  # fmt: skip


def _nodes(front: Front) -> Floats:
    """Stretches of a front; its whole way as one where it has none."""
    if len(front.segments):
        return front.segments.copy()
    return np.array([[
        0.0, front.offset_km, front.speed_m_s / 1000.0, np.radians(front.heading_deg), front.offset_sigma_km,
        front.speed_sigma_m_s / 1000.0, np.radians(front.heading_sigma_deg),
    ]])  # fmt: skip


def _seconds(span: np.timedelta64) -> float:
    return float(span.astype("timedelta64[ns]").astype(np.int64)) / 1e9
