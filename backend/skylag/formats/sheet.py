"""A printable sheet: one list of blocks, written as HTML and as PDF.

Blocks are headings, sentences, tables, lists and day charts (rows of coloured spans over a time axis).  The two writers
know nothing of what the sheet says.  PDF by fpdf2, a pure-Python writer, since a browser is no dependency of this
program; the standard fonts know Latin-1, other characters are written as their nearest, or as a question mark.
"""

import html
import unicodedata
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime

import numpy as np
from fpdf import FPDF
from fpdf.enums import XPos, YPos

# Fill, edge and hatch of a mark: never colour alone.  Values of the page's own palette.
MARKS = {
    "good": ("#cfe3dc", "#4c7a6c", ""),
    "doubt": ("#e2a63b", "#8a5a00", "/"),
    "bad": ("#9c1b57", "#9c1b57", "x"),
    "unseen": ("#fbf8f1", "#5a6070", "."),
}


@dataclass(frozen=True)
class Heading:
    """A title (level 1) or heading (2)."""

    text: str
    level: int = 2


@dataclass(frozen=True)
class Sentence:
    """A paragraph; strong: the one to read first; small: cautions and sources."""

    text: str
    kind: str = ""  # "", "strong" or "small"


@dataclass(frozen=True)
class Bullets:
    """A list; small: what need not be read first."""

    items: tuple[str, ...]
    kind: str = ""


@dataclass(frozen=True)
class Table:
    """Rows of text under a heading; widths are shares of the page."""

    heading: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    widths: tuple[float, ...]


@dataclass(frozen=True)
class DayChart:
    """Rows of spans: label and (from, to, mark) with from and to as shares of the axis; ticks (share, text); a key."""

    title: str
    rows: tuple[tuple[str, tuple[tuple[float, float, str], ...]], ...]
    ticks: tuple[tuple[float, str], ...]
    key: tuple[tuple[str, str], ...]  # mark, its meaning


Block = Heading | Sentence | Bullets | Table | DayChart

# Sizes of paper and type; on screen one column, on paper A4.
STYLE = """
:root { color-scheme: light; }
body { max-width: 46rem; margin: 2rem auto; padding: 0 1rem; background: #fbf8f1; color: #1f2430;
  font: 15px/1.45 system-ui, "Segoe UI", Roboto, "Noto Sans", "Liberation Sans", sans-serif; }
h1 { font-size: 1.5rem; margin: 0 0 .25rem; }
h2 { font-size: 1.1rem; margin: 1.4rem 0 .4rem; border-bottom: 1px solid #d9d1bf; }
p { margin: .3rem 0; } .strong { font-size: 1.15rem; font-weight: 600; } .small { color: #5a6070; font-size: .87rem; }
table { border-collapse: collapse; width: 100%; font-variant-numeric: tabular-nums; }
th, td { text-align: left; vertical-align: top; padding: .15rem .6rem .15rem 0; border-bottom: 1px solid #d9d1bf; }
th { font-weight: 600; }
th, td:not(:last-child) { white-space: nowrap; }
ul { margin: .3rem 0; padding-left: 1.2rem; } figure { margin: .6rem 0; }
svg { width: 100%; height: auto; display: block; } svg text { fill: #1f2430; font-size: 11px; }
@media print { @page { size: A4; margin: 10mm 14mm; }
  body { max-width: none; margin: 0; padding: 0; background: none; font-size: 8.3pt; line-height: 1.25; }
  body.fit-1 { font-size: 7.6pt; } body.fit-2 { font-size: 7.1pt; } body.fit-3 { font-size: 6.7pt; }
  body.fit-4 { font-size: 6.3pt; } body.fit-5 { font-size: 5.9pt; }
  h1 { font-size: 1.75em; } h2 { font-size: 1.22em; margin: .6em 0 .15em; } .strong { font-size: 1.2em; }
  p { margin: .2em 0; } td, th { padding: .02em .5em .02em 0; } .small { font-size: .85em; }
  figure { max-width: 74%; margin: .4em 0; }
  .fit-2 figure, .fit-3 figure, .fit-4 figure, .fit-5 figure { max-width: 64%; }
  h2 { break-after: avoid; } tr, figure, li { break-inside: avoid; }
  svg { -webkit-print-color-adjust: exact; print-color-adjust: exact; } }
"""


def to_html(title: str, blocks: Sequence[Block], style_address: str = "") -> str:
    """The sheet as a page; its style inside, or at an address where a policy forbids inline styles.

    On paper its type is as small as it must be on one page, by the measure of the PDF.
    """
    link = f'<link rel="stylesheet" href="{html.escape(style_address)}">'
    style = link if style_address else f"<style>{STYLE}</style>"
    body = "\n".join(_html_block(block, number) for number, block in enumerate(blocks))
    fit = _fitted(title, blocks, np.datetime64("2000-01-01", "s"))[0]
    kind = f' class="fit-{fit}"' if fit else ""
    return (
        '<!doctype html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        f"<title>{html.escape(title)}</title>\n{style}\n</head>\n<body{kind}>\n<main>\n{body}\n</main>\n</body>\n</html>\n"
    )


