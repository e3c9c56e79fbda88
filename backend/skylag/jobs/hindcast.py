"""Outlooks over an archive: its days as a history, the outlook after the newest, its record, and a replay of the past.

Reads with `archive`, computes with `ionosphere.outlook`.  When a day is kept, its hours at the places of the outlook
are made and kept, outlooks whose days are in are scored, once, and the next outlook is made and kept (`day_kept`).  A
replay keeps nothing.  Never lets an outlook see a later day than the one it is made on, nor an outlook of activity made
later.
"""

import hashlib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from skylag.archive import Archive, DayHead
from skylag.archive.outlooks import Kept
from skylag.constants import L1_M_PER_TECU
from skylag.errors import Missing, NotEnough, Refused, SkylagError
from skylag.impact import silence, uses
from skylag.impact.states import nearest_cells
from skylag.ionosphere import outlook_score
from skylag.ionosphere.climatology import climate_of
from skylag.ionosphere.outlook import ROTATION, Drivers, History, Limits, no_drivers, replay, tomorrow
from skylag.ionosphere.outlook_score import Tally
from skylag.tables import HOLDS, STRAINED, UNSEEN, Bools, Bytes, Fields, Floats, Indices, Region, Words

SCORED_WITHIN = 60  # days after which an outlook whose days never came is given up
HOURS_FORM = "2"  # of what is kept of a day; another one makes all of them anew
MOST_DAYS = 400  # further back an outlook does not look
MOST_CELLS = 400  # of the grid; every second, third ... row and column where it has more: a year is a minute of work

Progress = Callable[[int, int], None]


@dataclass(frozen=True)
class Hour:
    """The hours of one day at the places: delay, sigma [m], slope (24, P), states (uses, 24, P)."""

    delay: Floats
    sigma: Floats
    slope: Floats
    states: Bytes


def limits_for(region: Region) -> tuple[Limits, ...]:
    """First guesses of what makes a state, per use of a region."""
    known = []
    for use in uses.uses_of(region):
        strained, broken, unit = uses.limits_of(use, region.shell_height_km * 1000.0)
        if unit == "mm/km":
            known.append(Limits(use.name, "slope", strained, broken))
        else:
            # What a model leaves is about half of the delay, what a plane misses about a tenth (first guesses only:
            # the archive's own states teach the rest).
            share = 0.5 if use.kind == "single" else 0.1
            known.append(Limits(use.name, "delay", strained / share, broken / share))
    return tuple(known)


def _hours_of(
    fields: Fields, wanted: Sequence[Bytes], rows: Any, columns: Any, day: np.datetime64, silent: Bools
) -> Hour:
    """Maps of a day as hours: means of delay and sigma, the steepest slope, the worst state.

    silent  (T, places) whether the receiver nearest to a place is silent: nothing holds there
    An hour is unseen for a use where fewer than half of its maps see the place and none warns.
    """
    hour = ((fields.times - day.astype("datetime64[ns]")) / np.timedelta64(1, "h")).astype(np.int64)
    inside = (hour >= 0) & (hour < 24)
    count, places = 24, len(rows)
    seen: Bools = np.isfinite(fields.vtec) & (fields.support > 0)
    delay, sigma, slope = (np.full((count, places), np.nan) for _ in range(3))
    states = np.zeros((len(wanted), count, places), dtype=np.uint8)
    content = np.where(seen, fields.vtec, np.nan)[:, rows, columns].astype(np.float64) * L1_M_PER_TECU
    spread = np.where(seen, fields.vtec_sigma, np.nan)[:, rows, columns].astype(np.float64) * L1_M_PER_TECU
    steep = np.where(seen, fields.slope, np.nan)[:, rows, columns].astype(np.float64)
    for number in range(count):  # hours, not observations
        now = np.flatnonzero(inside & (hour == number))
        if len(now) == 0:
            continue
        parts = ((delay, content, np.nanmean), (sigma, spread, np.nanmean), (slope, steep, np.nanmax))
        for goal, source, make in parts:
            known = np.isfinite(source[now]).sum(axis=0) * 2 >= len(now)
            if known.any():
                goal[number, known] = make(source[now][:, known], axis=0)
        for use, codes in enumerate(wanted):
            mine = codes[now][:, rows, columns]
            mine = np.where(silent[now] & (mine == HOLDS), UNSEEN, mine)
            worst = mine.max(axis=0)
            enough = (mine != UNSEEN).sum(axis=0) * 2 >= len(now)
            states[use, number] = np.where(worst >= STRAINED, worst, np.where(enough & (worst == HOLDS), HOLDS, UNSEEN))
    return Hour(delay, sigma, slope, states)


