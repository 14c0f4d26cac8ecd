"""The command reference is the parser's own, and every command says what it is for."""

import argparse
import re
from pathlib import Path

import shaper
from shaper.cli import COMMANDS, parser
from shaper.cli.reference import reference_text

STORED = Path(shaper.__file__).with_name("REFERENCE.md")


def commands():
    top = parser()
    return next(a for a in top._actions if isinstance(a, argparse._SubParsersAction)).choices


def test_the_stored_reference_is_the_parsers():
    assert STORED.read_text(encoding="utf-8") == reference_text(), (
        "REFERENCE.md is old: run python scripts/regenerate.py"
    )


def test_every_argument_of_every_command_is_listed():
    sections = re.split(r"^## shaper ", reference_text(), flags=re.M)[1:]
    assert [section.split("\n")[0] for section in sections] == list(COMMANDS)
    for section, command in zip(sections, commands().values(), strict=True):
        for action in command._actions:
            for name in action.option_strings or [action.metavar or action.dest]:
                assert f"`{name}" in section


def test_every_command_and_argument_has_help():
    for name, command in commands().items():
        assert command.description, name
        assert f"shaper {name} " in (command.epilog or ""), f"{name}: no example"
        for action in command._actions:
            assert action.help, (name, action.dest)


def test_the_reference_does_not_depend_on_the_terminal(monkeypatch):
    wide = reference_text()
    monkeypatch.setenv("COLUMNS", "40")
    assert reference_text() == wide
