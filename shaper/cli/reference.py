"""The reference of all commands, made from the parser itself so that it cannot drift."""

from __future__ import annotations

import argparse
import re

from shaper.cli import parser


def reference_text() -> str:
    """Every command with its arguments and examples, as Markdown.

    Made of what the parser holds, not of ``--help``, whose line breaks follow the terminal.
    """
    top = parser()
    commands = next(a for a in top._actions if isinstance(a, argparse._SubParsersAction))
    summaries = {choice.dest: choice.help or "" for choice in commands._choices_actions}
    lines = [
        "# shaper: all commands",
        "",
        f"{top.description} Made from the parser by `python scripts/regenerate.py`.",
        "",
        "| command | what it does |",
        "|---|---|",
        *(
            f"| [`{name}`](#shaper-{name}) | {_cell(summaries.get(name, ''))} |"
            for name in commands.choices
        ),
        "",
        _flowing(top.epilog or ""),
    ]
    for name, command in commands.choices.items():
        lines += ["", f"## shaper {name}", "", _usage(command)]
        if command.description:
            lines += ["", _flowing(command.description)]
        lines += ["", "| argument | meaning |", "|---|---|"]
        lines += [f"| {_name(action)} | {_cell(_meaning(action))} |" for action in command._actions]
        if command.epilog:
            lines += ["", "```text", command.epilog.strip(), "```"]
    return "\n".join(lines) + "\n"


def _usage(command: argparse.ArgumentParser) -> str:
    parts = [command.prog]
    for action in command._actions:
        if isinstance(action, argparse._HelpAction):
            continue
        text = action.option_strings[0] if action.option_strings else ""
        if action.nargs != 0:
            text = f"{text} {_placeholder(action)}".strip()
        optional = action.option_strings and not action.required or action.nargs in ("?", "*")
        parts.append(f"[{text}]" if optional else text)
    return "`" + " ".join(parts) + "`"


def _name(action: argparse.Action) -> str:
    names = action.option_strings or [_placeholder(action)]
    value = f" {_placeholder(action)}" if action.option_strings and action.nargs != 0 else ""
    return ", ".join(f"`{name}{value}`" for name in names).replace("|", "\\|")


def _placeholder(action: argparse.Action) -> str:
    if action.choices is not None:
        return "{" + ",".join(map(str, action.choices)) + "}"
    shown = action.metavar or action.dest.upper()
    text = " ".join(shown) if isinstance(shown, tuple) else shown
    return text + " ..." if action.nargs in ("+", "*") or isinstance(action.nargs, int) else text


def _meaning(action: argparse.Action) -> str:
    text = (action.help or "") % {"default": action.default, "prog": "shaper"}
    return text if action.help else ""


def _cell(text: str) -> str:
    return re.sub(r"\s+", " ", text).replace("|", "\\|")


def _flowing(text: str) -> str:
    return re.sub(r"[ \t]*\n[ \t]*", " ", text.strip())