def _hours(archive: Archive, head: DayHead, places: Region, lats: Floats, lons: Floats, mark: str) -> Hour:
    """The hours of a stored day: those kept under the mark of the places and uses, or made now and kept."""
    kept = archive.outlooks.hours(head.region, str(head.day), head.version, mark)
    if kept is None:
        fields = archive.fields(head.region, head.day, version=head.version)
        flags = archive.flags(head.region, head.day, head.version)
        grid = replace(places, sites=())  # the cells are enough, and sentences about sites take time
        record = archive.day(head.region, head.day, head.version)
        silent = silence.of_facts(record.origin.counts, record.receivers)
        judged = [uses.judge_for(use, fields, flags, grid, silent=silent).states for use in uses.uses_of(places)]
        rows, columns, inside = nearest_cells(fields, lats, lons)
        found = _hours_of(fields, judged, rows, columns, head.day, silent.over(lats, lons, fields.times))
        kept = {
            name: np.where(inside, getattr(found, name), np.nan).astype(np.float32)
            for name in ("delay", "sigma", "slope")
        }
        kept["states"] = np.where(inside, found.states, UNSEEN).astype(np.uint8)
        archive.outlooks.keep_hours(head.region, str(head.day), head.version, mark, kept)
    delay, sigma, slope = (kept[name].astype(np.float64) for name in ("delay", "sigma", "slope"))
    return Hour(delay, sigma, slope, kept["states"].astype(np.uint8))


def _places_of(region: Region, lat_axis: Floats, lon_axis: Floats) -> tuple[Words, Floats, Floats]:
    """Names, latitudes, longitudes: sites first, cells of the grid after them, thinned where it has many."""
    step = int(np.ceil(np.sqrt(len(lat_axis) * len(lon_axis) / MOST_CELLS)))
    lon, lat = np.meshgrid(lon_axis[::step], lat_axis[::step])
    names = np.array([site.name for site in region.sites] + [""] * lat.size, dtype=np.str_)
    lats = np.concatenate([[site.lat for site in region.sites], lat.ravel()])
    return names, lats, np.concatenate([[site.lon for site in region.sites], lon.ravel()])


def history_of(
    archive: Archive, region: str, until: np.datetime64 | None = None, since: np.datetime64 | None = None,
    progress: Progress | None = None,
) -> tuple[History, tuple[DayHead, ...]]:  # fmt: skip
    """The stored days of a region as a history that ends on `until` (or its newest day), and which versions it holds.

    Sites come first, cells after them.  Raises Missing where the region has no day.
    """
    heads = [head for head in archive.days(region, since, until) if not head.provisional]
    if not heads:
        raise Missing(f"region {region}: the archive has no whole day of it in that span; compute one with "
                      "`skylag day`", what=region, nearest=archive.regions())  # fmt: skip
    heads = sorted(heads, key=lambda head: head.day)
    last = heads[-1].day if until is None else until.astype("datetime64[D]")
    first = max(heads[0].day, last - np.timedelta64(MOST_DAYS - 1, "D"))
    heads = [head for head in heads if head.day >= first]
    if not heads:
        raise Missing(f"region {region}: no day within {MOST_DAYS} days before {last}", what=region, nearest=())
    newest = archive.day(region, heads[-1].day)
    places = newest.region
    names, lats, lons = _places_of(places, newest.lats, newest.lons)
    limits = limits_for(places)
    of_places = f"{places.thresholds} {uses.uses_of(places)} {lats.tolist()} {lons.tolist()}"
    mark = hashlib.sha256(f"{HOURS_FORM} {of_places}".encode())
    days = np.arange(first, last + np.timedelta64(1, "D")).astype("datetime64[D]")
    shape = (len(days), 24, len(lats))
    delay, sigma, slope = (np.full(shape, np.nan) for _ in range(3))
    states = np.zeros((len(limits), *shape), dtype=np.uint8)
    for number, head in enumerate(heads):
        if progress is not None:
            progress(number, len(heads))
        found = _hours(archive, head, places, lats, lons, mark.hexdigest()[:32])
        row = int((head.day - first) / np.timedelta64(1, "D"))
        delay[row], sigma[row], slope[row], states[:, row] = found.delay, found.sigma, found.slope, found.states
    return History(days, names, lats, lons, delay, sigma, slope, states, limits), tuple(heads)


