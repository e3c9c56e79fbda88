"""Who may read and change: open on the loopback address, keys elsewhere, nothing through another page's back door."""

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from fastapi.testclient import TestClient
from tests.builders import REGION, STORM_DAY, invented_day

from skylag.archive import Archive, open_archive, schema
from skylag.errors import Missing, Refused
from skylag.jobs import guard
from skylag.jobs.guard import Rates
from skylag.web.access import Access, for_host
from skylag.web.app import HEADERS, create_app

T0 = np.datetime64("2031-05-12T08:00:00", "ns")


@pytest.fixture
def own(tmp_path: Path) -> Iterator[Archive]:
    with open_archive(tmp_path / "archive.sqlite") as archive:
        archive.tasks.add("tiny", "a task", {"number": 1}, T0)
        yield archive


def client_of(archive: Archive, access: Access | None, page: Path, host: str = "127.0.0.1:8017") -> TestClient:
    app = create_app(archive, clock=lambda: T0, frontend=page, access=access)
    return TestClient(app, base_url=f"http://{host}", raise_server_exceptions=False)


def test_loopback_is_open(own: Archive, page_folder: Path) -> None:
    for host in ("127.0.0.1", "::1", "localhost"):
        assert for_host(host).writing == "open"
    client = client_of(own, for_host("127.0.0.1"), page_folder)
    assert client.post("/api/work/1/cancel").json()["state"] == "cancelled"
    assert client.post("/api/work/1/again").json()["state"] == "waiting"


def test_nobody_changes_anything_unless_it_is_said(own: Archive, page_folder: Path) -> None:
    client = client_of(own, None, page_folder)
    for ask in (client.post, client.put, client.delete, client.patch):
        assert ask("/api/work/1/cancel").status_code == 405
    assert own.tasks.one(1).state == "waiting"


@pytest.mark.parametrize("host", ["0.0.0.0", "192.0.2.7", "::", "skylag.example"])
def test_elsewhere_changing_needs_a_key(own: Archive, page_folder: Path, host: str) -> None:
    assert for_host(host).writing == "key"
    client = client_of(own, for_host(host), page_folder, "skylag.example")
    refused = client.post("/api/work/1/cancel")
    assert refused.status_code == 401 and refused.headers["www-authenticate"] == "Bearer"
    content = refused.json()
    assert set(content) == {"ok", "error", "kind", "details", "status"} and "skylag token make" in content["error"]
    for name, value in HEADERS.items():
        assert refused.headers[name] == value
    assert client.get("/api/work").status_code == 200, "reading stays open unless chosen otherwise"


def with_key(key: str) -> dict[str, str]:
    return {"Authorization": f"Bearer {key}"}


def test_scopes(own: Archive, page_folder: Path) -> None:
    """What is allowed to read may not write; what may write may not pin; what is revoked may do nothing."""
    own.save(invented_day(STORM_DAY))
    keys = {scope: guard.make_key(own, f"the {scope} key", scope, T0) for scope in ("read", "write", "admin")}
    client = client_of(own, for_host("0.0.0.0", reading="key"), page_folder, "skylag.example")
    assert client.get("/api/work").status_code == 401
    assert client.get("/metrics").status_code == 401
    assert client.get("/healthz").status_code == 200
    assert client.get("/").status_code == 200, "the page itself tells nothing"
    change, pin = "/api/work/1/cancel", f"/api/pins/{REGION.name}/{STORM_DAY}?version=1"
    assert [client.get("/api/work", headers=with_key(key)).status_code for key in keys.values()] == [200, 200, 200]
    assert [client.put(pin, headers=with_key(key)).status_code for key in keys.values()] == [403, 403, 200]
    assert client.post(change, headers=with_key(keys["read"])).status_code == 403
    own.keys.revoke("the write key", T0)
    assert client.post(change, headers=with_key(keys["write"])).status_code == 401
    assert client.post(change, headers=with_key(keys["admin"])).status_code == 200
    assert own.day(REGION.name, STORM_DAY).head.pinned


