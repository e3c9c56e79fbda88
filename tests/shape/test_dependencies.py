"""What the program stands on: each with a lower bound and no pin, a licence that binds nobody, and all at peace.

Known weaknesses are told by advisory services, which a machine without the internet cannot ask: `pip-audit` does
(DEVELOPERS.md, Daily commands).
"""

import re
import tomllib
from collections.abc import Iterator, Sequence
from importlib import metadata
from pathlib import Path

from packaging.requirements import Requirement
from packaging.utils import canonicalize_name

ROOT = Path(__file__).resolve().parents[2]
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
RUNNING = [*PROJECT["dependencies"], *PROJECT["optional-dependencies"]["server"]]

# Words of licences that ask nothing of who uses the program, or only that changes to the library itself stay open.
FREE = re.compile(
    r"\b(MIT|BSD|0BSD|Apache|ISC|PSF|Python Software Foundation|Python-2\.0|MPL|Mozilla|LGPL|Lesser|Unlicense|"
    r"Public Domain|CC0|HPND|Zlib|ZPL|PostgreSQL|Zope)\b", re.IGNORECASE
)  # fmt: skip


def closure(asked: Sequence[str] = RUNNING) -> dict[str, metadata.Distribution]:
    """All packages that a running program needs, as installed."""
    found: dict[str, metadata.Distribution] = {}
    waiting = [Requirement(text) for text in asked]
    while waiting:
        wanted = waiting.pop()
        name = canonicalize_name(wanted.name)
        if name in found:
            continue
        try:
            found[name] = metadata.distribution(name)
        except metadata.PackageNotFoundError:
            continue  # of an extra that is not installed here
        for text in found[name].requires or ():
            further = Requirement(text)
            extras = wanted.extras or {""}
            if further.marker is None or any(further.marker.evaluate({"extra": extra}) for extra in extras):
                waiting.append(further)
    return found


def test_each_has_a_lower_bound_and_none_is_pinned() -> None:
    """A pin would keep a version that was withdrawn; without one the installer never takes such a version."""
    for text in [*RUNNING, *PROJECT["optional-dependencies"]["test"]]:
        operators = {part.operator for part in Requirement(text).specifier}
        assert operators == {">="}, text


def needs(package: metadata.Distribution) -> Iterator[Requirement]:
    """What a package needs here without any of its extras."""
    for text in package.requires or ():
        needed = Requirement(text)
        if needed.marker is None or needed.marker.evaluate({"extra": ""}):
            yield needed


def at_odds(asked: Sequence[str]) -> list[str]:
    """What of the packages asked for, and of all that they need, is missing or of a version that does not suit."""
    found = []
    pairs = [("the program", Requirement(text)) for text in asked]
    pairs += [(name, one) for name, package in closure(asked).items() for one in needs(package)]
    for who, wanted in pairs:
        try:
            version = metadata.version(wanted.name)
        except metadata.PackageNotFoundError:
            found.append(f"{who} needs {wanted}, which is not installed")
            continue
        if not wanted.specifier.contains(version, prereleases=True):
            found.append(f"{who} needs {wanted}, and {version} is installed")
    return found


def test_what_is_installed_is_what_is_asked_for() -> None:
    """Of the program and all it needs; what else lies in the same environment is not its matter."""
    assert at_odds(RUNNING) == []
    assert at_odds(["numpy>=9999", "no-such-package-at-all"]) == [
        f"the program needs numpy>=9999, and {metadata.version('numpy')} is installed",
        "the program needs no-such-package-at-all, which is not installed",
    ]


def licence_of(package: metadata.Distribution) -> str:
    """What a package says of its licence, in any of the places where it may."""
    told = package.metadata
    classifiers = [text for text in told.get_all("Classifier") or () if text.startswith("License")]
    return " ".join([told.get("License-Expression") or "", *classifiers, (told.get("License") or "")[:200]])


def test_every_licence_leaves_people_free() -> None:
    packages = closure()
    assert len(packages) > 40
    unclear = {name: licence_of(one)[:100] for name, one in packages.items() if not FREE.search(licence_of(one))}
    assert not unclear, unclear
