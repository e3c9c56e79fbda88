"""Alerts: the right occasions, told once, delivered at least once."""

import json
import sys
import threading
from collections.abc import Iterator
from dataclasses import replace
from http.server import BaseHTTPRequestHandler, HTTPServer
from pathlib import Path
from typing import ClassVar

import numpy as np
import pytest
from tests.builders import REGION, STORM_DAY, invented_day

from skylag.archive import Archive
from skylag.errors import FormatError, Refused
from skylag.jobs import alerts
from skylag.jobs.alerts import Rule
from skylag.tables import BROKEN, HOLDS, STRAINED, UNSEEN, Products, Site

T0 = np.datetime64("2031-05-11T12:00:00", "ns")


def quiet(_event: str, **_facts: object) -> None:
    pass


def until(products: Products, text: str) -> Products:
    """The day as it was known at a time of day."""
    keep = products.fields.times < np.datetime64(f"{products.day}T{text}", "ns")
    count = int(keep.sum())
    layers = {name: getattr(products.fields, name)[:count] for name in type(products.fields).LAYERS}
    return replace(
        products,
        fields=replace(products.fields, times=products.fields.times[:count], **layers),
        site_states=products.site_states[:count],
        site_reasons=tuple(one[:count] for one in products.site_reasons),
    )


@pytest.fixture(scope="module")
def storm() -> Products:
    """Gannet Field: holds, is strained at 04:00 and broken from 05:00 to 06:00, holds again; unseen from 20:00."""
    day = invented_day(STORM_DAY)
    hours = (day.fields.times - day.fields.times[0]) / np.timedelta64(1, "h")
    codes = np.full(day.site_states.shape, HOLDS, dtype=np.uint8)
    codes[(hours >= 4) & (hours < 7), 1] = STRAINED
    codes[(hours >= 5) & (hours < 6), 1] = BROKEN
    codes[hours >= 20, 1] = UNSEEN
    return replace(day, site_states=codes)


def subjects(rule: Rule, products: Products) -> list[tuple[str, str]]:
    found = alerts.occasions([rule], products)
    return [(one.subject, np.datetime_as_string(one.start, unit="m")[11:]) for one in found]


def test_a_state_is_told_while_it_lasts_and_shortly_after(storm: Products) -> None:
    rule = Rule("r", "state", site="Gannet Field", state="broken")
    assert subjects(rule, until(storm, "05:00")) == []
    for text in ("05:15", "06:00", "06:30"):
        assert subjects(rule, until(storm, text)) == [("r: Gannet Field", "05:00")], text
    assert subjects(rule, until(storm, "06:45")) == []


def test_a_state_means_from_it_on_and_unseen_means_unseen(storm: Products) -> None:
    assert subjects(Rule("r", "state", state="strained"), until(storm, "05:30")) == [("r: Gannet Field", "04:00")]
    assert subjects(Rule("r", "state", state="strained"), storm) == [], "unseen is no warning of its own"
    assert subjects(Rule("r", "state", state="unseen"), storm) == [("r: Gannet Field", "20:00")]
    assert subjects(Rule("r", "state", site="Northport"), until(storm, "05:30")) == []


def test_events_of_a_kind(storm: Products) -> None:
    at = until(storm, "06:00")
    assert [s for s, _ in subjects(Rule("r", "event", kind="front"), at)] == ["r: front near -40 146"]
    assert subjects(Rule("r", "event", kind="irregular", state="strained"), until(storm, "10:00")) != []
    assert subjects(Rule("r", "event", kind="fault", state="strained"), until(storm, "05:15")) == [], "not confirmed"
    assert subjects(Rule("r", "event"), until(storm, "12:30")) == [], "over for long"


