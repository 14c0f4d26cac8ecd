"""``shaper load``."""

from __future__ import annotations


def add(commands):
    """Declare the command's arguments."""
    return commands.add_parser("load")


def run(args) -> int:
    """Run it; returns the exit code."""
    raise SystemExit(2)
