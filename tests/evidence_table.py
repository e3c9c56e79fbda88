"""The table of checks against the outside world, tests/EVIDENCE.md: rows of this run put in, rows of others kept.

A row belongs to a test.  A test of which every case ran has just the rows that it wrote; one that did not run, or not
all of it, keeps what it had and writes over it; one that no longer exists has none.
"""

import ast
from collections.abc import Callable, Collection, Iterable, Mapping
from pathlib import Path

COLUMNS = ("test", "subject", "source", "expected", "got", "tolerance", "unit", "verdict")
HEAD = """# Checks against the outside world

Written by the test run. Each row: what was checked, the published source (or "common practice", or "from
memory"), the expected value, the value got, the tolerance. Rows of tests that did not run are kept.

"""

Rows = dict[tuple[str, str], dict[str, str]]  # (test, subject) -> the row's other cells


def name_of(node: str) -> str:
    """The test of a case: its file and name, without its parameters."""
    return node.split("[")[0]


def ran_whole(cases: Iterable[str], ran: Collection[str], by_case: bool = False) -> set[str]:
    """Tests of which every case ran.

    cases    all cases that were found, also those that were not chosen; ran: those that came to an end
    by_case  single cases were asked for by name: what others there are is not known, so no test is taken as whole
    """
    if by_case:
        return set()
    found = set(cases)
    return {name_of(case) for case in found} - {name_of(case) for case in found - set(ran)}


def merged(old: Rows, new: Rows, whole: Collection[str], exists: Callable[[str], bool]) -> Rows:
    """The rows to be kept and the new ones; `exists` tells whether a test still does."""
    kept = {key: row for key, row in old.items() if key[0] not in whole and exists(key[0])}
    return {**kept, **new}


def exists_under(root: Path) -> Callable[[str], bool]:
    """Whether a test is still defined in its file below a folder."""
    names: dict[str, set[str]] = {}

    def exists(test: str) -> bool:
        file, *_, name = test.split("::")
        if file not in names:
            path = root / file
            tree = ast.parse(path.read_text(encoding="utf-8")) if path.is_file() else ast.Module([], [])
            names[file] = {node.name for node in ast.walk(tree) if isinstance(node, ast.FunctionDef)}
        return name in names[file]

    return exists


def read(text: str) -> Rows:
    """The rows of the table as it was written."""
    rows: Rows = {}
    for line in text.splitlines():
        cells = [cell.strip().replace("&#124;", "|") for cell in line.strip().strip("|").split("|")]
        if len(cells) == len(COLUMNS) and cells[0].startswith("tests/"):
            rows[(cells[0], cells[1])] = dict(zip(COLUMNS[2:], cells[2:], strict=True))
    return rows


def written(rows: Mapping[tuple[str, str], Mapping[str, str]]) -> str:
    """The table in words, by test and subject."""
    lines = ["| " + " | ".join(COLUMNS) + " |", "|" + "---|" * len(COLUMNS)]
    for key in sorted(rows):
        cells = (*key, *(rows[key][name] for name in COLUMNS[2:]))
        lines.append("| " + " | ".join(" ".join(cell.split()).replace("|", "&#124;") for cell in cells) + " |")
    return HEAD + "\n".join(lines) + "\n"
