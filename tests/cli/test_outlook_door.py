"""The commands `ahead` and `activity`: what they print and keep, and what they refuse."""

import csv
import io
import json
from collections.abc import Iterator
from pathlib import Path

import pytest
from tests.builders import CALM_DAY, REGION, STORM_DAY, invented_day

from skylag.archive import open_archive
from skylag.cli import main
from skylag.jobs import hindcast


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """Two days kept as workers keep them."""
    folder = tmp_path_factory.mktemp("ahead")
    with open_archive(folder) as archive:
        for day in (CALM_DAY, STORM_DAY):
            archive.save(invented_day(day, storm=day == STORM_DAY, step_minutes=30, satellites=2))
            hindcast.day_kept(archive, REGION.name, day)
        assert hindcast.track_record(archive, REGION.name).outlooks == 1, "scored on the way, nobody asked"
    yield str(folder)


def run(capsys: pytest.CaptureFixture[str], *words: str) -> tuple[int, str, str]:
    status = main(list(words))
    told = capsys.readouterr()
    return status, told.out, told.err


def test_ahead_in_words_numbers_and_facts(place: str, capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    site = REGION.sites[1]
    status, text, _ = run(capsys, "ahead", "--archive", place, "--site", site.name, "--use", "ground")
    assert status == 0 and text.startswith(f"{site.name}, ground-based augmentation: after {STORM_DAY}")
    assert "Invented data" in text and "not for navigation" in text and "not known" in text
    assert "2031-05-12 00:00 to 2031-05-14 00:00 UTC" in text and "2031-05-13 23:00" in text
    table = [line for line in text.splitlines() if line.startswith("2031-05-1")]
    assert len(table) == 48 and all("; not known" in line for line in table)
    assert "strained or worse up to" not in text
    status, text, _ = run(capsys, "ahead", "--archive", place, "--site", site.name, "--format", "csv")
    rows = list(csv.DictReader(io.StringIO(text)))
    assert len(rows) == 48
    for row in rows:
        ends = [float(row[f"delay_{share}_{end}_m"]) for share, end in (
            ("95", "low"), ("80", "low"), ("50", "low"), ("50", "high"), ("80", "high"), ("95", "high"))]  # fmt: skip
        assert ends == sorted(ends)
        slopes = [float(row[f"slope_{level}_mm_per_km"]) for level in (50, 80, 95, 99)]
        assert slopes == sorted(slopes)
        assert row["chance_broken"] == row["chance_strained"] == "", "two days make no chance"
    out = tmp_path / "ahead.json"
    where = ("--at", str(site.lat), str(site.lon), "--expect", "120,20", "--format", "json", "--out", str(out))
    assert run(capsys, "ahead", "--archive", place, *where)[0] == 0
    facts = json.loads(out.read_text())
    assert facts["storm_phase"][0] == "onset" and facts["made_utc"] is None
    status, text, _ = run(capsys, "ahead", "--archive", place, "--record")
    assert status == 0 and "1 outlooks whose days came" in text and "beside persistence" in text


def test_activity_is_kept_and_used(place: str, capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    told = tmp_path / "told.csv"
    told.write_text("made_utc,day,ap\n2031-05-11T18:00Z,2031-05-12,110\n2031-05-12T06:00,2031-05-12,5\n")
    status, text, _ = run(capsys, "activity", "--archive", place, "--outlook", str(told), "--source", "an office")
    assert status == 0 and "2 new" in text
    _, text, _ = run(capsys, "ahead", "--archive", place)
    assert "ap of 2031-05-12 as foretold 2031-05-11 18:00 UTC (an office): up to 110" in text and "; onset" in text
    expected = ("--expect", "2031-05-13", "4,4,4,4,5,6,7,80", "--made", "2031-05-11T20:00Z")
    assert run(capsys, "activity", "--archive", place, *expected)[0] == 0
    measured = tmp_path / "measured.txt"
    kp, ap = " 1.000" * 7 + " 5.333", "    4" * 7 + "   56"
    measured.write_text(f"2031 05 11 36289 36289.5 2740 20 {kp} {ap}    10  50   140.0   141.0 1\n")
    status, text, _ = run(capsys, "activity", "--archive", place, "--measured", str(measured))
    assert status == 0 and "measured.txt: 2031-05-11 to 2031-05-11, 1 days new" in text
    _, text, _ = run(capsys, "activity", "--archive", place)
    assert "2031-05-11: Kp up to 5.33, ap 10, F10.7 140" in text
    assert "foretold: 3 tellings" in text and "2031-05-13: ap up to 80, made 2031-05-11T20:00 UTC, entered" in text


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("ahead", "--site", "Atlantis"), "or give --at"),
        (("ahead", "--region", "Atlantis"), "name a region"),
        (("ahead", "--at", "10", "10"), "outside the map"),
        (("ahead", "--expect", "12"), "for each of the two days"),
        (("ahead", "--expect", "a,b"), "two numbers"),
        (("ahead", "--use", "sextant"), "choose from"),
        (("ahead", "--record", "--format", "csv"), "as text or json"),
        (("activity", "--expect", "2031-05-13", "much"), "write a UTC day"),
        (("activity", "--expect", "2031-05-13", "900"), "from 0 to 400"),
        (("activity", "--expect", "2020-05-13", "9"), "was over by then"),
        (("activity", "--outlook", __file__), "no outlook of activity"),
        (("activity", "--outlook", "not-there.csv"), "No such file"),
    ],
)
def test_refusals(place: str, capsys: pytest.CaptureFixture[str], words: tuple[str, ...], said: str) -> None:
    status, _, err = run(capsys, words[0], "--archive", place, *words[1:])
    assert status == 3 and said in err


def test_an_archive_without_days(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Nothing to learn from: climatology where the region is told, and it says so; no window, no promise."""
    status, _, err = run(capsys, "ahead", "--archive", str(tmp_path / "new"))
    assert status == 3 and "no archive is there" in err and not (tmp_path / "new").exists()
    open_archive(tmp_path / "empty").close()
    status, _, err = run(capsys, "ahead", "--archive", str(tmp_path / "empty"))
    assert status == 3 and "the archive has none yet" in err and "region.toml" in err
    file = tmp_path / "region.toml"
    file.write_text('[region]\nname = "Here"\nsouth = 50.0\nnorth = 54.0\nwest = 8.0\neast = 14.0\n')
    words = ("ahead", "--archive", str(tmp_path / "new"), "--region", str(file), "--at", "52", "10")
    status, text, err = run(capsys, *words)
    assert status == 0, err
    assert "seen on 0 of the last 27 days" in text and "climatology alone, with a wide range" in text
    assert "UTC: not known\n" in text and "likely holds" not in text and "not covered" in text
    _, text, _ = run(capsys, *words, "--format", "csv")
    rows = list(csv.DictReader(io.StringIO(text)))
    noon, night = (max(float(row["vertical_delay_m"]) for row in rows if row["start_utc"][11:13] == hour) for hour in (
        "13", "01"))  # fmt: skip
    assert noon > 1.5 * night > 0
    for row in rows:
        assert float(row["delay_95_high_m"]) > 4.0 * float(row["delay_95_low_m"])
