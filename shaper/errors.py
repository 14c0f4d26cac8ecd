"""What can go wrong, as few kinds as the command line has exit codes for.

Every kind knows its exit code; only ``shaper.cli`` turns one into a process status.
"""


class ShaperError(Exception):
    """The run or a file failed. One clear line: what was expected, what came, where."""

    exit_code = 1


class InputError(ShaperError):
    """Wrong use or wrong input. ``lines`` holds one line per fault found."""

    exit_code = 2

    def __init__(self, *lines: str):
        super().__init__("\n".join(lines))
        self.lines = lines


class FileError(ShaperError):
    """A waveform file is damaged, hostile or not one of ours."""

    exit_code = 1


class SafetyError(ShaperError):
    """Refused, because a stated limit would be exceeded."""

    exit_code = 4


class ReadBackError(ShaperError):
    """What was read back is not what was written."""

    exit_code = 5
