"""Slant data to carry away hold the stored numbers, all of them that were asked for and no others."""

import csv
import io

import numpy as np
import pyarrow.parquet as pq
import pytest
from fastapi.testclient import TestClient
from tests.builders import REGION, STORM_DAY

from skylag import timescales
from skylag.archive import Archive
from skylag.formats import delimited
from skylag.formats.delimited import SLANT_COLUMNS
from skylag.web import slant_files
from skylag.web.nearby import great_circle_km

DAY = f"/api/days/{REGION.name}/{STORM_DAY}"
PLACE = {"lat": -41.1, "lon": 147.1}
INSTANT = "2031-05-11T06:00:00Z"


def test_a_whole_day(client: TestClient, small_archive: Archive) -> None:
    answer = client.get(f"{DAY}/slant.parquet")
    table = pq.read_table(io.BytesIO(answer.content))
    assert tuple(table.column_names) == SLANT_COLUMNS
    stored = small_archive.samples(REGION.name, STORM_DAY)
    assert len(table) == len(stored.rays)
    assert np.allclose(table["vtec_tecu"].to_numpy(), stored.vtec, atol=1e-4)


def test_lines_near_a_place_and_time_only(client: TestClient, small_archive: Archive) -> None:
    answer = client.get(f"{DAY}/slant.csv", params={**PLACE, "time": INSTANT, "reach_km": 150, "minutes": 20})
    assert answer.headers["content-type"].startswith("text/csv")
    rows = list(csv.DictReader(io.StringIO(answer.text)))
    stored = small_archive.samples(REGION.name, STORM_DAY)
    rays = stored.rays
    moment = timescales.utc_to_gps(np.array([np.datetime64(INSTANT[:-1], "ns")]))[0]
    wanted = (great_circle_km(rays.pierce_lat, rays.pierce_lon, PLACE["lat"], PLACE["lon"]) <= 150.0) & (
        np.abs(rays.time - moment) <= np.timedelta64(20, "m")
    )
    assert 0 < wanted.sum() < len(rays)
    assert sorted(float(row["vtec_tecu"]) for row in rows) == pytest.approx(sorted(stored.vtec[wanted]), abs=6e-4)
    assert [row["time"] for row in rows] == sorted(row["time"] for row in rows)


@pytest.mark.parametrize(
    "wrong", [{"reach_km": 0}, {"minutes": 1e9}, {"lat": 95}, {"time": "noon"}, {"reach_km": "nan"}]
)
def test_what_cannot_be_asked(client: TestClient, wrong: dict[str, object]) -> None:
    assert client.get(f"{DAY}/slant.csv", params={**PLACE, "time": INSTANT, **wrong}).status_code == 422


def test_more_rows_than_are_written_at_once(client: TestClient, monkeypatch: pytest.MonkeyPatch) -> None:
    """As many as may be are written; one more is refused before any is, with the way out."""
    asked = {**PLACE, "time": INSTANT, "reach_km": 1000, "minutes": 180}
    rows = len(client.get(f"{DAY}/slant.csv", params=asked).text.splitlines()) - 1
    assert rows > 100
    assert slant_files.MOST_ROWS == 50_000
    monkeypatch.setattr(slant_files, "MOST_ROWS", rows)
    assert client.get(f"{DAY}/slant.csv", params=asked).status_code == 200
    monkeypatch.setattr(slant_files, "MOST_ROWS", rows - 1)
    monkeypatch.setattr(delimited, "slants_csv", lambda *_: pytest.fail("rows were written"))
    answer = client.get(f"{DAY}/slant.csv", params=asked)
    assert answer.status_code == 422
    assert f"{rows} lines of sight" in answer.json()["error"]
    assert "smaller reach_km or fewer minutes" in answer.json()["error"]
    monkeypatch.undo()
    monkeypatch.setattr(slant_files, "MOST_ROWS", rows - 1)
    assert client.get(f"{DAY}/slant.csv", params={**asked, "minutes": 20}).status_code == 200
