"""A newcomer's path: every command of the README is run, and prints what is printed there.

Blocks fenced as ``console`` are run from top to bottom in one fresh copy of the project; a line
that begins with ``$ `` is a command, the lines below it are its standard output. Words must be
the same; numbers may differ as far as another processor's rounding leads a search elsewhere.
Blocks of another kind (``sh``) are for reading only.
"""

import os
import re
import shutil
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
FENCE = re.compile(r"^```console\n(.*?)^```$", re.M | re.S)
NUMBER = re.compile(r"-?\d+(?:\.\d+)?(?:[eE][-+]?\d+)?")
NOT_COPIED = shutil.ignore_patterns(".*", "node_modules", "__pycache__", "*.egg-info", "results")
CLOSE = 0.1  # relative; another of several equally good waveforms may win
NOTHING = 1e-7  # nominal infidelities of a robust pulse are leftovers, different in each waveform


def steps():
    """(command, expected output) in order."""
    found = []
    for block in FENCE.findall((ROOT / "README.md").read_text(encoding="utf-8")):
        for line in block.splitlines():
            if line.startswith("$ "):
                found.append((line[2:], []))
            elif found:
                found[-1][1].append(line)
    return [(command, "\n".join(lines)) for command, lines in found]


def settled(text):
    """Without what follows from the very last bit of a waveform: digests, how a search ended."""
    text = re.sub(r"sha256 [0-9a-f]+", "sha256", text)
    return "\n".join(line for line in text.splitlines() if not line.startswith("search "))


def words(text):
    """The text without its numbers, and without what depends on their width."""
    return re.sub(r"[\s-]+", " ", NUMBER.sub("#", text)).strip()


def test_the_readme_holds_the_commands_of_a_first_day():
    commands = [command for command, _ in steps()]
    for name in ("shaper optimize", "shaper compare", "shaper load", "shaper new", "shaper check"):
        assert any(command.startswith(name) for command in commands), name
    assert all(expected.strip() for _, expected in steps())


def test_every_command_prints_what_the_readme_says(tmp_path):
    shutil.copytree(ROOT, tmp_path / "project", ignore=NOT_COPIED)
    (tmp_path / "project" / "results").mkdir()
    environment = os.environ | {
        "PATH": f"{Path(sys.executable).parent}{os.pathsep}{os.environ['PATH']}",
        "HOME": str(tmp_path),  # a newcomer has no caches
        "COLUMNS": "100",
    }
    for command, expected in steps():
        done = subprocess.run(
            command,
            shell=True,
            cwd=tmp_path / "project",
            env=environment,
            text=True,
            capture_output=True,
            check=False,
        )
        assert done.returncode == 0, f"$ {command}\n{done.stderr}"
        output, expected = settled(done.stdout), settled(expected)
        assert words(output) == words(expected), f"$ {command}\n{done.stdout}"
        for said, printed in zip(NUMBER.findall(output), NUMBER.findall(expected), strict=True):
            said, printed = float(said), float(printed)
            close = abs(said - printed) <= CLOSE * abs(printed) + NOTHING
            assert close, f"$ {command}\nprints {said}, the README has {printed}"