def drivers_of(days: Any, indices: Indices | None, expected_ap: Floats | None = None) -> Drivers:
    """What is known of Sun and field on the days of a history.

    indices      measured ap and F10.7; None where none are at hand
    expected_ap  (2, 8) or (2,) entered for the two days after the last; NaN where nothing is said
    """
    drivers = no_drivers(len(days))
    if indices is not None:
        row = {day: number for number, day in enumerate(indices.day)}
        for number, day in enumerate(days):
            if day in row:
                drivers.ap[number] = indices.ap[row[day]]
                drivers.flux[number] = indices.f107_observed[row[day]]
    if expected_ap is not None:
        entered = np.asarray(expected_ap, dtype=np.float64)
        if entered.shape == (2,):
            entered = np.repeat(entered[:, None], 8, axis=1)
        if entered.shape != (2, 8) or np.any((entered < 0) | (entered > 400)):
            raise Refused("expected ap: give one value from 0 to 400 for each of the two days ahead, or eight",
                          name="expected_ap", value=str(expected_ap)[:60], allowed="0 to 400")  # fmt: skip
        drivers.expected[-1] = entered
    return drivers


def known_then(
    archive: Archive, days: Any, indices: Indices | None = None, expected_ap: Floats | None = None, now: bool = False
) -> tuple[Drivers, tuple[str, ...]]:  # fmt: skip
    """What was known of Sun and field at the end of each day of a history, and in words what was foretold at its end.

    indices      measured, beside those kept in the archive and before them
    expected_ap  entered for the two days after the last, as in `drivers_of`; before what is kept
    now          the last day is today's newest: an outlook of activity made after it counts for the days that had not
                 begun when it was made.  Of the other days only what was made before their end counts.
    Days of the indices are UTC days, those of the history begin 18 s earlier; that is taken for the same.
    """
    known = archive.activity.measured(days[0], days[-1])
    drivers = drivers_of(days, known)
    if indices is not None:
        given = drivers_of(days, indices)
        drivers = Drivers(*(np.where(np.isfinite(a), a, b) for a, b in (
            (given.ap, drivers.ap), (given.expected, drivers.expected), (given.flux, drivers.flux))))  # fmt: skip
    said: dict[int, str] = {}
    one_day = np.timedelta64(1, "D")
    for told in archive.activity.foretold(days[0] + one_day, days[-1] + 2 * one_day):  # in the order they were made
        for lead in (1, 2):
            row = int((told.day - days[0]) / one_day) - lead
            if not 0 <= row < len(days):
                continue
            end = told.day if now and row == len(days) - 1 else days[row] + one_day
            if told.made <= end.astype("datetime64[ns]"):
                drivers.expected[row, lead - 1] = told.ap
                if row == len(days) - 1:
                    when = np.datetime_as_string(told.made, unit="m").replace("T", " ")
                    said[lead] = (
                        f"ap of {told.day} as foretold {when} UTC{f' ({told.source})' if told.source else ''}: "
                        f"up to {told.ap.max():g}"
                    )
    if expected_ap is not None:
        drivers.expected[-1] = drivers_of(days, None, expected_ap).expected[-1]
        said = {0: "ap of the two days ahead as entered"}
    return drivers, tuple(said[lead] for lead in sorted(said))


def _mark(heads: Sequence[DayHead], drivers: Drivers) -> str:
    """Marks the inputs of an outlook: which versions of which days, and what was known of Sun and field."""
    checksum = hashlib.sha256()
    for head in heads:
        checksum.update(f"{head.day} {head.version}\n".encode())
    for part in (drivers.ap, drivers.expected, drivers.flux):
        checksum.update(np.nan_to_num(part, nan=-1.0).tobytes())
    return checksum.hexdigest()[:32]


def day_kept(
    archive: Archive, region: str, day: np.datetime64, log: Callable[..., None] | None = None, more: bool = False
) -> None:  # fmt: skip
    """After a day of a region was kept: its hours, and with them the scores that are due and the next outlook.

    more  other days are about to follow: the outlook is left to the last of them
    log   told what happened; a failure is told there and raises nothing, since the day itself is kept
    """
    tell: Callable[..., None] = log or (lambda event, **facts: None)
    try:
        if more:
            history_of(archive, region, until=day, since=day)
            return
        made = newest(archive, region)
        tell("outlook kept", region=region, known_until=str(made.outlook.known_until), number=made.number)
    except SkylagError as failure:
        tell("outlook not made", region=region, day=str(day), why=failure.message)
    except Exception as failure:  # whatever it is, the day is kept, and the outlook is made when it is asked for
        tell("outlook not made", region=region, day=str(day), why=f"{type(failure).__name__}: {failure}")


