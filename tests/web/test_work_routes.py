"""Sending files, queueing work, following along, figures: over the real application, with the worker beside it."""

import asyncio
import gzip
import json
import re
import subprocess
import sys
import threading
import zlib
from collections.abc import Iterator
from pathlib import Path

import httpx
import numpy as np
import pytest
from fastapi.testclient import TestClient
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from tests.builders import REGION, STORM_DAY, invented_day
from tests.formats.test_biases import HEAD as BIAS_HEAD
from tests.formats.test_biases import ROWS, TAIL
from tests.web.test_serve import ROOT

from skylag.archive import Archive, open_archive
from skylag.formats import ionex
from skylag.jobs import guard
from skylag.jobs.board import Policy, Worker
from skylag.jobs.guard import Inbox, Limits
from skylag.web.access import Access, for_host
from skylag.web.app import create_app
from skylag.web.work import Feed

T0 = np.datetime64("2031-05-12T08:00:00", "ns")
HEAD = (
    "     2.11           OBSERVATION DATA    G (GPS)             RINEX VERSION / TYPE\n"
    "  2031     5    11     0     0    0.0000000     GPS         TIME OF FIRST OBS\n"
)
BIASES = BIAS_HEAD + ROWS + TAIL


@pytest.fixture
def own(tmp_path: Path) -> Iterator[Archive]:
    with open_archive(tmp_path / "archive.sqlite") as archive:
        yield archive


def client_of(archive: Archive, page: Path, limits: Limits | None = None) -> TestClient:
    access = Access(writing="open", limits=limits or Limits())
    app = create_app(archive, clock=lambda: T0, frontend=page, access=access)
    return TestClient(app, raise_server_exceptions=False)


@pytest.fixture
def client(own: Archive, page_folder: Path) -> TestClient:
    return client_of(own, page_folder)


def send(client: TestClient, batch: str, name: str, data: bytes) -> httpx.Response:
    return client.put(f"/api/batches/{batch}/files", params={"name": name}, content=data)


def files_of(archive: Archive) -> list[Path]:
    folder = archive.slant_folder.with_name(archive.slant_folder.name + ".inbox")
    return sorted(path for path in folder.rglob("*") if path.is_file())


def test_from_files_to_a_stored_day(own: Archive, client: TestClient, sample_folder: Path) -> None:
    batch = client.post("/api/batches").json()["batch"]
    for marker, kind, told in (
        ("MRGT", "observations", ("MRGT00XBS", "2031-03-11")), ("TARN", "navigation", ("", None)),
    ):  # fmt: skip
        path = next((sample_folder / "2031-03-11").glob(f"{marker}*"))
        sent = send(client, batch, path.name, path.read_bytes())
        assert sent.status_code == 201 and sent.json()["kind"] == kind
        assert sent.json()["bytes"] == path.stat().st_size
        assert (sent.json()["marker"], sent.json()["day"]) == told
    assert send(client, batch, "of another\n year.BIA", BIASES.encode()).json()["kind"] == "biases"
    begun = client.post(f"/api/batches/{batch}/work")
    assert begun.status_code == 202
    (task,) = begun.json()["tasks"]
    assert (task["state"], task["day"], len(task["files"])) == ("waiting", "2031-03-11", 3)
    assert not any("/" in name for name in task["files"]), "paths of the server are not told"
    Worker(own, "threads:1", lambda: T0, Policy(beat_s=0.05)).run(threading.Event(), until_empty=True)
    done = client.get(f"/api/work/{task['id']}").json()
    assert done["state"] == "done", done["said"]
    address = f"/api/days/{done['result']['region']}/2031-03-11"
    day = client.get(address).json()
    assert day["receivers"][0]["name"] == "MRGT00XBS"
    # A file that is of no use is told by the name it was sent under, at once, and never by where it lies.
    said = "left out: of another year.BIA: its biases are of 2021-03-19 to 2021-03-20, not of 2031-03-11"
    assert any(warning.startswith(said) for warning in day["warnings"]) and ".inbox" not in json.dumps(day)
    names = {one["name"] for one in own.day(done["result"]["region"], "2031-03-11").origin.inputs}
    assert "of another year.BIA" in names and any(name.startswith("MRGT00XBS_R_") for name in names)
    work = client.get("/api/work").json()
    assert work["counts"]["done"] == 2, "the day, and the outlook after it"
    outlook = next(one for one in work["tasks"] if one["kind"] == "outlook")
    assert (outlook["region"], outlook["day"]) == (done["result"]["region"], "2031-03-11")


# ---------------------------------------------------------------------------------------------- names and sizes

