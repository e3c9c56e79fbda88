"""The commands of a service: keys, checks and copies as people type them; and all processes of the compose file."""

import contextlib
import json
import shutil
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import httpx
import pytest
from tests.builders import REGION, STORM_DAY, write_archive

from skylag import cli
from skylag.archive import open_archive, slants


def run(*words: str, cwd: Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "skylag.cli", *words], capture_output=True, text=True, timeout=240, cwd=cwd, check=False
    )


@contextlib.contextmanager
def running(*words: str, cwd: Path) -> Iterator[subprocess.Popen[str]]:
    command = [sys.executable, "-m", "skylag.cli", *words]
    with (cwd / f"{words[0]}.log").open("w") as log:
        process = subprocess.Popen(command, cwd=cwd, stdout=subprocess.PIPE, stderr=log, text=True)
        try:
            yield process
        finally:
            process.terminate()
            try:
                process.wait(20)
            except subprocess.TimeoutExpired:
                process.kill()
            process.communicate()


Capture = pytest.CaptureFixture[str]


def test_check_finds_harm_and_says_all_is_well(tmp_path: Path, capsys: Capture) -> None:
    place = str(write_archive(tmp_path))
    assert cli.main(["check", "--archive", place]) == 0
    assert capsys.readouterr().out == "2 days in 2 versions: all is well\n"
    with open_archive(place) as archive:
        path = slants.path_of(archive.slant_folder, archive.day(REGION.name, STORM_DAY).slant_sha256)
    path.write_bytes(path.read_bytes()[:-1] + b"?")
    assert cli.main(["check", "--archive", place]) == 3
    said = capsys.readouterr().out
    assert "slant table is not the one" in said and "1 things are wrong" in said
    assert cli.main(["check", "--quick", "--archive", place]) == 0


def test_a_key_is_shown_once(tmp_path: Path, capsys: Capture) -> None:
    place = ["--archive", str(tmp_path / "a")]
    assert cli.main(["token", "make", "office", "--scope", "write", *place]) == 0
    key = capsys.readouterr().out.strip()
    assert key.startswith("skylag-")
    assert cli.main(["token", "list", *place]) == 0
    listed = capsys.readouterr().out
    assert listed.startswith("office: write, made ") and key not in listed
    assert cli.main(["token", "revoke", "nobody", *place]) == 3
    assert "good ones: office" in capsys.readouterr().err
    assert cli.main(["token", "list", "office", *place]) == 3


def test_a_copy_there_and_back(tmp_path: Path, capsys: Capture) -> None:
    place = str(write_archive(tmp_path))
    assert cli.main(["backup", str(tmp_path / "kept"), "--archive", place]) == 0
    assert cli.main(["restore", str(tmp_path / "kept"), "--archive", str(tmp_path / "new")]) == 0
    assert cli.main(["restore", str(tmp_path / "kept"), "--archive", place]) == 3
    assert "holds something already" in capsys.readouterr().err
    assert cli.main(["check", "--archive", str(tmp_path / "new")]) == 0


def test_queued_from_the_command_line(tmp_path: Path, sample_folder: Path, capsys: Capture) -> None:
    folder = sample_folder / "2031-03-11"
    files = [str(next(folder.glob(f"{name}*"))) for name in ("MRGT", "TARN")]
    (tmp_path / "letter.txt").write_text("Dear surveyor,\n")
    place = ["--archive", str(tmp_path / "a")]
    assert cli.main(["add", *files, str(tmp_path / "letter.txt"), *place]) == 1
    said = capsys.readouterr()
    assert said.out == "queued 1: 2031-03-11 around its receivers, 1 observation file\n" and "letter.txt" in said.err
    assert cli.main(["add", *files, "--date", "2031-04-01", *place]) == 3
    assert cli.main(["watch", str(tmp_path / "nowhere"), *place]) == 3


@pytest.mark.slow
def test_all_processes_of_the_compose_file(archive_place: str, tmp_path: Path, sample_folder: Path) -> None:
    """Server, worker and watch by hand over one archive: a day that is sent, and a day that appears in the folder."""
    key = run("token", "make", "office", "--scope", "write", "--archive", archive_place, cwd=tmp_path).stdout.strip()
    incoming = tmp_path / "incoming"
    incoming.mkdir()
    common = ("--archive", archive_place)
    with (
        running("serve", *common, "--host", "0.0.0.0", "--port", "0", cwd=tmp_path) as server,
        running("work", *common, "--workers", "local:1", cwd=tmp_path),
        running("watch", str(incoming), *common, "--workers", "local:1", "--every", "60", "--simulated", cwd=tmp_path),
    ):
        line = server.stdout.readline()
        address = f"http://127.0.0.1:{line.split('0.0.0.0:')[1].split('/')[0]}"
        with httpx.Client(base_url=address, timeout=30) as client:
            assert client.post("/api/batches").status_code == 401
            client.headers["Authorization"] = f"Bearer {key}"
            batch = client.post("/api/batches").json()["batch"]
            for marker in ("MRGT", "TARN"):
                path = next((sample_folder / "2031-03-11").glob(f"{marker}*"))
                sent = client.put(f"/api/batches/{batch}/files?name={path.name}", content=path.read_bytes())
                assert sent.status_code == 201, sent.text
            (task,) = client.post(f"/api/batches/{batch}/work").json()["tasks"]
            until = time.perf_counter() + 200
            while client.get(f"/api/work/{task['id']}").json()["state"] in ("waiting", "running"):
                assert time.perf_counter() < until, (tmp_path / "work.log").read_text()
                time.sleep(0.5)
            assert client.get(f"/api/work/{task['id']}").json()["state"] == "done"
            assert [day["day"] for day in client.get("/api/days").json()["days"]] == ["2031-03-11"]
            # The sample days lie years ahead, so for the watch they are never long gone.
            for marker in ("MRGT", "TARN"):
                shutil.copy(next((sample_folder / "2031-03-12").glob(f"{marker}*")), incoming)
            while len(client.get("/api/days").json()["days"]) < 2:
                assert time.perf_counter() < until, (tmp_path / "watch.log").read_text()
                time.sleep(0.5)
    events = [json.loads(line)["event"] for line in (tmp_path / "watch.log").read_text().splitlines()]
    assert events.count("file came") == 2 and "day made" in events
    assert run("check", *common, cwd=tmp_path).returncode == 0
