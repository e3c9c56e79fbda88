"""SKYLAG_NO_SKIPS=1 turns the skip of a browser or database test into a failure, and no other."""

import os
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
TRIAL = '''
import pytest

@pytest.mark.browser
def test_browser():
    pytest.skip("no browser here")

@pytest.mark.open_data
def test_real_data():
    pytest.skip("no files here")

def test_other():
    pytest.skip("not today")
'''


def run(folder: Path, **changes: str) -> str:
    (folder / "test_trial.py").write_text(TRIAL, encoding="utf-8")
    world = {name: value for name, value in os.environ.items() if not name.startswith("SKYLAG_")} | changes
    done = subprocess.run(
        [sys.executable, "-m", "pytest", "-q", "--browser", "-c", str(ROOT / "pyproject.toml"), "--rootdir", str(ROOT),
         "-p", "tests.conftest", "--confcutdir", str(folder), str(folder)],
        cwd=ROOT, env=world, capture_output=True, text=True, check=False, timeout=120,
    )  # fmt: skip
    return done.stdout


def test_skips_stay_skips_on_a_desk(tmp_path: Path) -> None:
    assert "3 skipped" in run(tmp_path)


def test_a_skipped_browser_test_fails(tmp_path: Path) -> None:
    told = run(tmp_path, SKYLAG_NO_SKIPS="1")
    assert "1 failed, 2 skipped" in told
    assert "no browser here" in told


def test_real_data_must_be_there_once_their_folder_is_named(tmp_path: Path) -> None:
    assert "2 failed, 1 skipped" in run(tmp_path, SKYLAG_NO_SKIPS="1", SKYLAG_OPEN_DATA="/nowhere")
