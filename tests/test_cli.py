"""The command line as a whole: it starts at once, and every ending has its exit code."""

import io
import os
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

import shaper
from shaper import cli
from shaper.cli import COMMANDS, main
from shaper.errors import (
    FileError,
    InputError,
    ReadBackError,
    SafetyError,
    ShaperError,
)

WRONG_USE, INTERRUPTED = 2, 130
HEAVY = ("jax", "jaxlib", "numpy", "scipy", "h5py", "matplotlib", "pydantic", "optax")


def python(*arguments, **more):
    return subprocess.run(
        [sys.executable, *arguments], capture_output=True, text=True, check=False, **more
    )


# ---- it starts at once


@pytest.mark.parametrize(
    "question", [["--help"], ["--version"], *([c, "--help"] for c in COMMANDS)]
)
def test_help_is_answered_without_heavy_libraries(question):
    """In a fresh interpreter each: what it has imported by the time it answers."""
    code = (
        "import sys\n"
        "from shaper.cli import main\n"
        "try:\n    main()\n"
        "except SystemExit as end:\n    assert end.code == 0\n"
        f"print('heavy:', [name for name in {HEAVY!r} if name in sys.modules])"
    )
    done = python("-c", code, *question)
    assert done.returncode == 0, done.stderr
    assert done.stdout.splitlines()[-1] == "heavy: []"


def test_module_and_version():
    done = python("-m", "shaper", "--version")
    assert (done.returncode, done.stderr) == (0, "")
    assert done.stdout == f"shaper {shaper.__version__}\n"
    project = tomllib.loads((Path(shaper.__file__).parents[1] / "pyproject.toml").read_text())
    assert project["project"]["version"] == shaper.__version__
    assert project["project"]["scripts"]["shaper"] == "shaper.cli:main"


def test_help_names_every_command_and_exit_code(capsys):
    with pytest.raises(SystemExit) as end:
        main(["--help"])
    assert end.value.code == 0
    shown = " ".join(capsys.readouterr().out.split())  # lines are broken to the terminal's width
    for command in COMMANDS:
        assert f" {command} " in shown
    for code in (
        "0 done",
        "1 the run",
        "2 wrong use",
        "3 finished",
        "4 refused",
        "5 read-back",
        "130",
    ):
        assert code in shown


# ---- wrong use


@pytest.mark.parametrize(
    "arguments",
    [
        [],
        ["optimise"],
        ["optimize"],
        ["optimize", "job.toml", "extra"],
        ["optimize", "job.toml", "--outptu", "a.h5"],
        ["compare"],
        ["load"],
        ["load", "a.h5", "--layout", "upside-down"],
    ],
)
def test_wrong_arguments_are_exit_code_2(arguments, capsys):
    try:
        code = main(arguments)
    except SystemExit as end:
        code = end.code
    shown = capsys.readouterr()
    assert code == WRONG_USE
    assert shown.out == ""
    assert "usage: shaper" in shown.err or shown.err.startswith("shaper: ")
    assert "Traceback" not in shown.err


