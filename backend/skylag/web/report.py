"""One site and day on a printable sheet: the verdict first, then chart, evidence, assumptions, cautions.

Puts into words and blocks what `jobs.advising` found; `formats.sheet` writes them.  Never decides anything.
"""

import itertools
from collections.abc import Callable, Sequence
from datetime import UTC, datetime
from typing import TypeVar
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

import numpy as np

from skylag import timescales
from skylag.errors import Missing, NotEnough
from skylag.formats.calendar import Entry
from skylag.formats.sheet import Block, DayChart, Heading, Sentence, Table
from skylag.impact.ground_augmentation import StationDay
from skylag.impact.satellite_augmentation import USUAL_LEVELS, Availability, Outage, ServiceChoices
from skylag.impact.survey import AVOID, NOT_SEEN, WORK, Advice, Job, Window, touches
from skylag.jobs.advising import DayAdvice
from skylag.tables import Bools, Site, Times
from skylag.web import sentences

_MARK = {WORK: "good", AVOID: "bad", NOT_SEEN: "unseen"}
_STATE_MARK = ("unseen", "good", "doubt", "bad")
_WORDS = {WORK: "Work", AVOID: "Avoid", NOT_SEEN: "Not seen"}
_MOST_ROWS = 6
_HALF_MINUTE = np.timedelta64(30 * 10**9, "ns")


_Span = TypeVar("_Span", Outage, Window)


class Clock:
    """GPS times as text in UTC and in a region's own time."""

    def __init__(self, timezone: str) -> None:
        self.zone: ZoneInfo | None
        try:
            self.zone = None if timezone == "UTC" else ZoneInfo(timezone)
        except (ZoneInfoNotFoundError, ValueError):
            self.zone = None

    def utc(self, time: np.datetime64) -> str:
        """Hour and minute, to the nearest."""
        return str(np.datetime_as_string(timescales.gps_to_utc(time + _HALF_MINUTE), unit="m"))[11:]

    def utc_end(self, time: np.datetime64) -> str:
        """The same of an end: midnight is the 24th hour of the day that ends."""
        return "24:00" if (text := self.utc(time)) == "00:00" else text

    def local(self, time: np.datetime64) -> str:
        """The same in the region's own time; as UTC where it has none."""
        instant = timescales.gps_to_utc(time + _HALF_MINUTE).astype("datetime64[s]").astype(np.int64)
        return f"{datetime.fromtimestamp(int(instant), UTC).astimezone(self.zone or UTC):%H:%M}"

    def span(self, start: np.datetime64, end: np.datetime64) -> tuple[str, ...]:
        """Cells of a table: the span in UTC, and in local time where the region has one."""
        cells = (f"{self.utc(start)} - {self.utc_end(end)}", f"{self.local(start)} - {self.local(end)}")
        return cells[:1] if self.zone is None else cells

    def table(self, heading: tuple[str, ...], rows: Sequence[tuple[str, ...]], widths: tuple[float, ...]) -> Table:
        """A table whose rows begin with the cells of `span`."""
        names = ("UTC",) if self.zone is None else ("UTC", "Local")
        return Table((*names, *heading), tuple(rows), (*(1.15,) * len(names), *widths))


def of_site(
    day: DayAdvice, site: Site, advice: Advice | None = None, choices: ServiceChoices | None = None,
    levels: Sequence[str] = USUAL_LEVELS,
) -> tuple[str, list[Block]]:
    """Title and blocks of a site's sheet: its survey job (a usual one without), and for an aerodrome its approaches."""
    record = day.record
    clock = Clock(record.region.timezone)
    advice = advice or day.survey(Job(site.name, ((site.lat, site.lon),)))
    approaches: Availability | None = None
    station: StationDay | None = None
    missing = ""
    if site.kind == "aerodrome":
        station = day.station(site)
        try:
            approaches = day.approaches([site], choices, levels)
        except NotEnough as trouble:
            missing = trouble.message
    title = f"{site.name}, {record.head.day}"
    blocks: list[Block] = [Heading(title, 1), Sentence(_place(site, record.region.name), "small")]
    if record.origin.simulated:
        blocks.append(Sentence(sentences.INVENTED, "strong"))
    if record.head.provisional:
        blocks.append(Sentence(sentences.GOES_ON, "strong"))
    if approaches is not None:
        blocks.append(Sentence(approach_verdict(approaches, clock), "strong"))
    elif missing:
        blocks.append(Sentence(f"Approaches cannot be judged: {missing}", "strong"))
    blocks.append(Sentence(survey_verdict(advice, clock), "strong"))
    if station is not None:
        blocks.append(Sentence(station_verdict(station), ""))
    blocks.append(_chart(day, site, advice, approaches, clock))
    if approaches is not None:
        blocks += _approach_rows(approaches, clock)
    blocks += _survey_rows(advice, clock)
    blocks += _evidence(day, site, advice, clock)
    blocks += _single(day, site)
    blocks.append(Heading("What is assumed"))
    told = [*advice.assumptions]
    told += [] if approaches is None else approaches.assumptions
    told += [] if station is None else station.assumptions
    blocks.append(Sentence(" ".join(dict.fromkeys(told)), "small"))
    blocks.append(Heading("Cautions"))
    cautions = [sentences.CAUTION, advice.caution] + ([approaches.caution] if approaches is not None else [])
    blocks.append(Sentence(" ".join(dict.fromkeys(cautions))))
    versions = record.origin.versions.get("skylag", "")
    blocks.append(
        Sentence(
            f"Skylag {versions}; version {record.head.version} of the day, from {len(record.origin.inputs)} files and "
            f"{len(record.receivers)} receivers, kept {record.head.saved_at}Z. Times are UTC unless said.", "small",
        )
    )  # fmt: skip
    return title, blocks


