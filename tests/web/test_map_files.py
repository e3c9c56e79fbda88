"""One map as a table and as lines, and the day as IONEX with its biases, over HTTP."""

import csv
import io

import pytest
from fastapi.testclient import TestClient
from tests.builders import REGION, STORM_DAY

from skylag.formats import ionex

DAY = f"/api/days/{REGION.name}/{STORM_DAY}"
NOW = {"time": "2031-05-11T05:00:00Z"}


def test_a_map_as_table_and_lines(client: TestClient) -> None:
    rows = list(csv.DictReader(io.StringIO(client.get(f"{DAY}/map.csv", params=NOW).text)))
    assert {row["state"] for row in rows} >= {"unseen", "holds"}
    assert all(row["state"] != "holds" for row in rows if row["support"] == "0" or not row["vertical_delay_m"])
    lines = client.get(f"{DAY}/lines.geojson", params={**NOW, "step_m": 0.2})
    assert lines.headers["content-type"].startswith("application/geo+json")
    told = lines.json()
    assert told["simulated"] is True and len(told["features"]) > 2


def test_the_ionex_file_has_biases(client: TestClient) -> None:
    reading = ionex.parse(client.get(f"{DAY}/maps.inx").content, "ours")
    assert reading.problems == () and len(reading.header["biases"]) > 10


@pytest.mark.parametrize(
    ("file", "asked"),
    [("lines.geojson", {**NOW, "step_m": 0}), ("lines.geojson", {**NOW, "step_m": "nan"}), ("map.csv", {}),
     ("lines.geojson", {**NOW, "step_m": 1e-5}), ("map.csv", {"time": "noon"})],
)  # fmt: skip
def test_what_cannot_be_asked(client: TestClient, file: str, asked: dict[str, object]) -> None:
    assert client.get(f"{DAY}/{file}", params=asked).status_code == 422
