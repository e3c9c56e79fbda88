"""What pairs of receivers say of a front's slope: the mean slope between two pierce points is the least it can be.

A broad wall that hardly moves takes so long to pass that the running background of each line of sight follows it, and
the rates above that background tell too little of its slope.  Pairs know no background.  Never lowers a slope, and
never takes the word of one receiver.
"""

from dataclasses import replace

import numpy as np

from skylag.ionosphere.fronts import ahead_km
from skylag.ionosphere.slopes import MM_PER_TECU, MODEL_WIDTH_KM, PAIR
from skylag.tables import Front, Fronts, Slopes

_SIGMAS = 2.0  # pairs count where they stand above the front's slope by so many sigmas of both


def at_least(fronts: Fronts, slopes: Slopes) -> Fronts:
    """The fronts, none less steep than two pairs without a common receiver see it at once or after each other."""
    return replace(fronts, fronts=tuple(_raised(front, slopes) for front in fronts.fronts))


def _raised(front: Front, slopes: Slopes) -> Front:
    """One front with its slope raised to what its pairs see; its width stays, so that its jump grows."""
    if not len(slopes):
        return front
    own = (slopes.way == PAIR) & (slopes.time >= front.start) & (slopes.time <= front.end)
    rows = np.flatnonzero(own)
    # What the front does not know of itself is no reason not to hear its pairs.
    known, own_sigma = float(np.nan_to_num(front.slope)), float(np.nan_to_num(front.slope_sigma))
    width_km = front.width_km if np.isfinite(front.width_km) else MODEL_WIDTH_KM[0]
    beyond = slopes.slope[rows] - known > _SIGMAS * np.hypot(slopes.sigma[rows], own_sigma)
    rows = rows[beyond]
    if not len(rows):
        return front
    away, right = ahead_km(front, slopes.lat[rows], slopes.lon[rows], slopes.time[rows])
    under = (np.abs(away) <= 0.5 * width_km) & (right >= front.reach_km[0]) & (right <= front.reach_km[1])
    rows = rows[under]
    rows = rows[np.argsort(-(slopes.slope[rows] - slopes.sigma[rows]), kind="stable")]
    pairs = np.stack([slopes.receiver[rows], slopes.other[rows]], axis=1)
    for number in range(1, len(rows)):
        shared = (pairs[:number, :, None] == pairs[number][None, None, :]).any(axis=(1, 2))
        if not shared.all():  # a steeper one, of two other receivers, bears it out
            slope, sigma = float(slopes.slope[rows[number]]), float(slopes.sigma[rows[number]])
            raised = replace(front, slope=slope, slope_sigma=float(np.hypot(sigma, own_sigma)))
            if not np.isfinite(front.slope * front.width_km):
                return raised
            share = slope / front.slope
            return replace(
                raised,
                jump_tecu=float(np.sign(front.jump_tecu)) * slope * front.width_km / MM_PER_TECU,
                jump_sigma_tecu=front.jump_sigma_tecu * share,
            )  # fmt: skip
    return front
