"""How a front's speed and heading change on its way: its line fitted anew in stretches of half an hour.

Each stretch starts from what the whole way says and leaves it only as far as its own lines of sight insist.  Never adds
a line of sight to a front.
"""

import numpy as np

from skylag.tables import Floats

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