def test_an_arrival_within_the_time_asked_for(storm: Products) -> None:
    front = replace(storm.flags[0], track=storm.flags[0].track[:5], end=storm.flags[0].track[4][0])
    at = replace(until(storm, "05:15"), flags=(front,))  # at -41.5 then; Gannet Field at -41.1, Northport at -37.8
    assert [s for s, _ in subjects(Rule("r", "arrival", within_min=30), at)] == ["r: front to Gannet Field"]
    assert len(subjects(Rule("r", "arrival", within_min=120), at)) == 3
    (one,) = alerts.occasions([Rule("r", "arrival", site="Northport", within_min=120)], at)
    assert "toward 0 deg at 62 m/s" in one.sentence and "not for navigation" in one.sentence
    # By hand: 3.7 degrees at 61.8 m/s take 6657 s; a speed sigma of 6.18 m/s is a tenth of it, 666 s; the line's place
    # adds 6000 / 61.8 = 97 s: 673 s, twice that is 22 minutes.
    sure = replace(front, speed_sigma_m_s=0.1 * front.speed_m_s)
    (one,) = alerts.occasions([Rule("r", "arrival", site="Northport", within_min=120)], replace(at, flags=(sure,)))
    assert "give or take 22 min" in one.sentence and abs(one.facts["sigma_s"] - 673) < 15


def test_arrivals_are_told_for_the_sites_in_force(storm: Products) -> None:
    """A site that was added since is told, one that was taken away is not."""
    front = replace(storm.flags[0], track=storm.flags[0].track[:5], end=storm.flags[0].track[4][0])
    at, rule = replace(until(storm, "05:15"), flags=(front,)), Rule("r", "arrival", within_min=120)
    sites = (*(site for site in REGION.sites if site.name != "Northport"), Site("New quay", -40.5, 146.0, "port"))
    told = {one.facts["site"] for one in alerts.occasions([rule], at, sites)}
    assert told == {one.facts["site"] for one in alerts.occasions([rule], at)} - {"Northport"} | {"New quay"}


def test_states_are_told_for_the_sites_in_force(storm: Products) -> None:
    """A site that was added or moved since is told from the kept maps, one that was taken away is not."""
    at, rule = until(storm, "05:30"), Rule("r", "state", state="broken")
    lat, lon = storm.fields.lats, storm.fields.lons
    row, column = np.argwhere(at.fields.state[-1] == BROKEN)[0]
    quay = Site("New quay", float(lat[row]), float(lon[column]), "port")
    moved = Site("Northport", quay.lat, quay.lon, "port")
    calm = Site("Calm", *(float(axis[k]) for axis, k in zip((lat, lon), np.argwhere(at.fields.state[-1] == HOLDS)[0],
                                                           strict=True)))  # fmt: skip
    others = tuple(site for site in REGION.sites if site.name not in ("Northport", "Gannet Field"))
    own = {one.facts["site"] for one in alerts.occasions([rule], at)}
    assert own == {"Gannet Field"}
    told = alerts.occasions([rule], at, (*others, moved, quay, calm))
    assert {one.facts["site"] for one in told} == {"Northport", "New quay"}
    assert all(one.facts["reason"] and one.facts["reason"] in one.sentence for one in told)
    assert all("not for navigation" in one.sentence for one in told)
    named = alerts.occasions([replace(rule, site="New quay")], at, (*others, quay))
    assert [one.subject for one in named] == ["r: New quay"]
    assert alerts.occasions([rule], at, others) == []
    assert alerts.occasions([rule], at, (*others, REGION.sites[1]))[0].start == alerts.occasions([rule], at)[0].start
    assert alerts.occasions([Rule("r", "state", state="unseen")], at, (Site("Far", 10.0, 20.0),)) != []


@pytest.mark.parametrize("within", ["0", "-5", "181", "nan", "true", '"60"'])
def test_no_arrival_is_told_farther_ahead_than_any(tmp_path: Path, within: str) -> None:
    rules = tmp_path / "rules.toml"
    text = '[[alert]]\nwhen = "arrival"\nto = [{file = "told"}]\nwithin_min = '
    rules.write_text(f"{text}{within}\n", encoding="utf-8")
    with pytest.raises(Refused, match="up to 180"):
        alerts.read_rules(rules)
    rules.write_text(f"{text}180\n", encoding="utf-8")
    assert alerts.read_rules(rules)[0].within_min == 180