WICKED = ["../../etc/passwd", "/etc/passwd", "..", ".", "", "C:\\x", "a/b", "x\x00y", "MRGT00XBS_/../x", "-rf", "~",
          "CON", ".hidden", "a" * 300, "MRGT00XBS_R\n", "%2e%2e%2f", "mrgt070a.31o/..", "٣٣٣٣070a.31o"]  # fmt: skip


@pytest.mark.parametrize("name", WICKED)
def test_a_name_never_becomes_a_path(own: Archive, client: TestClient, name: str, tmp_path: Path) -> None:
    batch = client.post("/api/batches").json()["batch"]
    before = {path for path in tmp_path.rglob("*") if "inbox" not in str(path)}
    sent = send(client, batch, name, HEAD.encode())
    assert sent.status_code == 201, sent.text
    assert {path for path in tmp_path.rglob("*") if "inbox" not in str(path)} == before
    usual = r"([A-Z0-9]{9}_)?[0-9a-f]{64}"
    (kept,) = [path for path in files_of(own) if not path.name.startswith(".")]
    assert kept.parent.name == batch and re.fullmatch(usual, kept.name)
    for note in set(files_of(own)) - {kept}:  # the name as text, on one line
        assert note == kept.with_name(f".{kept.name}.sent")
        assert note.read_text(encoding="utf-8").isprintable()


def test_why_no_work_begins_is_told_by_the_names_that_were_sent(client: TestClient) -> None:
    batch = client.post("/api/batches").json()["batch"]
    for name in ("ours.BIA", "map.31i"):
        told = ionex.write(invented_day(STORM_DAY, step_minutes=60, satellites=6).fields, T0, 400.0)
        assert send(client, batch, name, (BIASES if name == "ours.BIA" else told).encode()).status_code == 201
    refused = client.post(f"/api/batches/{batch}/work")
    assert refused.status_code == 422 and "\n  map.31i: holds a published map" in refused.json()["error"]
    assert ".inbox" not in refused.text


def test_usual_names_keep_what_tells_the_receiver() -> None:
    mark = "0" * 64
    assert guard.kept_name("MRGT00XBS_R_20310700000_01H_30S_MO.crx.gz", mark) == f"MRGT00XBS_{mark}"
    assert guard.kept_name("mrgt070a.31o", mark) == f"mrgt070a.{mark}"
    assert guard.kept_name("mrgt070a15.31d.Z", mark) == f"mrgt070a15.{mark}"


@pytest.mark.parametrize("batch", ["0" * 32, "..", "x", "../" + "0" * 29, "0" * 31 + "G"])
def test_batches_that_were_not_given_out(client: TestClient, batch: str) -> None:
    for answer in (send(client, batch, "x.rnx", b"x"), client.post(f"/api/batches/{batch}/work")):
        assert answer.status_code in (404, 405), answer.text


@pytest.mark.parametrize(
    "data, word", [(b"", "empty"), (b"Dear surveyor,\n", "no kind"), (b"\x1f\x8bnonsense", "no kind")]
)
def test_what_nobody_can_use_is_refused_at_once(own: Archive, client: TestClient, data: bytes, word: str) -> None:
    batch = client.post("/api/batches").json()["batch"]
    refused = send(client, batch, "x.rnx", data)
    assert refused.status_code == 422 and word in refused.json()["error"]
    assert files_of(own) == []


def test_sizes_are_limited(own: Archive, page_folder: Path) -> None:
    client = client_of(own, page_folder, Limits(file_bytes=1000, batch_bytes=1500, batch_files=3))
    batch = client.post("/api/batches").json()["batch"]
    assert send(client, batch, "a.rnx", HEAD.encode().ljust(1001)).status_code == 422
    assert client.put(f"/api/batches/{batch}/files?name=b", content=iter([HEAD.encode()] * 9)).status_code == 422
    assert files_of(own) == [], "nothing is left of what was too much, announced or not"
    assert send(client, batch, "a.rnx", HEAD.encode().ljust(900)).status_code == 201
    assert send(client, batch, "b.rnx", HEAD.encode().ljust(700)).status_code == 422
    for pad in (201, 202):
        assert send(client, batch, "c.rnx", HEAD.encode().ljust(pad)).status_code == 201
    assert "at most 3 files" in send(client, batch, "d.rnx", HEAD.encode()).json()["error"]


def test_a_full_disk_is_said_in_words(tmp_path: Path) -> None:
    inbox = Inbox(tmp_path / "inbox", Limits(spare_bytes=2**60))
    with pytest.raises(Exception, match="no room for this file"):
        inbox.receive(inbox.open_batch(), "x.rnx", 100)


