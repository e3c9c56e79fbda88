"""Routes about the sites of a region: added, changed, taken away, taken in from lists; and days computed before."""

from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from fastapi.testclient import TestClient
from tests.builders import REGION, STORM_DAY, invented_day, write_archive

from skylag.archive import Archive, open_archive
from skylag.jobs import guard
from skylag.web.access import Access, for_host
from skylag.web.app import create_app

SITES = f"/api/sites/{REGION.name}"
DAY = f"/api/days/{REGION.name}/{STORM_DAY}"
NOW = np.datetime64("2031-05-12T00:00:00")
NEW = {"name": "New pier", "lat": -40.5, "lon": 146.5, "kind": "port"}


@pytest.fixture
def own(tmp_path: Path) -> Iterator[Archive]:
    with open_archive(write_archive(tmp_path)) as archive:
        yield archive


def _client(archive: Archive, folder: Path, access: Access) -> TestClient:
    return TestClient(create_app(archive, clock=lambda: NOW, frontend=folder, access=access), "http://127.0.0.1")


def test_a_site_comes_changes_and_goes(own: Archive, page_folder: Path) -> None:
    """Everything that is told of a day follows, though the day was computed before."""
    with _client(own, page_folder, for_host("127.0.0.1")) as client:
        before = client.get(SITES).json()
        assert (before["revision"], before["writing"]) == (0, "open")
        assert [site["name"] for site in before["sites"]] == [site.name for site in REGION.sites]
        found = client.put(SITES, params=NEW).json()
        assert (found["revision"], found["sites"][-1]["name"]) == (1, "New pier")
        assert found["sites"][-1]["changed"] and found["sites"][-1]["on_map"]
        assert found["history"][0]["said"] == "New pier added"
        states = client.get(f"{DAY}/site-states").json()
        assert [site["name"] for site in states["sites"]][-1] == "New pier"
        series = client.get(f"{DAY}/series", params={"lat": -40.5, "lon": 146.5}).json()
        assert [states["states"][code] for code in states["codes"][-1]] == series["state"]
        assert client.get(DAY).json()["sites"][-1]["name"] == "New pier"
        assert client.get(f"{DAY}/survey", params={"site": "New pier"}).json()["windows"]
        assert client.get(f"{DAY}/sheet", params={"site": "New pier"}).status_code == 200
        other = {**NEW, "name": "Old pier", "lat": -41.0, "was": "New pier", "after": 1}
        moved = client.put(SITES, params=other).json()
        assert [site["name"] for site in moved["sites"]][-1] == "Old pier"
        assert "New pier" not in [site["name"] for site in moved["sites"]]
        late = client.put(SITES, params={**NEW, "after": 1})
        assert (late.status_code, "changed meanwhile" in late.json()["error"]) == (422, True)
        gone = client.delete(SITES, params={"name": "Northport"}).json()
        assert "Northport" not in [site["name"] for site in gone["sites"]]
        assert client.get(f"{DAY}/survey", params={"site": "Northport"}).status_code == 404
        first = client.get(SITES, params={"revision": 1}).json()
        assert [site["name"] for site in first["sites"]] == [*(site.name for site in REGION.sites), "New pier"]
        assert client.get(SITES, params={"revision": 9}).status_code == 404
        # An aerodrome that came later has its approaches.
        client.put(SITES, params={**NEW, "name": "New strip", "kind": "aerodrome"})
        flown = client.get(f"{DAY}/approaches").json()
        assert [site["name"] for site in flown["sites"]] == ["Gannet Field", "Kelp Island", "New strip"]
    # A day that is computed later, with the region's own file, is told for the same sites.
    own.save(invented_day(STORM_DAY))
    names = [site.name for site in own.day(REGION.name, STORM_DAY).region.sites]
    assert names == ["Gannet Field", "Kelp Island", "Southmere quarry", "Old pier", "New strip"]


CSV = "name;lat;lon;kind\nNorthport;-37,9;145,1;port\nBrook;-40.2;146;\nFar;10;10;\nbad;x;1;\n"
GEOJSON = (
    '{"type": "FeatureCollection", "features": [{"type": "Feature", "properties": {"name": "Brook"},'
    ' "geometry": {"type": "Point", "coordinates": [146, -40.2]}}]}'
)


