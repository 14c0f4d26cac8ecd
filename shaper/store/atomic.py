"""Replacing a file so that at every moment the old one or the new one is there, whole."""

from __future__ import annotations

import os
import re
import socket
import time
from pathlib import Path

from shaper.errors import FileError

_DAY = 86400.0  # s; a temporary file of another machine this old is taken for abandoned


def replace_file(path: str | os.PathLike, data: bytes) -> None:
    """Write ``data`` to ``path``: temporary file beside it, fsync, rename, fsync of the folder.

    Whatever happens on the way, power cut included, ``path`` holds the old bytes or the new. What
    killed writers of this same file left behind is removed.

    Raises:
        FileError: if the file cannot be written; the old one is untouched.
    """
    path = Path(path)
    temporary = path.with_name(f".{path.name}.{_machine()}.{os.getpid()}.tmp")
    try:
        _remove_strays(path)
        # O_EXCL: never through a link that somebody else laid there
        handle = os.open(temporary, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o666)
        try:
            with os.fdopen(handle, "wb") as file:
                file.write(data)
                file.flush()
                os.fsync(file.fileno())
            os.replace(temporary, path)
        except BaseException:
            temporary.unlink(missing_ok=True)
            raise
        _sync_folder(path.parent)
    except OSError as error:
        raise FileError(f"{path}: cannot write: {error.strerror or error}") from error


def _machine() -> str:
    """This machine's name, fit for a file name: a process id means nothing elsewhere."""
    return re.sub(r"[^A-Za-z0-9-]", "-", socket.gethostname())[:64] or "machine"


def _sync_folder(folder: Path) -> None:
    """The rename itself survives a power cut; where folders cannot be opened, nothing to do."""
    flag = getattr(os, "O_DIRECTORY", None)
    if flag is None:
        return
    handle = os.open(folder, os.O_RDONLY | flag)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _remove_strays(path: Path) -> None:
    """Temporary files for ``path`` whose writer is no more: dead here, or a day old elsewhere."""
    ours = re.compile(rf"\.{re.escape(path.name)}\.([A-Za-z0-9-]+)\.([0-9]+)\.tmp")
    for name in os.listdir(path.parent):
        match = ours.fullmatch(name)
        if match is None:
            continue
        machine, process = match.group(1), int(match.group(2))
        stray = path.parent / name
        try:
            if machine == _machine():
                abandoned = process == os.getpid() or not _alive(process)
            else:
                abandoned = time.time() - stray.lstat().st_mtime > _DAY
            if abandoned:
                stray.unlink()
        except OSError:
            continue  # gone meanwhile, or not ours to remove: harmless


def _alive(process: int) -> bool:
    if os.name != "posix":
        return True  # elsewhere signal 0 is not a question
    try:
        os.kill(process, 0)
    except (ProcessLookupError, OverflowError):
        return False
    except OSError:
        return True  # there, but another user's
    return True
