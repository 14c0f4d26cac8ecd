"""The wire to an instrument: whole messages out, whole answers in, each within a deadline.

``Link`` is what the loader needs; a transport is one class with five methods. A link on which
something went wrong is broken for good: a late answer would be taken for the next one, and half a
block would swallow the next command. The only way back is to close and to open a new one.
"""

from __future__ import annotations

import contextlib
import importlib.util
import select
import socket
import time
from abc import ABC, abstractmethod
from typing import Protocol

from shaper.awg import block
from shaper.errors import InputError, ShaperError

SCPI_PORT = 5025  # registered for SCPI over raw TCP (from memory)
LINE_LIMIT = 4096  # bytes of an ordinary answer
_SHOWN = 80  # characters of an answer in a message


class LinkError(ShaperError):
    """The link failed, was too slow, or answered what cannot be understood."""


class Link(Protocol):
    """One open connection. Every method ends within its deadline, well or with LinkError.

    Attributes:
        address: as the user wrote it.
        usable: False from the first failure on, and while an exchange is under way.
    """

    address: str
    usable: bool

    def send(self, seconds: float, *pieces: bytes) -> None:
        """Send one whole message, its newline included; in pieces, so that none is copied."""
        ...

    def read_line(self, seconds: float, limit: int = LINE_LIMIT) -> str:
        """One answer of ASCII text, without its newline."""
        ...

    def read_block(self, seconds: float, limit: int) -> bytes | bytearray:
        """One answer that is a definite-length block; its data, at most ``limit`` bytes.

        They may be overwritten by the next block that is read.
        """
        ...

    def idle(self) -> None:
        """LinkError if bytes have come that nobody asked for."""
        ...

    def close(self) -> None:
        """Give the connection up; never fails, may be called again."""
        ...


class Reader(ABC):
    """Lines and blocks from two primitives, the same for every transport.

    A transport gives ``_exactly(count, deadline)`` and ``_line(limit, deadline)``; deadlines are
    points of ``time.monotonic()``.
    """

    address = ""
    usable = True

    @contextlib.contextmanager
    def _exchange(self):
        """Whatever leaves the body early, an interrupt too, leaves the link broken."""
        if not self.usable:
            raise LinkError(f"{self.address}: the link is broken; open a new one")
        self.usable = False
        try:
            yield
        except block.BlockError as error:
            raise LinkError(f"{self.address}: {error}") from error
        self.usable = True

    def read_line(self, seconds: float, limit: int = LINE_LIMIT) -> str:
        """See ``Link``."""
        with self._exchange():
            line = self._line(limit, time.monotonic() + seconds)
            text = line.removesuffix(b"\r")
            if not all(0x20 <= byte < 0x7F for byte in text):
                raise LinkError(f"{self.address}: expected a line of text, got {_shown(line)}")
        return text.decode("ascii")

    def read_block(self, seconds: float, limit: int) -> bytes | bytearray:
        """See ``Link``."""
        deadline = time.monotonic() + seconds
        with self._exchange():
            digits = block.count_digits(bytes(self._exactly(2, deadline)))
            count = block.byte_count(bytes(self._exactly(digits, deadline)), digits)
            if count > limit:
                raise LinkError(
                    f"{self.address}: expected a block of at most {limit} bytes, got {count}"
                )
            data = self._exactly(count, deadline)
            end = self._exactly(1, deadline)
            if bytes(end) != b"\n":
                raise LinkError(
                    f"{self.address}: expected a newline after {count} bytes, got {_shown(end)}"
                )
        return data

    @abstractmethod
    def _exactly(self, count: int, deadline: float) -> bytes | bytearray:
        """So many bytes, no more."""

    @abstractmethod
    def _line(self, limit: int, deadline: float) -> bytes:
        """All bytes up to a newline, which is not among them."""


