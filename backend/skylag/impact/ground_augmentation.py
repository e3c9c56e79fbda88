"""Ground-based augmentation of an aerodrome: the slope against what such a station may assume.

Three questions per minute of the maps: is the slope within the nominal spread that the station announces; could it be
announced at all; is it within the published threat space.  Which front comes next is told by `coming`.  A planning aid,
not for navigation: an approved station has its own monitors and its own threat space, which decide.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from skylag.errors import Refused
from skylag.impact import at_places
from skylag.impact.satellite_augmentation import CAUTION, spans
from skylag.impact.silence import SILENT, Silences
from skylag.impact.states import nearest_cells, plus_minus, with_its_sigma
from skylag.ionosphere.geometry import mapping
from skylag.ionosphere.slopes import NOMINAL_BOUND, model_bound
from skylag.tables import (
    BROKEN,
    HOLDS,
    STATE_NAMES,
    STRAINED,
    UNSEEN,
    Bools,
    Bytes,
    Fields,
    Flag,
    Floats,
    Site,
    Thresholds,
    Times,
)

ANNOUNCED_MOST = 25.5  # mm/km: 255 times 0.1; ICAO Annex 10, Appendix B to chapter 3
QUANTILE = 3.29  # 99.9 %: a slope beyond so many spreads is not nominal (our choice of share)
_ONE_SIDED_95 = 1.645  # of a normal error: what holds is said with this confidence, as for the states of a map


def nominal_error_m(
    factor: npt.ArrayLike, sigma_mm_per_km: npt.ArrayLike, distance_km: float, speed_m_s: float,
    smoothing_s: float = 100.0,
) -> Floats:  # fmt: skip
    """Sigma [m] of the differential delay of an approaching aircraft on a line of sight.

    factor  slant over vertical; the rest as in `front_error_m`
    Source: ICAO Annex 10, Appendix B, 3.6.5.4 (formula from memory).
    """
    return np.asarray(factor, dtype=np.float64) * front_error_m(sigma_mm_per_km, distance_km, speed_m_s, smoothing_s)


def front_error_m(
    slope_mm_per_km: npt.ArrayLike, distance_km: float, speed_m_s: float, smoothing_s: float = 100.0
) -> Floats:
    """Differential delay [m] that a slope makes for an approaching aircraft.

    Smoothing of 100 s (or 30 s) drags the past along: twice its length times the speed (DO-253; from memory).
    """
    way_km = distance_km + 2.0 * smoothing_s * speed_m_s / 1000.0
    return np.asarray(np.asarray(slope_mm_per_km, dtype=np.float64) * 1e-3 * way_km)


@dataclass(frozen=True)
class StationChoices:
    """What the aerodrome's station and its aircraft are taken to do; printed with every result.

    sigma_mm_per_km  announced spread of the vertical slope; distance_km from station to aircraft, speed_m_s, and
    smoothing_s of the aircraft; lowest_deg: lowest elevation used, for the slant slope
    """

    sigma_mm_per_km: float = NOMINAL_BOUND
    distance_km: float = 6.0
    speed_m_s: float = 70.0
    smoothing_s: float = 100.0
    lowest_deg: float = 15.0

    def __post_init__(self) -> None:
        for name, low, high in (
            ("sigma_mm_per_km", 0.1, ANNOUNCED_MOST), ("distance_km", 0.1, 100.0), ("speed_m_s", 1.0, 200.0),
            ("smoothing_s", 1.0, 600.0), ("lowest_deg", 5.0, 40.0),
        ):  # fmt: skip
            value = getattr(self, name)
            if not low <= value <= high:
                raise Refused(
                    f"{name}: {value:g} is outside {low:g} to {high:g}", name=name, value=value, allowed=(low, high)
                )


@dataclass(frozen=True)
class Exceeded:
    """A span in which an assumption of a site's station is exceeded, or nothing is seen; GPS time; why in words.

    what  "nominal", "announced", "threat", "warned" (a warning lies over the site that its own slope does not tell of)
          or "unseen"
    """

    site: str
    start: np.datetime64
    end: np.datetime64
    what: str
    why: str


@dataclass(frozen=True)
class StationDay:
    """An aerodrome's day, (T,) at the epochs of the maps.

    slope, slope_sigma [mm/km, vertical]; seen; error_95_m: 95 % differential delay of an aircraft at the lowest
    elevation; state: holds where the slope stays within what is nominal with 95 % confidence, strained beyond it by one
    sigma, broken beyond what can be announced, unseen where neither can be said, and never better than what the map and
    the warnings over the site say; minutes: per kind of `Exceeded.what`, and "within", how many minutes of the day
    """

    site: Site
    times: Times
    slope: Floats
    slope_sigma: Floats
    seen: Bools
    error_95_m: Floats
    state: Bytes
    exceeded: tuple[Exceeded, ...]
    minutes: dict[str, float]
    assumptions: tuple[str, ...]
    caution: str = CAUTION


def station_day(
    site: Site, fields: Fields, flags: Sequence[Flag] = (), choices: StationChoices | None = None,
    shell_height_m: float = 400e3, limits: Thresholds | None = None, silent: Sequence[Silences] = (),
) -> StationDay:  # fmt: skip
    """The slope at an aerodrome through the day against the station's assumptions.

    A confirmed front that passes within the maps' cell of the site counts with its own slope, which maps smear out.  It
    only ever raises: a place that the map does not see stays unseen under a front that is not beyond what is nominal.
    Warnings of other kinds (patches, slopes between receivers) raise the state without a slope at the site.
    limits  those of the region by which the map was judged
    """
    choices = choices or StationChoices()
    nominal = QUANTILE * choices.sigma_mm_per_km
    codes, reasons = at_places.judge([site], fields, flags, limits or Thresholds(), silent)
    judged, told = codes[:, 0], reasons[0]
    row, column, inside = nearest_cells(fields, np.array([site.lat]), np.array([site.lon]))
    place = (slice(None), int(row[0]), int(column[0]))
    slope = np.asarray(fields.slope[place], dtype=np.float64)
    sigma = np.asarray(fields.slope_sigma[place], dtype=np.float64)
    seen = bool(inside[0]) & np.isfinite(slope) & np.isfinite(sigma)
    seen &= (fields.state[place] != UNSEEN) & (fields.support[place] > 0)
    step_s = float(np.median(np.diff(fields.times)) / np.timedelta64(1, "s")) if len(fields.times) > 1 else 300.0
    for flag in flags:
        if flag.kind != "front":
            continue
        over = at_places.over(flag, site, fields.times)
        sure = slope - sigma
        front_sure = flag.slope_mm_per_km - float(np.nan_to_num(flag.sigma_mm_per_km))  # unknown: warns as it stands
        more = (flag.slope_mm_per_km > slope) & ((front_sure >= sure) | ~(sure > nominal))
        steeper = over & np.where(seen, more, front_sure > nominal)
        slope = np.where(steeper, flag.slope_mm_per_km, slope)
        sigma = np.where(steeper, flag.sigma_mm_per_km, sigma)
        seen = seen | steeper
    slope, sigma = np.where(seen, slope, np.nan), np.where(seen, sigma, np.nan)
    factor = float(mapping(choices.lowest_deg, shell_height_m))
    most = slope + _ONE_SIDED_95 * sigma
    error = nominal_error_m(factor, most, choices.distance_km, choices.speed_m_s, choices.smoothing_s)
    sure = slope - np.where(seen, np.nan_to_num(sigma), np.nan)  # a front's own sigma may not be known
    with np.errstate(invalid="ignore"):
        within = (most <= min(nominal, ANNOUNCED_MOST)) & (judged == HOLDS)
        marks = {
            "nominal": sure > nominal,
            "announced": sure > ANNOUNCED_MOST,
            "threat": factor * sure > float(model_bound(np.array(choices.lowest_deg))),
        }
    by_slope = np.where(marks["announced"], BROKEN, np.where(marks["nominal"], STRAINED, UNSEEN))
    marks["warned"] = (judged >= STRAINED) & (judged > by_slope)
    marks["unseen"] = ~(within | marks["nominal"] | marks["announced"] | marks["warned"])  # nothing can be said
    state = np.where(judged >= STRAINED, judged, UNSEEN).astype(np.uint8)
    for mark, code in ((within, HOLDS), (marks["nominal"], STRAINED), (marks["announced"], BROKEN)):
        state[mark] = np.maximum(state[mark], code)
    minutes = {name: float(mark.sum()) * step_s / 60.0 for name, mark in {"within": within, **marks}.items()}
    minutes["unseen"] += max(0.0, 1440.0 - len(fields.times) * step_s / 60.0)  # hours that no map reaches
    return StationDay(
        site, fields.times, slope, sigma, seen, error, state,
        tuple(_exceeded(site, fields.times, slope, sigma, marks, choices, step_s, judged, told)), minutes,
        _assumptions(choices, factor, shell_height_m),
    )  # fmt: skip


def _exceeded(
    site: Site, times: Times, slope: Floats, sigma: Floats, marks: dict[str, Bools], choices: StationChoices,
    step_s: float, judged: Bytes, told: Sequence[str],
) -> list[Exceeded]:  # fmt: skip
    limit = {
        "nominal": f"{QUANTILE:g} times the announced spread of {choices.sigma_mm_per_km:g} mm/km",
        "announced": f"the largest spread that can be announced, {ANNOUNCED_MOST:g} mm/km",
        "threat": f"the threat space, {float(model_bound(np.array(choices.lowest_deg))):.0f} mm/km of slant slope at "
        f"{choices.lowest_deg:g} degrees",
    }
    step = np.timedelta64(round(step_s * 1e9), "ns")
    rows = []
    for what, mark in marks.items():
        for first, last in spans(mark):
            why = "the maps do not see the aerodrome: nothing can be said"
            run = sigma[first:last]
            if what == "unseen" and np.isfinite(run).any():
                why = (
                    f"the slope is known to {plus_minus(np.nanmax(run))} mm/km only: that it is within "
                    f"{limit['nominal']} cannot be said"
                )
            if what == "unseen":
                why = next((one for one in told[first:last] if SILENT in one), why)
            if what == "warned":
                worst = first + int(np.argmax(judged[first:last]))
                why = f"{STATE_NAMES[int(judged[worst])]} by a warning over the aerodrome: {told[worst]}"
            elif what != "unseen":
                worst = first + int(np.nanargmax(slope[first:last]))
                told_slope = with_its_sigma(float(slope[worst]), float(sigma[worst]))
                why = f"vertical slope up to {told_slope} mm/km is beyond {limit[what]}"
            rows.append(Exceeded(site.name, times[first], times[last - 1] + step, what, why))
    return sorted(rows, key=lambda one: (one.start, one.what))


def _assumptions(choices: StationChoices, factor: float, shell_height_m: float) -> tuple[str, ...]:
    return (
        f"The station announces a spread of {choices.sigma_mm_per_km:g} mm/km of vertical slope; {QUANTILE:g} times "
        "of it is taken as the end of what is nominal.",
        f"The aircraft is {choices.distance_km:g} km away at {choices.speed_m_s:g} m/s and smooths over "
        f"{choices.smoothing_s:g} s; its lowest satellite at {choices.lowest_deg:g} degrees sees {factor:.2f} times "
        f"the vertical (thin shell at {shell_height_m / 1000:g} km).",
        "Threat space: that published for CONUS, 375 mm/km at 15 degrees to 425 mm/km at 65 degrees and above; "
        "the region's own may differ.",
        "A slope counts where it is beyond a limit by one sigma; it is within where 95 % of its chances are, and "
        "between the two nothing is said. Maps smear out walls narrower than their cells; fronts that were confirmed "
        "count with their own slope.",
    )
