"""Alerts: rules say what somebody wants to know, occasions are found in the newest maps, deliveries are made.

An occasion is kept with its deliveries before any is made, so that each is made at least once; whoever gets one twice
knows it by its number.  The same occasion is told once.  A command is run without a shell and gets the notice on its
standard input.  An alert is a planning aid and says so.
"""

import json
import subprocess
import tomllib
import urllib.error
import urllib.request
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from skylag.archive import Archive
from skylag.archive.notices import Due
from skylag.errors import FormatError, Refused
from skylag.impact import at_places, silence
from skylag.impact.coming import HORIZON, coming
from skylag.tables import FLAG_KINDS, STATE_NAMES, UNSEEN, Bytes, Flag, Products, Site
from skylag.timescales import gps_to_utc

OCCASIONS = ("state", "event", "arrival", "silence")
CAUTION = "Planning aid, not for navigation."
_LATELY = np.timedelta64(30, "m")  # what ended longer ago than this before the newest map is no news
_GIVE_UP_AFTER = 40  # tries, the last ones ten minutes apart: six hours


@dataclass(frozen=True)
class Rule:
    """What somebody wants to know.

    when        of OCCASIONS: a site's state, an event of a kind anywhere, a front that will reach a site, a silent
                receiver
    site        its name; any where empty.  state: from this one on, or `unseen` alone; kind: of FLAG_KINDS, or any
    within_min  of an arrival, at most as far ahead as any is told; targets: JSON texts of where to tell it
    """

    name: str
    when: str
    site: str = ""
    state: str = "broken"
    kind: str = ""
    within_min: float = 60.0
    quiet_min: float = 30.0
    targets: tuple[str, ...] = ()


@dataclass(frozen=True)
class Occasion:
    """Something to tell: about what, in a sentence, from when to when (GPS time), and to whom."""

    subject: str
    sentence: str
    start: np.datetime64
    end: np.datetime64
    facts: Mapping[str, Any]
    rule: Rule


def read_rules(path: Path) -> tuple[Rule, ...]:
    """The rules of a file of [[alert]] entries.  Raises FormatError for no TOML, Refused for what is not understood."""
    try:
        content = tomllib.loads(path.read_text(encoding="utf-8"))
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as cause:
        raise FormatError(f"{path}: cannot be read as TOML ({cause})", path=str(path), line=0) from cause
    rules = tuple(_rule(path, entry) for entry in content.get("alert", []))
    if not rules:
        raise Refused(f"{path}: has no [[alert]] entry", name="alert", value=None, allowed="one entry or more")
    return rules


def _rule(path: Path, entry: Mapping[str, Any]) -> Rule:
    def check(name: str, value: Any, allowed: Sequence[str]) -> None:
        if value not in allowed:
            raise Refused(
                f"{path}: {name} = {value!r} is not understood; choose from {', '.join(allowed)}",
                name=name, value=value, allowed=tuple(allowed),
            )  # fmt: skip

    known = set(Rule.__dataclass_fields__) - {"targets"} | {"to"}
    for name in entry:
        check("key", name, sorted(known))
    check("when", entry.get("when"), OCCASIONS)
    check("state", entry.get("state", "broken"), ("unseen", "strained", "broken"))
    check("kind", entry.get("kind", ""), ("", *FLAG_KINDS))
    farthest_min = HORIZON / np.timedelta64(1, "m")
    within_min = entry.get("within_min", Rule.within_min)
    if isinstance(within_min, bool) or not isinstance(within_min, int | float) or not 0 < within_min <= farthest_min:
        raise Refused(
            f"{path}: within_min = {within_min!r} is no number of minutes up to {farthest_min:g}: farther ahead no "
            "arrival is told", name="within_min", value=within_min, allowed=(0, farthest_min),
        )  # fmt: skip
    targets = []
    for target in entry.get("to", []):
        way, value = next(iter(target.items())) if isinstance(target, dict) and len(target) == 1 else ("", None)
        check("to", way, ("webhook", "file", "command"))
        if way == "webhook" and not str(value).startswith(("http://", "https://")):
            raise Refused(
                f"{path}: webhook {value!r} is no http or https address", name="to", value=value, allowed="http, https"
            )
        if way == "command" and not (isinstance(value, list) and value and all(isinstance(v, str) for v in value)):
            raise Refused(
                f"{path}: a command is a list of words, like [\"/usr/bin/logger\", \"-t\", \"skylag\"]",
                name="to", value=value, allowed="a list of words",
            )  # fmt: skip
        text = json.dumps({way: value})
        if len(text) > 300:
            raise Refused(f"{path}: a target has at most 300 characters", name="to", value=text[:50], allowed=300)
        targets.append(text)
    facts = {name: value for name, value in entry.items() if name != "to"}
    return Rule(**{"name": str(entry["when"]), **facts}, targets=tuple(targets))