def _place(site: Site, region: str) -> str:
    north, east = "N" if site.lat >= 0 else "S", "E" if site.lon >= 0 else "W"
    return f"{site.kind.capitalize()} at {abs(site.lat):.2f} {north}, {abs(site.lon):.2f} {east}; region {region}"


def _hours(minutes: float) -> str:
    return f"{minutes / 60:.1f} h" if minutes >= 90 else f"{minutes:.0f} min"


def survey_verdict(advice: Advice, clock: Clock) -> str:
    """A job's day in a sentence or two."""
    spent = dict.fromkeys((WORK, AVOID, NOT_SEEN), 0.0)
    for window in advice.windows:
        spent[window.verdict] += float((window.end - window.start) / np.timedelta64(1, "m"))
    job = advice.job
    over = "between the reference stations" if job.method == "network" else f"over {job.baseline_km:g} km"
    head = (
        f"Survey ({job.method}, {over}, {job.horizontal_mm:g} mm across and {job.vertical_mm:g} mm in height): "
        f"{_hours(spent[WORK])} to work, {_hours(spent[AVOID])} to avoid, {_hours(spent[NOT_SEEN])} not seen."
    )
    bad = [window for window in advice.windows if window.verdict != WORK]
    if not bad:
        return head
    worst = max(bad, key=lambda window: window.end - window.start)
    return f"{head} Longest away from work: {clock.utc(worst.start)} to {clock.utc_end(worst.end)} UTC, {worst.why}."


def known_part(known: Bools, times: Times) -> str:
    """How much of the day, or days, the known ones (T,) of the epochs of its maps are: epochs without a map count."""
    step = np.diff(times).min() if len(times) > 1 else np.timedelta64(5, "m")
    days = len(np.unique(times.astype("datetime64[D]")))
    percent = 100.0 * float(known.sum() * step / (days * np.timedelta64(1, "D")))
    share = "less than 1" if percent < 1.0 else f"{np.floor(percent + 1e-6):.0f}"
    return f"the {share} % of the {'day' if days == 1 else f'{days} days'} that is known"


def survey_figures(advice: Advice, clock: Clock) -> list[str]:
    """The figures behind the verdict in sentences: longest baseline, errors at the middle and the worst, the index.

    Each is of the known part of the day only, and says how much of the day that is.
    """
    told = []
    known = np.isfinite(advice.longest_km)
    if known.any():
        least = int(np.nanargmin(advice.longest_km))
        told.append(
            f"Longest baseline within tolerance, of {known_part(known, advice.times)}: "
            f"{np.nanmedian(advice.longest_km):.0f} km in the middle of the values, "
            f"{advice.longest_km[least]:.1f} km at {clock.utc(advice.times[least])} UTC."
        )
    else:
        told.append("Longest baseline within tolerance: not known at any time of the day.")
    known = np.isfinite(advice.differential_95)
    if known.any():
        worst = int(np.nanargmax(advice.differential_95))
        told.append(
            f"Differential delay at the job's distance, of {known_part(known, advice.times)}: "
            f"{np.nanmedian(advice.differential_68):.0f} mm (68 %) and "
            f"{np.nanmedian(advice.differential_95):.0f} mm (95 %) in the middle of the values, "
            f"{advice.differential_68[worst]:.0f} and {advice.differential_95[worst]:.0f} mm at "
            f"{clock.utc(advice.times[worst])} UTC."
        )
    else:
        told.append("Differential delay at the job's distance: not known at any time of the day.")
    index = [
        f"{clock.utc(hour)[:2]} {ppm:.1f}" for hour, ppm in zip(advice.hours, advice.index, strict=True)
        if np.isfinite(ppm)
    ]  # fmt: skip
    if index:
        told.append(f"Hourly index, ppm that 95 % of the surroundings stay under: {', '.join(index)}.")
    return told


