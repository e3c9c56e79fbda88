"""The route that lays a published map beside a day."""

import asyncio
import base64
import bz2
import gzip
import io
import time
import zipfile
from collections.abc import Iterator, MutableMapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from fastapi.testclient import TestClient
from tests.builders import CALM_DAY, REGION, invented_day

from skylag.archive import Archive, open_archive
from skylag.formats import ionex, rinex_obs, wrappers
from skylag.jobs import guard
from skylag.jobs.guard import AtOnce
from skylag.web import beside
from skylag.web.access import Access, for_host
from skylag.web.app import create_app


@pytest.fixture
def open_client(small_archive: Archive, page_folder: Path) -> Iterator[TestClient]:
    app = create_app(small_archive, frontend=page_folder, access=Access(writing="open"))
    with TestClient(app, raise_server_exceptions=False) as asking:
        yield asking


def published(archive: Archive) -> bytes:
    """The calm day's own maps, two TECU higher, as a file."""
    fields = archive.fields(archive.regions()[0], str(CALM_DAY))
    return ionex.write(replace(fields, vtec=fields.vtec + np.float32(2.0)), fields.times[0], 400.0).encode()


def test_a_map_that_is_sent_is_laid_beside_the_day(open_client: TestClient, small_archive: Archive) -> None:
    route = f"/api/days/{small_archive.regions()[0]}/{CALM_DAY}/beside"
    for data in (published(small_archive), gzip.compress(published(small_archive))):
        answer = open_client.post(route, params={"name": "../made.31i"}, content=data)
        assert answer.status_code == 200
        told = answer.json()
        assert told["name"] == "made.31i"
        assert told["facts"]["mean_tecu"] == pytest.approx(-2.0, abs=0.15)
        hours = len(told["hours"]["start_utc"])
        shape = [hours, len(told["lats"]), len(told["lons"])]
        assert told["difference_m"]["shape"] == shape and told["hours"]["start_utc"][0].endswith(":00:00Z")
        values = np.frombuffer(base64.b64decode(told["difference_m"]["base64"]), "<f4").reshape(shape)
        assert np.nanmean(values) == pytest.approx(-2.0 * 0.16237, abs=0.03)
        assert any("Invented" in sentence for sentence in told["said"])


def test_a_map_whose_biases_are_a_receivers_alone(open_client: TestClient, small_archive: Archive) -> None:
    """Maps of real days tell receivers on codes that their satellites are not told on: no scatter of satellites."""
    region = small_archive.regions()[0]
    ours = small_archive.biases(region, str(CALM_DAY), small_archive.day(region, str(CALM_DAY)).head.version)
    of_receivers = ours.kind == "receiver"
    columns = ("kind", "name", "system", "code1", "code2", "value_ns", "sigma_ns", "start", "end")
    told = replace(ours, **{name: getattr(ours, name)[of_receivers] for name in columns})
    fields = small_archive.fields(region, str(CALM_DAY))
    data = ionex.write(fields, fields.times[0], 400.0, biases=told).encode()
    answer = open_client.post(f"/api/days/{region}/{CALM_DAY}/beside", content=data)
    assert answer.status_code == 200, answer.text
    (one,) = answer.json()["facts"]["biases"]
    assert one["receivers"] > 0 and one["satellites"] == 0 and one["satellite_scatter_ns"] is None


def test_what_is_no_map_is_refused(
    open_client: TestClient, small_archive: Archive, monkeypatch: pytest.MonkeyPatch
) -> None:
    region = small_archive.regions()[0]
    route = f"/api/days/{region}/{CALM_DAY}/beside"
    for data, words in ((b"", "empty"), (b"no map at all", "no format known"), (b"\x1f\x8bgarbage", "made")):
        answer = open_client.post(route, params={"name": "made"}, content=data)
        assert answer.status_code == 422 and words in answer.json()["error"]
    monkeypatch.setattr(beside, "MOST_BYTES", 1000)
    answer = open_client.post(route, content=published(small_archive))
    assert answer.status_code == 422 and "larger" in answer.json()["error"]
    assert open_client.post(f"/api/days/{region}/2001-01-01/beside", content=b"x").status_code == 404