def _html_block(block: Block, number: int) -> str:
    text = html.escape
    if isinstance(block, Heading):
        return f"<h{block.level}>{text(block.text)}</h{block.level}>"
    if isinstance(block, Sentence):
        return f'<p class="{block.kind}">{text(block.text)}</p>' if block.kind else f"<p>{text(block.text)}</p>"
    if isinstance(block, Bullets):
        kind = f' class="{block.kind}"' if block.kind else ""
        return f"<ul{kind}>" + "".join(f"<li>{text(item)}</li>" for item in block.items) + "</ul>"
    if isinstance(block, Table):
        head = "".join(f'<th scope="col">{text(cell)}</th>' for cell in block.heading)
        rows = "".join("<tr>" + "".join(f"<td>{text(cell)}</td>" for cell in row) + "</tr>" for row in block.rows)
        return f"<table><thead><tr>{head}</tr></thead><tbody>{rows}</tbody></table>"
    return _svg(block, number)


def _svg(chart: DayChart, number: int) -> str:
    left, width, row_height = 150, 560, 22
    bottom = 20 + row_height * len(chart.rows)
    parts = [
        f'<figure><svg viewBox="0 0 730 {bottom + 46}" role="img" aria-labelledby="chart-{number}">',
        f'<title id="chart-{number}">{html.escape(chart.title)}</title><defs>',
    ]
    for mark, (_, edge, hatch) in MARKS.items():
        line = {
            "/": f'<path d="M0 6 L6 0" stroke="{edge}"/>',
            "x": '<path d="M0 6 L6 0 M0 0 L6 6" stroke="#fbf8f1" stroke-width=".8"/>',
            ".": f'<circle cx="3" cy="3" r=".9" fill="{edge}"/>',
        }.get(hatch, "")
        parts.append(
            f'<pattern id="{mark}-{number}" width="6" height="6" patternUnits="userSpaceOnUse">{line}</pattern>'
        )
    parts.append("</defs>")

    def box(x: float, y: float, wide: float, high: float, mark: str) -> str:
        fill, edge, _ = MARKS[mark]
        at = f'x="{x:.1f}" y="{y:.1f}" width="{wide:.1f}" height="{high:.1f}"'
        return (
            f'<rect {at} fill="{fill}" stroke="{edge}" stroke-width=".5"/>'
            f'<rect {at} fill="url(#{mark}-{number})"/>'
        )

    for row, (label, spans) in enumerate(chart.rows):
        y = 8 + row * row_height
        parts.append(f'<text x="{left - 8}" y="{y + 13}" text-anchor="end">{html.escape(label[:26])}</text>')
        parts += [box(left + a * width, y, max((b - a) * width, 0.5), row_height - 6, mark) for a, b, mark in spans]
    for share, word in chart.ticks:
        x = left + share * width
        parts.append(f'<path d="M{x:.1f} 6 V{bottom - 10}" stroke="#8a8270" stroke-width=".4"/>')
        parts.append(f'<text x="{x:.1f}" y="{bottom + 4}" text-anchor="middle">{html.escape(word)}</text>')
    x = float(left)
    for mark, meaning in chart.key:
        parts.append(box(x, bottom + 20, 14, 12, mark))
        parts.append(f'<text x="{x + 19:.0f}" y="{bottom + 30}">{html.escape(meaning)}</text>')
        x += 34 + 6.2 * len(meaning)
    return "".join([*parts, "</svg></figure>"])


# ---------------------------------------------------------------------------------------------- PDF


# How far type and spacing shrink, step by step, until all is on one page.
_SCALES = (1.0, 0.95, 0.89, 0.84, 0.79, 0.74)


class _Paper(FPDF):
    """Paper on which all sizes are scaled."""

    scale = 1.0


def to_pdf(title: str, blocks: Sequence[Block], made: np.datetime64) -> bytes:
    """The sheet on one A4 page, in type as small as that needs; on more where the smallest is too large.

    The same sheet, made at the same UTC instant, gives the same bytes.
    """
    return bytes(_fitted(title, blocks, made)[1].output())


def _fitted(title: str, blocks: Sequence[Block], made: np.datetime64) -> tuple[int, _Paper]:
    """Number of the largest scale at which the sheet is one page, and the paper."""
    for number, scale in enumerate(_SCALES):
        paper = _laid_out(title, blocks, made, scale)
        if len(paper.pages) == 1:
            return number, paper
    return len(_SCALES) - 1, paper


def _laid_out(title: str, blocks: Sequence[Block], made: np.datetime64, scale: float) -> _Paper:
    pdf = _Paper(format="A4")
    pdf.scale = scale
    pdf.set_creation_date(datetime.fromtimestamp(int(made.astype("datetime64[s]").astype(np.int64)), UTC))
    pdf.set_title(_latin(title))
    pdf.set_margins(14, 10, 14)
    pdf.set_auto_page_break(True, 9)
    pdf.add_page()
    for block in blocks:
        _pdf_block(pdf, block)
    return pdf


