"""The command line teaches: each command says what it is for, what it answers, and shows how it is written.

The examples are read by the real parser; none is run.
"""

import argparse
import shlex

import pytest
from tests.shape.references import _subcommands

from skylag.cli import command_parser
from skylag.web.sentences import CAUTION

PARSER = command_parser()
COMMANDS = {name: (line, parser) for name, line, parser in _subcommands(PARSER)}


def examples(parser: argparse.ArgumentParser) -> list[list[str]]:
    """The command lines under the line `example:` or `examples:` of a command's help, as words."""
    lines = (parser.epilog or "").split("\n")
    heads = [number for number, line in enumerate(lines) if line in ("example:", "examples:")]
    shown = lines[heads[0] + 1 :] if heads else []
    return [shlex.split(line) for line in shown if line.startswith("  skylag ")]


def test_every_command_is_looked_at() -> None:
    top = [action for action in PARSER._actions if isinstance(action, argparse._SubParsersAction)]
    assert len(top) == 1 and set(COMMANDS) >= {f"skylag {name}" for name in top[0].choices}


@pytest.mark.parametrize("name", COMMANDS)
def test_a_command_says_what_it_is_for(name: str) -> None:
    line, parser = COMMANDS[name]
    assert line, "a line for the list of commands"
    told = " ".join((parser.description or "").split())
    assert len(told) > len(line) and told.endswith("."), "a description in sentences, more than the line of the list"
    assert "exit status: 0" in (parser.epilog or ""), "what it answers to whoever calls it"
    assert CAUTION in (parser.epilog or "")


@pytest.mark.parametrize("name", COMMANDS)
def test_a_command_shows_examples_that_parse(name: str) -> None:
    """Every example is of this command and is understood; where a first word chooses what is done, each is shown."""
    parser = COMMANDS[name][1]
    shown = examples(parser)
    assert shown, "at least one example"
    for words in shown:
        assert words[: len(name.split())] == name.split()
        assert PARSER.parse_args(words[1:]).run is parser.get_default("run")
    for action in parser._actions:
        if action.choices and not action.option_strings:
            said = {word for words in shown for word in words}
            assert set(map(str, action.choices)) <= said, f"an example of each {action.dest}"


@pytest.mark.parametrize("name", COMMANDS)
def test_help_keeps_its_lines(name: str) -> None:
    """Lines of description and examples are not run together, and fit a narrow terminal."""
    parser = COMMANDS[name][1]
    assert parser.formatter_class is argparse.RawDescriptionHelpFormatter
    text = f"{parser.description}\n{parser.epilog}".replace(CAUTION, "")
    assert [line for line in text.split("\n") if len(line) > 115] == []


@pytest.mark.parametrize("name", COMMANDS)
def test_every_argument_that_is_a_word_is_explained(name: str) -> None:
    """What is given without an option has no name on the command line, so help must say what it is."""
    for action in COMMANDS[name][1]._actions:
        if not action.option_strings:
            assert action.help, action.dest