def test_a_bomb_is_refused_and_the_rest_goes_on(own: Archive, client: TestClient) -> None:
    """A good head, then 300 MB of nothing in 300 kB: it passes for an observation file, and its reader refuses it."""
    batch = client.post("/api/batches").json()["batch"]
    squeeze = zlib.compressobj(9, wbits=31)
    bomb = b"".join([squeeze.compress(HEAD.encode()), *(squeeze.compress(bytes(2**20)) for _ in range(300))])
    bomb += squeeze.flush()
    assert len(bomb) < 400_000 and send(client, batch, "MRGT00XBS_R_20311310000.rnx.gz", bomb).status_code == 201
    navigation = "     3.04           NAVIGATION DATA     M (MIXED)           RINEX VERSION / TYPE\n"
    send(client, batch, "nav.gz", gzip.compress(navigation.encode()))
    assert client.post(f"/api/batches/{batch}/work").status_code == 202
    Worker(own, "threads:1", lambda: T0, Policy(beat_s=0.05)).run(threading.Event(), until_empty=True)
    (task,) = client.get("/api/work").json()["tasks"]
    assert task["state"] == "failed" and task["attempts"] == 1
    from skylag.errors import FormatError
    from skylag.formats import read

    with pytest.raises(FormatError, match="swell"):
        read(next(path for path in files_of(own) if path.name.startswith("MRGT")))


# ---------------------------------------------------------------------------------------------- following along


def follow(feed: Feed, count: int, act) -> list[tuple[str, dict]]:
    """The first `count` events of a feed; `act(number)` is called after each."""

    async def run() -> list[tuple[str, dict]]:
        found: list[tuple[str, dict]] = []
        stream = feed.follow()
        async for text in stream:
            match = re.fullmatch(r"event: (\w+)\ndata: (.*)\n\n", text)
            if match:
                found.append((match.group(1), json.loads(match.group(2))))
                await asyncio.to_thread(act, len(found))
            if len(found) == count:
                break
        await stream.aclose()
        return found

    return asyncio.run(asyncio.wait_for(run(), 20))


def test_followers_are_told_what_changes(own: Archive) -> None:
    own.tasks.add("tiny", "first", {"number": 1}, T0)

    def act(number: int) -> None:
        if number == 1:
            own.tasks.cancel(1, T0)
        if number == 2:
            own.save(invented_day(STORM_DAY))

        if number == 3:
            own.notices.tell("port", "It is broken.", {"start_ns": 1, "end_ns": 2}, ['{"webhook": "https://s"}'], 0, T0)

    told = follow(Feed(own, look_s=0.02), 4, act)
    assert [(event, facts.get("state", facts.get("version"))) for event, facts in told] == [
        ("work", "waiting"), ("work", "cancelled"), ("day", 1), ("notice", None)]  # fmt: skip
    assert told[3][1]["deliveries"] == [{"way": "webhook", "attempts": 0, "delivered_utc": None}]
    client = TestClient(create_app(own))
    assert client.get("/api/notices").json()["notices"] == [told[3][1]], "addresses may hold secrets: not told"
    assert "skylag_deliveries_waiting 1" in client.get("/metrics").text


def test_nobody_looks_while_nobody_follows(own: Archive) -> None:
    own.tasks.add("tiny", "first", {"number": 1}, T0)
    feed, looks = Feed(own, look_s=0.01), []
    recent = feed._recent
    feed._recent = lambda: looks.append(1) or recent()

    async def run() -> int:
        stream = feed.follow()
        await anext(stream)
        await anext(stream)
        await stream.aclose()
        await asyncio.sleep(0.1)
        before = len(looks)
        await asyncio.sleep(0.1)
        return len(looks) - before

    assert asyncio.run(run()) == 0 and looks


FOLLOWED = """
import sys, numpy as np
from skylag.archive import open_archive
from skylag.web.access import for_host
from skylag.web.app import create_app, serve
with open_archive(sys.argv[1]) as archive:
    app = create_app(archive, clock=lambda: np.datetime64("2031-05-12T08:00:00", "ns"), access=for_host("127.0.0.1"))
    serve(app, "127.0.0.1", 0, lambda address: print(address, flush=True))
print("closed", flush=True)
"""