def without_days(
    archive: Archive, region: Region, last: np.datetime64, expected_ap: Floats | None = None
) -> Kept:  # fmt: skip
    """The outlook after a day for a region of which nothing was seen: climatology, which it says.  It is not kept."""
    days = np.arange(last - np.timedelta64(ROTATION - 1, "D"), last + np.timedelta64(1, "D")).astype("datetime64[D]")
    names, lats, lons = _places_of(region, region.lats, region.lons)
    limits = limits_for(region)
    shape = (len(days), 24, len(lats))
    unseen = np.full(shape, np.nan)
    states = np.zeros((len(limits), *shape), dtype=np.uint8)
    drivers, said = known_then(archive, days, None, expected_ap, now=True)
    made = tomorrow(History(days, names, lats, lons, unseen, unseen, unseen, states, limits), drivers)
    return Kept(0, region.name, "", np.datetime64("NaT", "s"), replace(made, basis=(*made.basis, *said)))


def newest(
    archive: Archive, region: str, indices: Indices | None = None, expected_ap: Floats | None = None,
    keep: bool = True,
) -> Kept:  # fmt: skip
    """The outlook after the newest day of a region: the one that is kept, or made now and kept.

    keep  False: one with entered activity is made and not kept, so that asking what if fills no archive

    Outlooks whose days have come in the meantime are scored on the way.  While the first day of a region still goes on
    there is nothing to learn from: climatology then.  Raises Missing where the region has no day.
    """
    there = archive.days(region)
    heads = sorted((head for head in there if not head.provisional), key=lambda head: head.day)
    if there and not heads:
        first_day = there[-1].day
        known = archive.day(region, first_day).region
        return without_days(archive, known, first_day - np.timedelta64(1, "D"), expected_ap)
    if heads:
        last = heads[-1].day
        first = max(heads[0].day, last - np.timedelta64(MOST_DAYS - 1, "D"))
        used = [head for head in heads if head.day >= first]
        days = np.arange(first, last + np.timedelta64(1, "D"))
        kept = archive.outlooks.find(
            region, last, _mark(used, known_then(archive, days, indices, expected_ap, now=True)[0])
        )
        if kept is not None:
            return kept
    history, used_heads = history_of(archive, region)
    drivers, said = known_then(archive, history.days, indices, expected_ap, now=True)
    score_due(archive, region, history, drivers)
    made = tomorrow(history, drivers)
    made = replace(made, basis=(*made.basis, *said))
    mark = _mark(used_heads, drivers)
    if expected_ap is not None and not keep:
        return Kept(0, region, mark, np.datetime64("NaT", "s"), made)
    archive.outlooks.keep(region, made, mark)
    kept = archive.outlooks.find(region, made.known_until, mark)
    if kept is None:
        raise Missing(f"the outlook of {region} was not kept", what=region, nearest=())
    return kept


