"""A long search survives the machine: what is needed to go on, kept from time to time."""

from __future__ import annotations

import hashlib
import io
import time
import zipfile
from collections.abc import Callable
from importlib.metadata import version
from pathlib import Path

import numpy as np

from shaper.errors import InputError
from shaper.job import Job

INTERVAL = 30.0  # s between two checkpoints
# what reading a zip archive of arrays raises if bytes of it are wrong
_DAMAGED = (OSError, ValueError, EOFError, KeyError, RuntimeError, zipfile.BadZipFile)


class Checkpoint:
    """A file beside the result that holds a search under way.

    Args:
        path: of the file.
        job: whose search it is; the checkpoint of another job, or of another version of the
            program, is refused.
        write: replaces a file's content whole or not at all, ``write(path, data)``.
        resume: whether to go on from what the file holds.
        interval: s between two writes.
    """

    def __init__(
        self,
        path: Path,
        job: Job,
        write: Callable[[Path, bytes], None],
        resume: bool = False,
        interval: float = INTERVAL,
    ):
        self.path, self._write, self._resume, self._interval = path, write, resume, interval
        whose = f"{version('shaper')} {version('jaxlib')}\n{job.text}"
        self._job = hashlib.sha256(whose.encode()).hexdigest()
        self._last = time.monotonic()

    @property
    def due(self) -> bool:
        """Whether it is time to write again."""
        return time.monotonic() - self._last >= self._interval

    def save(self, kept: dict[str, np.ndarray]) -> None:
        """Write a snapshot."""
        buffer = io.BytesIO()
        np.savez(buffer, job=self._job, **kept)
        self._write(self.path, buffer.getvalue())
        self._last = time.monotonic()

    def load(self) -> dict[str, np.ndarray] | None:
        """The snapshot to go on from; None if the search begins anew.

        Raises:
            InputError: if there is none to resume, it cannot be read, or is another job's.
        """
        if not self._resume:
            return None
        if not self.path.is_file():
            raise InputError(f"--resume: expected a checkpoint {self.path}, found none")
        try:
            with np.load(io.BytesIO(self.path.read_bytes()), allow_pickle=False) as file:
                kept = {name: file[name] for name in file.files}
        except _DAMAGED as error:
            raise InputError(f"--resume: {self.path} is not a whole checkpoint: {error}") from error
        if str(kept.pop("job", "")) != self._job:
            raise InputError(
                f"--resume: {self.path} belongs to another job, or another version of the program"
            )
        return kept

    def discard(self) -> None:
        """Remove the file: the search is done."""
        self.path.unlink(missing_ok=True)
