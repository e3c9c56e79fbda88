"""The table of outside checks: what did not run stays, what ran is new, what is gone falls out."""

import os
import subprocess
import sys
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from tests.conftest import ROOT
from tests.evidence_table import Rows, exists_under, merged, ran_whole, read, written

QUICK, SLOW, GONE = "tests/a/test_it.py::test_quick", "tests/a/test_it.py::test_slow", "tests/a/test_it.py::test_gone"


def row(got: str) -> dict[str, str]:
    cells = {"source": "a paper", "expected": "1", "got": got, "tolerance": "0.1", "unit": "m", "verdict": "met"}
    return cells


def some(*keys: tuple[str, str], got: str = "old") -> Rows:
    return {key: row(got) for key in keys}


def test_a_slow_test_of_a_file_that_ran_keeps_its_rows() -> None:
    old = some((QUICK, "one"), (QUICK, "two"), (SLOW, "three"))
    whole = ran_whole([QUICK, SLOW], {QUICK})
    assert whole == {QUICK}
    found = merged(old, some((QUICK, "one"), got="new"), whole, lambda test: True)
    assert {key: cells["got"] for key, cells in found.items()} == {(QUICK, "one"): "new", (SLOW, "three"): "old"}


def test_a_test_of_which_some_cases_ran_keeps_the_rows_of_the_others() -> None:
    old = some((QUICK, "one"), (QUICK, "two"))
    new = some((QUICK, "two"), got="new")
    cases = [f"{QUICK}[1]", f"{QUICK}[2]"]
    for whole in (ran_whole(cases, {cases[1]}), ran_whole(cases[1:], {cases[1]}, by_case=True)):
        assert whole == set()
        assert [cells["got"] for cells in merged(old, new, whole, lambda test: True).values()] == ["old", "new"]
    assert ran_whole(cases, cases) == {QUICK}


def test_rows_of_a_test_that_is_gone_fall_out(tmp_path: Path) -> None:
    (tmp_path / "tests" / "a").mkdir(parents=True)
    text = "class Some:\n    def test_slow(self): ...\n\ndef test_quick(): ...\n# def test_gone(): ...\n"
    (tmp_path / "tests" / "a" / "test_it.py").write_text(text, encoding="utf-8")
    old = some((QUICK, "one"), (SLOW, "two"), (GONE, "three"), ("tests/b/test_other.py::test_quick", "four"))
    exists = exists_under(tmp_path)
    assert set(merged(old, {}, set(), exists)) == {(QUICK, "one"), (SLOW, "two")}
    assert exists("tests/a/test_it.py::Some::test_slow")


cells = st.text(st.characters(blacklist_categories=("Cs", "Cc", "Z")), max_size=8)  # spaces are folded when written


@given(st.dictionaries(st.tuples(st.sampled_from([QUICK, SLOW]), cells), st.builds(row, cells), max_size=5))
def test_what_is_written_is_read_again(rows: Rows) -> None:
    assert read(written(rows)) == rows
    assert written(read(written(rows))) == written(rows)


def test_the_committed_table_is_as_it_would_be_written() -> None:
    """Each of its rows belongs to a test that exists, and no row is lost by being read."""
    text = (ROOT / "tests" / "EVIDENCE.md").read_text(encoding="utf-8")
    rows, exists = read(text), exists_under(ROOT)
    assert written(rows) == text and len(rows) > 500
    assert [test for test, _ in rows if not exists(test)] == []


TESTS = """
import pytest


def told(evidence, subject):
    evidence(subject, source="counted", expected=1.0, got=1.0, tolerance=0.1)


def test_quick(evidence):
    told(evidence, "quick")


@pytest.mark.parametrize("case", ["a", "b"])
def test_cases(evidence, case):
    told(evidence, f"case {case}")


@pytest.mark.slow
def test_slow(evidence):
    told(evidence, "slow")


def test_absent(evidence):
    pytest.skip("nothing there")
"""
CONFIG = '[pytest]\nmarkers = slow\naddopts = --import-mode=importlib -p no:cacheprovider -m "not slow"\n'
EARLIER = [("quick", "earlier"), ("cases", "case a"), ("cases", "earlier"), ("slow", "earlier"), ("absent", "earlier"),
           ("gone", "earlier")]  # fmt: skip


@pytest.mark.parametrize(
    ("words", "lost", "new"),
    [
        ([], {"quick", "cases"}, {"quick", "case a", "case b"}),
        (["-k", "quick"], {"quick"}, {"quick"}),
        (["tests/test_some.py::test_cases[a]"], set(), {"case a"}),
        (["-m", "slow"], {"slow"}, {"slow"}),
        (["-k", "absent"], None, set()),  # no check was made: the table is left as it is
    ],
)
def test_in_a_run_of_its_own(tmp_path: Path, words: list[str], lost: set[str] | None, new: set[str]) -> None:
    """This project's hooks over a small folder: only tests that ran whole lose what they no longer say."""
    (tmp_path / "tests").mkdir()
    (tmp_path / "pytest.ini").write_text(CONFIG, encoding="utf-8")
    (tmp_path / "tests" / "test_some.py").write_text(TESTS, encoding="utf-8")
    table = tmp_path / "tests" / "EVIDENCE.md"
    old = some(*((f"tests/test_some.py::test_{name}", subject) for name, subject in EARLIER))
    table.write_text(written(old), encoding="utf-8")
    done = subprocess.run(
        [sys.executable, "-m", "pytest", "-q", "-p", "tests.conftest", *words],
        cwd=tmp_path, env={**os.environ, "PYTHONPATH": os.pathsep.join((str(ROOT), str(ROOT / "backend")))},
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.returncode == 0, done.stdout + done.stderr
    found = read(table.read_text(encoding="utf-8"))
    assert {subject for (_, subject), cells in found.items() if cells["got"] == "1"} == new
    left = {test.split("test_")[-1] for (test, subject), cells in found.items() if subject == "earlier"}
    assert left == {name for name, _ in EARLIER} - (set() if lost is None else lost | {"gone"})
