"""The vocabulary of DEVELOPERS.md from `quantities.py`: `python -m tests.shape.glossary` writes it."""

from pathlib import Path

from skylag.quantities import QUANTITIES

DEVELOPERS = Path(__file__).resolve().parents[2] / "DEVELOPERS.md"
START, END = "<!-- glossary -->\n", "<!-- end of glossary -->\n"


def table() -> str:
    """The vocabulary as a Markdown table."""
    lines = ["| name | unit | meaning |", "|---|---|---|"]
    lines += [f"| `{q.name}` | {q.unit or '-'} | {q.meaning} |" for q in QUANTITIES]
    return "\n".join(lines) + "\n"


def with_table(text: str) -> str:
    """The text with the table between the marks renewed."""
    before, rest = text.split(START, 1)
    _, after = rest.split(END, 1)
    return before + START + table() + END + after


if __name__ == "__main__":
    DEVELOPERS.write_text(with_table(DEVELOPERS.read_text(encoding="utf-8")), encoding="utf-8")
