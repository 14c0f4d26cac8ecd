"""Files that are either whole or not there."""

from __future__ import annotations

import contextlib
import hashlib
import json
import os
import tempfile
from pathlib import Path

from shaper.errors import FileError


def replace_file(path: Path, data: bytes, *, lasting: bool = True) -> None:
    """Put ``data`` at ``path``: a reader sees the old content or the new, never a part.

    Args:
        lasting: also survive a power cut (fsync), which costs milliseconds.
    Raises:
        FileError: if it cannot be written; nothing half-written stays.
    """
    scratch = None
    try:
        handle, scratch = tempfile.mkstemp(".tmp", f".{path.name}.", path.parent)
        with open(handle, "wb") as file:
            file.write(data)
            if lasting:
                file.flush()
                os.fsync(file.fileno())
        os.chmod(scratch, 0o644)
        os.replace(scratch, path)
        scratch = None
        if lasting:
            folder = os.open(path.parent, os.O_RDONLY)
            try:
                os.fsync(folder)
            finally:
                os.close(folder)
    except OSError as error:
        raise FileError(f"{path}: cannot write the file: {error.strerror}") from error
    finally:
        if scratch is not None:
            with contextlib.suppress(OSError):
                os.unlink(scratch)


def read_file(path: Path, limit: int) -> bytes:
    """The file's bytes.

    Raises:
        FileError: if it cannot be read or is longer than ``limit`` bytes.
    """
    try:
        with open(path, "rb") as file:
            data = file.read(limit + 1)
    except OSError as error:
        raise FileError(f"{path}: cannot read the file: {error.strerror}") from error
    if len(data) > limit:
        raise FileError(f"{path}: expected at most {limit} bytes")
    return data


def json_bytes(document: dict) -> bytes:
    """A JSON document, readable by people, the same bytes for the same content."""
    return (json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n").encode()


def sha256(data: bytes | memoryview) -> str:
    """Fingerprint of the bytes, 64 hexadecimal digits."""
    return hashlib.sha256(data).hexdigest()
