"""The load record: what was sent, what came back, when, and how it ended. Readable at any moment.

One JSON document, replaced as a whole. That a trace is about to be sent is written before it is;
all else at the latest with the first line after ``_PATIENCE``, and at the end.
"""

from __future__ import annotations

import json
import time
from datetime import UTC, datetime
from pathlib import Path

from shaper import __version__
from shaper.awg.files import json_bytes, read_file, replace_file
from shaper.errors import FileError

FORMAT, FORMAT_VERSION = "shaper-load-record", 1
SUFFIX = ".load.json"
STATES = ("planned", "sending", "loaded", "in place", "removed", "left")
_MAX_BYTES = 100_000_000
_PATIENCE = 0.05  # s; writing the file after each of many short exchanges would cost more than they


class LoadRecord:
    """A record under way. Without a path it is kept in memory only."""

    def __init__(self, path: Path | None, **about):
        """Begin; ``about`` goes to the top level as it is."""
        self.path, self.tolerant = path, False
        self._start = self._saved = time.monotonic()
        self.document = {
            "format": FORMAT,
            "format_version": FORMAT_VERSION,
            "software": f"shaper {__version__}",
            "started": now(),
            "ended": None,
            "status": "running",
            "error": None,
            "identity": None,
            "output": {"confirmed_off": False, "statement": "not asked yet"},
            **about,
            "lines": [],
        }
        self.save()

    def line(self, step: str, **details) -> None:
        """One thing done, with the time since the start."""
        now_s = time.monotonic()
        at = round(now_s - self._start, 6)
        self.document["lines"].append({"at_s": at, "step": step, **details})
        if now_s - self._saved > _PATIENCE:
            self.save()

    def put(self, **items) -> None:
        """Change entries at the top level; written with the next line that is."""
        self.document.update(items)

    def trace(self, name: str, state: str) -> None:
        """Change the state of one trace; on disk before this returns if it is to be sent.

        A killed loader must leave the names that it may have touched, no more.
        """
        for entry in self.document["traces"]:
            if entry["name"] == name:
                entry["state"] = state
        if state == "sending":
            self.save()

    def states(self, *states: str) -> list[str]:
        """Names of the traces in one of these states."""
        return [entry["name"] for entry in self.document["traces"] if entry["state"] in states]

    def finish(self, status: str, error: str | None = None) -> None:
        """The end, safe against a power cut."""
        self.document.update(status=status, error=error, ended=now())
        self.save(lasting=True)

    def save(self, *, lasting: bool = False) -> None:
        """Write the whole record; once ``tolerant``, a failure to do so is swallowed."""
        self._saved = time.monotonic()
        if self.path is None:
            return
        try:
            replace_file(self.path, json_bytes(self.document), lasting=lasting)
        except FileError:
            if not self.tolerant:
                raise


def now() -> str:
    """ISO 8601, UTC."""
    return datetime.now(UTC).isoformat(timespec="seconds").replace("+00:00", "Z")


def new_path(folder: Path, stem: str, suffix: str = SUFFIX) -> Path:
    """A name that is not taken: ``STEM-20260101T120000Z.load.json``."""
    stamp = datetime.now(UTC).strftime("%Y%m%dT%H%M%SZ")
    path, again = folder / f"{stem}-{stamp}{suffix}", 1
    while path.exists():
        again += 1
        path = folder / f"{stem}-{stamp}-{again}{suffix}"
    return path


def read_record(path: str | Path) -> dict:
    """A record, checked as far as the loader relies on it.

    Raises:
        FileError: if it cannot be read or is not one of ours.
    """
    raw = read_file(Path(path), _MAX_BYTES)
    try:
        record = json.loads(raw)
        if (record["format"], record["format_version"]) != (FORMAT, FORMAT_VERSION):
            raise ValueError(f"format {record['format']!r} {record['format_version']!r}")
        for key in ("started", "status", "address"):
            _text(record[key], key)
        for trace in record["traces"]:
            for key in ("name", "data_sha256", "state"):
                _text(trace[key], f"traces.{key}")
            if type(trace["bytes"]) is not int or trace["state"] not in STATES:
                raise ValueError(f"trace {trace['name']!r}")
        for pulse in record["pulses"]:
            for key in ("file", "file_sha256", "pulse"):
                _text(pulse[key], f"pulses.{key}")
        if not isinstance(record["output"]["confirmed_off"], bool):
            raise ValueError("output.confirmed_off")
        if not isinstance(record["lines"], list):
            raise ValueError("lines")
    except (KeyError, TypeError, ValueError, RecursionError) as error:
        raise FileError(f"{path}: not a load record of ours: {error!r}") from error
    return record


def records_in(folder: Path) -> list[dict]:
    """All readable records of a folder, the oldest first; others are passed over."""
    found = []
    for path in sorted(folder.glob(f"*{SUFFIX}")):
        try:
            found.append(read_record(path))
        except FileError:
            continue
    return sorted(found, key=lambda record: record["started"])


def _text(value, key: str) -> None:
    if not isinstance(value, str):
        raise ValueError(f"{key} {value!r}")