def score_due(archive: Archive, region: str, history: History, drivers: Drivers | None = None) -> int:
    """Score the kept outlooks whose days are in; gives how many.  Scored when the last of their days is in or past.

    An outlook of places that the region no longer has is left unscored.
    """
    done = 0
    for kept in archive.outlooks.unscored(region, since=history.days[-1] - np.timedelta64(SCORED_WITHIN, "D")):
        made = kept.outlook
        days_in = int((history.days[-1] - made.known_until) / np.timedelta64(1, "D"))
        if days_in < 1 or made.known_until < history.days[0] or not np.array_equal(made.lats, history.lats):
            continue
        try:
            tally = outlook_score.score(made, history, drivers)
        except NotEnough:
            continue
        archive.outlooks.keep_score(kept.number, min(days_in, len(made.hours) // 24), tally.facts())
        done += 1
    return done


def track_record(archive: Archive, region: str, most: int = 120) -> Tally:
    """What became of the newest kept outlooks of a region, together: of each day the one that was made last."""
    total = Tally()
    for facts in archive.outlooks.scores(region, most):
        total.add(outlook_score.from_facts(facts))
    return total


@dataclass(frozen=True)
class Hindcast:
    """What a replay found: first and last day foretold, the score, and how many days had data."""

    region: str
    first: np.datetime64
    last: np.datetime64
    days_with_data: int
    tally: Tally


def hindcast(
    archive: Archive, region: str, first: np.datetime64, last: np.datetime64, indices: Indices | None = None,
    progress: Progress | None = None,
) -> Hindcast:  # fmt: skip
    """Replay the archive as if it were then: an outlook before each day from `first` to `last`, scored with that day.

    Raises Refused where last is before first, NotEnough where no outlook can be scored.
    """
    if last < first:
        raise Refused(f"hindcast: {last} is before {first}; give the earlier day first", name="to", value=str(last),
                      allowed=f"from {first}")  # fmt: skip
    history, _ = history_of(archive, region, until=last, progress=progress)
    drivers, _ = known_then(archive, history.days, indices)
    return Hindcast(region, first, last, int(np.isfinite(history.delay).any(axis=(1, 2)).sum()),
                    replay_scored(history, drivers, first))  # fmt: skip


def replay_scored(history: History, drivers: Drivers, first: np.datetime64) -> Tally:
    """Scores of the outlooks for the days of a history from `first` on, each made the evening before."""
    start = max(0, int((first - history.days[0]) / np.timedelta64(1, "D")) - 1)
    climate = climate_of(history.days, history.lats, history.lons)
    total = Tally()
    for number, made in enumerate(replay(history, drivers, start)):
        if start + number + 1 >= len(history.days):
            break
        try:
            total.add(outlook_score.score(made, history, drivers, climate))
        except NotEnough:
            continue  # the network was down on that day
    if total.outlooks == 0:
        raise NotEnough(
            f"hindcast: no day from {first} on follows a stored one and has data itself; give an earlier day, or "
            "compute more days",
            had=len(history.days), needed=2, where=str(first),
        )  # fmt: skip
    return total


def summary(tally: Tally) -> Mapping[str, Any]:
    """A tally as a page or a table shows it: what was reached, per lead; reliability and Brier scores per use."""
    leads = {}
    for lead in ("1", "2"):
        found = outlook_score.verdict(tally, lead)
        if found is not None:
            leads[lead] = {
                "hours": found.hours, "mean_error_m": found.mean_error, "rms_m": found.rms,
                "absolute_m": found.absolute, "crps_m": found.crps, "inside": dict(found.inside),
                "against": {name: vars(one) for name, one in found.against.items()},
            }  # fmt: skip
    states: dict[str, Any] = {}
    for use, levels in tally.brier.items():
        states[use] = {}
        for level, (count, own, often, same) in levels.items():
            tenths = [vars(tenth) for tenth in outlook_score.reliability(tally, use, level)]
            scores = [value / count if count else None for value in (own, often, same)]
            states[use][level] = {"cases": int(count), "brier": scores[0], "brier_frequency": scores[1],
                                  "brier_persistence": scores[2], "tenths": tenths}  # fmt: skip
    return {"outlooks": tally.outlooks, "leads": leads, "states": states}


def told(found: Hindcast) -> tuple[str, ...]:
    """What a replay found, in lines."""
    facts = summary(found.tally)
    scored_ones = "1 outlook" if facts["outlooks"] == 1 else f"{facts['outlooks']} outlooks"
    lines = [
        f"{found.region}, {found.first} to {found.last}: {scored_ones} scored; the archive has data on "
        f"{found.days_with_data} of the days up to then"
    ]
    return (*lines, *scored(facts))


def scored(facts: Mapping[str, Any]) -> tuple[str, ...]:
    """What `summary` tells, in lines."""
    lines: list[str] = []
    for lead, name in (("1", "the day ahead"), ("2", "the day after it")):
        one = facts["leads"].get(lead)
        if one is None:
            continue
        inside = ", ".join(f"{share} % range held {100 * held:.1f} %" for share, held in one["inside"].items())
        lines.append(
            f"{name}: delay RMS {one['rms_m']:.3f} m, mean error {one['mean_error_m']:+.3f} m, "
            f"CRPS {one['crps_m']:.3f} m over {one['hours']} hours and places; {inside}"
        )
        lines += [
            f"  beside {other}: RMS {row['rms']:.3f} against {row['other_rms']:.3f} m, "
            f"{100 * row['better_rms']:+.1f} % ({row['hours']} hours and places)"
            for other, row in one["against"].items()
        ]
    for use, levels in facts["states"].items():
        for level, row in levels.items():
            if row["brier"] is None:
                continue
            tenths = ", ".join(
                f"{100 * tenth['told']:.0f} -> {100 * tenth['came']:.0f} ({tenth['cases']})" for tenth in row["tenths"]
            )
            lines.append(
                f"{use}, {level}: Brier {row['brier']:.4f}, frequency {row['brier_frequency']:.4f}, persistence "
                f"{row['brier_persistence']:.4f}; chance told -> came in per cent (cases): {tenths}"
            )
    return tuple(lines)