class SocketLink(Reader):
    """A raw TCP socket, from the standard library.

    Nagle's algorithm is off, or each small message would wait 40 ms for an acknowledgement.
    """

    def __init__(self, address: str, seconds: float):
        """Connect.

        Raises:
            InputError: if the address is not ``host``, ``host:port`` or ``[v6]:port``.
            LinkError: if nobody answers there within ``seconds``.
        """
        self.address = address
        host, port = split_address(address)
        try:
            self._socket = socket.create_connection((host, port), seconds)
            self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        except (OSError, UnicodeError) as error:
            raise LinkError(f"{address}: cannot connect: {_reason(error)}") from error
        self._ahead = b""  # received, not yet asked for
        self._space = bytearray()  # of the last long block; fresh memory for each costs time

    def send(self, seconds: float, *pieces: bytes) -> None:
        """See ``Link``. The deadline covers the whole message, however slow the peer takes it."""
        deadline, size = time.monotonic() + seconds, sum(map(len, pieces))
        with self._exchange(), self._failures(f"sending {size} bytes"):
            for piece in pieces:
                self._wait(deadline)
                self._socket.sendall(piece)

    def idle(self) -> None:
        """See ``Link``."""
        with self._exchange(), self._failures("looking for stray bytes"):
            if self._ahead or select.select([self._socket], [], [], 0)[0]:
                stray = self._ahead or self._socket.recv(_SHOWN)
                if not stray:
                    raise LinkError(f"{self.address}: the instrument closed the link")
                raise LinkError(f"{self.address}: expected silence, got {_shown(stray)}")

    def close(self) -> None:
        """See ``Link``."""
        self.usable = False
        with contextlib.suppress(OSError):
            self._socket.close()

    def _exactly(self, count: int, deadline: float) -> bytes | bytearray:
        if count <= len(self._ahead):
            taken, self._ahead = self._ahead[:count], self._ahead[count:]
            return taken
        data = self._space if count == len(self._space) else bytearray(count)
        if count > LINE_LIMIT:
            self._space = data
        view, filled = memoryview(data), len(self._ahead)
        view[:filled], self._ahead = self._ahead, b""
        with self._failures(f"reading {count} bytes"):
            while filled < count:
                self._wait(deadline)
                got = self._socket.recv_into(view[filled:])
                if not got:
                    raise LinkError(
                        f"{self.address}: closed by the instrument after {filled} of {count} bytes"
                    )
                filled += got
        return data

    def _line(self, limit: int, deadline: float) -> bytes:
        line = bytearray(self._ahead)
        self._ahead = b""
        with self._failures("waiting for an answer"):
            while (end := line.find(b"\n")) < 0:
                if len(line) > limit:
                    raise LinkError(f"{self.address}: expected an answer of at most {limit} bytes")
                self._wait(deadline)
                got = self._socket.recv(LINE_LIMIT)
                if not got:
                    raise LinkError(f"{self.address}: closed by the instrument before its answer")
                line += got
        self._ahead = bytes(line[end + 1 :])
        if end > limit:
            raise LinkError(f"{self.address}: expected an answer of at most {limit} bytes")
        return bytes(line[:end])

    def _wait(self, deadline: float) -> None:
        remaining = deadline - time.monotonic()
        if remaining <= 0:
            raise TimeoutError
        self._socket.settimeout(remaining)

    @contextlib.contextmanager
    def _failures(self, doing: str):
        try:
            yield
        except TimeoutError as error:
            raise LinkError(f"{self.address}: out of time {doing}") from error
        except OSError as error:
            raise LinkError(f"{self.address}: failed {doing}: {_reason(error)}") from error


def split_address(address: str) -> tuple[str, int]:
    """Host and port of ``host``, ``host:port`` or ``[v6]:port``.

    Raises:
        InputError: for anything else.
    """
    host, colon, port = address.rpartition(":")
    if not colon or address.endswith("]"):
        host, port = address, str(SCPI_PORT)
    host = host.removeprefix("[").removesuffix("]")
    if not host or not (port.isascii() and port.isdigit() and 0 < int(port) < 65536):
        raise InputError(f"address: expected host:port or a VISA resource, got {address!r}")
    return host, int(port)


def is_visa(address: str) -> bool:
    """Whether the address is a VISA resource."""
    return "::" in address and not address.startswith("[")


def require_address(address: str) -> None:
    """InputError if the address makes no sense, or needs a package that is not installed."""
    if not is_visa(address):
        split_address(address)
    elif importlib.util.find_spec("pyvisa") is None:
        raise InputError(
            f"{address}: expected the packages pyvisa and pyvisa-py for a VISA resource; "
            "install the extra: pip install 'shaper[visa]'"
        )


def open_link(address: str, seconds: float) -> Link:
    """The transport that the address asks for: VISA if it holds ``::``, else a socket.

    Raises:
        InputError: if the address makes no sense, or needs a package that is not installed.
        LinkError: if the connection cannot be opened.
    """
    require_address(address)
    if is_visa(address):
        from shaper.awg.visa import VisaLink

        return VisaLink(address, seconds)
    return SocketLink(address, seconds)


def _shown(data: bytes | bytearray) -> str:
    """Bytes for a message, not too many."""
    return repr(bytes(data[:_SHOWN])) + ("..." if len(data) > _SHOWN else "")


def _reason(error: Exception) -> str:
    return getattr(error, "strerror", None) or str(error) or type(error).__name__