def approach_verdict(found: Availability, clock: Clock) -> str:
    """An aerodrome's approaches in a sentence or two."""
    parts = [
        f"{level.name} {100 * float(found.share[number, 0]):.1f} %" for number, level in enumerate(found.levels)
    ]
    head = f"Approaches available of the day: {', '.join(parts)}."
    if not found.outages:
        return f"{head} No outage."
    worst = max(found.outages, key=lambda outage: outage.end - outage.start)
    many = len(found.outages)
    return (
        f"{head} {f'{many} outages; the longest' if many > 1 else 'One outage'}, {worst.level} "
        f"{clock.utc(worst.start)} to {clock.utc_end(worst.end)} UTC, is of {'the ' if worst.cause != 'unseen' else ''}"
        f"{worst.cause if worst.cause != 'unseen' else 'want of data'}."
    )


def station_verdict(found: StationDay) -> str:
    """An aerodrome's ground-based augmentation in a sentence."""
    minutes = found.minutes
    return (
        f"Ground-based augmentation: slope within nominal for {_hours(minutes['within'])}, beyond nominal for "
        f"{_hours(minutes['nominal'])}, beyond what can be announced for {_hours(minutes['announced'])}, beyond the "
        f"threat space for {_hours(minutes['threat'])}, under a warning beside that for {_hours(minutes['warned'])}, "
        f"not known for {_hours(minutes['unseen'])}."
    )


# ---------------------------------------------------------------------------------------------- chart and tables


def _chart(
    day: DayAdvice, site: Site, advice: Advice, approaches: Availability | None, clock: Clock
) -> DayChart:
    start = day.record.head.day.astype("datetime64[ns]")
    whole = np.timedelta64(86_400 * 10**9, "ns")

    def share(time: np.datetime64) -> float:
        return float(np.clip((time - start) / whole, 0.0, 1.0))

    rows: list[tuple[str, tuple[tuple[float, float, str], ...]]] = []
    rows.append(("Corrections at the site", _state_spans(day, site, share)))
    rows.append(("Survey", tuple((share(w.start), share(w.end), _MARK[w.verdict]) for w in advice.windows)))
    if approaches is not None:
        for level in approaches.levels:
            spans: list[tuple[float, float, str]] = [(0.0, 1.0, "good")]
            spans += [
                (share(one.start), share(one.end), "unseen" if one.cause == "unseen" else "bad")
                for one in approaches.outages
                if one.level == level.name
            ]
            rows.append((level.name, tuple(spans)))
    ticks = tuple((k / 24, clock.utc(start + np.timedelta64(k, "h"))[:2]) for k in range(0, 25, 3))
    key = (("good", "works"), ("doubt", "strained"), ("bad", "avoid, broken, outage"), ("unseen", "not seen"))
    return DayChart("The day, hours in UTC", tuple(rows), ticks, key)


def _state_spans(
    day: DayAdvice, site: Site, share: Callable[[np.datetime64], float]
) -> tuple[tuple[float, float, str], ...]:
    fields, codes = day.fields, day.states_at(site)
    if not len(fields.times):
        return ((0.0, 1.0, "unseen"),)
    edges = [0, *(np.flatnonzero(np.diff(codes)) + 1).tolist(), len(codes)]
    step = np.median(np.diff(fields.times)) if len(fields.times) > 1 else np.timedelta64(300, "s")
    spans = [
        (share(fields.times[a]), share(fields.times[b - 1] + step), _STATE_MARK[int(codes[a])])
        for a, b in itertools.pairwise(edges)
    ]
    # What no map of the day reaches is unseen, not blank.
    around = ((0.0, spans[0][0], "unseen"), (spans[-1][1], 1.0, "unseen"))
    return tuple(span for span in (around[0], *spans, around[1]) if span[1] > span[0])


def _longest(spans: Sequence[_Span]) -> tuple[list[_Span], str]:
    """The longest few, in order of time, and what was left out in words."""
    most = sorted(spans, key=lambda one: one.start - one.end)[:_MOST_ROWS]
    left = len(spans) - len(most)
    return sorted(most, key=lambda one: one.start), f"{left} shorter ones are not listed." if left else ""


def _brief(text: str, most: int = 150) -> str:
    """The first parts of a long sentence, and how many more there are; the whole is in the answers of the API."""
    parts = text.split("; ")
    kept = 1
    while kept < len(parts) and len("; ".join(parts[: kept + 1])) <= most:
        kept += 1
    rest = len(parts) - kept
    return "; ".join(parts[:kept]) + (f"; {rest} more" if rest else "")


