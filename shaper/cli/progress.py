"""One line on stderr that says how a search gets on, and a Ctrl-C that loses nothing."""

from __future__ import annotations

import contextlib
import signal
import sys
import threading
import time
from collections.abc import Callable, Iterator

_ON_TERMINAL, _IN_A_LOG = 0.1, 5.0  # s between two lines


class ProgressLine:
    """Rewrites one line on a terminal; elsewhere writes one every few seconds."""

    def __init__(self):
        self._began = self._last = time.monotonic()
        self._live = sys.stderr.isatty()
        self._width = 0

    def __call__(self, stage: str, step: int, total: int, best: float) -> None:
        """The callback of a search."""
        now = time.monotonic()
        if now - self._last < (_ON_TERMINAL if self._live else _IN_A_LOG):
            return
        self._last = now
        text = f"{stage} {step}/{total}  best {best:.2e}  {now - self._began:.0f} s"
        if self._live:
            print("\r" + text.ljust(self._width), end="", file=sys.stderr, flush=True)
            self._width = len(text)
        else:
            print(text, file=sys.stderr, flush=True)

    def close(self) -> None:
        """Leave the line behind."""
        if self._width:
            print("\r" + " " * self._width + "\r", end="", file=sys.stderr, flush=True)
            self._width = 0


@contextlib.contextmanager
def patient_interrupt() -> Iterator[Callable[[], bool]]:
    """Within the body the first Ctrl-C only asks to stop; the second raises KeyboardInterrupt.

    Yields:
        a function that says whether to stop.
    """
    heard = threading.Event()

    def handle(number, frame):
        if heard.is_set():
            raise KeyboardInterrupt
        heard.set()
        print("\nstopping: the best so far is kept", file=sys.stderr, flush=True)

    if threading.current_thread() is not threading.main_thread():
        yield heard.is_set
        return
    before = signal.getsignal(signal.SIGINT)
    signal.signal(signal.SIGINT, handle)
    try:
        yield heard.is_set
    finally:
        signal.signal(signal.SIGINT, before)