# ---------------------------------------------------------------------------------------------- once


def test_the_same_occasion_is_told_once(archive: Archive, storm: Products) -> None:
    """Maps are made again and again, and the start of a span moves a little; a new span hours later is new."""
    rule = Rule("r", "state", state="strained", targets=('{"file": "x"}',))
    made = []
    for text in ("04:15", "04:30", "05:30", "07:15"):
        made.append(len(alerts.keep(archive, alerts.occasions([rule], until(storm, text)), T0)))
    moved = [replace(one, start=one.start + np.timedelta64(15, "m"))
             for one in alerts.occasions([rule], until(storm, "05:30"))]  # fmt: skip
    made.append(len(alerts.keep(archive, moved, T0)))
    later = [replace(one, start=one.start + np.timedelta64(6, "h"), end=one.end + np.timedelta64(6, "h"))
             for one in alerts.occasions([rule], until(storm, "05:30"))]  # fmt: skip
    made.append(len(alerts.keep(archive, later, T0)))
    assert made == [1, 0, 0, 0, 0, 1]
    assert archive.notices.undelivered() == 2


# ---------------------------------------------------------------------------------------------- at least once


class Hook(BaseHTTPRequestHandler):
    """Says what it is told to, and keeps what it gets."""

    answers: ClassVar[list[int]] = []
    got: ClassVar[list[dict]] = []

    def do_POST(self) -> None:
        body = json.loads(self.rfile.read(int(self.headers["content-length"])))
        status = Hook.answers.pop(0) if Hook.answers else 200
        if status == 200:
            Hook.got.append(body)
        self.send_response(status)
        if status == 302:
            self.send_header("Location", "/elsewhere")
        self.end_headers()

    def log_message(self, *_: object) -> None:
        pass


@pytest.fixture
def hook() -> Iterator[str]:
    Hook.answers, Hook.got = [], []
    server = HTTPServer(("127.0.0.1", 0), Hook)
    threading.Thread(target=server.serve_forever, daemon=True).start()
    yield f"http://127.0.0.1:{server.server_port}/hook"
    server.shutdown()
    server.server_close()


def test_every_way_of_delivery(archive: Archive, storm: Products, hook: str, tmp_path: Path) -> None:
    took = tmp_path / "took.json"
    command = [sys.executable, "-c", f"import sys; open({str(took)!r}, 'w').write(sys.stdin.read())"]
    ways = ({"webhook": hook}, {"file": str(tmp_path / "log.jsonl")}, {"command": command})
    rule = Rule("r", "state", targets=tuple(json.dumps(way) for way in ways))
    (number,) = alerts.keep(archive, alerts.occasions([rule], until(storm, "05:30")), T0)
    assert alerts.deliver(archive, lambda: T0, quiet) == 3
    got = [Hook.got[0], json.loads((tmp_path / "log.jsonl").read_text()), json.loads(took.read_text())]
    assert got[0] == got[1] == got[2] and got[0]["notice"] == number
    assert got[0]["facts"]["site"] == "Gannet Field" and got[0]["facts"]["simulated"] is True
    assert got[0]["made_utc"] == "2031-05-11T12:00:00Z"
    assert alerts.deliver(archive, lambda: T0, quiet) == 0, "not again"
    ((_, deliveries),) = archive.notices.newest()
    assert len(deliveries) == 3 and all(one.delivered == T0 and one.attempts == 1 for one in deliveries)


def test_a_target_that_is_away_gets_it_later(archive: Archive, storm: Products, hook: str) -> None:
    """An error, a redirect (not followed) and a cut are each tried again, with growing waits."""
    rule = Rule("r", "state", targets=(json.dumps({"webhook": hook}),))
    alerts.keep(archive, alerts.occasions([rule], until(storm, "05:30")), T0)
    Hook.answers = [500, 302, 404]
    now, waits = T0, []
    while not Hook.got:
        alerts.deliver(archive, lambda: now, quiet)  # noqa: B023 - called at once
        waits.append(0)
        while not archive.notices.due(now) and not Hook.got:
            now += np.timedelta64(1, "s")
            waits[-1] += 1
    assert waits == [5, 10, 20, 0]
    assert len(Hook.got) == 1 and archive.notices.undelivered() == 0