# ---------------------------------------------------------------------------------------------- who may ask


@pytest.fixture
def own(tmp_path: Path) -> Iterator[Archive]:
    with open_archive(tmp_path) as archive:
        archive.save(invented_day(CALM_DAY))
        yield archive


ROUTE = f"/api/days/{REGION.name}/{CALM_DAY}/beside"


def client_of(archive: Archive, access: Access | None, page: Path, host: str = "skylag.example") -> TestClient:
    return TestClient(create_app(archive, frontend=page, access=access), base_url=f"http://{host}")


def test_who_may_read_may_ask(own: Archive, page_folder: Path) -> None:
    """Nothing is changed by it, so no key for changes is needed; where reading needs a key, one for reading is."""
    content, versions = published(own), [head.version for head in own.days()]
    assert client_of(own, None, page_folder).post(ROUTE, content=content).status_code == 200
    elsewhere = client_of(own, for_host("0.0.0.0"), page_folder)
    assert elsewhere.post(ROUTE, content=content).status_code == 200
    assert elsewhere.put(ROUTE, content=content).status_code == 401, "any other way of sending is a change"
    assert elsewhere.post(f"{ROUTE}/", content=content).status_code == 401
    assert elsewhere.post("/api/batches").status_code == 401
    with_keys = client_of(own, for_host("0.0.0.0", reading="key"), page_folder)
    assert with_keys.post(ROUTE, content=content).status_code == 401
    key = guard.make_key(own, "reader", "read", np.datetime64("2031-05-12T08:00:00", "ns"))
    asked = with_keys.post(ROUTE, content=content, headers={"Authorization": f"Bearer {key}"})
    assert asked.status_code == 200
    assert [head.version for head in own.days()] == versions


@pytest.mark.parametrize(
    "headers", [{"Origin": "http://elsewhere.example"}, {"Sec-Fetch-Site": "cross-site"}, {"Host": "a.name.of.mine"}]
)
def test_another_page_makes_no_work_here(own: Archive, page_folder: Path, headers: dict[str, str]) -> None:
    client = client_of(own, for_host("127.0.0.1"), page_folder, "127.0.0.1:8017")
    assert client.post(ROUTE, content=published(own), headers=headers).status_code == 403


def test_it_has_a_rate_of_its_own(own: Archive, page_folder: Path) -> None:
    client = client_of(own, replace(for_host("0.0.0.0"), with_a_file=(0.01, 2.0)), page_folder)
    found = [client.post(ROUTE, content=b"no map").status_code for _ in range(4)]
    assert found == [422, 422, 429, 429]
    assert client.get("/api/days").status_code == 200, "other questions go on"


def test_few_are_at_work_at_once(own: Archive, page_folder: Path) -> None:
    client = client_of(own, None, page_folder)
    places: AtOnce = client.app.state.beside_at_once  # type: ignore[attr-defined]
    with places.place("testclient") as free:
        assert free
        busy = client.post(ROUTE, content=published(own))
        assert busy.status_code == 429 and busy.headers["retry-after"] == "5"
        assert set(busy.json()) == {"ok", "error", "kind", "details", "status"}
    assert client.post(ROUTE, content=published(own)).status_code == 200
    assert client.post(ROUTE, content=b"no map").status_code == 422
    assert client.post(ROUTE, content=published(own)).status_code == 200, "a place is given back after a failure too"


def test_places_at_work() -> None:
    places = AtOnce(total=2, each=1)
    with (
        places.place("a") as first,
        places.place("a") as again,
        places.place("b") as second,
        places.place("c") as third,
    ):
        assert (first, again, second, third) == (True, False, True, False)
    with pytest.raises(ValueError, match="at work"), places.place("a"):
        raise ValueError("at work")
    assert not places._at_work, "whoever is done is forgotten"


