"""The command `maps`: every open format from an archive and from a folder of results; what cannot be written."""

import csv
import io
import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from tests.builders import STORM_DAY, at_geocentric, invented_day, write_archive

from skylag import cli, formats
from skylag.archive import open_archive
from skylag.formats import netcdf
from skylag.tables import HOLDS, Biases, Fields


@pytest.fixture(scope="module")
def archive(tmp_path_factory: pytest.TempPathFactory) -> str:
    return str(write_archive(tmp_path_factory.mktemp("kept")))


def test_ionex_with_rms_maps_and_biases(archive: str, tmp_path: Path) -> None:
    out = tmp_path / "storm.31i"
    assert cli.main(["maps", "--archive", archive, "--format", "ionex", "--every", "60", "--out", str(out)]) == 0
    reading = formats.read(out)
    assert reading.problems == () and isinstance(reading.table, Fields)
    with open_archive(archive) as kept:
        name = kept.regions()[0]
        ours, known = kept.fields(name, str(STORM_DAY)), kept.biases(name, str(STORM_DAY))
    rows = reading.table.lats
    assert len(rows) == len(ours.lats) - 1, "both counts give the region the same width, and one row is lost"
    np.testing.assert_allclose(reading.table.vtec, at_geocentric(ours.vtec[::4], ours.lats, rows), atol=0.0501)
    np.testing.assert_allclose(
        reading.table.vtec_sigma, at_geocentric(ours.vtec_sigma[::4], ours.lats, rows), atol=0.0501
    )
    assert "Latitudes are geocentric" in out.read_text()
    found = reading.header["biases"]
    assert isinstance(found, Biases) and set(found.kind) == {"satellite", "receiver"}
    summed = 0
    for pair in {(s, a, b) for s, a, b in zip(found.system, found.code1, found.code2, strict=True)}:
        def rows(table: Biases, pair: tuple[str, str, str] = pair) -> np.ndarray:
            return (table.system == pair[0]) & (table.code1 == pair[1]) & (table.code2 == pair[2])

        here = found.value_ns[rows(found) & (found.kind == "satellite")]
        if len(here):
            assert abs(here.sum()) < 0.001 * len(here)  # zero mean, to the last digit written
            summed += 1
        # What a receiver and a satellite do together is what it was.
        for who in found.name[rows(found) & (found.kind == "receiver")]:
            for sat in found.name[rows(found) & (found.kind == "satellite")][:3]:
                sums = [
                    table.value_ns[rows(table) & np.char.startswith(table.name, str(who))][0]
                    + table.value_ns[rows(table) & (table.name == sat)][0]
                    for table in (found, known)
                ]
                assert sums[0] == pytest.approx(sums[1], abs=0.002)
    assert summed >= 1  # the main pair of a constellation


