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
    lines = capsys.readouterr().out.splitlines()
    assert lines[0].startswith("use,start_utc,end_utc,state,cause") and len(lines) > 1


def test_events_for_a_use_are_written(archive: str, tmp_path: Path) -> None:
    out = tmp_path / "events.geojson"
    asked = ["events", "--archive", archive, "--day", str(STORM_DAY), "--use", "ground", "--format", "geojson"]
    assert cli.main([*asked, "--out", str(out)]) == 0
    shapes = json.loads(out.read_text(encoding="utf-8"))
    assert {shape["properties"]["use"] for shape in shapes["features"]} == {"ground-based augmentation"}


def test_what_is_not_there_is_said(archive: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert cli.main(["events", "--archive", archive, "--day", "2001-01-01"]) == 3
    assert "2001-01-01 is not kept here" in capsys.readouterr().err
    assert cli.main(["events", "--archive", archive, "--use", "sextant"]) == 3
    assert "choose from differential over 10 km" in capsys.readouterr().err