@pytest.mark.parametrize(("body", "problems"), [(CSV, 2), (GEOJSON, 0), ("\ufeff" + CSV, 2)])
def test_lists(own: Archive, page_folder: Path, body: str, problems: int) -> None:
    with _client(own, page_folder, for_host("127.0.0.1")) as client:
        found = client.post(f"{SITES}/list", params={"kind": "survey"}, content=body.encode()).json()
    by_name = {site["name"]: site for site in found["sites"]}
    assert (by_name["Brook"]["lat"], by_name["Brook"]["kind"]) == (-40.2, "survey")
    assert by_name["Northport"]["lat"] == (-37.9 if problems else -37.8)
    assert len(found["problems"]) == problems
    assert found["revision"] == 1


@pytest.mark.parametrize(
    ("asked", "word"),
    [({"lat": 10}, "outside the map"), ({"lat": 95}, "lat"), ({"lat": "nan"}, "lat"), ({"name": " "}, "name"),
     ({"name": "Northport"}, "already"), ({"was": "Atlantis"}, "no site"), ({"kind": "k" * 60}, "kind"),
     ({"kind": "aerodrom"}, "looks like aerodrome misspelt"), ({"was": "Nortport"}, "did you mean Northport?")],
)  # fmt: skip
def test_what_is_no_site(own: Archive, page_folder: Path, asked: dict[str, object], word: str) -> None:
    with _client(own, page_folder, for_host("127.0.0.1")) as client:
        answer = client.put(SITES, params={**NEW, **asked})
        assert answer.status_code in (404, 422)
        assert word in answer.json()["error"]
        assert client.get(SITES).json()["revision"] == 0


def test_a_misspelt_kind_in_a_list(own: Archive, page_folder: Path) -> None:
    with _client(own, page_folder, for_host("127.0.0.1")) as client:
        body = b"name,lat,lon,kind\nBrook,-40.2,146,aerodrom\nMast,-40.2,146,lighthouse\n"
        found = client.post(f"{SITES}/list", content=body).json()
        assert [site["kind"] for site in found["sites"] if site["name"] in ("Brook", "Mast")] == ["lighthouse"]
        assert "looks like aerodrome misspelt" in str(found["problems"][0])
        answer = client.post(f"{SITES}/list", params={"kind": "aerodrom"}, content=body)
        assert (answer.status_code, "known kinds are" in answer.json()["error"]) == (422, True)


@pytest.mark.parametrize("body", [b"", b"\xff\xfe", b"a,b\n1,2\n", b"{", b'{"a": 1}', b"x" * 2_100_000])
def test_what_is_no_list(own: Archive, page_folder: Path, body: bytes) -> None:
    with _client(own, page_folder, for_host("127.0.0.1")) as client:
        answer = client.post(f"{SITES}/list", content=body)
        assert answer.status_code == 422
        assert answer.json()["error"]
        assert client.get(SITES).json()["revision"] == 0
        assert client.delete(SITES, params={"name": "Atlantis"}).status_code == 404
        assert client.get("/api/sites/Nowhere").status_code == 404


def test_who_may_change(own: Archive, page_folder: Path) -> None:
    """Nobody where nobody writes; elsewhere than on this machine only who has a key that may write."""
    with _client(own, page_folder, Access()) as client:
        assert client.put(SITES, params=NEW).status_code == 405
        assert client.get(SITES).json()["writing"] == "nobody"
    key = {scope: guard.make_key(own, scope, scope, NOW) for scope in ("read", "write")}
    with _client(own, page_folder, for_host("0.0.0.0")) as client:
        assert client.get(SITES).json()["writing"] == "key"
        for method, address in (("PUT", SITES), ("DELETE", SITES), ("POST", f"{SITES}/list")):
            assert client.request(method, address, params=NEW).status_code == 401
            wrong = {"Authorization": f"Bearer {key['read']}"}
            assert client.request(method, address, params=NEW, headers=wrong).status_code == 403
        good = {"Authorization": f"Bearer {key['write']}"}
        assert client.put(SITES, params=NEW, headers=good).json()["revision"] == 1
        foreign = {**good, "Origin": "http://elsewhere.example"}
        assert client.put(SITES, params={**NEW, "name": "B"}, headers=foreign).status_code == 403
