"""Files that are either whole or not there."""

from __future__ import annotations

import hashlib
import json
import os
import stat
from pathlib import Path

from shaper.errors import FileError
from shaper.store import atomic


def replace_file(path: Path, data: bytes, *, lasting: bool = True) -> None:
    """Put ``data`` at ``path``: a reader sees the old content or the new, never a part.

    Args:
        lasting: also survive a power cut (fsync), which costs milliseconds. Without it there
            must be only one writer.
    Raises:
        FileError: if it cannot be written.
    """
    if lasting:
        atomic.replace_file(path, data)
        return
    scratch = path.with_name(f".{path.name}.tmp")
    try:
        scratch.write_bytes(data)
        os.replace(scratch, path)
    except OSError as error:
        raise FileError(f"{path}: cannot write: {error.strerror}") from error


def read_file(path: Path, limit: int) -> bytes:
    """The file's bytes.

    Raises:
        FileError: if it cannot be read or is longer than ``limit`` bytes.
    """
    try:
        with open(path, "rb") as file:
            if not stat.S_ISREG(os.fstat(file.fileno()).st_mode):
                raise FileError(f"{path}: expected a regular file")
            data = file.read(limit + 1)
    except OSError as error:
        raise FileError(f"{path}: cannot read: {error.strerror}") from error
    if len(data) > limit:
        raise FileError(f"{path}: expected at most {limit} bytes")
    return data


def json_bytes(document: dict) -> bytes:
    """A JSON document, readable by people, the same bytes for the same content."""
    return (json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n").encode()


def sha256(data: bytes | bytearray | memoryview) -> str:
    """Fingerprint of the bytes, 64 hexadecimal digits."""
    return hashlib.sha256(data).hexdigest()