def test_a_real_server_streams_and_still_ends(own: Archive, tmp_path: Path) -> None:
    """Over a real connection the event comes at once, not when a buffer is full; and Ctrl-C ends the server."""
    own.tasks.add("tiny", "first", {"number": 1}, T0)
    server = subprocess.Popen(
        [sys.executable, "-c", FOLLOWED, str(tmp_path / "archive.sqlite")], cwd=ROOT, stdout=subprocess.PIPE, text=True
    )
    try:
        address = server.stdout.readline().strip()
        with httpx.stream("GET", f"{address}api/work/news", timeout=20) as stream:
            assert stream.headers["content-type"].startswith("text/event-stream")
            lines = stream.iter_lines()
            assert next(line for line in lines if line.startswith("event:")) == "event: work"
            assert httpx.post(f"{address}api/work/1/cancel", timeout=20).status_code == 200
            assert next(line for line in lines if '"cancelled"' in line)
            server.terminate()
            assert server.wait(20) == 0 or server.returncode == -15
    finally:
        server.kill()
        server.communicate()


# ---------------------------------------------------------------------------------------------- figures


def test_figures_are_in_the_prometheus_text_format(own: Archive, client: TestClient) -> None:
    """Lines as the Prometheus documentation gives them (Exposition formats, text-based format)."""
    own.tasks.add("tiny", "first", {"number": 1}, T0)
    own.save(invented_day(STORM_DAY))
    for address in ("/api/days", "/api/days", "/api/nothing"):
        client.get(address)
    answer = client.get("/metrics")
    assert answer.headers["content-type"] == "text/plain; version=0.0.4; charset=utf-8"
    line = re.compile(r'[a-z_]+(\{[a-z]+="[^"\\]*"(,[a-z]+="[^"\\]*")*\})? [0-9.e+-]+')
    values = {}
    for text in answer.text.splitlines():
        if not text.startswith(("# HELP ", "# TYPE ")):
            assert line.fullmatch(text), text
            name, _, value = text.rpartition(" ")
            assert name not in values, "each series once"
            values[name] = float(value)
    assert values['skylag_tasks{state="waiting"}'] == 1 and values['skylag_tasks{state="failed"}'] == 0
    assert values["skylag_days"] == 1 and values["skylag_versions"] == 1
    assert values['skylag_http_requests_total{method="GET",status="200"}'] == 2
    assert values['skylag_http_requests_total{method="GET",status="404"}'] == 1
    assert values['skylag_http_request_seconds_bucket{le="+Inf"}'] == values["skylag_http_request_seconds_count"] == 3
    steps = [v for k, v in values.items() if k.startswith("skylag_http_request_seconds_bucket")]
    assert steps == sorted(steps)


ASKED = st.sampled_from(["1", "0", "-1", "77", str(2**63), "x", "..", "%00", "0" * 32, "a", "2031-05-11", "", "1e3"])


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    way=st.sampled_from([
        ("POST", "/api/work/{a}/cancel"), ("POST", "/api/work/{a}/again"), ("PUT", "/api/batches/{a}/files?name={b}"),
        ("POST", "/api/batches/{a}/work?region={b}&day={c}"), ("PUT", "/api/pins/{a}/{b}?version={c}"),
        ("POST", "/api/batches"),
    ]),
    a=ASKED, b=ASKED, c=ASKED, body=st.binary(max_size=60), length=st.sampled_from([None, "-1", "x", "9" * 30]),
)  # fmt: skip
def test_no_change_that_is_asked_for_is_a_defect(
    client: TestClient, way: tuple[str, str], a: str, b: str, c: str, body: bytes, length: str | None
) -> None:
    headers = {} if length is None else {"Content-Length": length}
    answer = client.request(way[0], way[1].format(a=a, b=b, c=c), content=body, headers=headers)
    assert answer.status_code < 500, (way, a, b, c, answer.text)
    if answer.status_code >= 400:
        assert set(answer.json()) == {"ok", "error", "kind", "details", "status"}


def test_a_list_of_one_state(own: Archive, client: TestClient) -> None:
    own.tasks.add("tiny", "first", {"number": 1}, T0)
    assert len(client.get("/api/work?state=waiting").json()["tasks"]) == 1
    assert client.get("/api/work?state=done").json()["tasks"] == []
    assert "choose from waiting" in client.get("/api/work?state=odd").json()["error"]
    assert client.get("/api/work/77").status_code == 404
    assert client.post("/api/work/77/cancel").status_code == 404


def test_a_pin_over_http(own: Archive, client: TestClient) -> None:
    own.save(invented_day(STORM_DAY))
    own.save(invented_day(STORM_DAY))
    address = f"/api/pins/{REGION.name}/{STORM_DAY}"
    assert client.put(address, params={"version": 1}).json()["version"] == 1
    assert client.put(address).json()["version"] == 2
    assert for_host("127.0.0.1").writing == "open"
