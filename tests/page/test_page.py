"""The page's pure functions under node, and what its files may hold.

node is no dependency of the program: without it only the tests that need it are skipped.
"""

import gzip
import re
import shutil
import subprocess
from collections.abc import Callable
from html.parser import HTMLParser
from pathlib import Path

import pytest

from skylag.web.app import CONTENT_POLICY

ROOT = Path(__file__).resolve().parents[2]
FRONTEND = ROOT / "frontend"
TEXT_FILES = sorted(p for p in FRONTEND.rglob("*") if p.suffix in {".html", ".js", ".css", ".svg"})

SCRIPTS = [p for p in TEXT_FILES if p.suffix == ".js"]


def test_pure_functions_under_node() -> None:
    """All of tests/page/*.test.mjs pass; each is a plain module without packages."""
    node = shutil.which("node")
    if node is None:
        pytest.skip("node is not installed; it runs the page's pure functions")
    files = sorted(str(p) for p in Path(__file__).parent.glob("*.test.mjs"))
    assert len(files) >= 4
    done = subprocess.run([node, "--test", *files], capture_output=True, text=True, timeout=120, check=False)
    assert done.returncode == 0, done.stdout[-6000:] + done.stderr[-2000:]
    counted = re.search(r"^# pass (\d+)", done.stdout, re.MULTILINE)
    assert counted is not None
    assert int(counted.group(1)) >= 50


class _Elements(HTMLParser):
    """Start tags with their attributes, and the text inside script and style elements."""

    def __init__(self) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.inside: list[str] = []
        self._open = ""

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        self._open = tag

    def handle_endtag(self, tag: str) -> None:
        self._open = ""

    def handle_data(self, data: str) -> None:
        if self._open in {"script", "style"} and data.strip():
            self.inside.append(data)


@pytest.fixture
def page() -> _Elements:
    parser = _Elements()
    parser.feed((FRONTEND / "index.html").read_text(encoding="utf-8"))
    return parser


def test_no_script_or_style_stands_inside_the_page(page: _Elements) -> None:
    """A strict content policy forbids inline scripts, handlers and styles; the page has none."""
    assert page.inside == []
    for tag, attributes in page.tags:
        for name in attributes:
            assert not name.startswith("on"), f"<{tag} {name}>"
            assert name != "style", f"<{tag} style>"


def test_content_policy_allows_scripts_from_this_server_only() -> None:
    """No inline script, no evaluation of text, no other host."""
    rules = dict(rule.split(" ", 1) for rule in CONTENT_POLICY.split("; "))
    assert rules["script-src"] == "'self'"
    assert rules["default-src"] == "'self'"
    assert rules["connect-src"] == "'self'"
    assert "http" not in CONTENT_POLICY


@pytest.mark.parametrize("path", TEXT_FILES, ids=lambda p: str(p.relative_to(FRONTEND)))
def test_no_file_names_another_host(path: Path) -> None:
    """The only addresses with a host are the names of the SVG vocabulary, which nothing fetches."""
    text = path.read_text(encoding="utf-8").replace("http://www.w3.org/2000/svg", "")
    assert not re.findall(r"(?:https?|wss?):\/\/[^\s\"')]+|[\"'(]\/\/[a-z0-9.-]+\.[a-z]{2,}", text)


@pytest.mark.parametrize("path", SCRIPTS, ids=lambda p: str(p.relative_to(FRONTEND)))
def test_scripts_put_no_text_in_as_markup(path: Path) -> None:
    """What the service says enters the page as text, never as markup or as code."""
    text = path.read_text(encoding="utf-8")
    assert not re.findall(r"innerHTML|outerHTML|insertAdjacentHTML|document\.write|\beval\(|new Function", text)


def test_every_file_the_page_names_is_there(page: _Elements) -> None:
    """Links, scripts and imports lead to files of this project; plotly.js is served from the Python package."""
    for _tag, attributes in page.tags:
        for name in ("src", "href"):
            target = attributes.get(name) or ""
            if target and not target.startswith(("#", "?")) and target != "/vendor/plotly.min.js":
                assert (FRONTEND / target).is_file(), target
    for path in FRONTEND.rglob("*.js"):
        for target in re.findall(r"from \"(\.[^\"]+)\"", path.read_text(encoding="utf-8")):
            assert (path.parent / target).resolve().is_file(), f"{path.name} imports {target}"


def test_every_element_that_the_script_asks_for_is_on_the_page(page: _Elements) -> None:
    """An id asked for in main.js and missing in index.html would fail only in a browser."""
    ids = [attributes["id"] for _tag, attributes in page.tags if attributes.get("id")]
    assert len(ids) == len(set(ids)), "an id is used twice"
    asked = re.findall(r"\bat\(\"([a-z-]+)\"\)", (FRONTEND / "js" / "main.js").read_text(encoding="utf-8"))
    assert len(asked) > 20
    assert set(asked) <= set(ids), set(asked) - set(ids)


