"""The rules of the house as tests: floors, style, types, sizes, names."""

import re
import shutil
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
OURS = sorted((ROOT / "backend" / "skylag").rglob("*.py"))


def run(*command: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(command, cwd=ROOT, capture_output=True, text=True, timeout=300, check=False)


def tool(name: str) -> str:
    found = shutil.which(name, path=str(Path(sys.executable).parent)) or shutil.which(name)
    if found is None:
        pytest.fail(f"{name} is not installed; pip install -e '.[test]'")
    return found


def test_imports_go_down() -> None:
    """Floors and forbidden imports, as pyproject.toml lists them."""
    done = run(tool("lint-imports"), "--no-cache")
    assert done.returncode == 0, done.stdout[-4000:]


def test_ruff_is_content() -> None:
    done = run(tool("ruff"), "check", "--no-cache", "backend", "tests", "sample_data")
    assert done.returncode == 0, done.stdout[-4000:]


def test_types_hold() -> None:
    done = run(tool("mypy"), "--no-error-summary", "--cache-dir", str(Path("/dev/null")))
    assert done.returncode == 0, done.stdout[-6000:]


def test_each_module_says_what_it_is() -> None:
    silent = [str(p.relative_to(ROOT)) for p in OURS if p.name != "__init__.py" and not p.read_text().startswith('"""')]
    assert not silent, f"no docstring at the top of: {silent}"


def test_no_file_hides_another_noun() -> None:
    """House plan: a file over about 800 lines asks for the noun hiding in it."""
    long = {str(p.relative_to(ROOT)): n for p in OURS if (n := len(p.read_text().splitlines())) > 850}
    assert not long, long


def test_no_unfinished_places() -> None:
    marks = re.compile(r"\b(TODO|FIXME|XXX|NotImplementedError)\b")
    found = [str(p.relative_to(ROOT)) for p in OURS if marks.search(p.read_text())]
    assert not found, found


def test_every_dependency_has_its_reason() -> None:
    """DEVELOPERS.md, Dependencies: one line each."""
    project = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]
    lists = [project["dependencies"], *project["optional-dependencies"].values()]
    names = {re.split(r"[\[<>=!~ ]", item)[0] for items in lists for item in items}
    text = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    missing = sorted(name for name in names if f"`{name}`" not in text)
    assert not missing, f"no reason given for {missing}"


def test_readme_knows_the_result_columns() -> None:
    """The result files are a contract: their columns stand in the README."""
    from skylag.formats import delimited

    text = (ROOT / "README.md").read_text(encoding="utf-8")
    for columns in (delimited.BIAS_COLUMNS, delimited.FLAG_COLUMNS, delimited.SLANT_COLUMNS):
        for column in columns:
            assert f"`{column}`" in text, column


def test_no_machine_stands_in_the_project() -> None:
    """No paths of a desk and no registry hosts in what is committed."""
    done = run("git", "ls-files")
    if done.returncode != 0:
        pytest.skip("not a git checkout")
    marks = re.compile(r"(/home/\w+/|/Users/\w+/|C:\\\\Users|file:///)")
    found = []
    for name in done.stdout.splitlines():
        path = ROOT / name
        if path.suffix in (".py", ".md", ".toml", ".yml", ".js", ".css", ".html", "") and path.is_file():
            text = path.read_text(encoding="utf-8", errors="ignore")
            if path != Path(__file__) and marks.search(text):
                found.append(name)
    assert not found, found


def test_the_glossary_is_fresh() -> None:
    from tests.shape import glossary

    text = glossary.DEVELOPERS.read_text(encoding="utf-8")
    assert glossary.with_table(text) == text, "run python -m tests.shape.glossary"


def test_the_references_are_fresh() -> None:
    from tests.shape import references

    for path, made in ((references.COMMANDS, references.commands()), (references.ROUTES, references.routes())):
        assert path.read_text(encoding="utf-8") == made, f"{path.name}: run python -m tests.shape.references"
