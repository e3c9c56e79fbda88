"""One shape of failure on every route, and protective headers on every answer."""

import re

import pytest
from fastapi.routing import APIRoute
from fastapi.testclient import TestClient
from tests.builders import REGION, STORM_DAY

from skylag.archive import Archive
from skylag.errors import FormatError, SkylagError
from skylag.web.app import HEADERS, create_app


def routes() -> list[APIRoute]:
    """Every route of the application, whoever added it."""

    def gather(holder: object) -> list[APIRoute]:
        found = []
        for route in holder.routes:
            if isinstance(route, APIRoute):
                found.append(route)
            elif hasattr(route, "original_router"):
                found.extend(gather(route.original_router))
        return found

    return gather(create_app(archive=None))  # nothing is asked of the archive here


ADDRESSES = sorted(route.path for route in routes())
ASKED = sorted(route.path for route in routes() if "GET" in route.methods)
GOOD = {"lat": "-41", "lon": "147", "time": "2031-05-11T05:00:00Z", "site": "Gannet Field", "use": "ground"}


def check_shape(answer, status: int, kind: str) -> dict:
    content = answer.json()
    assert answer.status_code == status, content
    assert set(content) == {"ok", "error", "kind", "details", "status"}
    assert content["ok"] is False and content["status"] == status and content["kind"] == kind
    assert len(content["error"]) > 10 and isinstance(content["details"], dict)
    for name, value in HEADERS.items():
        assert answer.headers[name] == value, name
    return content


def test_all_routes_are_looked_at() -> None:
    assert len(ADDRESSES) >= 15 and "/healthz" in ADDRESSES and "/api/days/{region}/{day}/fields" in ADDRESSES


@pytest.mark.parametrize("address", ADDRESSES)
def test_a_wrong_method(client: TestClient, address: str) -> None:
    """Nobody may change anything here; `beside` alone is a question that is sent by POST."""
    for method in ("PUT", "DELETE") if address.endswith("/beside") else ("PUT", "DELETE", "POST"):
        check_shape(client.request(method, re.sub(r"\{\w+\}", "x", address)), 405, "Refused")


@pytest.mark.parametrize("address", [a for a in ASKED if "{region}" in a and "{day}" not in a])
def test_an_unknown_region(client: TestClient, address: str) -> None:
    there = address.replace("{region}", "nowhere")
    assert REGION.name in check_shape(client.get(there, params=GOOD), 404, "Missing")["error"]


@pytest.mark.parametrize("address", [a for a in ASKED if "{day}" in a and "/pins/" not in a])
def test_an_unknown_region_and_a_wrong_day(client: TestClient, address: str) -> None:
    there = address.replace("{region}", "nowhere").replace("{day}", "2031-05-11")
    assert REGION.name in check_shape(client.get(there, params=GOOD), 404, "Missing")["error"]
    other = address.replace("{region}", REGION.name).replace("{day}", "2031-05-31")
    assert check_shape(client.get(other, params=GOOD), 404, "Missing")["details"]["nearest"] == "2031-05-11"
    for text in ("2031-02-30", "today", "2031", "2031-05-11T00"):
        wrong = address.replace("{region}", REGION.name).replace("{day}", text)
        check_shape(client.get(wrong, params=GOOD), 422, "Refused")
    good = address.replace("{region}", REGION.name).replace("{day}", str(STORM_DAY))
    check_shape(client.get(good, params={**GOOD, "version": "two"}), 422, "Refused")
    check_shape(client.get(good, params={**GOOD, "version": "7"}), 404, "Missing")


class Broken:
    """An archive on which every verb fails in the same way."""

    def __init__(self, failure: Exception) -> None:
        self.failure = failure

    def __getattr__(self, name: str):
        def fail(*_args: object, **_named: object) -> None:
            raise self.failure

        return fail


