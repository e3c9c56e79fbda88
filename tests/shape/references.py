"""The references of commands and of HTTP routes, from the program: `python -m tests.shape.references` writes them."""

import argparse
import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from skylag.archive import open_archive
from skylag.cli import command_parser
from skylag.web.app import create_app
from skylag.web.sentences import CAUTION

DOCS = Path(__file__).resolve().parents[2] / "docs"
COMMANDS, ROUTES = DOCS / "commands.md", DOCS / "http.md"


def _cell(text: str) -> str:
    return " ".join(text.split()).replace("|", "\\|")


def _subcommands(parser: argparse.ArgumentParser) -> Iterator[tuple[str, str, argparse.ArgumentParser]]:
    """Name, line of help and parser of each command, also of commands under commands."""
    for action in parser._actions:
        if isinstance(action, argparse._SubParsersAction):
            helps = {choice.dest: choice.help or "" for choice in action._choices_actions}
            for name, inner in action.choices.items():
                yield inner.prog, helps.get(name, ""), inner
                yield from _subcommands(inner)


def _arguments(parser: argparse.ArgumentParser) -> Iterator[str]:
    """A table line of each argument that a person may give."""
    for action in parser._actions:
        if isinstance(action, argparse._HelpAction | argparse._SubParsersAction):
            continue
        if action.option_strings:
            value = action.metavar or ("\\|".join(map(str, action.choices)) if action.choices else action.dest.upper())
            name = ", ".join(f"`{option}`" for option in action.option_strings)
            name += "" if action.nargs == 0 else f" {value}"
        else:
            name = f"`{action.metavar or action.dest}`"
        needed = " (needed)" if action.required else ""
        yield f"| {name} | {_cell((action.help or '') % {'default': action.default})}{needed} |"


def commands() -> str:
    """Every command with its arguments, as Markdown."""
    lines = ["# Commands", "", "From the program's own `--help`; `python -m tests.shape.references` writes it."]
    for name, help_line, parser in _subcommands(command_parser()):
        lines += ["", f"## {name}", "", parser.description or help_line.capitalize() + "."]
        rows = list(_arguments(parser))
        if rows:
            lines += ["", "| argument | meaning |", "|---|---|", *rows]
        if parser.epilog:
            lines += ["", "```text", parser.epilog.rstrip(), "```"]
    return "\n".join(lines) + "\n"


def description() -> dict[str, Any]:
    """The OpenAPI description of the program."""
    with tempfile.TemporaryDirectory() as folder, open_archive(folder) as archive:
        return create_app(archive).openapi()


def routes() -> str:
    """Every HTTP route with its questions, as Markdown."""
    lines = [
        "# HTTP routes", "",
        "From the program's own description at `/api/openapi.json`; `python -m tests.shape.references` writes it.",
        "Every failure is one JSON object: `ok` false, `error` a sentence, `kind`, `details`, `status`. Reading on the",
        "loopback address needs no key; writing elsewhere does.",
        "",
        CAUTION,
        "", "| route | what it gives | may be asked with |", "|---|---|---|",
    ]  # fmt: skip
    for path, methods in sorted(description()["paths"].items()):
        for method, told in sorted(methods.items()):
            asked = [p for p in told.get("parameters", ()) if p["in"] == "query"]
            words = ", ".join(f"`{p['name']}`" + (" (needed)" if p.get("required") else "") for p in asked)
            body = told.get("requestBody", {}).get("content", {})
            words += ("; " if words and body else "") + ("body: " + ", ".join(sorted(body)) if body else "")
            meaning = _cell(told.get("description") or told.get("summary", ""))
            lines.append(f"| {method.upper()} `{path}` | {meaning} | {words} |")
    return "\n".join(lines) + "\n"


if __name__ == "__main__":
    COMMANDS.write_text(commands(), encoding="utf-8")
    ROUTES.write_text(routes(), encoding="utf-8")