# ---------------------------------------------------------------------------------------------- occasions


def occasions(
    rules: Sequence[Rule], products: Products, sites: Sequence[Site] | None = None, before: Sequence[Flag] = ()
) -> list[Occasion]:
    """What the newest maps have for the rules: only what goes on at the newest map, or ended shortly before.  Pure.

    sites   those in force, whose states are told and where fronts may arrive; the products' own when None
    before  flags of the day before whose fronts may be on their way still
    """
    found: list[Occasion] = []
    if not len(products.fields.times):
        return found
    sites = products.region.sites if sites is None else sites
    judged = _judged(products, sites) if any(rule.when == "state" for rule in rules) else ()
    for rule in rules:
        if rule.when == "state":
            found += _states(rule, products, judged)
        elif rule.when == "event":
            found += _events(rule, products)
        elif rule.when == "arrival":
            found += _arrivals(rule, products, sites, before)
    return found


def silences(rules: Sequence[Rule], receiver: str, since: np.datetime64, now: np.datetime64) -> list[Occasion]:
    """A receiver that has been silent since a GPS time, for the rules that ask for it."""
    sentence = f"{receiver} has been silent since {_utc(since)}; its surroundings are turning unseen. {CAUTION}"
    return [
        Occasion(f"{rule.name}: {receiver} silent", sentence, since, now, {"receiver": receiver}, rule)
        for rule in rules if rule.when == "silence"
    ]  # fmt: skip


def _judged(products: Products, sites: Sequence[Site]) -> tuple[tuple[Site, Bytes, tuple[str, ...]], ...]:
    """Each site in force with its states (T,) and reasons."""
    states, reasons = at_places.in_force(
        sites, products.region.sites, products.site_states, products.site_reasons, products.fields, products.flags,
        products.region.thresholds, (silence.of_facts(products.origin.counts, products.receivers),),
    )  # fmt: skip
    return tuple(zip(sites, states.T, reasons, strict=True))


def _states(
    rule: Rule, products: Products, judged: Sequence[tuple[Site, Bytes, tuple[str, ...]]]
) -> list[Occasion]:
    times, found = products.fields.times, []
    for site, codes, reasons in judged:
        if rule.site not in ("", site.name):
            continue
        wanted = STATE_NAMES.index(rule.state)
        on = codes == UNSEEN if wanted == UNSEEN else codes >= wanted
        lately = np.flatnonzero(on & (times >= times[-1] - _LATELY))
        if not len(lately):
            continue
        last = int(lately[-1])
        off = np.flatnonzero(~on[: last + 1])
        first = int(off[-1]) + 1 if len(off) else 0
        reason = reasons[last]
        name = STATE_NAMES[int(codes[last])]
        sentence = f"{site.name} is {name} since {_utc(times[first])}: {reason}. {CAUTION}".replace("..", ".")
        facts = {"site": site.name, "state": name, "reason": reason, "simulated": products.origin.simulated}
        found.append(Occasion(f"{rule.name}: {site.name}", sentence, times[first], times[last], facts, rule))
    return found


def _events(rule: Rule, products: Products) -> list[Occasion]:
    newest, found = products.fields.times[-1], []
    for flag in products.flags:
        if flag.end < newest - _LATELY or (rule.kind and flag.kind != rule.kind) or not flag.confirmed:
            continue
        if STATE_NAMES.index(flag.state) < STATE_NAMES.index(rule.state):
            continue
        facts = {"kind": flag.kind, "state": flag.state, "lat": flag.lat, "lon": flag.lon,
                 "simulated": products.origin.simulated}  # fmt: skip
        subject = f"{rule.name}: {flag.kind} near {flag.lat:.0f} {flag.lon:.0f}"
        sentence = f"{flag.kind} since {_utc(flag.start)}: {flag.evidence} {CAUTION}"
        found.append(Occasion(subject, sentence, flag.start, flag.end, facts, rule))
    return found