# ---------------------------------------------------------------------------------------------- what is sent


def test_who_sends_slowly_holds_no_place(own: Archive, page_folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(beside, "SENT_WITHIN_S", 0.2)
    app = create_app(own, frontend=page_folder)
    said: list[MutableMapping[str, Any]] = []
    parts = iter([{"type": "http.request", "body": b"     1.0", "more_body": True}])

    async def receive() -> MutableMapping[str, Any]:
        for part in parts:
            return part
        await asyncio.sleep(60.0)
        raise AssertionError("waited for")

    async def send(message: MutableMapping[str, Any]) -> None:
        said.append(message)

    scope = {"type": "http", "method": "POST", "path": ROUTE, "raw_path": ROUTE.encode(), "query_string": b"",
             "headers": [(b"host", b"here")], "client": ("192.0.2.7", 1), "server": ("here", 80), "scheme": "http",
             "http_version": "1.1", "root_path": ""}  # fmt: skip
    asyncio.run(asyncio.wait_for(app(scope, receive, send), 20.0))
    assert said[0]["status"] == 408
    assert not app.state.beside_at_once._at_work


def test_it_swells_no_larger_than_it_may_be_sent(
    own: Archive, page_folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A map larger than the limit is refused whether it is sent plain, announced, packed or packed twice."""
    content = published(own)
    client = client_of(own, None, page_folder)
    monkeypatch.setattr(beside, "MOST_BYTES", len(content))
    assert client.post(ROUTE, content=gzip.compress(content)).status_code == 200
    monkeypatch.setattr(beside, "MOST_BYTES", len(content) - 1)
    for sent in (content, gzip.compress(content), bz2.compress(content), gzip.compress(bz2.compress(content))):
        answer = client.post(ROUTE, content=sent)
        assert answer.status_code == 422 and answer.json()["ok"] is False


def test_nothing_but_a_map_is_parsed(own: Archive, page_folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Observations are refused by their first line: neither their parser nor the decoder of Compact RINEX runs."""

    def never(*_arguments: object, **_named: object) -> None:
        raise AssertionError("parsed")

    monkeypatch.setattr(rinex_obs, "parse", never)
    monkeypatch.setattr(wrappers, "_hatanaka", never)
    client = client_of(own, None, page_folder)
    plain = b"     3.04           OBSERVATION DATA    M                   RINEX VERSION / TYPE\n"
    packed = b"3.0                 COMPACT RINEX FORMAT                    CRINEX VERS   / TYPE\n" + plain
    for sent in (plain, packed, gzip.compress(packed)):
        answer = client.post(ROUTE, content=sent)
        assert answer.status_code == 422 and "ionex is needed" in answer.json()["error"]
    several = io.BytesIO()
    with zipfile.ZipFile(several, "w") as folder:
        folder.writestr("one", plain)
        folder.writestr("two", plain)
    answer = client.post(ROUTE, content=several.getvalue())
    assert answer.status_code == 422 and "give the one" in answer.json()["error"]


def test_a_map_takes_room_only_as_it_is_read(own: Archive, page_folder: Path) -> None:
    """A header that claims 48 million nodes, and many maps begun and never filled, cost no more than their text."""

    def line(text: str, label: str) -> str:
        return f"{text:60}{label}\n"

    head = (line("     1.0            I", "IONEX VERSION / TYPE") + line("    80.0 -80.0 -0.02", "LAT1 / LAT2 / DLAT")
            + line("  -180.0 180.0  0.06", "LON1 / LON2 / DLON") + line("", "END OF HEADER"))  # fmt: skip
    content = (head + line("     1", "START OF TEC MAP") * 20_000).encode()
    began = time.perf_counter()
    answer = client_of(own, None, page_folder).post(ROUTE, content=content)
    assert answer.status_code == 422 and "no whole map" in answer.json()["error"]
    assert time.perf_counter() - began < 30.0  # room for each map begun, 0.38 GB, would take hours
