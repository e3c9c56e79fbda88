"""Curves behind what is said, what each receiver gave, and the day's maps as files."""

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
from fastapi.testclient import TestClient
from tests.builders import RECEIVERS, REGION, STORM_DAY, at_geocentric, invented_day, write_archive

from skylag import timescales
from skylag.archive import Archive, open_archive
from skylag.constants import L1_M_PER_TECU
from skylag.formats import ionex, netcdf
from skylag.web.app import create_app

DAY = f"/api/days/{REGION.name}/{STORM_DAY}"


def test_lines_near_a_place(client: TestClient, small_archive: Archive) -> None:
    """Every point told is a stored one, near lines only, with the satellites that change most first."""
    asked = {"time": "2031-05-11T06:00:00Z", "lat": -41.1, "lon": 147.1}
    answer = client.get(f"{DAY}/witnesses", params=asked)
    assert answer.status_code == 200, answer.text
    lines = answer.json()["lines"]
    assert 2 <= len(lines) <= 20
    assert all(line["distance_km"] <= 250 for line in lines)
    stored = small_archive.samples(REGION.name, STORM_DAY)
    rays = stored.rays
    names = np.array([one.name for one in rays.receivers])
    told = 0
    for line in lines:
        rows = (names[rays.receiver] == line["receiver"]) & (rays.satellites[rays.satellite] == line["satellite"])
        known = {
            str(t)[:19]: v * L1_M_PER_TECU
            for t, v in zip(timescales.gps_to_utc(rays.time[rows]), stored.vtec[rows], strict=True)
        }
        for when, value in zip(line["times_utc"], line["vertical_delay"], strict=True):
            if value is not None:
                assert math.isclose(value, known[when[:19]], abs_tol=1e-4)
                told += 1
    assert told > 30
    far = client.get(f"{DAY}/witnesses", params={**asked, "time": "2031-05-20T06:00:00Z"})
    assert far.json() == {"lines": []}


def test_the_network_day_by_day(tmp_path: Path) -> None:
    """Shares, counts, biases and faults as stored; a receiver without facts says so by null, not by nought."""
    made = invented_day()
    name = RECEIVERS[7].name
    facts = {"receiver": name, "epochs": 1440, "interval_s": 30.0, "satellites": 8, "rays": 11, "arcs": 9, "slips": 3,
             "arcs_began": {"gap": 2, "slip": 3, "reset": 1}, "level_sigma_median_tecu": 0.4}  # fmt: skip
    left_out = {"by_receiver": {name: {"rms_tecu": 1.7, "sigma_tecu": 0.9}}}
    counts = {**made.origin.counts, "by_receiver": [facts], "receivers_left_out": left_out}
    with open_archive(tmp_path) as archive:
        archive.save(replace(made, origin=replace(made.origin, counts=counts)))
        told = TestClient(create_app(archive)).get("/api/network").json()["days"]
        biases = archive.biases(REGION.name, STORM_DAY)
    assert [(one["day"], len(one["receivers"])) for one in told] == [("2031-05-11", 10)]
    by_name = {one["name"]: one for one in told[0]["receivers"]}
    one = by_name[name]
    assert (one["received"], one["gaps"], one["slips"], one["resets"], one["left_out_rms_tecu"]) == (0.5, 2, 3, 1, 1.7)
    assert one["left_out_sigma_tecu"] == 0.9
    assert one["faults"] == ["Only HULL sees a step on G07; no neighbour agrees, so the receiver is suspected."]
    value = float(biases.value_ns[(biases.kind == "receiver") & (biases.name == name)][0])
    assert math.isclose(one["biases"][0]["bias_ns"], value, rel_tol=1e-6)
    other = by_name[RECEIVERS[0].name]
    assert other["received"] is None and other["slips"] is None and other["faults"] == []


def test_the_day_as_files(client: TestClient, small_archive: Archive, tmp_path: Path) -> None:
    """NetCDF and IONEX come back as the maps that are stored, to each format's resolution."""
    stored = small_archive.fields(REGION.name, STORM_DAY)
    answer = client.get(f"{DAY}/field.nc")
    assert answer.status_code == 200 and "field.nc" in answer.headers["content-disposition"]
    path = tmp_path / "field.nc"
    path.write_bytes(answer.content)
    np.testing.assert_allclose(netcdf.read(path).vtec, stored.vtec, rtol=1e-6)
    answer = client.get(f"{DAY}/maps.inx")
    assert answer.status_code == 200 and "Planning aid" in answer.text and "Invented data" in answer.text
    back = ionex.parse(answer.content, "maps.inx").table
    expected = at_geocentric(np.where(stored.support > 0, stored.vtec, np.nan), stored.lats, back.lats)
    assert np.isfinite(expected).any() and "Latitudes are geocentric" in answer.text
    np.testing.assert_allclose(back.vtec, expected, atol=0.051)


def test_the_series_says_what_the_reading_says(client: TestClient) -> None:
    """At any time of the day: the same sentence, state and numbers, so that the page may use what it holds."""
    place = {"lat": -41.1, "lon": 147.1}
    series = client.get(f"{DAY}/series", params=place).json()
    for k in range(0, len(series["times_utc"]), 5):
        one = client.get(f"{DAY}/reading", params={**place, "time": series["times_utc"][k]}).json()
        assert (series["sentence"][k], series["state"][k]) == (one["sentence"], one["state"])
        if one["state"] != "unseen":
            assert series["slope_east"][k] == one["slope_east"]


def test_an_archive_written_by_hand_is_served(tmp_path: Path) -> None:
    """The list of days carries each day's largest slope."""
    with open_archive(write_archive(tmp_path)) as archive:
        told = TestClient(create_app(archive)).get("/api/days").json()["days"]
        heads = archive.days()
    assert [one["highest"]["slope"] for one in told] == [float(f"{h.highest['slope']:.7g}") for h in heads]