def test_killed_between_delivery_and_its_note(archive: Archive, storm: Products) -> None:
    """It is delivered again with the same number: at least once, never not at all."""
    rule = Rule("r", "state", targets=('{"file": "x"}',))
    alerts.keep(archive, alerts.occasions([rule], until(storm, "05:30")), T0)
    got: list[int] = []

    class Killed(BaseException):
        pass

    def send(due: object) -> None:
        got.append(due.notice.id)
        if len(got) == 1:
            raise Killed

    with pytest.raises(Killed):
        alerts.deliver(archive, lambda: T0, quiet, send)
    assert alerts.deliver(archive, lambda: T0, quiet, send) == 1
    assert got == [got[0]] * 2


def test_a_command_that_fails_is_said_and_tried_again(archive: Archive, storm: Products) -> None:
    command = [sys.executable, "-c", "import sys; sys.exit('the horn is broken')"]
    rule = Rule("r", "state", targets=(json.dumps({"command": command}),))
    alerts.keep(archive, alerts.occasions([rule], until(storm, "05:30")), T0)
    assert alerts.deliver(archive, lambda: T0, quiet) == 0
    ((_, (one,)),) = archive.notices.newest()
    assert "the horn is broken" in one.said and np.isnat(one.delivered)


def test_no_shell_is_between(archive: Archive, storm: Products, tmp_path: Path) -> None:
    """A word with a command of a shell inside stays a word."""
    named = tmp_path / "out"
    words = [sys.executable, "-c", "import sys, pathlib; pathlib.Path(sys.argv[1]).write_text(sys.argv[2])",
             str(named), "$(touch x); `touch y`"]  # fmt: skip
    rule = Rule("r", "state", targets=(json.dumps({"command": words}),))
    alerts.keep(archive, alerts.occasions([rule], until(storm, "05:30")), T0)
    assert alerts.deliver(archive, lambda: T0, quiet) == 1
    assert named.read_text() == "$(touch x); `touch y`"


# ---------------------------------------------------------------------------------------------- rules


def test_rules_from_a_file(tmp_path: Path) -> None:
    path = tmp_path / "alerts.toml"
    path.write_text(
        '[[alert]]\nname = "port"\nwhen = "state"\nsite = "Northport"\nstate = "strained"\n'
        'to = [{file = "/var/log/x"}, {webhook = "https://example.org/hook"}]\n'
        '[[alert]]\nwhen = "silence"\nto = [{command = ["logger", "-t", "skylag"]}]\n'
    )
    rules = alerts.read_rules(path)
    assert rules[0] == Rule("port", "state", "Northport", "strained",
                            targets=('{"file": "/var/log/x"}', '{"webhook": "https://example.org/hook"}'))  # fmt: skip
    assert rules[1].name == "silence" and REGION.sites[0].name == "Northport"


@pytest.mark.parametrize(
    "text, word",
    [("", "no [[alert]]"), ('[[alert]]\nwhen = "rain"', "rain"), ('[[alert]]\nwhen = "state"\nstat = 1', "stat"),
     ('[[alert]]\nwhen = "state"\nto = [{webhook = "file:/etc/passwd"}]', "no http"),
     ('[[alert]]\nwhen = "state"\nto = [{command = "rm -rf"}]', "list of words"),
     ('[[alert]]\nwhen = "state"\nto = ["x"]', "to"), ('[[alert]]\nwhen = "state"\nstate = "good"', "good"),
     ("[", "TOML")],
)  # fmt: skip
def test_rules_that_are_not_understood(tmp_path: Path, text: str, word: str) -> None:
    (tmp_path / "a.toml").write_text(text)
    with pytest.raises((Refused, FormatError)) as caught:
        alerts.read_rules(tmp_path / "a.toml")
    assert word in str(caught.value)
