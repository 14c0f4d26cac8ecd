"""The optional transport for GPIB, USB, VXI-11 and HiSLIP: PyVISA behind the ``Link`` interface.

PyVISA is imported when the first such link is opened, never before. Only its raw byte transfer is
used: its conversion of arrays wraps, truncates and miscounts in silence, and its block header is
not the standard's beyond nine digits. Each transfer runs in a thread of its own that is given up
at the deadline, since the pure-Python backend waits for ever on a socket that takes no bytes.
"""

from __future__ import annotations

import contextlib
import threading
import time
import warnings
from collections.abc import Callable
from typing import Any

from shaper.awg.link import LinkError, Reader

_CHUNK = 1 << 20  # bytes in one transfer
_MESSAGE_LIMIT = 1 << 30  # bytes of one answer on a link that marks its end


class VisaLink(Reader):
    """A VISA resource, for example ``GPIB0::10::INSTR`` or ``TCPIP::127.0.0.1::5025::SOCKET``.

    A socket resource has no mark at the end of an answer, so it is read by count and by newline.
    Every other kind has one, and is read up to it.
    """

    def __init__(self, address: str, seconds: float):
        """Open the resource. That it is alive shows only when it answers: some backends open
        a closed port without a word.

        Raises:
            LinkError: if it cannot be opened.
        """
        import pyvisa

        self.address = address
        self._visa: Any = pyvisa
        self._by_count = address.upper().endswith("::SOCKET")
        self._ahead = bytearray()
        self._resource: Any = None
        self._within(seconds, "opening", self._open)

    def _open(self) -> None:
        backend = ""
        try:
            manager = self._visa.ResourceManager()
        except (OSError, ValueError):  # no vendor library on this machine
            backend = "@py"
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")  # pyvisa-py lists the interfaces it lacks
                manager = self._visa.ResourceManager(backend)
        self._resource = manager.open_resource(self.address)
        self._resource.write_termination = ""
        self._resource.read_termination = None
        self._resource.chunk_size = _CHUNK

    def send(self, seconds: float, *pieces: bytes) -> None:
        """See ``Link``."""
        message = b"".join(pieces)

        def write():
            sent = 0
            while sent < len(message):  # some backends take less than they were given
                sent += self._resource.write_raw(message[sent:])

        with self._exchange():
            self._within(seconds, f"sending {len(message)} bytes", write)

    def idle(self) -> None:
        """See ``Link``. VISA cannot look without reading; what was read ahead is seen."""
        with self._exchange():
            if self._ahead:
                raise LinkError(f"{self.address}: expected silence, got {bytes(self._ahead[:80])}")

    def close(self) -> None:
        """See ``Link``."""
        self.usable = False
        resource, self._resource = self._resource, None
        if resource is not None:
            with contextlib.suppress(Exception):
                resource.close()

    def _exactly(self, count: int, deadline: float) -> bytes:
        if self._by_count:
            return self._within(
                deadline - time.monotonic(),
                f"reading {count} bytes",
                lambda: self._resource.read_bytes(count, break_on_termchar=False) if count else b"",
            )
        self._fill(deadline)
        if len(self._ahead) < count:
            raise LinkError(f"{self.address}: expected {count} bytes, got {len(self._ahead)}")
        taken = bytes(self._ahead[:count])
        del self._ahead[:count]
        return taken

    def _line(self, limit: int, deadline: float) -> bytes:
        line = bytearray()
        while not line.endswith(b"\n"):
            if len(line) > limit:
                raise LinkError(f"{self.address}: expected an answer of at most {limit} bytes")
            if not self._by_count:
                self._fill(deadline)
                end = self._ahead.find(b"\n") + 1 or len(self._ahead)
                line += self._ahead[:end]
                del self._ahead[:end]
                break
            line += self._within(deadline - time.monotonic(), "waiting for an answer", self._piece)
        return bytes(line.removesuffix(b"\n"))

    def _piece(self) -> bytes:
        """Bytes up to a newline at most, so that nothing of a next answer is taken."""
        with self._resource.read_termination_context("\n"):
            data, _ = self._resource.visalib.read(self._resource.session, 4096)
        return data

    def _fill(self, deadline: float) -> None:
        """On a link with an end mark: the whole answer, once."""
        if not self._ahead:
            self._ahead += self._within(
                deadline - time.monotonic(), "reading an answer", self._message
            )

    def _message(self) -> bytes:
        data = bytearray()
        done = self._visa.constants.StatusCode.success
        status = None
        while status != done:
            piece, status = self._resource.visalib.read(self._resource.session, _CHUNK)
            data += piece
            if len(data) > _MESSAGE_LIMIT:
                raise LinkError(f"{self.address}: an answer beyond {_MESSAGE_LIMIT} bytes")
        return bytes(data)

    def _within(self, seconds: float, doing: str, work: Callable[[], Any]) -> Any:
        """The result of ``work``, or LinkError when it fails or the time is up."""
        outcome = {}

        def run():
            try:
                outcome["result"] = work()
            except BaseException as error:  # carried over to the caller's thread
                outcome["error"] = error

        if self._resource is not None:
            self._resource.timeout = max(1, round(seconds * 1e3))  # ms
        thread = threading.Thread(target=run, daemon=True)
        thread.start()
        thread.join(max(0.0, seconds))
        if thread.is_alive():
            self.close()
            raise LinkError(f"{self.address}: out of time {doing}")
        error = outcome.get("error")
        if error is None:
            return outcome.get("result")
        if isinstance(error, self._visa.errors.VisaIOError) and (
            error.error_code == self._visa.constants.StatusCode.error_timeout
        ):
            raise LinkError(f"{self.address}: out of time {doing}") from error
        if isinstance(error, LinkError):
            raise error
        raise LinkError(f"{self.address}: failed {doing}: {_one_line(error)}") from error


def _one_line(error: BaseException) -> str:
    return " ".join(str(error).split())[:200] or type(error).__name__
