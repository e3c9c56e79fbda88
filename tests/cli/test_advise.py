"""The commands advise and sites."""

from pathlib import Path
from typing import Any

import pytest
from tests.builders import CALM_DAY, write_archive

from skylag import settings
from skylag.archive import Archive
from skylag.cli import main


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> str:
    return str(write_archive(tmp_path_factory.mktemp("advise")))


def _lines(told: str) -> dict[str, str]:
    """What is said of each site that a line begins with."""
    return dict(line.split(": ", 1) for line in told.splitlines() if ": " in line)


def test_all_sites_in_a_line_each(place: str, capsys: pytest.CaptureFixture[str]) -> None:
    """Aerodromes by their approaches, all others by survey."""
    assert main(["advise", "--archive", place]) == 0
    told = capsys.readouterr().out
    lines = _lines(told)
    for name in ("Northport", "Southmere quarry"):
        assert lines[name].startswith("Survey (rtk, over 10 km")
    for name in ("Gannet Field", "Kelp Island"):
        assert lines[name].startswith("Approaches available of the day: NPA ") and "Survey" not in lines[name]
    assert told.startswith("Invented data") and "not for navigation" in told.rstrip().split("\n")[-1]


@pytest.mark.parametrize("name", ["Gannet Field", "Kelp Island"])
def test_an_aerodrome_reads_the_same_alone(place: str, name: str, capsys: pytest.CaptureFixture[str]) -> None:
    """Levels and what the service is assumed to do count for all sites as for one."""
    words = ["advise", "--archive", place, "--levels", "APV-I,LPV-200", "--corrections", "6"]
    assert main(words) == 0
    among = _lines(capsys.readouterr().out)[name]
    assert main([*words, "--site", name]) == 0
    assert among in capsys.readouterr().out.splitlines()
    assert "APV-I " in among and "outage" in among.lower()