def test_keys_on_both_databases(archive: Archive) -> None:
    key = guard.make_key(archive, "field office", "write", T0)
    assert len(key) > 40 and key != guard.make_key(archive, "other", "read", T0)
    with archive._reading() as connection:
        rows = connection.execute(schema.access_key.select()).all()
    assert all(key not in str(value) for row in rows for value in row), "only the hash is kept"
    assert guard.allows(archive, key, "read") and guard.allows(archive, key, "write")
    assert guard.allows(archive, key, "admin") is False
    for wrong in ("", key[:-1], key + "x", key.upper(), "skylag-", "\ud800", "x" * 10_000):
        assert guard.allows(archive, wrong, "read") is None
    archive.keys.revoke("field office", T0)
    assert guard.allows(archive, key, "read") is None
    listed = {one.name: one for one in archive.keys.all()}
    assert listed["field office"].revoked == T0 and np.isnat(listed["other"].revoked)
    with pytest.raises(Refused, match="not used twice"):
        guard.make_key(archive, "field office", "read", T0)
    with pytest.raises(Refused, match="choose one of read, write, admin"):
        guard.make_key(archive, "third", "all", T0)
    with pytest.raises(Missing, match="good ones: other"):
        archive.keys.revoke("nobody", T0)


@pytest.mark.parametrize(
    "headers",
    [
        {"Origin": "http://elsewhere.example"},
        {"Origin": "null"},
        {"Origin": "http://127.0.0.1:9999"},
        {"Sec-Fetch-Site": "cross-site"},
        {"Sec-Fetch-Site": "same-site"},
        {"Host": "elsewhere.example"},  # a name that was made to point at this machine
        {"Host": "127.0.0.1.elsewhere.example:8017"},
    ],
)
def test_another_page_changes_nothing(own: Archive, page_folder: Path, headers: dict[str, str]) -> None:
    client = client_of(own, for_host("127.0.0.1"), page_folder)
    assert client.post("/api/work/1/cancel", headers=headers).status_code == 403
    assert own.tasks.one(1).state == "waiting"


def test_the_own_page_may(own: Archive, page_folder: Path) -> None:
    client = client_of(own, for_host("127.0.0.1"), page_folder)
    headers = {"Origin": "http://127.0.0.1:8017", "Sec-Fetch-Site": "same-origin"}
    assert client.post("/api/work/1/cancel", headers=headers).status_code == 200


def test_wrong_keys_are_slowed_down(own: Archive, page_folder: Path) -> None:
    """Ten guesses, then a pause; a good key is not even looked at from there until then."""
    key = guard.make_key(own, "good", "write", T0)
    client = client_of(own, for_host("0.0.0.0"), page_folder, "skylag.example")
    found = [client.post("/api/work/1/cancel", headers=with_key(f"skylag-{n}")).status_code for n in range(12)]
    assert found == [401] * 10 + [429] * 2
    assert client.post("/api/work/1/cancel", headers=with_key(key)).headers["retry-after"] == "60"


def test_too_many_requests(own: Archive, page_folder: Path) -> None:
    access = replace(for_host("127.0.0.1"), changes=(0.01, 3), questions=(0.01, 5))
    client = client_of(own, access, page_folder)
    assert [client.post("/api/batches").status_code for _ in range(5)] == [201, 201, 201, 429, 429]
    assert [client.get("/api/work").status_code for _ in range(6)] == [200] * 5 + [429]
    assert int(client.get("/api/work").headers["retry-after"]) > 1


def test_a_bucket_fills_with_time() -> None:
    rates = Rates(per_s=2.0, burst=4.0, most_callers=3)
    assert [rates.wait_s("a", 0.0) for _ in range(6)] == [0, 0, 0, 0, 0.5, 0.5]
    assert [rates.wait_s("a", 1.0) for _ in range(3)] == [0, 0, 0.5]
    assert rates.wait_s("b", 1.0) == 0 and rates.wait_s("c", 1.0) == 0, "callers do not share"
    for number in range(50):
        assert rates.wait_s(f"one of many {number}", 2.0) == 0
    assert len(rates._levels) <= 4
    assert rates.wait_s("a", 0.5) >= 0, "a clock that goes back harms nothing"
