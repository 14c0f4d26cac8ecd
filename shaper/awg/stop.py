"""The way out of trouble: outputs off, and the plain truth about whether that was confirmed.

Then, and only then, the traces of a set that failed are removed again.
"""

from __future__ import annotations

from collections.abc import Callable

from shaper.awg.instrument import Instrument
from shaper.awg.link import Link
from shaper.awg.profile import Profile
from shaper.awg.record import LoadRecord
from shaper.errors import ShaperError

ATTEMPTS = 3  # links tried, one after the other
BY_HAND = "go to the bench and switch it off by hand"


class Session:
    """A link that can be renewed, and what is known of the instrument at its end.

    Attributes:
        connect: opens a link.
        instrument: on the present link; None without one.
        stranger: True once it has answered as another instrument than the profile's.
        reachable: whether it answered when it was last told to switch off.
    """

    def __init__(self, connect: Callable[[], Link], profile: Profile, record: LoadRecord):
        self.connect, self.profile, self.record = connect, profile, record
        self.instrument: Instrument | None = None
        self.stranger = self.reachable = False

    def open(self) -> Instrument:
        """A fresh link; the old one is given up first."""
        self.close()
        self.instrument = Instrument(self.connect(), self.profile, self.record.line)
        return self.instrument

    def usable(self) -> Instrument:
        """The present link if nothing went wrong on it, else a fresh one."""
        if self.instrument is not None and self.instrument.link.usable:
            return self.instrument
        return self.open()

    def close(self) -> None:
        """Give the link up; nothing is sent."""
        if self.instrument is not None:
            self.instrument.link.close()
            self.instrument = None


def make_safe(session: Session, remove: list[str]) -> str:
    """Outputs off on this or a fresh link, then traces removed; never fails.

    The result goes into the record: ``output`` with ``confirmed_off`` and a statement for people,
    and the state of each trace. An instrument that is not the profile's is left alone.

    Args:
        remove: names of traces of this run that are not to stay.
    Returns:
        The statement about the outputs.
    """
    record = session.record
    record.tolerant = True  # a full disk must not keep an output on
    left = list(remove)
    if session.stranger:
        confirmed, statement = False, _look_only(session)
    else:
        confirmed, statement = _switch_off(session)
        if session.reachable:
            left = _tidy(session, remove)
            again, later = _switch_off(session)  # the last word: what they are when we leave
            if session.reachable:
                confirmed, statement = again, later
    for name in remove:
        record.trace(name, "left" if name in left else "removed")
    record.put(output={"confirmed_off": confirmed, "statement": statement})
    return statement


def _switch_off(session: Session) -> tuple[bool, str]:
    """OFF on up to ``ATTEMPTS`` links until every output says so."""
    outputs = " and ".join(str(n) for n in session.profile.outputs.numbers)
    statement = f"output {outputs}: OFF could NOT be sent; {BY_HAND}"
    for _ in range(ATTEMPTS):
        session.reachable = False
        try:
            instrument = session.usable()
            statement = f"output {outputs}: OFF was sent but NOT confirmed; {BY_HAND}"
            on = [str(n) for n, state in instrument.switch_off().items() if state]
            session.reachable = True
            if not on:
                return True, f"output {outputs}: off, confirmed by the instrument"
            statement = f"output {' and '.join(on)}: STILL ON after OFF was sent; {BY_HAND}"
        except ShaperError as error:
            session.record.line("trouble while switching off", answer=str(error)[:400])
    return False, statement


def _look_only(session: Session) -> str:
    """What an instrument that is not ours says of its outputs; nothing is changed on it."""
    states = "its outputs did not say whether they are on"
    try:
        found = session.usable().outputs().items()
        states = "its outputs: " + ", ".join(f"{n} {'ON' if on else 'off'}" for n, on in found)
    except ShaperError as error:
        session.record.line("trouble while looking", answer=str(error)[:400])
    return "not the instrument of the profile, so nothing was switched or changed; " + states


def _tidy(session: Session, names: list[str]) -> list[str]:
    """Note the errors at the time and remove traces; returns those that may still be there."""
    left = list(names)
    for _ in range(ATTEMPTS):
        try:
            instrument = session.usable()
            if found := instrument.errors("errors at the time"):
                session.record.line("the instrument reports", answer="; ".join(found)[:400])
            return _removed(instrument, left) if left else left
        except ShaperError as error:
            session.record.line("trouble while tidying", answer=str(error)[:400])
    return left


def _removed(instrument: Instrument, names: list[str]) -> list[str]:
    """Delete what is there of these; returns those that may still be there."""
    there = instrument.catalog()
    for name in names:
        if there is None or name in there:
            instrument.delete(name)
    reports = instrument.errors("errors after removing")
    there = instrument.catalog()
    if there is None:  # it cannot list: believed only if it had nothing to report
        return list(names) if reports else []
    return [name for name in names if name in there]