@pytest.mark.parametrize(
    "failure, status, kind",
    [
        (SkylagError("cannot read from the archive x: disk I/O error", archive="x"), 503, "SkylagError"),
        (FormatError("stored data of x do not match", path="x", line=0), 500, "FormatError"),
        (RuntimeError("a secret that must not leave"), 500, "Defect"),
    ],
)
@pytest.mark.parametrize("address", [a for a in ASKED if a.startswith(("/api/days", "/healthz"))])
def test_a_failing_archive(address: str, failure: Exception, status: int, kind: str) -> None:
    client = TestClient(create_app(Broken(failure)), raise_server_exceptions=False)
    there = address.replace("{region}", REGION.name).replace("{day}", str(STORM_DAY))
    content = check_shape(client.get(there, params=GOOD), status, kind)
    assert "secret" not in str(content)


@pytest.mark.parametrize(
    "tail, word",
    [
        ("reading?lat=95&lon=147&time=2031-05-11T05:00:00Z", "lat"),
        ("reading?lat=nan&lon=147&time=2031-05-11T05:00:00Z", "lat"),
        ("reading?lat=-41&lon=1e9&time=2031-05-11T05:00:00Z", "lon"),
        ("reading?lat=-41&lon=147&time=noon", "time"),
        ("reading?lat=-41&lon=147&time=0001-01-01T00:00:00Z", "time"),
        ("reading?lat=-41&lon=147&time=9999-12-31T23:59:59-12:00", "time"),
        ("reading?lat=-41&lon=147", "time"),
        ("fields?layers=vertical_delay,colour", "colour"),
        ("fields?from=x", "from"),
        ("series?lat=-41", "lon"),
    ],
)
def test_wrong_questions_name_what_is_wrong(client: TestClient, tail: str, word: str) -> None:
    content = check_shape(client.get(f"/api/days/{REGION.name}/{STORM_DAY}/{tail}"), 422, "Refused")
    assert word in content["error"]


@pytest.mark.parametrize("box", ["south=1&north=0&west=0&east=1", "south=0&north=1&west=5&east=1", "south=0&north=1",
                                 "south=inf&north=1&west=0&east=1", "south=-99&north=1&west=0&east=1"])  # fmt: skip
def test_wrong_boxes(client: TestClient, box: str) -> None:
    check_shape(client.get(f"/api/coast?{box}"), 422, "Refused")


@pytest.mark.parametrize("address", ["/nothing", "/api/nothing", "/api/days/a/b/c/d", "/api"])
def test_nothing_there(client: TestClient, address: str) -> None:
    check_shape(client.get(address), 404, "Missing")


@pytest.mark.parametrize("address", ["/", "/healthz", "/api/days", "/vendor/plotly.min.js", "/api/openapi.json"])
def test_good_answers_are_protected_too(client: TestClient, address: str) -> None:
    answer = client.get(address)
    assert answer.status_code == 200
    for name, value in HEADERS.items():
        assert answer.headers[name] == value, name


def test_the_content_policy_allows_this_address_only() -> None:
    policy = HEADERS["Content-Security-Policy"]
    assert "http:" not in policy and "https:" not in policy and "*" not in policy and "unsafe-eval" not in policy
    scripts = next(part for part in policy.split("; ") if part.startswith("script-src"))
    assert scripts == "script-src 'self'"


def test_a_damaged_day_is_never_served(tmp_path, page_folder) -> None:
    """From the stored byte to the answer: one wrong bit in a map, and the maps are refused."""
    import sqlalchemy as sa
    from tests.builders import invented_day

    from skylag.archive import open_archive, schema

    with open_archive(tmp_path / "archive.sqlite") as archive:
        archive.save(invented_day())
        with archive._write_engine.begin() as connection:
            state = schema.chunk.c.layer == "state"
            data = bytearray(connection.scalars(sa.select(schema.chunk.c.data).where(state)).first())
            data[-1] ^= 1
            connection.execute(sa.update(schema.chunk).where(state).values(data=bytes(data)))
        client = TestClient(create_app(archive, frontend=page_folder), raise_server_exceptions=False)
        content = check_shape(client.get(f"/api/days/{REGION.name}/{STORM_DAY}/fields"), 500, "FormatError")
        assert "checksum" in content["error"]


def test_the_archive_is_what_is_asked(small_archive: Archive) -> None:
    """The stand-in above fails on verbs the real archive has, not on invented ones."""
    for verb in ("days", "day", "fields", "series", "cell_at", "flags", "biases", "site_states", "rays_at", "regions"):
        assert callable(getattr(small_archive, verb))
