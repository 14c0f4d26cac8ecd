"""Arguments that several commands share, so that they mean and say the same everywhere."""

from __future__ import annotations


def add_against(command) -> None:
    """``--against``: composites to set beside the file's own pulses."""
    command.add_argument(
        "--against",
        metavar="NAME",
        nargs="+",
        default=[],
        help="composite pulses of the library to set beside them: names, or all",
    )


def add_data(command) -> None:
    """``--data``: where measured lines and spectra lie."""
    command.add_argument(
        "--data",
        metavar="FOLDER",
        help="where the measured files that the job names lie (default: beside FILE.h5)",
    )
