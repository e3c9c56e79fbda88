"""The command line as people type it, in a process of its own where that matters."""

import csv
import json
import re
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr

from skylag import cli
from skylag.formats import delimited, netcdf, results
from skylag.tables import FLAG_KINDS, STATE_NAMES

DAY = "2031-03-12"


def run(*words: str, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "skylag.cli", *words], capture_output=True, text=True, timeout=240, cwd=cwd, check=False
    )


def few(sample_folder: Path) -> list[str]:
    return [str(next((sample_folder / DAY).glob(f"{name}*"))) for name in ("FENN", "EDRO", "VANP", "MRGT", "TARN")]


Done = tuple[subprocess.CompletedProcess[str], Path]


@pytest.fixture(scope="module")
def done(sample_folder: Path, tmp_path_factory: pytest.TempPathFactory) -> Done:
    out = tmp_path_factory.mktemp("results")
    region = str(sample_folder / "region.toml")
    return run("day", *few(sample_folder), "--out", str(out), "--region", region, "--every", "15"), out


def test_version_and_help_read_well() -> None:
    version = run("--version")
    assert version.returncode == 0
    assert re.fullmatch(r"skylag \d+\.\d+\.\d+\S*\n", version.stdout)
    help_text = run("--help").stdout
    for word in ("day", "demo", "serve", "not for navigation"):
        assert word in help_text
    day = run("day", "--help").stdout
    for word in ("C1W-C2W", "--region", "exit status", "skylag day", "biases.csv"):
        assert word in day


def test_no_command_prints_help_and_fails() -> None:
    nothing = run()
    assert nothing.returncode == 2
    assert "commands" in nothing.stdout


@pytest.mark.parametrize(
    ("words", "status", "said"),
    [
        (["day", "nowhere", "--out", "x"], 3, "no such file or folder"),
        (["day", "."], 2, "--out"),
        (["day", ".", "--out", "x", "--date", "12 March"], 2, "write it as 2031-03-12"),
        (["day", ".", "--out", "x", "--every", "90"], 2, "outside 1 to 60"),
        (["day", ".", "--out", "x", "--signals", "G=C1W"], 3, "write system=code1-code2"),
        (["day", ".", "--out", "x", "--region", "nowhere.toml"], 3, "cannot be read"),
        (["day", ".", "--out", "x", "--earlier-days", "7"], 3, "name it with --archive"),
        (["day", ".", "--out", "x", "--drift-hours", "30"], 3, "1 to 24"),
        (["serve", "--port", "eighty"], 3, "not a port"),
        (["fly"], 2, "invalid choice"),
    ],
)
def test_wrong_words_are_explained(words: list[str], status: int, said: str, tmp_path: Path) -> None:
    answer = run(*words, cwd=tmp_path)
    assert answer.returncode == status
    assert said in answer.stderr
    assert "Traceback" not in answer.stderr
    assert not list(tmp_path.iterdir()), "a command that fails leaves nothing behind"


def test_a_day_tells_what_it_did(done: Done) -> None:
    answer, out = done
    assert answer.returncode == 0, answer.stderr
    assert "receivers 4" in answer.stdout
    assert "unseen" in answer.stdout
    assert "making maps" in answer.stderr
    assert sorted(p.name for p in out.iterdir()) == sorted(results.NAMES)


def test_biases_csv_is_the_contract(done: Done) -> None:
    with (done[1] / "biases.csv").open(encoding="utf-8") as lines:
        rows = list(csv.DictReader(lines))
    assert tuple(rows[0]) == delimited.BIAS_COLUMNS
    assert {row["kind"] for row in rows} == {"receiver", "satellite"}
    receivers = [row for row in rows if row["kind"] == "receiver"]
    assert len(receivers) == 8  # four receivers, two constellations
    assert all(float(row["sigma_ns"]) > 0 for row in receivers)
    assert all(row["datum"] for row in rows)
    for system in "GE":
        values = [float(r["bias_ns"]) for r in rows if r["kind"] == "satellite" and r["system"] == system]
        assert abs(np.mean(values)) < 1e-3, "zero mean over the satellites, as the datum says"


def test_slant_parquet_is_the_contract(done: Done) -> None:
    table = pd.read_parquet(done[1] / "slant.parquet")
    assert tuple(table.columns) == delimited.SLANT_COLUMNS
    assert table.time.dtype == "datetime64[ns]"
    assert set(table.receiver.unique()) == {"FENN00XBS", "EDRO00XBS", "VANP00XBS", "MRGT00XBS"}
    assert table.satellite.str.match(r"[GE]\d\d").all()
    assert table.elevation_deg.between(10, 90).all()
    assert (table.sigma_tecu > 0).all()
    assert np.isfinite(table.stec_tecu).all()


