"""The route that lays a published map beside a day."""

import base64
import gzip
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from fastapi.testclient import TestClient
from tests.builders import CALM_DAY

from skylag.archive import Archive
from skylag.formats import ionex
from skylag.web import beside
from skylag.web.access import Access
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
    open_client: TestClient, client: TestClient, small_archive: Archive, monkeypatch: pytest.MonkeyPatch
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
    assert client.post(route, content=b"x").status_code == 405  # where nobody may send anything