def _approach_rows(found: Availability, clock: Clock) -> list[Block]:
    alike: dict[tuple[str, str, str], list[Outage]] = {}
    for one in found.outages:
        alike.setdefault((str(one.start), str(one.end), one.why), []).append(one)
    shown, rest = _longest([group[0] for group in alike.values()])
    if not shown:
        return []
    rows = [
        (*clock.span(one.start, one.end),
         ", ".join(other.level for other in alike[str(one.start), str(one.end), one.why]), _brief(one.why))
        for one in shown
    ]  # fmt: skip
    blocks: list[Block] = [Heading("Outages of approaches"), clock.table(("Level", "Why"), rows, (0.9, 5.5))]
    return [*blocks, Sentence(rest, "small")] if rest else blocks


def _survey_rows(advice: Advice, clock: Clock) -> list[Block]:
    shown, rest = _longest(advice.windows)
    rows = [(*clock.span(one.start, one.end), _WORDS[one.verdict], one.why) for one in shown]
    index = [
        (clock.utc(hour)[:2], f"{ppm:.1f}" if np.isfinite(ppm) else "-", word)
        for hour, ppm, word in zip(advice.hours, advice.index, advice.index_words, strict=True)
    ]
    highest = max(index, key=lambda row: float(row[1]) if row[1] != "-" else -1.0, default=None)
    blocks: list[Block] = [
        Heading("Windows for survey"),
        clock.table(("", "Why"), rows, (0.9, 5.5)),
    ]
    if rest:
        blocks.append(Sentence(rest, "small"))
    if highest is not None:
        blocks.append(Sentence(
            "Differential delay that 95 % of the surroundings stay under, by hour (ppm of the baseline): "
            + ", ".join(f"{hour} {ppm}" for hour, ppm, _ in index)
            + f". Highest {highest[1]} in the hour from {highest[0]} UTC: {highest[2]}."
        ))  # fmt: skip
    return blocks


def _evidence(day: DayAdvice, site: Site, advice: Advice, clock: Clock) -> list[Block]:
    middle = day.record.head.day.astype("datetime64[ns]")
    near = [flag for flag in day.flags if touches(flag, site.lat, site.lon, flag.start + (flag.end - flag.start) // 2,
                                                  np.timedelta64(1, "m"))]  # fmt: skip
    near += [flag for flag in day.flags if flag.kind == "front" and flag not in near and flag.confirmed]
    rows = [
        (f"{clock.utc(flag.start)} to {clock.utc_end(flag.end)}", flag.kind, flag.state,
         _brief(flag.evidence if flag.confirmed else f"unconfirmed: {flag.evidence}"))
        for flag in sorted(near, key=lambda flag: (not flag.confirmed, flag.start))[:4]
    ]  # fmt: skip
    blocks: list[Block] = [Heading("Evidence")]
    known = np.isfinite(advice.slope)
    if known.any():
        worst = int(np.nanargmax(advice.slope))
        blocks.append(Sentence(
            f"Of {known_part(known, advice.times)}, the delay sloped by {np.nanmedian(advice.slope):.1f} mm/km in the "
            f"middle of the values and by {advice.slope[worst]:.1f} ± {advice.slope_sigma[worst]:.1f} mm/km at the "
            f"most, at {clock.utc(advice.times[worst])} UTC."
        ))  # fmt: skip
    else:
        blocks.append(Sentence("The maps of this day never saw the site."))
    if rows:
        blocks.append(Table(("Time (UTC)", "Kind", "State", "Seen by"), tuple(rows), (1.4, 0.9, 0.9, 5.0)))
    else:
        blocks.append(Sentence(f"No slope, front, patch or fault was flagged near on {str(middle)[:10]}."))
    return blocks


def _single(day: DayAdvice, site: Site) -> list[Block]:
    try:
        found = day.broadcast_model(site)
    except (Missing, NotEnough):
        return []
    if not np.isfinite(found.day_range_95_m):
        return []
    position = (
        f"; position {found.day_horizontal_95_m:.1f} m across and {found.day_vertical_95_m:.1f} m in height"
        if np.isfinite(found.day_vertical_95_m)
        else ""
    )
    return [
        Heading("Users of one frequency"),
        Sentence(f"The broadcast model leaves {found.day_range_95_m:.1f} m of range (95 %){position}."),
    ]


# ---------------------------------------------------------------------------------------------- calendars


def survey_entries(advice: Advice) -> list[Entry]:
    """Windows to work and to avoid as calendar entries."""
    job = advice.job
    return [
        Entry(w.start, w.end, f"{_WORDS[w.verdict]}: {job.name}", f"{w.why}\n{advice.caution}".strip(), job.name)
        for w in advice.windows
    ]


def approach_entries(found: Availability) -> list[Entry]:
    """Outages as calendar entries."""
    return [
        Entry(one.start, one.end, f"No {one.level}: {one.site}", f"{one.why}\n{found.caution}", one.site)
        for one in found.outages
    ]

