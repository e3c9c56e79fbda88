"""The command `events` over a small archive."""

import json
from pathlib import Path

import pytest
from tests.builders import STORM_DAY, write_archive

from skylag import cli


@pytest.fixture(scope="module")
def archive(tmp_path_factory: pytest.TempPathFactory) -> str:
    return str(write_archive(tmp_path_factory.mktemp("kept")))


def test_events_of_a_day_are_printed(archive: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert cli.main(["events", "--archive", archive, "--day", str(STORM_DAY)]) == 0
    said = capsys.readouterr()
    lines = said.out.splitlines()
    assert lines[0].startswith("use,start_utc,end_utc,state,cause") and len(lines) > 1
    assert "not for navigation" in said.err  # a table has no place for it


def test_events_for_a_use_are_written(archive: str, tmp_path: Path) -> None:
    out = tmp_path / "events.geojson"
    asked = ["events", "--archive", archive, "--day", str(STORM_DAY), "--use", "ground", "--format", "geojson"]
    assert cli.main([*asked, "--out", str(out)]) == 0
    shapes = json.loads(out.read_text(encoding="utf-8"))
    assert {shape["properties"]["use"] for shape in shapes["features"]} == {"ground-based augmentation"}


def test_foretold_arrivals_are_printed(archive: str, capsys: pytest.CaptureFixture[str]) -> None:
    asked = ["events", "--archive", archive, "--day", str(STORM_DAY), "--arrivals"]
    assert cli.main(asked) == 0
    lines = capsys.readouterr().out.splitlines()
    assert lines[0] == "flag,site,made_utc,expected_utc,sigma_s,seen_utc,came_true"
    assert lines[1].startswith("0,Gannet Field,2031-05-11T04:59:42Z") and lines[1].endswith(",true")
    assert cli.main([*asked, "--format", "json"]) == 0
    assert json.loads(capsys.readouterr().out)["came_true"] == 1
    assert cli.main([*asked, "--format", "geojson"]) == 3
    assert "choose --format csv or json" in capsys.readouterr().err


def test_what_is_not_there_is_said(archive: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert cli.main(["events", "--archive", archive, "--day", "2001-01-01"]) == 3
    assert "2001-01-01 is not kept here" in capsys.readouterr().err
    assert cli.main(["events", "--archive", archive, "--use", "sextant"]) == 3
    assert "choose from differential over 10 km" in capsys.readouterr().err
