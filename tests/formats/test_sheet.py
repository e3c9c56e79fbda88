"""Sheets: one list of blocks, whole in HTML and in PDF."""

import re
from html.parser import HTMLParser

import numpy as np

from skylag.formats.sheet import MARKS, STYLE, Bullets, DayChart, Heading, Sentence, Table, _laid_out, to_html, to_pdf

MADE = np.datetime64("2031-03-13T01:02:03")
BLOCKS = (
    Heading("Dam, 2031-03-12", 1),
    Sentence("Work until 05:00 <now> & rest", "strong"),
    Sentence("Small print", "small"),
    DayChart("The day", (("Survey", ((0.0, 0.5, "good"), (0.5, 0.75, "bad"), (0.75, 1.0, "unseen"))),
                         ("State", ((0.0, 1.0, "doubt"),))),
             ((0.0, "00"), (1.0, "24")), (("good", "works"), ("bad", "avoid"))),
    Heading("Windows"),
    Table(("UTC", "Why"), (("00:00 - 05:00", "± 3 mm/km ≤ limit − done"), ("05:00 - 06:00", "łatwo 東")), (1, 3)),
    Bullets(("one", "two")),
)  # fmt: skip


class _Balance(HTMLParser):
    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.text = ""

    def handle_starttag(self, tag: str, attrs: object) -> None:
        if tag not in ("meta", "link", "path", "rect", "circle"):
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        if tag not in ("path", "rect", "circle"):
            assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        self.text += data


def test_html_is_whole_and_escaped() -> None:
    page = to_html("Dam", BLOCKS)
    reader = _Balance()
    reader.feed(page)
    assert reader.open == []
    for word in ("Work until 05:00 <now> & rest", "± 3 mm/km ≤ limit", "Small print", "two"):
        assert word in reader.text
    assert "<now>" not in page
    assert "http" not in page.replace("http-equiv", "")  # nothing is fetched


def test_style_inside_or_at_an_address() -> None:
    assert STYLE in to_html("Dam", BLOCKS)
    linked = to_html("Dam", BLOCKS, "/api/sheet.css")
    assert "<style" not in linked
    assert '<link rel="stylesheet" href="/api/sheet.css">' in linked


def test_no_mark_speaks_by_colour_alone() -> None:
    hatches = [hatch for _, _, hatch in MARKS.values()]
    assert len(set(hatches)) == len(MARKS)
    page = to_html("Dam", BLOCKS)
    assert len(re.findall(r"<pattern ", page)) == len(MARKS)


def test_pdf_is_one_page_and_repeats_itself() -> None:
    first, again = to_pdf("Dam", BLOCKS, MADE), to_pdf("Dam", BLOCKS, MADE)
    assert first == again
    assert first.startswith(b"%PDF-")
    assert first.rstrip().endswith(b"%%EOF")
    assert len(re.findall(rb"/Type /Page\b", first)) == 1


def test_type_shrinks_until_all_is_on_one_page() -> None:
    """Both writers take the same step; nothing is left out; a sheet that fits is not shrunk."""
    rows = tuple((f"{k:02d}:00", "why " * 20) for k in range(30))
    long = (*BLOCKS, Table(("UTC", "Why"), rows, (1, 5)), Sentence("word " * 1400, "small"))
    pages = [len(_laid_out("Long", long, MADE, scale).pages) for scale in (1.0, 0.74)]
    assert pages == [2, 1]
    assert len(re.findall(rb"/Type /Page\b", to_pdf("Long", long, MADE))) == 1
    page = to_html("Long", long)
    step = re.search(r'<body class="fit-(\d)">', page)
    assert step is not None
    assert f"body.fit-{step.group(1)} " in STYLE
    assert page.count("<td>why why") == 30
    assert "<body>" in to_html("Dam", BLOCKS)


def test_a_long_pdf_turns_pages() -> None:
    rows = tuple((f"row {k}", "why " * 20) for k in range(240))
    pages = re.findall(rb"/Type /Page\b", to_pdf("Long", (*BLOCKS, Table(("a", "b"), rows, (1, 3)), *BLOCKS), MADE))
    assert len(pages) >= 3
