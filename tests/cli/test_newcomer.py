"""What somebody new types wrongly: messages name what is wrong, where, and a way out; no verdict lacks its caution."""

import errno
import os
import signal
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from tests.builders import CALM_DAY, STORM_DAY, write_archive

from skylag import cli, settings
from skylag.cli import main
from skylag.errors import Refused
from skylag.web.report import Clock
from skylag.web.sentences import CAUTION, INVENTED


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> str:
    return str(write_archive(tmp_path_factory.mktemp("newcomer")))


@pytest.mark.parametrize(
    "words",
    [
        ["advise"], ["events"], ["maps"], ["ahead"], ["check"], ["backup", "copy"], ["token", "list"],
        ["token", "revoke", "field"], ["hindcast", "2031-03-12", "2031-03-13"],
    ],
)  # fmt: skip
def test_a_misspelt_archive_is_told_and_not_made(
    words: list[str], tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """What only reads must neither make an archive nor say that all is well with one that is not there."""
    monkeypatch.chdir(tmp_path)
    assert main([*words, "--archive", "skylag-dmeo"]) == 3
    told = capsys.readouterr()
    assert "skylag-dmeo: no archive is there; name one with --archive" in told.err and not told.out
    assert list(tmp_path.iterdir()) == []


def test_a_file_is_no_archive(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    letter = tmp_path / "letter.txt"
    letter.write_text("dear reader", encoding="utf-8")
    assert main(["advise", "--archive", str(letter)]) == 3
    assert f"{letter}: is a file and no archive; name the folder" in capsys.readouterr().err
    assert letter.read_text(encoding="utf-8") == "dear reader"


def test_a_day_that_is_not_kept(place: str, capsys: pytest.CaptureFixture[str]) -> None:
    for words in (["advise"], ["events"], ["maps"]):
        assert main([*words, "--archive", place, "--day", "2031-05-01"]) == 3
        told = capsys.readouterr().err
        assert "2031-05-01" in told and str(CALM_DAY) in told and str(STORM_DAY) in told


@pytest.mark.parametrize("words", [["advise"], ["advise", "--site", "Gannet Field"], ["ahead", "--record"]])
def test_what_is_read_carries_its_caution(words: list[str], place: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main([*words, "--archive", place]) == 0
    assert "not for navigation" in capsys.readouterr().out.rstrip().split("\n")[-1]


@pytest.mark.parametrize("words", [["events"], ["events", "--arrivals"], ["ahead", "--format", "csv"]])
def test_a_table_has_its_caution_beside_it(words: list[str], place: str, capsys: pytest.CaptureFixture[str]) -> None:
    """The table itself stays a table."""
    assert main([*words, "--archive", place]) == 0
    told = capsys.readouterr()
    assert CAUTION in told.err and INVENTED in told.err
    assert CAUTION not in told.out and "," in told.out.split("\n")[0]


def test_a_refused_question_leaves_no_half_verdict(place: str, capsys: pytest.CaptureFixture[str]) -> None:
    asked = ["advise", "--archive", place, "--site", "Gannet Field", "--day", str(STORM_DAY)]
    assert main([*asked, "--failed", "five past seven"]) == 3
    told = capsys.readouterr()
    assert not told.out and "five past seven" in told.err
    assert main([*asked, "--failed", "2031-06-30T07:05:00Z"]) == 3
    told = capsys.readouterr()
    assert not told.out and "2031-06-30T07:05:00Z: no map lies within 10 minutes" in told.err
    assert "choose the day" in told.err and ".000" not in told.err


@pytest.mark.parametrize("words", [["advise"], ["ahead"]])
@pytest.mark.parametrize(
    ("name", "meant"), [("Ganet Field", "Gannet Field"), ("gannet field", "Gannet Field"), ("kelp", "Kelp Island")]
)  # fmt: skip
def test_a_misspelt_site(
    words: list[str], name: str, meant: str, place: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main([*words, "--archive", place, "--site", name]) == 3
    told = capsys.readouterr()
    assert f"has no site {name}; did you mean {meant}? It has Northport, " in told.err and not told.out


KIND_SAID = "looks like aerodrome misspelt; known kinds are aerodrome, survey, port, site"


@pytest.mark.parametrize("kind", ["aerodrom", "Aerodrome", "areodrome", "aerodromes"])
def test_a_misspelt_kind_of_site(kind: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """By the option, in the list and in the region file; a word of one's own is taken as it is."""
    region, listed = tmp_path / "region.toml", tmp_path / "sites.csv"
    region.write_text(REGION_TEXT, encoding="utf-8")
    listed.write_text(f"name,lat,lon,kind\nAtoll,52,9,{kind}\nMast,52,9,lighthouse\n", encoding="utf-8")
    assert main(["sites", str(listed), "--region", str(region), "--kind", kind]) == 3
    assert f"--kind: kind {kind!r} {KIND_SAID}" in capsys.readouterr().err
    assert region.read_text(encoding="utf-8") == REGION_TEXT
    assert main(["sites", str(listed), "--region", str(region)]) == 1
    assert f"{listed}:2: Atoll: kind {kind!r} {KIND_SAID}" in capsys.readouterr().err
    assert [site.kind for site in settings.read_region(region).sites] == ["site", "site", "lighthouse"]
    region.write_text(REGION_TEXT.replace("lon = 10.0", f'lon = 10.0\nkind = "{kind}"'), encoding="utf-8")
    with pytest.raises(Refused, match="site Field: kind"):
        settings.read_region(region)


def test_a_sheet_of_another_kind(place: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    asked = ["advise", "--archive", place, "--site", "Gannet Field", "--sheet"]
    assert main([*asked, str(tmp_path / "a.doc")]) == 3
    assert "a sheet is HTML or PDF" in capsys.readouterr().err and list(tmp_path.iterdir()) == []
    assert main([*asked, str(tmp_path / "A.PDF")]) == 0
    assert (tmp_path / "A.PDF").read_bytes().startswith(b"%PDF-")


def test_a_folder_that_is_not_there(place: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    goal = tmp_path / "nowhere" / "maps.csv"
    assert main(["maps", "--archive", place, "--out", str(goal)]) == 3
    told = capsys.readouterr().err
    assert str(goal) in told and "a folder to write into must be there first" in told


def test_no_place_for_results_is_told_before_the_work(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """No work is begun whose results cannot be kept."""
    monkeypatch.setattr(cli.work, "network_day", lambda *_, **__: pytest.fail("began to compute"))
    file = tmp_path / "there"
    file.write_text("mine", encoding="utf-8")
    assert main(["day", str(tmp_path), "--out", str(file)]) == 3
    assert f"--out {file}: {file} is a file; name a folder" in capsys.readouterr().err
    assert main(["day", str(tmp_path), "--out", str(tmp_path / "new"), "--archive", str(file)]) == 3
    assert f"{file}: is a file and no archive" in capsys.readouterr().err
    monkeypatch.setattr(os, "access", lambda *_: False)
    assert main(["day", str(tmp_path), "--out", str(tmp_path / "new")]) == 3
    told = capsys.readouterr().err
    assert f"{tmp_path}: Permission denied; change its rights, or choose a place" in told


@pytest.mark.parametrize("how", ["no names", "no files"])
def test_a_folder_that_may_not_be_looked_into(
    how: str, tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Named, it is refused; below a named one, it is told among what was left out."""
    inputs, below = tmp_path / "inputs", tmp_path / "inputs" / "below"
    below.mkdir(parents=True)
    (below / "there.obs").write_text("not for you", encoding="utf-8")
    names, rights = os.scandir, os.access

    def scandir(place: str) -> object:
        if how == "no names" and Path(place) == below:
            raise PermissionError(errno.EACCES, os.strerror(errno.EACCES), str(place))
        return names(place)

    def access(place: str, mode: int) -> bool:
        return not (how == "no files" and Path(place) == below) and rights(place, mode)

    monkeypatch.setattr(os, "scandir", scandir)
    monkeypatch.setattr(os, "access", access)
    said = f"{below}: may not be read; change its rights, or take the files from elsewhere (Permission denied)"
    assert main(["day", str(below), "--out", str(tmp_path / "out")]) == 3
    assert capsys.readouterr().err.rstrip().endswith(f"skylag: {said}")
    assert main(["day", str(inputs), "--out", str(tmp_path / "out")]) == 3
    told = capsys.readouterr().err
    assert "no observation file is among the inputs" in told and said in told and "there.obs" not in told


REGION_TEXT = """[region]
name = "Here"
south = 50.0
north = 54.0
west = 8.0
east = 14.0
timezone = "Europe/Berlin"

[[site]]
name = "Field"
lat = 52.0
lon = 10.0

[[site]]
name = "Quarry"
lat = 51.0
lon = 11.0
"""


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("[[site]]", "[[sites]]", r"knows nothing of sites; a region file may hold .*\[\[site\]\]"),
        ("[[site]]\nname = \"Quarry\"\nlat = 51.0\nlon = 11.0", "[treshold]\nstrained_mm_per_km = 5",
         "knows nothing of treshold"),
        ("lat = 52.0", "latt = 52.0", "site Field knows nothing of latt"),
        ("lon = 10.0", "lon = 10.0\nkidn = \"aerodrome\"", "site Field knows nothing of kidn"),
        ("\nlon = 10.0", "", "site Field lacks lon"),
        ('"Quarry"', '"Field"', r"two \[\[site\]\] are named Field"),
        ("Europe/Berlin", "Europe/Berln", "timezone 'Europe/Berln' is not known; write one like"),
        ("south = 50.0", "south = 60.0", "south must be below north"),
    ],
)  # fmt: skip
def test_a_typo_in_a_region_file(tmp_path: Path, old: str, new: str, said: str) -> None:
    """None is passed over in silence, and each message names the file."""
    path = tmp_path / "region.toml"
    path.write_text(REGION_TEXT, encoding="utf-8")
    assert len(settings.read_region(path).sites) == 2
    path.write_text(REGION_TEXT.replace(old, new), encoding="utf-8")
    with pytest.raises(Refused, match=said) as trouble:
        settings.read_region(path)
    assert trouble.value.message.startswith(f"{path}: ")


def test_a_region_file_is_replaced_whole_or_not_at_all(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    region, listed = tmp_path / "region.toml", tmp_path / "sites.csv"
    region.write_text(REGION_TEXT.replace("[[site]]", "[[site]] # mine"), encoding="utf-8")
    listed.write_text("name,lat,lon\nAtoll,52,9\nBelow,-152,9\n", encoding="utf-8")
    assert main(["sites", str(listed), "--region", str(region)]) == 1
    assert f"{listed}:3: Below stands at -152" in capsys.readouterr().err
    assert "# mine" in region.read_text(encoding="utf-8")
    assert [site.name for site in settings.read_region(region).sites] == ["Field", "Quarry", "Atoll"]
    assert sorted(path.name for path in tmp_path.iterdir()) == ["region.toml", "sites.csv"]


def test_a_whole_day_does_not_read_as_none() -> None:
    clock = Clock("Etc/GMT-10")
    start = np.datetime64("2031-03-12T00:00:18", "ns")  # midnight UTC in GPS time
    end = start + np.timedelta64(24, "h")
    assert clock.span(start, end) == ("00:00 - 24:00", "10:00 - 10:00")
    assert clock.utc_end(start + np.timedelta64(6, "h")) == "06:00"


def test_an_interruption_is_answered_in_words_from_the_first_moment() -> None:
    """Ctrl-C while the program is still being loaded: an import stands in for it that interrupts."""
    code = (
        "import sys, signal, os\n"
        "class Interrupting:\n"
        "    def find_spec(self, name, path=None, target=None):\n"
        "        if name == 'skylag.cli':\n"
        "            os.kill(os.getpid(), signal.SIGINT)\n"
        "sys.meta_path.insert(0, Interrupting())\n"
        "from skylag.__main__ import main\n"
        "sys.exit(main())\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60)
    assert done.returncode == 128 + signal.SIGINT
    assert done.stderr == "skylag: stopped; nothing unfinished was kept\n"