def test_lines_tables_and_grid_points(archive: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    asked = ["maps", "--archive", archive, "--day", str(STORM_DAY)]
    assert cli.main([*asked, "--format", "geojson", "--at", "05:00", "--step", "0.2"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert told["features"] and told["time_utc"] == "2031-05-11T04:59:42Z"
    assert cli.main([*asked, "--at", "05:00"]) == 0
    said = capsys.readouterr()
    assert "not for navigation" in said.err  # a table has no place for it
    rows = list(csv.DictReader(io.StringIO(said.out)))
    with open_archive(archive) as kept:
        ours = kept.fields(kept.regions()[0], str(STORM_DAY))
    assert len(rows) == ours.vtec[0].size and {row["time_utc"] for row in rows} == {"2031-05-11T04:59:42Z"}
    unseen = [row for row in rows if row["support"] == "0"]
    assert unseen and all(row["state"] != "holds" for row in unseen)
    assert cli.main([*asked, "--format", "gridpoints", "--every", "240"]) == 0
    points = list(csv.DictReader(io.StringIO(capsys.readouterr().out)))
    assert {(row["lat_deg"], row["lon_deg"]) for row in points} >= {("-40", "145")}
    known = [row for row in points if row["chi_square"]]
    assert known and all(float(row["chi_square_limit"]) > 0 for row in known)


def test_netcdf_and_a_folder_of_results(archive: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    out = tmp_path / "day.nc"
    assert cli.main(["maps", "--archive", archive, "--format", "netcdf", "--every", "60", "--out", str(out)]) == 0
    with xr.open_dataset(out, engine="h5netcdf") as held:
        assert len(held["time"]) == 24 and held.attrs["Conventions"].startswith("CF")
    with open_archive(archive) as kept:
        name = kept.regions()[0]
        netcdf.write(kept.fields(name, str(STORM_DAY)), kept.day(name, str(STORM_DAY)).region, tmp_path / "field.nc")
    folder = ["maps", "--results", str(tmp_path)]
    assert cli.main([*folder, "--format", "ionex", "--every", "120"]) == 0
    assert "START OF RMS MAP" in capsys.readouterr().out
    assert cli.main([*folder, "--format", "gridpoints"]) == 3
    assert "lines of sight" in capsys.readouterr().err


def test_a_file_of_no_value_never_says_that_it_holds(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A kept state that claims more than its cell knows leaves as unseen, from a folder as from an archive."""
    whole = invented_day(STORM_DAY, step_minutes=60, satellites=6)
    vtec, support = whole.fields.vtec.copy(), whole.fields.support.copy()
    vtec[:, 0], vtec[:, 1], support[:, 0], support[:, 1] = np.nan, 5.0, 3, 0
    state = np.full_like(whole.fields.state, HOLDS)
    claims = replace(whole, fields=replace(whole.fields, vtec=vtec, support=support, state=state))
    netcdf.write(claims.fields, claims.region, tmp_path / "field.nc")
    with open_archive(tmp_path / "kept") as kept:
        kept.save(claims)
    for where in (["--results", str(tmp_path)], ["--archive", str(tmp_path / "kept")]):
        assert cli.main(["maps", *where, "--at", "05:00"]) == 0
        rows = list(csv.DictReader(io.StringIO(capsys.readouterr().out)))
        held = [row["state"] for row in rows if row["support"] == "0" or not row["vertical_delay_m"]]
        assert len(held) >= 2 * len(claims.fields.lons) and set(held) == {"unseen"}
        assert cli.main(["maps", *where, "--format", "netcdf", "--out", str(tmp_path / "out.nc")]) == 0
        assert not netcdf.read(tmp_path / "out.nc").state[:, :2].any()


@pytest.mark.parametrize("provisional", [True, False])
def test_files_say_what_must_be_known_of_the_day(
    provisional: bool, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """That it goes on, that it is invented, the caution: from an archive, and from a folder that a file was put in."""
    said = "This day goes on"
    with open_archive(tmp_path / "kept") as kept:
        kept.save(invented_day(STORM_DAY, step_minutes=60, satellites=6), provisional=provisional)
    where = ["--archive", str(tmp_path / "kept")]
    file = tmp_path / "field.nc"
    assert cli.main(["maps", *where, "--format", "netcdf", "--out", str(file)]) == 0
    comment = netcdf.read_with_facts(file)[1]["comment"]
    assert (said in comment) is provisional and "Invented" in comment and "not for navigation" in comment
    for place in (where, ["--results", str(tmp_path)]):
        assert cli.main(["maps", *place, "--format", "ionex"]) == 0
        lines = capsys.readouterr().out.splitlines()
        words = "".join(line[:60] for line in lines if line[60:].startswith("DESCRIPTION"))
        assert (said in words) is provisional and "Invented" in words and "not for navigation" in words
        asked = [["maps", *place, "--format", "geojson", "--at", "05:00"]]
        if place is where:
            asked += [["events", *place, "--format", "geojson"], ["events", *place, "--format", "json"],
                      ["events", *place, "--arrivals", "--format", "json"]]  # fmt: skip
        for words_of in asked:
            assert cli.main(words_of) == 0
            told = json.loads(capsys.readouterr().out)
            assert told["provisional"] is provisional and told["simulated"] is True
            assert any(notice.startswith(said) for notice in told["notices"]) is provisional
            assert any(notice.startswith("Invented") for notice in told["notices"])
            assert "not for navigation" in told["caution"]


def test_lines_keep_to_the_limit_of_the_region(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A folder of results remembers from which sigma on its region counts a cell as not seen."""
    whole = invented_day(STORM_DAY, step_minutes=60, satellites=6)
    counted = []
    for limit_m in (1e-6, 50.0):
        thresholds = replace(whole.region.thresholds, unseen_sigma_m=limit_m)
        netcdf.write(whole.fields, replace(whole.region, thresholds=thresholds), tmp_path / "field.nc")
        words = ["maps", "--results", str(tmp_path), "--format", "geojson", "--at", "05:00", "--step", "0.2"]
        assert cli.main(words) == 0
        counted.append(len(json.loads(capsys.readouterr().out)["features"]))
    assert counted[0] == 0 < counted[1]


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--format", "netcdf"], "--out FILE"),
        (["--format", "geojson"], "--at HH:MM"),
        (["--at", "25:00"], "a time of day is written like"),
        (["--at", "noon"], "a time of day is written like"),
        (["--every", "0"], "minutes above 0"),
        (["--every", "nan"], "minutes above 0"),
        (["--format", "geojson", "--at", "05:00", "--step", "0"], "more than 0"),
        (["--day", "2001-01-01"], "is not kept here"),
        (["--results", "/nowhere"], "holds no field.nc"),
    ],
)
def test_what_cannot_be_written_is_said(
    archive: str, words: list[str], said: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert cli.main(["maps", "--archive", archive, *words]) == 3
    assert said in capsys.readouterr().err
