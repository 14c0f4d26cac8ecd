"""Ctrl-C once: the first one stops the work, later ones must not stop the way out of trouble."""

from __future__ import annotations

import contextlib
import signal
import threading
from collections.abc import Iterator

_KINDS = ("SIGINT", "SIGTERM", "SIGHUP")


class Interrupts:
    """Whether a signal may still interrupt."""

    def __init__(self):
        self.heard = False

    def silence(self) -> None:
        """From now on signals are noted, not obeyed."""
        self.heard = True

    def handle(self, number, frame) -> None:
        """The signal handler."""
        if not self.heard:
            self.heard = True
            raise KeyboardInterrupt


@contextlib.contextmanager
def one_interrupt() -> Iterator[Interrupts]:
    """Within the body Ctrl-C, termination and hang-up raise KeyboardInterrupt, at most once.

    A signal that was ignored before (``nohup``) stays ignored. In other threads than the main one,
    which gets no signals, nothing changes.
    """
    interrupts, before = Interrupts(), {}
    if threading.current_thread() is threading.main_thread():
        kinds = [getattr(signal, name) for name in _KINDS if hasattr(signal, name)]
        before = {kind: signal.getsignal(kind) for kind in kinds}
        for kind, old in before.items():
            if old is not signal.SIG_IGN and old is not None:
                signal.signal(kind, interrupts.handle)
    try:
        yield interrupts
    finally:
        for kind, old in before.items():
            if old is not None:
                signal.signal(kind, old)