def _arrivals(rule: Rule, products: Products, sites: Sequence[Site], before: Sequence[Flag]) -> list[Occasion]:
    newest, found = products.fields.times[-1], []
    latest = newest + np.timedelta64(round(rule.within_min * 60), "s")
    for one in coming((*products.flags, *before), sites, newest):
        site, flag = one.site.name, one.flag
        if rule.site not in ("", site) or one.expected > latest:
            continue
        sentence = (
            f"A front that moves toward {flag.heading_deg:.0f} deg at {flag.speed_m_s:.0f} m/s is expected at {site} "
            f"about {_utc(one.expected)}, give or take {one.give_or_take_min} min, if it keeps its way. {CAUTION}"
        )
        facts = {"site": site, "expected_utc": _utc(one.expected), "sigma_s": round(one.sigma_s),
                 "simulated": products.origin.simulated}  # fmt: skip
        found.append(Occasion(f"{rule.name}: front to {site}", sentence, newest, one.expected, facts, rule))
    return found


def _utc(time: np.datetime64) -> str:
    return f"{np.datetime_as_string(gps_to_utc(np.array([time]).astype('datetime64[ns]'))[0], unit='m')}Z"


def keep(archive: Archive, found: Sequence[Occasion], now: np.datetime64) -> list[int]:
    """Keep occasions that are new, with their deliveries; gives the numbers of the notices made."""
    made = []
    for one in found:
        span = {"start_ns": _ns(one.start), "end_ns": _ns(one.end)}
        number = archive.notices.tell(
            one.subject, one.sentence, {**one.facts, **span}, one.rule.targets, one.rule.quiet_min * 60.0, now
        )
        made += [] if number is None else [number]
    return made


def _ns(time: np.datetime64) -> int:
    return int(time.astype("datetime64[ns]").astype(np.int64))


# ---------------------------------------------------------------------------------------------- deliveries


def deliver(
    archive: Archive, clock: Callable[[], np.datetime64], log: Callable[..., None],
    send: "Callable[[Due], None] | None" = None,
) -> int:  # fmt: skip
    """Make the deliveries that are due; gives how many came through.  One that does not is tried later."""
    through = 0
    for due in archive.notices.due(clock()):
        number, target = due.notice.id, due.target
        try:
            (send or hand_over)(due)
        except Exception as failure:
            wait_s = min(5.0 * 2.0**due.attempts, 600.0)
            given_up = due.attempts + 1 >= _GIVE_UP_AFTER
            later = None if given_up else clock() + np.timedelta64(round(wait_s * 1e9), "ns")
            archive.notices.put_off(number, target, f"{type(failure).__name__}: {failure}", later)
            log("notice put off", notice=number, way=next(iter(json.loads(target))), why=str(failure), over=given_up)
            continue
        archive.notices.delivered(number, target, clock())
        log("notice delivered", notice=number, way=next(iter(json.loads(target))), subject=due.notice.subject)
        through += 1
    return through


def hand_over(due: Due) -> None:
    """Bring one notice to one target; raises where it did not come through."""
    notice = due.notice
    (way, value), *_ = json.loads(due.target).items()
    text = json.dumps(
        {
            "notice": notice.id, "subject": notice.subject, "sentence": notice.sentence,
            "made_utc": f"{np.datetime_as_string(notice.made, unit='s')}Z", "facts": dict(notice.facts),
            "caution": CAUTION,
        },
        ensure_ascii=False,
    )  # fmt: skip
    if way == "webhook":
        request = urllib.request.Request(
            value, text.encode(), {"Content-Type": "application/json", "User-Agent": "skylag"}, method="POST"
        )
        with _opener().open(request, timeout=10) as answer:
            answer.read(1000)
    elif way == "file":
        with Path(value).open("a", encoding="utf-8") as file:
            file.write(text + "\n")
    elif way == "command":
        done = subprocess.run(value, input=text.encode(), capture_output=True, timeout=30, check=False)
        if done.returncode:
            said = done.stderr.decode(errors="replace").strip()[-200:]
            raise RuntimeError(f"{value[0]} ended with status {done.returncode}: {said}")


class _NoRedirects(urllib.request.HTTPRedirectHandler):
    """A webhook is told where it was written down, and nowhere else."""

    def redirect_request(self, *_arguments: Any, **_named: Any) -> None:
        return None


def _opener() -> urllib.request.OpenerDirector:
    return urllib.request.build_opener(_NoRedirects)