def test_field_nc_is_the_contract(done: Done) -> None:
    with xr.open_dataset(done[1] / "field.nc", engine="h5netcdf") as held:
        assert held.attrs["Conventions"].startswith("CF-")
        assert dict(held.sizes) == {"time": 96, "lat": 15, "lon": 17}
        for name in ("vertical_delay", "vertical_delay_sigma", "vtec", "support", "slope", "state"):
            assert held[name].dims == ("time", "lat", "lon")
            assert held[name].attrs["units"]
        assert held.vertical_delay.attrs["units"] == "m"
        assert held.slope.attrs["units"] == "mm km-1"
        assert held.state.attrs["flag_meanings"].split() == list(STATE_NAMES)
        # 96 quarter hours of GPS time begin 18 s before UTC midnight (IERS Bulletin C: 18 s since 2017).
        assert held.time.values[0] == np.datetime64(f"{DAY}T00:00:00") - np.timedelta64(18, "s")
        ratio = (held.vertical_delay / held.vtec).values
        assert np.nanmax(np.abs(ratio - 0.162372)) < 1e-5  # m per TECU on 1575.42 MHz
        unseen = held.support.values == 0
        assert unseen.any()
        # A tracked front or patch may say broken ahead of what is seen; nothing may say that corrections hold.
        assert not (held.state.values[unseen] == STATE_NAMES.index("holds")).any()
    back = netcdf.read(done[1] / "field.nc")
    assert back.times[0] == np.datetime64(DAY, "ns")


def test_flags_csv_is_the_contract(done: Done) -> None:
    with (done[1] / "flags.csv").open(encoding="utf-8") as lines:
        rows = list(csv.DictReader(lines))
    assert rows, "the storm day has flags"
    assert tuple(rows[0]) == delimited.FLAG_COLUMNS
    for row in rows:
        assert re.fullmatch(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\dZ", row["start"])
        assert row["start"] <= row["end"]
        assert row["kind"] in FLAG_KINDS
        assert row["state"] in STATE_NAMES
        assert row["evidence"]
        assert not (row["kind"] == "fault" and row["state"] == "holds")
    fronts = [row for row in rows if row["kind"] == "front"]
    assert fronts
    assert all(float(row["speed_m_s"]) > 0 and 0 <= float(row["heading_deg"]) < 360 for row in fronts)


def test_day_json_tells_where_numbers_come_from(done: Done) -> None:
    facts = json.loads((done[1] / "day.json").read_text(encoding="utf-8"))
    assert facts["day"] == DAY
    assert len(facts["inputs"]) == 5
    assert all(len(item["sha256"]) == 64 for item in facts["inputs"])
    assert facts["options"]["epoch_step_s"] == 900.0
    assert facts["versions"]["skylag"]
    assert facts["timings_s"]["maps"] > 0
    assert facts["counts"]["receivers"] == 4
    assert "not for navigation" in facts["caution"]


def test_a_run_that_fails_leaves_old_results_as_they_were(
    done: Done, tmp_path: Path
) -> None:
    before = {path.name: path.read_bytes() for path in done[1].iterdir()}
    (tmp_path / "broken.rnx").write_text("nothing of use\n")
    answer = run("day", str(tmp_path), "--out", str(done[1]))
    assert answer.returncode == 3
    assert "broken.rnx:1" in answer.stderr
    assert {path.name: path.read_bytes() for path in done[1].iterdir()} == before


def test_status_one_when_something_was_left_out(sample_folder: Path, tmp_path: Path) -> None:
    broken = tmp_path / "broken.rnx"
    broken.write_text("nothing of use\n")
    paths = few(sample_folder)[-2:]
    answer = run("day", *paths, str(broken), "--out", str(tmp_path / "out"), "--every", "60", "--quiet")
    assert answer.returncode == 1
    assert f"left out: {broken}:1: " in answer.stderr
    assert answer.stdout == ""
    assert (tmp_path / "out" / "day.json").is_file()


def test_a_day_is_kept_in_an_archive(sample_folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    from skylag.archive import open_archive

    place = str(tmp_path / "archive")
    words = ["day", *few(sample_folder)[-2:], "--out", str(tmp_path / "out"), "--every", "60", "--archive", place,
             "--workers", "threads:1"]  # fmt: skip
    assert cli.main(words) == 0
    assert cli.main(words) == 0
    capsys.readouterr()
    with open_archive(place) as archive:
        (head,) = archive.days()
        assert head.versions == (1, 2), "the same day again is a new version"
        assert len(archive.outlooks.unscored(head.region)) == 2, "and the outlook after it is kept with each"


def test_progress_is_a_bar_on_a_terminal() -> None:
    import io

    class Terminal(io.StringIO):
        def isatty(self) -> bool:
            return True

    screen = Terminal()
    bar = cli._Bar("day", out=screen)
    bar.tell("look", 0.0, "")
    bar.tell("receivers", 0.5, "MRGT")
    bar.tell("maps", 0.5, "")
    bar.close()
    text = screen.getvalue()
    shares = [int(n) for n in re.findall(r"(\d+) %", text)]
    assert shares == sorted(shares)
    assert shares[-1] > shares[1] > 0
    assert "MRGT" in text
