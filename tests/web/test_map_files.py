"""One map as a table and as lines, and the day as IONEX with its biases, over HTTP."""

import base64
import csv
import io
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from fastapi.testclient import TestClient
from tests.builders import REGION, STORM_DAY, invented_day

from skylag.archive import open_archive
from skylag.formats import ionex
from skylag.ionosphere.geometry import geocentric_latitude
from skylag.tables import BROKEN, HOLDS
from skylag.web.app import create_app

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


@pytest.fixture
def blind(tmp_path: Path, page_folder: Path) -> Iterator[TestClient]:
    """A day of which no line of sight carries the northern rows, though a wall was seen to reach over some of them."""
    made = invented_day(STORM_DAY, step_minutes=60, satellites=6)
    support, state, vtec, slope = (getattr(made.fields, name).copy() for name in ("support", "state", "vtec", "slope"))
    support[:, 10:], vtec[:, 10:], slope[:, 10:] = 0, 12.0, 3.0
    state[:, 10:] = HOLDS
    state[:, 10:12] = BROKEN
    with open_archive(tmp_path) as archive:
        bare = {"support": support, "state": state, "vtec": vtec, "vtec_sigma": slope, "slope": slope}
        archive.save(replace(made, fields=replace(made.fields, **bare)))
        with TestClient(create_app(archive, frontend=page_folder)) as client:
            yield client


def test_where_nobody_looks_no_answer_has_a_number_and_none_holds(blind: TestClient) -> None:
    """The maps hold there what they fade into; a reader who sees no support beside it would take it for measured."""
    rows = list(csv.DictReader(io.StringIO(blind.get(f"{DAY}/map.csv", params=NOW).text)))
    bare = [row for row in rows if row["support"] == "0"]
    assert {row["state"] for row in bare} == {"unseen", "broken"}
    assert all(not row[name] for row in bare for name in row if name.endswith(("_m", "_mm_per_km")))
    table = ionex.parse(blind.get(f"{DAY}/maps.inx").content, "ours").table
    # Rows of the file lie between rows of the map: none of them has a number that touches the tenth or one behind it.
    bare_rows = table.lats > geocentric_latitude(REGION.lats[9])
    assert np.isnan(table.vtec[:, bare_rows]).all() and np.isnan(table.vtec_sigma[:, bare_rows]).all()
    assert bare_rows.sum() >= 4 and np.isfinite(table.vtec[:, ~bare_rows]).any()
    for lat, word in ((-37.5, "broken"), (-36.5, "unseen")):
        asked = {"lat": lat, "lon": 146.0}
        told = blind.get(f"{DAY}/reading", params={**asked, **NOW}).json()
        assert told["state"] == word and told["support"] == 0
        assert [told[name] for name in ("vertical_delay", "slope", "slope_east")] == [None] * 3
        day = blind.get(f"{DAY}/series", params=asked).json()
        assert set(day["state"]) == {word}
        assert set(day["vertical_delay"]) | set(day["vertical_delay_sigma"]) | set(day["slope"]) == {None}
        assert not any("vertical delay is" in sentence for sentence in day["sentence"])
    shown = blind.get(f"{DAY}/fields", params={"layers": "vertical_delay,slope,state"}).json()["layers"]
    for name in ("vertical_delay", "slope"):
        values = np.frombuffer(base64.b64decode(shown[name]["base64"]), "<f4").reshape(shown[name]["shape"])
        assert np.isnan(values[:, 10:]).all() and np.isfinite(values[:, :10]).any()


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