def test_all_sites_share_one_sky_and_grid(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Lines of sight are read once, however many sites there are."""
    place, read = str(write_archive(tmp_path)), []
    whole = Archive.samples

    def samples(self: Archive, *asked: Any) -> Any:
        read.append(asked)
        return whole(self, *asked)

    monkeypatch.setattr(Archive, "samples", samples)
    assert main(["advise", "--archive", place, "--day", str(CALM_DAY)]) == 0
    assert len(read) == 1


def test_a_site_with_sheet_and_calendar(place: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    paper, page, dates = tmp_path / "a.pdf", tmp_path / "a.html", tmp_path / "a.ics"
    asked = ["advise", "--archive", place, "--day", "2031-05-11", "--site", "Gannet Field", "--hours", "07:00-17:00"]
    failed = ["--failed", "2031-05-11T05:10:00Z"]
    assert main([*asked, *failed, "--sheet", str(paper), "--calendar", str(dates)]) == 0
    told = capsys.readouterr().out
    for word in ("Approaches available", "Ground-based augmentation", "Was it the ionosphere", "Assumed:", "GPSA",
                 "not for navigation"):  # fmt: skip
        assert word in told
    assert paper.read_bytes().startswith(b"%PDF-")
    assert dates.read_bytes().startswith(b"BEGIN:VCALENDAR\r\n")
    assert main([*asked, "--sheet", str(page)]) == 0
    assert "<style>" in page.read_text(encoding="utf-8")


def test_a_place_that_is_no_site(place: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["advise", "--archive", place, "--at", "-40", "146.5"]) == 0
    assert "-40, 146.5" in capsys.readouterr().out
    assert main(["advise", "--archive", place, "--at", "-40", "146.5", "--at", "-20", "146.5"]) == 0
    told = capsys.readouterr().out
    assert "-40, 146.5 and 1 more" in told
    assert " 0 min to work" in told
    assert "-20, 146.5 lies off the map of this region, which reaches from latitude " in told


def test_a_job_with_every_word(place: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """What was asked comes back with the answer, and the same job over an area has no more time to work."""
    ring = ["--at", "-41", "146.5", "--at", "-41", "147.5", "--at", "-41.6", "147.5"]
    words = ["--method", "static", "--session", "30", "--least-window", "10", "--mask", "10", "--satellites", "6",
             "--dilution", "5", "--fixing", "0.2", "--tolerance", "150", "250", "--reference", "GULL",
             "--reference-at", "-41.2", "147"]  # fmt: skip
    assert main(["advise", "--archive", place, *ring, "--shape", "area", *words]) == 0
    told = capsys.readouterr().out
    for word in ("area of 3 points from -41, 146.5", "Survey (static, over ", "150 mm across", "mean over 30 minutes",
                 "above 10 degrees", "cells of the map that the area touches", "Longest baseline within tolerance",
                 "Hourly index", "Differential delay at"):  # fmt: skip
        assert word in told
    assert main(["advise", "--archive", place, *ring[:3], "--shape", "route"]) == 3
    assert "needs 2 places" in capsys.readouterr().err
    assert main(["advise", "--archive", place, *ring[:3], "--reference", "NONE"]) == 3
    assert "no receiver NONE" in capsys.readouterr().err


def test_what_service_and_station_are_assumed_to_do(place: str, capsys: pytest.CaptureFixture[str]) -> None:
    words = ["--levels", "APV-II,CAT-I", "--corrections", "6", "--systems", "GE", "--lowest", "7", "--noise", "0.2",
             "--usual-grid", "4.5", "--spread", "6", "--distance", "9", "--speed", "80", "--smoothing", "30",
             "--station-lowest", "10", "--coming", "2031-05-11T04:30:00Z"]  # fmt: skip
    assert main(["advise", "--archive", place, "--site", "Gannet Field", *words]) == 0
    told = capsys.readouterr().out
    for word in ("APV-II", "CAT-I", "bounded by 6 m", "systems GE, above 7 degrees", "divergence 0.2 m", "4.5 m",
                 "a spread of 6 mm/km", "9 km away at 80 m/s", "over 30 s", "at 10 degrees sees",
                 "Next front after 2031-05-11T04:30:00Z"):  # fmt: skip
        assert word in told
    assert "LPV-200" not in told
    for wrong in (["--corrections", "2"], ["--noise", "0"], ["--spread", "30"], ["--levels", "X"]):
        assert main(["advise", "--archive", place, "--site", "Gannet Field", *wrong]) == 3
        assert capsys.readouterr().err


@pytest.mark.parametrize(
    ("more", "word"),
    [(["--day", "2031-01-01"], "keeps no such day"), (["--site", "Atlantis"], "has no site"),
     (["--at", "95", "0"], "lat"), (["--site", "Northport", "--baseline", "-1"], "baseline_km")],
)  # fmt: skip
def test_what_cannot_be_answered(place: str, more: list[str], word: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["advise", "--archive", place, *more]) == 3
    assert word in capsys.readouterr().err


def test_sites_into_a_region(sample_folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    region = tmp_path / "region.toml"
    region.write_text((sample_folder / "region.toml").read_text(encoding="utf-8"), encoding="utf-8")
    table = tmp_path / "sites.csv"
    table.write_text('name,lat,lon\n"Old ""brook"" \\ east",-40.5,146\nPort Sallow,0,0\nbad,x,1\n', encoding="utf-8")
    assert main(["sites", str(table), "--region", str(region), "--kind", "aerodrome"]) == 1
    told = capsys.readouterr()
    assert "bad has no place" in told.err
    assert "left as it is: Port Sallow" in told.err
    sites = settings.read_region(region).sites
    assert (sites[-1].name, sites[-1].lat, sites[-1].kind) == ('Old "brook" \\ east', -40.5, "aerodrome")
    assert len(sites) == len(settings.read_region(sample_folder / "region.toml").sites) + 1
    assert main(["sites", str(tmp_path / "none.csv"), "--region", str(region)]) == 3
