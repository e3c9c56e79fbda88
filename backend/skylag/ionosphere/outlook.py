"""The day ahead: expected vertical delay and slope with their ranges, and the chance that corrections stop holding.

What is foretold is the logarithm of delay over a climatological value (IRI at F10.7: `climatology`), so that season and
time of day come from the model and the rest from the archive: the mean of the last 27 days at the same hour, recent
days weighted toward the newest, the same day one solar rotation (27 days) before.  Their weights are learned from the
archive itself.  Geomagnetic activity told beforehand shifts hours to analogues: what earlier hours of the same storm
phase did (`activity`); what they did on the last day, where that was one of storm, is taken off before it is carried
on.  Ranges come from the past errors of the same method.  With an empty archive the climatology
speaks alone, with a wide range, and says so.
A planning aid, not for navigation.  Never looks past the day it is made on, never counts an unseen hour as holding.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from skylag.errors import NotEnough, Refused
from skylag.ionosphere import activity
from skylag.ionosphere.climatology import LEAST_DELAY_M, USUAL_FLUX, climate_of, smoothed
from skylag.ionosphere.learning import Chances, Shifts, Spread, Weights, storm_columns
from skylag.tables import BROKEN, STRAINED, UNSEEN, Bools, Bytes, Floats, Outlook, Times, Words

LEVELS = np.array([0.01, 0.025, 0.05, 0.1, 0.2, 0.25, 0.3, 0.4, 0.5, 0.6, 0.7, 0.75, 0.8, 0.9, 0.95, 0.975, 0.99])
SLOPE_LEVELS = np.array([0.5, 0.8, 0.95, 0.99])
RANGES = {50: (0.25, 0.75), 80: (0.1, 0.9), 95: (0.025, 0.975)}
LEAST_DAYS = 7  # seen at a place before a stretch of hours is called likely to hold
LEARNING_PLACES = 60  # more of them tell little new of one day, and take time
ROTATION = 27  # days of the Sun as seen from Earth

_LEAST_SLOPE = 0.02
# Climatology by itself: half of the delay may be wrong, as IS-GPS-200 20.3.3.5.2.5 says of the broadcast model.
_CLIMATE_SPREAD = 0.5
_SHAPE_SPREAD = 0.3  # of that between the hours of a month: 20 to 30 % (from memory)
# Slopes before any were seen: about 1 mm/km, and 4 mm/km the bound of nominal ones (Mayer et al. 2009, ION GNSS).
_SLOPE_START, _SLOPE_SPREAD = 1.0, 0.6
_DAY_SPREAD = 0.25  # day-to-day scatter of content: the middle of 15 to 35 % (Forbes et al. 2000, JASTP 62)
_CALM_WEIGHT = 0.3  # of hours in and after a storm, where usual days are sought
_FEW_DAYS = 3.0
_LOCAL = 0.5  # places of a region stray from its mean by half of what the region strays from climatology (from memory)


@dataclass(frozen=True)
class Limits:
    """What makes a state for a use, as far as the outlook needs a first guess: `of` is slope [mm/km] or delay [m]."""

    use: str
    of: str
    strained: float
    broken: float

    def __post_init__(self) -> None:
        if self.of not in ("slope", "delay"):
            raise Refused(f"limits of {self.use}: of must be slope or delay", name="of", value=self.of,
                          allowed=("slope", "delay"))  # fmt: skip


@dataclass(frozen=True)
class History:
    """Days in a row, hour by hour, at places; NaN or unseen where nothing was seen, so for days that are missing.

    days (D,)      GPS-time days without a gap
    names, lats, lons (P,)   sites and cells
    delay, sigma (D, 24, P)  vertical delay on 1575.42 MHz and its uncertainty [m]
    slope (D, 24, P)         steepest of the hour [mm/km]
    states (U, D, 24, P)     worst of the hour for each use, codes of STATE_NAMES
    limits (U)               of the uses
    """

    days: npt.NDArray[np.datetime64]
    names: Words
    lats: Floats
    lons: Floats
    delay: Floats
    sigma: Floats
    slope: Floats
    states: Bytes
    limits: tuple[Limits, ...]

    def __post_init__(self) -> None:
        shape = (len(self.days), 24, len(self.lats))
        wrong = [name for name in ("delay", "sigma", "slope") if getattr(self, name).shape != shape]
        if wrong or self.states.shape != (len(self.limits), *shape):
            raise Refused(f"history: {', '.join(wrong) or 'states'} must have the shape {shape} (per use for states)",
                          name="history", value=wrong, allowed=str(shape))  # fmt: skip
        if np.any(np.diff(self.days) != np.timedelta64(1, "D")):
            raise Refused("history: days must follow one another; fill missing ones with NaN", name="days",
                          value=str(self.days[:3]), allowed="days in a row")  # fmt: skip

    def until(self, count: int) -> "History":
        """The first days of it."""
        return replace(self, days=self.days[:count], delay=self.delay[:count], sigma=self.sigma[:count],
                       slope=self.slope[:count], states=self.states[:, :count])  # fmt: skip


@dataclass(frozen=True)
class Drivers:
    """What is known of Sun and magnetic field; NaN where it is not.

    ap (D, 8)           measured, of the days of the history
    expected (D, 2, 8)  the ap that was expected, at the end of each day, for the two days after it
    flux (D,)           observed F10.7
    """

    ap: Floats
    expected: Floats
    flux: Floats


def no_drivers(days: int) -> Drivers:
    """Nothing known."""
    return Drivers(np.full((days, 8), np.nan), np.full((days, 2, 8), np.nan), np.full(days, np.nan))


# ---------------------------------------------------------------------------------------------- what is known when


@dataclass(frozen=True)
class _Series:
    """A logarithm through the days (D, 24, P) and what was known of it at the end of each day: trailing, by day."""

    value: Floats  # NaN where unseen
    weight: Floats  # of a row when learning
    month: Floats  # usual of the last 27 days at the hour, drawn to that of all places while few days are known
    recent: Floats  # days weighted toward the newest, less `month`
    last: Floats  # the day itself, less `month`; 0 where unseen
    whole: Floats  # (D, 1, 1) mean of `last` over hours and places
    late: Floats  # (D, 1, 1) the same of its last six hours
    turn: Floats  # (D, 24, P) departure from the usual of its time, over three hours; 0 where unseen
    unknown: Floats  # (D, 24, P) share of what is not known without any day that is not known yet


_KNOWN = 8  # columns of _Series known beforehand
_PRIOR = np.array([0.0, 1.0, 0.3, 0.1, 0.2, 0.1, 0.15, 0.0])
_PRIOR_SIGMA = np.array([0.1, 0.15, 0.2, 0.2, 0.3, 0.3, 0.2, 0.2])


def _series(value: Floats, spread: Floats, calm: Bools, scatter: float, alone: float, shape: float) -> _Series:
    """From the logarithm, its measurement sigma, and which hours (D, 24) were calm.

    scatter, alone, shape  from day to day; of what is expected without any day, and of that how hours stray from their
    mean: their squares weigh the first days
    """
    seen = np.isfinite(value)
    weight = np.where(seen, 1.0 / (1.0 + np.nan_to_num(spread, nan=1.0) ** 2 / scatter**2), 0.0)
    usual = weight * np.where(calm, 1.0, _CALM_WEIGHT)[:, :, None]
    filled = np.where(seen, value, 0.0)
    total, count = _trailing(usual * filled, ROTATION), _trailing(usual, ROTATION)
    # All hours and places tell the level first, then the hour its departure from it, then the place its own.
    days = _trailing(usual.max(axis=2, keepdims=True), ROTATION)  # on which the hour was seen anywhere
    any_hour = days.mean(axis=1, keepdims=True)
    hourly = total.sum(axis=2, keepdims=True) / (count.sum(axis=2, keepdims=True) + 1e-9)
    level = (hourly * days).sum(axis=1, keepdims=True) / (days.sum(axis=1, keepdims=True) + 1e-9)
    first, later = scatter**2 / (alone**2 - shape**2), (scatter / shape) ** 2
    level *= any_hour / (any_hour + first)
    everywhere = level + (hourly - level) * days / (days + later)
    few = _FEW_DAYS / (_FEW_DAYS + count)  # of the place itself, beside all places
    unknown = np.sqrt((alone**2 - shape**2) * first / (any_hour + first) + shape**2 * later / (days + later)
                      + (alone * _LOCAL * few) ** 2) / alone  # fmt: skip
    month = (total + _FEW_DAYS * everywhere) / (count + _FEW_DAYS)
    last = np.where(seen, value - month, 0.0)
    recent = np.zeros_like(value)
    before, known = np.zeros(value.shape[1:]), np.zeros(value.shape[1:])
    for day in range(len(value)):  # days, not observations
        before = 0.67 * before + usual[day] * filled[day]
        known = 0.67 * known + usual[day]
        recent[day] = (before - known * month[day]) / (known + 0.5)
    rows = seen.sum(axis=(1, 2), keepdims=True)
    whole = last.sum(axis=(1, 2), keepdims=True) / np.maximum(rows, 1)
    rows = seen[:, 18:].sum(axis=(1, 2), keepdims=True)
    late = last[:, 18:].sum(axis=(1, 2), keepdims=True) / np.maximum(rows, 1)
    wide = np.pad(last, ((0, 0), (1, 1), (0, 0)), mode="wrap")
    turn = (wide[:, :-2] + wide[:, 1:-1] + wide[:, 2:]) / 3.0
    return _Series(value, weight, month, recent, last, whole, late, turn, unknown)


def _trailing(values: Floats, days: int) -> Floats:
    """Sum over the last so many days, the day itself among them."""
    summed = np.cumsum(values, axis=0)
    summed[days:] = summed[days:] - summed[:-days].copy()
    return summed


def _beforehand(series: _Series, last: int, lead: int, storm: Floats) -> Floats:
    """What is known at the end of day `last` of the day `lead` after it (24, P, K).

    storm  (24,) what its storm usually does to hours of the last day, and which does not last into the next
    """
    shape = (*series.value.shape[1:], _KNOWN)
    known = np.zeros(shape)
    turn = last + lead - ROTATION
    known[..., 0] = 1.0
    known[..., 1] = series.month[last]
    known[..., 2] = series.recent[last]
    passing = np.where(np.isfinite(series.value[last]), storm[:, None], 0.0)
    seen = np.isfinite(series.value[last]).sum(axis=1)
    known[..., 3] = series.last[last] - passing
    known[..., 4] = series.whole[last] - passing.sum() / max(int(seen.sum()), 1)
    known[..., 5] = series.late[last] - passing[18:].sum() / max(int(seen[18:].sum()), 1)
    around = [series.turn[day] for day in (turn - 1, turn, turn + 1) if 0 <= day <= last]
    if around:
        known[..., 6] = np.mean(around, axis=0)
    if turn - lead >= 0:  # what the rotation before did from the day like today to the day like the one ahead
        known[..., 7] = series.whole[turn] - series.whole[turn - lead]
    return known


# ---------------------------------------------------------------------------------------------- one lead, one quantity


@dataclass
class _Told:
    """What was foretold of a quantity: logarithm (24, P), its sigmas, and the columns it came from."""

    known: Floats
    first: Floats  # before the shift by storm phase
    middle: Floats
    sigma: Floats
    extra: Floats

    @property
    def whole(self) -> Floats:
        """Sigma with that of a short history."""
        return np.asarray(np.sqrt(self.sigma**2 + self.extra**2))


@dataclass
class _Quantity:
    """Delay or slope at one lead."""

    scatter: float
    alone: float  # sigma of the logarithm without any history
    weights: Weights = field(init=False)
    shifts: Shifts = field(default_factory=Shifts)
    spread: Spread = field(init=False)

    def __post_init__(self) -> None:
        self.weights = Weights(_PRIOR, _PRIOR_SIGMA, self.scatter)
        self.spread = Spread(self.scatter)

    def foretell(
        self, series: _Series, last: int, lead: int, told: npt.NDArray[Any], measured: npt.NDArray[Any]
    ) -> _Told:  # fmt: skip
        """From phases (24,) as told of the day and as measured of the last one."""
        known = _beforehand(series, last, lead, self.shifts.usual(measured))
        first = known @ self.weights.now()
        middle = first + self.shifts.now(told)[:, None]
        sigma = self.spread.sigma(told, known.shape[1])
        return _Told(known, first, middle, sigma, self.alone * series.unknown[last])

    def learn(self, what: _Told, series: _Series, day: int, told: npt.NDArray[Any], seen: npt.NDArray[Any]) -> None:
        value, weight = series.value[day], series.weight[day]
        error = value - what.middle
        self.spread.learn(error, what.sigma, what.extra, told)
        self.shifts.learn(value - what.first, told, seen)
        # A storm teaches how storms go, not how usual days follow from one another.
        calm = np.where(told <= activity.QUIET, 1.0, _CALM_WEIGHT) * np.where(seen <= activity.QUIET, 1.0, _CALM_WEIGHT)
        rows = what.known.reshape(-1, _KNOWN)
        self.weights.learn(rows, np.where(weight > 0, value, 0.0).ravel(), (weight * calm[:, None]).ravel())


# Columns of `_Lead.columns`: one, guess, four phases, how often, lately (calm, storm), slope, delay, time of day (two).
_CHANCE_PRIOR = np.array([0.0, 1.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0])
_CHANCE_SIGMA = np.array([1.0, 0.3, 0.7, 0.7, 0.7, 0.7, 0.5, 0.5, 0.5, 0.3, 0.3, 0.3, 0.3])
_PASSING = (activity.ONSET, activity.MAIN, activity.AFTER)


def _odds(chance: Floats) -> Floats:
    held = np.clip(chance, 5e-4, 1 - 5e-4)
    return np.asarray(np.log(held / (1.0 - held)))


class _Lead:
    """All that is learned for the day `lead` days after the last one known."""

    def __init__(self, lead: int, limits: Sequence[Limits]) -> None:
        self.lead = lead
        self.delay = _Quantity(_DAY_SPREAD, _CLIMATE_SPREAD)
        self.slope = _Quantity(0.4, _SLOPE_SPREAD)
        self.limits = limits
        self.chances = [[Chances(_CHANCE_PRIOR, _CHANCE_SIGMA) for _ in (STRAINED, BROKEN)] for _ in limits]

    def columns(
        self, world: "_World", last: int, told: npt.NDArray[Any], delay: _Told, slope: _Told, use: int, broken: bool,
        places: Any,
    ) -> Floats:  # fmt: skip
        """What is known beforehand of a state at some places (24, places, K)."""
        limits = self.limits[use]
        limit = limits.broken if broken else limits.strained
        if limits.of == "slope":
            what, quantity, base = slope, self.slope, world.slope_base
        else:
            what, quantity, base = delay, self.delay, np.log(world.climate[last + self.lead][:, places])
        steep_middle = slope.middle[:, places] + world.slope_base
        guess = _odds(quantity.spread.above((np.log(limit) - what.middle[:, places] - base) / what.whole[:, places]))
        shape = guess.shape
        turn = 2.0 * np.pi * (np.arange(24)[:, None] + 0.5 + world.local_h[:, places]) / 24.0
        bad = world.bad[use][1 if broken else 0]
        usual = _odds(bad.overall[last])
        often, lately = _odds(bad.month[last][:, places]) - usual, _odds(bad.day[last]) - usual
        # What was bad on a day of storm or after it passes with the storm: told apart from other bad days.
        storm = float(np.isin(world.measured[last], _PASSING).mean())
        parts = [
            np.ones(shape), guess,
            *(np.broadcast_to(column[:, None], shape) for column in storm_columns(told).T),
            often, np.broadcast_to(lately * (1.0 - storm), shape), np.broadcast_to(lately * storm, shape),
            np.log1p(np.exp(np.clip(steep_middle, -5, 5))) - np.log(2.0), delay.middle[:, places],
            np.broadcast_to(np.sin(turn), shape), np.broadcast_to(np.cos(turn), shape),
        ]  # fmt: skip
        return np.stack(parts, axis=-1)


@dataclass(frozen=True)
class _Bad:
    """How often a state came, as known at the end of each day: at the hour and place over 27 days, on the day, ever."""

    month: Floats  # (D, 24, P)
    day: Floats  # (D, 1, 1)
    overall: Floats  # (D, 1, 1)


def _how_often(bad: Bools, seen: Bools) -> _Bad:
    yes, known = (bad & seen).astype(np.float64), seen.astype(np.float64)
    all_yes, all_known = np.cumsum(yes.mean(axis=(1, 2))), np.cumsum(known.mean(axis=(1, 2)))
    overall = ((all_yes + 0.02) / (all_known + 1.0))[:, None, None]
    wide = np.pad(yes, ((0, 0), (1, 1), (0, 0)), mode="wrap"), np.pad(known, ((0, 0), (1, 1), (0, 0)), mode="wrap")
    smooth = [(part[:, :-2] + part[:, 1:-1] + part[:, 2:]) / 3.0 for part in wide]
    month = (_trailing(smooth[0], ROTATION) + 3.0 * overall) / (_trailing(smooth[1], ROTATION) + 3.0)
    day_yes, day_known = yes.mean(axis=(1, 2), keepdims=True), known.mean(axis=(1, 2), keepdims=True)
    return _Bad(month, (day_yes + 0.3 * overall) / (day_known + 0.3), overall)


class _World:
    """The history with what was known of it at the end of each day, and the climatology two days further."""

    def __init__(self, history: History, drivers: Drivers) -> None:
        count = len(history.days)
        self.history, self.drivers = history, drivers
        ahead = history.days[-1] + np.arange(1, 3)
        # The flux of a day is not known before it: each day is given that of two days before.
        smooth = smoothed(drivers.flux)
        flux = np.concatenate([smooth[:1], smooth[:1], smooth])
        climate = climate_of(np.concatenate([history.days, ahead]), history.lats, history.lons)
        self.climate = climate.delay(slice(None), flux)
        self.slope_base = float(np.log(_SLOPE_START))
        measured = activity.phases(activity.hourly(drivers.ap)).reshape(count, 24)
        self.measured = measured
        calm = measured <= activity.QUIET
        with np.errstate(invalid="ignore", divide="ignore"):
            delay = np.log(np.maximum(history.delay, LEAST_DELAY_M)) - np.log(self.climate[:count])
            rough = history.sigma / np.maximum(history.delay, LEAST_DELAY_M)
            slope = np.log(np.maximum(history.slope, _LEAST_SLOPE)) - self.slope_base
        self.delay = _series(delay, rough, calm, _DAY_SPREAD, _CLIMATE_SPREAD, _SHAPE_SPREAD)
        self.slope = _series(slope, np.zeros_like(slope), calm, 0.4, _SLOPE_SPREAD, 0.4)
        seen = history.states != UNSEEN
        self.bad = [
            [_how_often(history.states[use] >= least, seen[use]) for least in (STRAINED, BROKEN)]
            for use in range(len(history.limits))
        ]
        self.local_h = (history.lons / 15.0)[None, :]
        places = len(history.lats)
        self.sample = np.unique(np.linspace(0, places - 1, min(places, LEARNING_PLACES)).round().astype(np.int64))

    def told(self, last: int) -> npt.NDArray[Any]:
        """Phases (2, 24) of the two days after `last`, as told then."""
        return activity.told(self.drivers.ap[: last + 1], self.drivers.expected[last])


def _held(values: Floats) -> Floats:
    """Each unknown value as the last one known before; NaN before the first."""
    known = np.maximum.accumulate(np.where(np.isfinite(values), np.arange(len(values)), -1))
    return np.asarray(np.where(known >= 0, values[known], np.nan))


# ---------------------------------------------------------------------------------------------- outlooks


def replay(history: History, drivers: Drivers | None = None, first: int = 0, ahead_days: int = 2) -> Iterator[Outlook]:
    """The outlook after each day of the history from row `first` on, as it would have been made then.

    Raises NotEnough for a history without days, Refused where the drivers do not fit.
    """
    count = len(history.days)
    if count == 0:
        raise NotEnough("outlook: the history has no day; give at least one, unseen or not", had=0, needed=1,
                        where="history")  # fmt: skip
    if not 1 <= ahead_days <= 2:
        raise Refused(f"ahead_days: {ahead_days} is outside 1 to 2", name="ahead_days", value=ahead_days, allowed="1-2")
    drivers = drivers or no_drivers(count)
    if drivers.ap.shape != (count, 8) or drivers.expected.shape != (count, 2, 8) or drivers.flux.shape != (count,):
        raise Refused(f"drivers: one row for each of the {count} days of the history", name="drivers",
                      value=drivers.ap.shape, allowed=f"({count}, 8)")  # fmt: skip
    world = _World(history, drivers)
    leads = [_Lead(number + 1, history.limits) for number in range(ahead_days)]
    waiting: dict[int, list[tuple[_Lead, _Day]]] = {}
    for last in range(count):
        for lead, what in waiting.pop(last, []):
            _learn(world, lead, what, last)
        told = world.told(last)
        days = []
        for lead in leads:
            what = _foretell(world, lead, last, told[lead.lead - 1], last >= first)
            waiting.setdefault(last + lead.lead, []).append((lead, what))
            days.append(what)
        if last >= first:
            yield _outlook(world, leads, days, last, told[:ahead_days])


def tomorrow(history: History, drivers: Drivers | None = None, ahead_days: int = 2) -> Outlook:
    """The outlook after the last day of the history."""
    *_, newest = replay(history, drivers, len(history.days) - 1, ahead_days)
    return newest


@dataclass
class _Day:
    """What was foretold of a day: both quantities, told phases (24,), and the columns behind each chance.

    whole  the columns are of all places, not only of those that are learned from
    """

    delay: _Told
    slope: _Told
    told: npt.NDArray[Any]
    columns: list[list[Floats]]
    whole: bool


def _foretell(world: _World, lead: _Lead, last: int, told: npt.NDArray[Any], whole: bool) -> _Day:
    delay = lead.delay.foretell(world.delay, last, lead.lead, told, world.measured[last])
    slope = lead.slope.foretell(world.slope, last, lead.lead, told, world.measured[last])
    places = slice(None) if whole else world.sample
    columns = [
        [lead.columns(world, last, told, delay, slope, use, broken, places) for broken in (False, True)]
        for use in range(len(lead.limits))
    ]
    return _Day(delay, slope, told, columns, whole)


def _learn(world: _World, lead: _Lead, what: _Day, day: int) -> None:
    """Show a lead the day it has foretold."""
    measured = world.measured[day]
    lead.delay.learn(what.delay, world.delay, day, what.told, measured)
    lead.slope.learn(what.slope, world.slope, day, what.told, measured)
    for use in range(len(lead.limits)):
        states = world.history.states[use, day][:, world.sample].ravel()
        for number, least in enumerate((STRAINED, BROKEN)):
            columns = what.columns[use][number]
            rows = (columns[:, world.sample] if what.whole else columns).reshape(len(states), -1)
            lead.chances[use][number].learn(rows, states >= least, states != UNSEEN)


def _outlook(
    world: _World, leads: list[_Lead], days: list[_Day], last: int, told: npt.NDArray[Any]
) -> Outlook:
    history = world.history
    places, uses = len(history.lats), len(history.limits)
    delay, quantiles, slopes = [], [], []
    chances = np.zeros((2, uses, 24 * len(leads), places))
    for number, (lead, what) in enumerate(zip(leads, days, strict=True)):
        base = np.log(world.climate[last + lead.lead])
        spread = what.delay.whole
        z = lead.delay.spread.quantiles(LEVELS)
        of_delay = np.exp((what.delay.middle + base)[..., None] + spread[..., None] * z)
        # The mean of a skewed distribution lies above its middle; so much of it as the spread of calm hours tells.
        delay.append(np.exp(what.delay.middle + base + 0.5 * np.minimum(spread, _CLIMATE_SPREAD) ** 2))
        quantiles.append(of_delay)
        z = lead.slope.spread.quantiles(SLOPE_LEVELS)
        slopes.append(np.exp((what.slope.middle + world.slope_base)[..., None] + what.slope.whole[..., None] * z))
        rows = slice(24 * number, 24 * number + 24)
        for use in range(uses):
            for level in range(2):
                usual = float(_odds(world.bad[use][level].overall[last, 0, 0]))
                columns = what.columns[use][level]
                chance = lead.chances[use][level].now(columns.reshape(24 * places, -1), usual)
                chances[level, use, rows] = chance.reshape(24, places)
    seen_days, dark = _seen(history.states[:, max(0, last + 1 - ROTATION) : last + 1])
    chances[:, np.tile(dark, (1, len(leads), 1))] = np.nan
    start = (history.days[last] + np.timedelta64(1, "D")).astype("datetime64[ns]")
    hours: Times = start + np.arange(24 * len(leads)) * np.timedelta64(3600, "s")
    return Outlook(
        known_until=history.days[last], hours=hours, names=history.names, lats=history.lats, lons=history.lons,
        delay=np.concatenate(delay), levels=LEVELS, delay_quantiles=np.concatenate(quantiles),
        slope_levels=SLOPE_LEVELS, slope_quantiles=np.concatenate(slopes),
        uses=np.array([limits.use for limits in history.limits], dtype=np.str_),
        strained=chances[0], broken=np.minimum(chances[1], chances[0]),
        phases=np.array(activity.words(told), dtype=np.str_), seen_days=seen_days,
        basis=_basis(world, last, told),
    )  # fmt: skip


def _seen(states: Bytes) -> tuple[Floats, Bools]:
    """Days (P,) on which anything was said of corrections at a place, and the hours of the day of which too little was.

    states  (uses, days, 24, P) of the last days.  The second, (uses, 24, P): where the place itself was seen on seven
    days and more, an hour that was seen on fewer, and on fewer than half of them, has no chance: what other hours and
    places taught would call it good though nobody looks there then.
    """
    told = states != UNSEEN
    days = told.any(axis=(0, 2)).sum(axis=0).astype(np.float64)
    return days, np.asarray((days >= LEAST_DAYS) & (told.sum(axis=1) < np.minimum(LEAST_DAYS, days / 2.0)))


def _basis(world: _World, last: int, told: npt.NDArray[Any]) -> tuple[str, ...]:
    """What an outlook rests on, in words."""
    known = np.isfinite(world.history.delay[: last + 1]).sum(axis=(1, 2)) > 0
    count, month = int(known.sum()), int(known[-ROTATION:].sum())
    if count == 0:
        first = "no day of the archive could be used: climatology alone, with a wide range, and nothing learned"
    elif month == 0:
        first = f"no day of the last {ROTATION} in the archive: climatology, and what {count} earlier days taught"
    else:
        first = f"climatology scaled to {month} of the last {ROTATION} days; {count} days in all"
    notes = [first, "climatology: International Reference Ionosphere (CCIR coefficients) at the mean flux of 81 days"]
    if count and last + 1 < ROTATION:
        notes.append("no whole solar rotation yet: recurrence after 27 days is not known")
    if 0 < count < 30:
        notes.append("fewer than 30 days were learned from: ranges and chances are first guesses")
    if not np.isfinite(world.drivers.flux[: last + 1]).any():
        notes.append(f"solar flux is not known: {USUAL_FLUX:g} was taken")
    if not np.isfinite(world.drivers.expected[last]).any():
        notes.append("no outlook of geomagnetic activity was entered: a storm would come unannounced")
    elif (told > activity.QUIET).any():
        notes.append("storm or its aftermath told: hours are shifted to what such hours did before, where any were")
    return tuple(notes)


# ---------------------------------------------------------------------------------------------- windows


@dataclass(frozen=True)
class Span:
    """A stretch of hours of one of SPAN_KINDS, with the highest chances in it."""

    start: np.datetime64
    end: np.datetime64
    kind: str
    strained: float
    broken: float


SPAN_KINDS = ("likely holds", "doubtful", "likely not", "not known")


def windows(outlook: Outlook, place: int, use: int, most: float = 0.1) -> tuple[Span, ...]:
    """Spans of hours for a place and use (row numbers), by the chance that an hour is strained or worse.

    most  the chance up to which an hour counts as likely to hold; from one half on it is `likely not`
    A place seen on fewer than seven of the last 27 days has no window: it is `not known`, and so is an hour of the day
    without a chance.
    """
    if not 0.0 < most < 0.5:
        raise Refused(f"most: {most:g} is no chance between 0 and 0.5", name="most", value=most, allowed="0 to 0.5")
    strained, broken = outlook.strained[use, :, place], outlook.broken[use, :, place]
    kind = np.where(strained <= most, 0, np.where(strained < 0.5, 1, 2))
    kind[~np.isfinite(strained)] = 3
    if outlook.seen_days[place] < LEAST_DAYS:
        kind = np.full(len(kind), 3)
    edges = np.flatnonzero(np.diff(kind)) + 1
    hour = np.timedelta64(3600, "s")
    spans = []
    for rows in np.split(np.arange(len(kind)), edges):
        spans.append(Span(outlook.hours[rows[0]], outlook.hours[rows[-1]] + hour, SPAN_KINDS[int(kind[rows[0]])],
                          float(strained[rows].max()), float(broken[rows].max())))  # fmt: skip
    return tuple(spans)