def test_controls_have_names(page: _Elements) -> None:
    """Every input and select has a label for it or around it; landmarks are there."""
    tags = [tag for tag, _attributes in page.tags]
    for landmark in ("header", "main", "aside", "footer"):
        assert tags.count(landmark) == 1, landmark
    labelled = {attributes.get("for") for tag, attributes in page.tags if tag == "label"}
    for number, (tag, attributes) in enumerate(page.tags):
        if tag in {"input", "select"} and attributes.get("id") not in labelled:
            assert page.tags[number - 1][0] == "label", attributes


# Names of the platform, of keys and of the URL's own vocabulary, which nobody reads.
_NO_WORDS = {
    "AbortError",
    "ServiceError",
    "Offline",
    "Accept",
    "Authorization",
    "Bearer ${key}",
    "Files",
    "Home",
    "End",
}


def test_english_stands_in_one_file(page: _Elements) -> None:
    """What a person reads is written in words.js alone: the other scripts name it there, as does the page's frame."""
    for path in SCRIPTS:
        if path.name.endswith("words.js"):  # the job and the sites have theirs beside, fetched with their panels
            continue
        text = re.sub(r"/\*[\s\S]*?\*/|(?<!:)//.*", "", path.read_text(encoding="utf-8"))
        said = re.findall(r"[\"`]([A-Z][a-z]+(?: [^\"`]*)?)[\"`]", text)
        assert not set(said) - _NO_WORDS, f"{path.name}: {set(said) - _NO_WORDS}"
        sentences = re.findall(r"[\"`]([^\"`]*[a-z]{2,}(?: [a-z]{2,}){3,}[^\"`]*)[\"`]", text)
        assert not [one for one in sentences if not re.search(r"[.#:\[(=]", one)], path.name
    frame = (FRONTEND / "index.html").read_text(encoding="utf-8").split("<body>")[1]
    frame = re.sub(r"<noscript>.*?</noscript>", "", frame)
    shown = [part.strip() for part in re.findall(r">([^<>]+)<", frame) if re.search("[A-Za-z]", part)]
    assert set(shown) <= {"Skylag", "&nbsp;"}, shown
    assert not [attributes for _tag, attributes in page.tags if "aria-label" in attributes or "title" in attributes]
    asked = {
        attributes[name] for _tag, attributes in page.tags for name in ("data-say", "data-label", "data-role")
        if name in attributes
    }  # fmt: skip
    words = (FRONTEND / "js" / "words.js").read_text(encoding="utf-8")
    known = set(re.findall(r"^  (\w+): \"", words.split("PAGE_WORDS = {")[1].split("};")[0], re.MULTILINE))
    assert asked == known, asked ^ known


def test_page_is_light() -> None:
    """Without plotly.js the page weighs under 250 kB (budget of the project), as the server sends it: compressed."""
    sent = sum(len(gzip.compress(path.read_bytes(), 5)) for path in FRONTEND.rglob("*") if path.is_file())
    assert sent < 250_000, sent
    assert sent > 20_000  # the files were found


def _tokens(theme: str) -> dict[str, str]:
    css = (FRONTEND / "style" / "tokens.css").read_text(encoding="utf-8")
    start = css.index(":root {") if theme == "day" else css.index(':root[data-theme="night"]')
    block = css[css.index("{", start) + 1 : css.index("}", start)]
    return dict(re.findall(r"--([a-z-]+):\s*(#[0-9a-f]{6})", block))


def _contrast(one: str, other: str) -> float:
    """Contrast ratio of two colours by the definitions of WCAG 2.2; written apart from the page's own function."""

    def luminance(colour: str) -> float:
        parts = [int(colour[at : at + 2], 16) / 255 for at in (1, 3, 5)]
        red, green, blue = (c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in parts)
        return 0.2126 * red + 0.7152 * green + 0.0722 * blue

    dark, light = sorted((luminance(one), luminance(other)))
    return (light + 0.05) / (dark + 0.05)


@pytest.mark.parametrize("theme", ["day", "night"])
def test_contrast_of_text_and_of_edges(theme: str, evidence: Callable[..., None]) -> None:
    """Text reaches 4.5 to 1 on every ground it stands on, edges of controls and states 3 to 1 on paper."""
    tokens = _tokens(theme)
    grounds = [tokens[name] for name in ("paper", "paper-raised", "paper-sunk")]
    texts = [tokens[name] for name in ("ink", "muted", "accent", "broken")]
    edges = [tokens[name] for name in ("edge", "holds-edge", "strained-edge", "broken-edge", "unseen-edge")]
    text = min(_contrast(one, ground) for one in texts for ground in grounds)
    edge = min(_contrast(one, tokens["paper"]) for one in edges)
    source = "WCAG 2.2, success criteria {}; W3C Recommendation, definitions of contrast ratio and relative luminance"
    evidence(
        f"lowest contrast of text by {theme}: what it lacks to 4.5", source=source.format("1.4.3"),
        expected=0.0, got=max(0.0, 4.5 - text), tolerance=0.0, unit="to 1", at_most=True,
    )  # fmt: skip
    evidence(
        f"lowest contrast of edges by {theme}: what it lacks to 3", source=source.format("1.4.11"),
        expected=0.0, got=max(0.0, 3.0 - edge), tolerance=0.0, unit="to 1", at_most=True,
    )  # fmt: skip
