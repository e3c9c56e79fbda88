"""Users of one frequency without a network: what the broadcast model leaves of the delay, in range and position.

The measured map against Klobuchar's model with the coefficients of the day's navigation file, along each line of sight
of a place.  Lines of sight whose pierce point the map does not see do not count, and are counted.  A planning aid, not
for navigation.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from skylag.constants import L1_M_PER_TECU
from skylag.errors import Missing, Refused
from skylag.impact import sky as satellites
from skylag.impact.satellite_augmentation import CAUTION
from skylag.impact.sky import Sky
from skylag.impact.states import nearest_cells
from skylag.ionosphere.broadcast_delay import klobuchar
from skylag.ionosphere.geometry import mapping, pierce
from skylag.tables import UNSEEN, Fields, Floats, Ints, Site, Times

FEWEST = 4


@dataclass(frozen=True)
class LeftOver:
    """What the broadcast model leaves at a site, (T,) at the epochs of the maps; NaN where it cannot be told.

    range_m       the 95 % point of |model - measured| over the lines of sight of the epoch
    horizontal_m, vertical_m   position error that follows, in size
    measured, in_view          lines of sight that the map sees, and all above the mask
    hours, range_95_m, horizontal_95_m, vertical_95_m   the same as 95 % points per hour; day_* over the day
    """

    site: Site
    times: Times
    range_m: Floats
    horizontal_m: Floats
    vertical_m: Floats
    measured: Ints
    in_view: Ints
    hours: Times
    range_95_m: Floats
    horizontal_95_m: Floats
    vertical_95_m: Floats
    day_range_95_m: float
    day_horizontal_95_m: float
    day_vertical_95_m: float
    assumptions: tuple[str, ...]
    caution: str = CAUTION


def coefficients_of(broadcast: Mapping[str, Sequence[float]]) -> tuple[tuple[float, ...], tuple[float, ...]]:
    """Alpha and beta of the GPS message; Missing where the day's navigation files had none."""
    if "GPSA" not in broadcast or "GPSB" not in broadcast:
        raise Missing(
            "the broadcast model's coefficients (GPSA, GPSB) are not known for this day; process it again with a "
            "navigation file whose header tells them",
            what="GPSA, GPSB", nearest=sorted(broadcast),
        )  # fmt: skip
    alpha, beta = tuple(map(float, broadcast["GPSA"])), tuple(map(float, broadcast["GPSB"]))
    if len(alpha) != 4 or len(beta) != 4:
        raise Refused(
            f"GPSA and GPSB need four coefficients each, there are {len(alpha)} and {len(beta)}", name="GPSA",
            value=len(alpha), allowed=4,
        )  # fmt: skip
    return alpha, beta


def left_over(
    site: Site, fields: Fields, sky: Sky, broadcast: Mapping[str, Sequence[float]], mask_deg: float = 10.0,
    shell_height_m: float = 400e3,
) -> LeftOver:  # fmt: skip
    """The broadcast model against the maps at a site.  Raises Missing without coefficients."""
    alpha, beta = coefficients_of(broadcast)
    at = np.clip(np.searchsorted(sky.times, fields.times), 0, len(sky.times) - 1)
    elevation, azimuth = (values[at] for values in sky.look(site.lat, site.lon))
    with np.errstate(invalid="ignore"):
        above = elevation >= mask_deg
    above &= (np.abs(sky.times[at] - fields.times) <= np.timedelta64(120, "s"))[:, None]
    epoch, satellite = np.nonzero(above)
    el, az = elevation[above], azimuth[above]
    lat, lon = pierce(site.lat, site.lon, el, az, shell_height_m)
    row, column, inside = nearest_cells(fields, lat, lon)
    place = (epoch, row, column)
    vertical = np.asarray(fields.vtec[place], dtype=np.float64) * L1_M_PER_TECU
    seen = inside & (fields.support[place] > 0) & (fields.state[place] != UNSEEN) & np.isfinite(vertical)
    factor = mapping(el, shell_height_m)
    model = klobuchar(alpha, beta, site.lat, site.lon, el, az, fields.times[epoch])
    off = np.full(elevation.shape, np.nan)
    off[epoch, satellite] = np.where(seen, model - factor * vertical, np.nan)
    known = np.isfinite(off)
    rows = satellites.rows_of(elevation, azimuth)
    weight = np.where(known, np.sin(np.radians(np.where(known, elevation, 90.0))) ** 2, 0.0)
    enough = known.sum(axis=1) >= FEWEST
    solve = np.einsum("tij,tsj,ts->tis", satellites.position_covariance(rows, weight), rows, weight)
    moved = np.einsum("tis,ts->ti", solve, np.nan_to_num(off))
    horizontal = np.where(enough, np.hypot(moved[:, 0], moved[:, 1]), np.nan)
    up = np.where(enough, np.abs(moved[:, 2]), np.nan)
    size = np.abs(off)
    hour = fields.times.astype("datetime64[h]")
    hours = np.unique(hour)
    by_hour = [np.array([_high(values[hour == one]) for one in hours]) for values in (size, horizontal, up)]
    return LeftOver(
        site, fields.times, np.array([_high(one) for one in size]), horizontal, up, known.sum(axis=1),
        above.sum(axis=1), hours.astype("datetime64[ns]"), by_hour[0], by_hour[1], by_hour[2], _high(size),
        _high(horizontal), _high(up), _assumptions(sky, mask_deg, shell_height_m),
    )  # fmt: skip


def _high(values: Floats) -> float:
    """The 95 % point of what is known; NaN where nothing is."""
    known = values[np.isfinite(values)]
    return float(np.quantile(known, 0.95)) if known.size else float("nan")


def _assumptions(sky: Sky, mask_deg: float, shell_height_m: float) -> tuple[str, ...]:
    return (
        "Model: Klobuchar's with the coefficients of the day's navigation file (IS-GPS-200, 20.3.3.5.2.5).",
        f"Measured: the map at each pierce point, thin shell at {shell_height_m / 1000:g} km; satellites above "
        f"{mask_deg:g} degrees by {sky.source}; lines of sight that the map does not see do not count.",
        "Position: weighted by the squared sine of the elevation; the ionosphere alone, no noise, orbits or multipath.",
    )