def _latin(text: str) -> str:
    """Text in the letters that the standard fonts have."""
    known = text.replace("−", "-").replace("–", "-").replace("—", "-").replace("≤", "<=").replace("≥", ">=")
    decomposed = "".join(c if ord(c) < 256 else unicodedata.normalize("NFKD", c) for c in known)
    return "".join(c for c in decomposed if not unicodedata.combining(c)).encode("latin-1", "replace").decode("latin-1")


def _line(pdf: _Paper, text: str, size: float, style: str = "", grey: bool = False) -> None:
    size *= pdf.scale
    pdf.set_font("helvetica", style, size)
    pdf.set_text_color(*(90, 96, 112) if grey else (31, 36, 48))
    pdf.multi_cell(0, size * 0.46, _latin(text), align="L", new_x=XPos.LMARGIN, new_y=YPos.NEXT)


def _pdf_block(pdf: _Paper, block: Block) -> None:
    if isinstance(block, Heading):
        pdf.ln(0 if block.level == 1 else 1.5 * pdf.scale)
        _line(pdf, block.text, 15 if block.level == 1 else 10.5, "B")
        pdf.ln(0.5)
    elif isinstance(block, Sentence):
        size = {"strong": 10.5, "small": 7.2}.get(block.kind, 8.5)
        _line(pdf, block.text, size, "B" if block.kind == "strong" else "", block.kind == "small")
        pdf.ln(0.6)
    elif isinstance(block, Bullets):
        for item in block.items:
            _line(pdf, f"\u00b7 {item}", 7.2 if block.kind == "small" else 9)
    elif isinstance(block, Table):
        _pdf_table(pdf, block)
    else:
        _pdf_chart(pdf, block)


def _pdf_table(pdf: _Paper, block: Table) -> None:
    pdf.set_font("helvetica", "", 7.5 * pdf.scale)
    pdf.set_text_color(31, 36, 48)
    pdf.set_draw_color(217, 209, 191)
    pdf.set_fill_color(255, 255, 255)
    total = sum(block.widths)
    with pdf.table(
        col_widths=tuple(100 * share / total for share in block.widths), borders_layout="HORIZONTAL_LINES",
        text_align="LEFT", line_height=3.3 * pdf.scale, padding=0.35,
    ) as table:  # fmt: skip
        for row in (block.heading, *block.rows):
            cells = table.row()
            for cell in row:
                cells.cell(_latin(cell))
    pdf.ln(1)


def _rgb(colour: str) -> tuple[int, int, int]:
    return int(colour[1:3], 16), int(colour[3:5], 16), int(colour[5:7], 16)


def _pdf_mark(pdf: _Paper, x: float, y: float, wide: float, high: float, mark: str) -> None:
    fill, edge, hatch = MARKS[mark]
    pdf.set_fill_color(*_rgb(fill))
    pdf.set_draw_color(*_rgb(edge))
    pdf.set_line_width(0.1)
    pdf.rect(x, y, wide, high, style="DF")
    if hatch == "x":
        pdf.set_draw_color(251, 248, 241)
    at = x
    while hatch and at < x + wide:
        reach = min(1.5, x + wide - at)
        if hatch == ".":
            pdf.line(at, y + high / 2, at + 0.15, y + high / 2)
        else:
            pdf.line(at, y + high, at + reach, y + high - high * reach / 1.5)
        if hatch == "x":
            pdf.line(at, y, at + reach, y + high * reach / 1.5)
        at += 1.5


def _pdf_chart(pdf: _Paper, chart: DayChart) -> None:
    left, width, row_height = 56.0, 138.0, 5.2 * pdf.scale
    need = row_height * len(chart.rows) + 16
    if pdf.get_y() + need > pdf.h - 14:
        pdf.add_page()
    top = pdf.get_y() + 1
    pdf.set_font("helvetica", "", 7.5 * pdf.scale)
    pdf.set_text_color(31, 36, 48)
    bottom = top + row_height * len(chart.rows)
    for row, (label, spans) in enumerate(chart.rows):
        y = top + row * row_height
        pdf.text(14, y + 0.56 * row_height, _latin(label[:30]))
        for a, b, mark in spans:
            _pdf_mark(pdf, left + a * width, y, max((b - a) * width, 0.15), row_height - 1.5, mark)
    for share, word in chart.ticks:
        x = left + share * width
        pdf.set_draw_color(138, 130, 112)
        pdf.line(x, top - 0.5, x, bottom)
        pdf.text(x - 3, bottom + 3, _latin(word))
    x = left
    for mark, meaning in chart.key:
        _pdf_mark(pdf, x, bottom + 6, 3.5, 3, mark)
        pdf.text(x + 5, bottom + 8.4, _latin(meaning))
        x += 10 + pdf.get_string_width(_latin(meaning))
    pdf.set_y(bottom + 10.5)