@pytest.mark.parametrize("command", ["optimize", "compose", "check", "compare", "verify", "report"])
def test_a_file_that_is_not_there_is_one_line(command, tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    name = "none.toml" if command in ("optimize", "compose", "check") else "none.h5"
    code = main([command, name])
    shown = capsys.readouterr()
    assert code == (2 if name.endswith("toml") else 1)
    assert shown.out == ""
    assert shown.err.startswith("shaper: ") and name in shown.err
    assert shown.err.count("\n") == 1
    assert list(tmp_path.iterdir()) == []


# ---- every ending has its code


@pytest.fixture
def ending(monkeypatch):
    """``shaper check`` replaced by something that ends as the test says."""

    def set_ending(how):
        def run(args):
            if isinstance(how, BaseException):
                raise how
            return how

        monkeypatch.setattr(cli.importlib.import_module("shaper.cli.check"), "run", run)

    return set_ending


@pytest.mark.parametrize(
    ("how", "code", "line"),
    [
        (0, 0, ""),
        (3, 3, ""),
        (ShaperError("failed here"), 1, "shaper: failed here\n"),
        (FileError("damaged there"), 1, "shaper: damaged there\n"),
        (InputError("first", "second"), 2, "shaper: first\nshaper: second\n"),
        (SafetyError("too much"), 4, "shaper: too much\n"),
        (ReadBackError("differs"), 5, "shaper: differs\n"),
        (KeyboardInterrupt(), INTERRUPTED, "shaper: interrupted\n"),
        (MemoryError(), 1, "shaper: out of memory: try fewer starts or slices\n"),
    ],
)
def test_every_ending_has_its_exit_code(ending, capsys, how, code, line):
    ending(how)
    assert main(["check", "job.toml"]) == code
    shown = capsys.readouterr()
    assert (shown.out, shown.err) == ("", line)


@pytest.mark.parametrize("how", [InputError("first"), KeyboardInterrupt(), MemoryError()])
def test_debug_shows_where_it_came_from(ending, how):
    ending(how)
    with pytest.raises(type(how)):
        main(["check", "job.toml", "--debug"])


def test_a_fault_of_the_program_is_not_dressed_up(ending):
    """Not one of ours: the traceback is what the developer needs."""
    ending(ZeroDivisionError())
    with pytest.raises(ZeroDivisionError):
        main(["check", "job.toml"])


def test_a_reader_who_leaves_is_no_error():
    """``shaper check JOB.toml | head -1``: no traceback, no complaint."""
    process = subprocess.Popen(
        [sys.executable, "-m", "shaper", "check", str(CONFIG)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
    )
    process.stdout.close()
    err = process.stderr.read()
    process.stderr.close()
    assert process.wait() == 0
    assert err == b""


CONFIG = Path(shaper.__file__).parents[1] / "configs" / "z90.toml"


# ---- progress and interruption


class Terminal(io.StringIO):
    def isatty(self):
        return True


def test_progress_rewrites_one_line_on_a_terminal(monkeypatch):
    from shaper.cli import progress

    clock = iter([0.0, 0.05, 0.2, 0.4])
    monkeypatch.setattr(progress.time, "monotonic", lambda: next(clock))
    monkeypatch.setattr(sys, "stderr", Terminal())
    line = progress.ProgressLine()
    line("exploring", 10, 100, 1e-3)  # too soon after the last
    line("exploring", 20, 100, 1e-4)
    line("refining", 5, 120, 2.5e-6)
    line.close()
    shown = sys.stderr.getvalue()
    assert "\n" not in shown
    parts = [part.strip() for part in shown.split("\r") if part.strip()]
    assert parts == [
        "exploring 20/100  best 1.00e-04  0 s",
        "refining 5/120  best 2.50e-06  0 s",
    ]
    assert shown.endswith("\r")  # and it is wiped in the end


def test_progress_in_a_log_is_a_line_now_and_then(monkeypatch):
    from shaper.cli import progress

    clock = iter([0.0, 1.0, 6.0, 7.0])
    monkeypatch.setattr(progress.time, "monotonic", lambda: next(clock))
    monkeypatch.setattr(sys, "stderr", io.StringIO())
    line = progress.ProgressLine()
    for step in (10, 20, 30):
        line("exploring", step, 100, 1e-3)
    line.close()
    assert sys.stderr.getvalue() == "exploring 20/100  best 1.00e-03  6 s\n"


def test_first_ctrl_c_asks_and_the_second_stops(capsys):
    import signal

    from shaper.cli.progress import patient_interrupt

    before = signal.getsignal(signal.SIGINT)
    with patient_interrupt() as asked_to_stop:
        assert not asked_to_stop()
        os.kill(os.getpid(), signal.SIGINT)
        assert asked_to_stop()
        with pytest.raises(KeyboardInterrupt):
            os.kill(os.getpid(), signal.SIGINT)
    assert signal.getsignal(signal.SIGINT) is before
    assert "the best so far is kept" in capsys.readouterr().err


# ---- the package


def test_public_names_are_there_and_others_are_not():
    assert set(shaper.__all__) <= set(dir(shaper))
    for name in shaper.__all__:
        assert getattr(shaper, name) is not None
    with pytest.raises(AttributeError, match="no attribute 'nonsense'"):
        shaper.nonsense  # noqa: B018
