"""The careful order of loading. Nothing here ever switches an output on.

1. clear errors; 2. identify, and match the profile; 3. outputs off, and confirmed off; 4. the
profile's questions; 5. formats, proved by a short trace that is written as words and read as text;
6. names and free memory; 7. for each trace: transfer, completion, errors to the end, read back in
the other byte order and compare byte for byte; 8. outputs still off. A set is loaded whole or not
at all.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from shaper.awg import block
from shaper.awg.instrument import Instrument, InstrumentError, StrangerError
from shaper.awg.interrupts import one_interrupt
from shaper.awg.link import Link
from shaper.awg.plan import Plan, Trace
from shaper.awg.profile import Profile
from shaper.awg.record import LoadRecord
from shaper.awg.stop import Session, make_safe
from shaper.errors import InputError, ReadBackError, SafetyError

PROBE = (1, -2, 3)  # reads otherwise in the other byte order


def begin_record(plan: Plan, path, address: str, **about) -> LoadRecord:
    """The record of a load that is about to start."""
    return LoadRecord(
        path,
        address=address,
        settings=plan.settings,
        pulses=list(plan.pulses),
        traces=[
            {
                "name": trace.name,
                "part": trace.part,
                "output": trace.output,
                "points": trace.points,
                "bytes": len(trace.data),
                "data_sha256": trace.data_sha256,
                "state": "planned",
            }
            for trace in plan.traces
        ],
        probe="not sent",
        **about,
    )


def load(
    plan: Plan,
    connect: Callable[[], Link],
    record: LoadRecord,
    *,
    replace: bool = False,
    resume: bool = False,
    ours: frozenset[str] = frozenset(),
    say: Callable[[str], None] = lambda text: None,
) -> None:
    """Load a set into an instrument's memory, in the order above.

    On any error, interrupt or broken link: outputs off (on a fresh link if need be), what was
    loaded removed again, both stated in the record and through ``say``; then the error goes on.

    Args:
        connect: opens a link.
        record: from ``begin_record``.
        replace: traces of the same names may be overwritten; their old content is lost.
        resume: keep traces whose read-back is equal already.
        ours: names that an unfinished load of ours left, which ``resume`` may overwrite.
        say: takes one line for people.
    Raises:
        SafetyError: wrong instrument, wrong answer to a question, output that does not go off.
        InputError: names taken, without ``replace``.
        ReadBackError: other bytes, or another byte order, than written.
        ShaperError: everything else that fails.
    """
    session = Session(connect, plan.profile, record)
    with one_interrupt() as interrupts:
        try:
            _in_order(session, plan, replace, resume, ours, say)
            record.finish("done")
        except BaseException as error:
            interrupts.silence()
            remove = record.states("sending", "loaded")
            if record.document["probe"] == "sending":
                remove.append(plan.profile.names.probe.upper())
            fail(session, error, remove, say)
            raise
        finally:
            session.close()


def fail(
    session: Session, error: BaseException, remove: list[str], say: Callable[[str], None]
) -> None:
    """What every failure ends in: safe, stated, recorded."""
    record = session.record
    session.stranger = session.stranger or isinstance(error, StrangerError)
    say(make_safe(session, remove))
    for state, words in (("removed", "removed again"), ("left", "could NOT be removed")):
        if names := record.states(state):
            say(f"{words}: {', '.join(names)}")
    if names := record.states("in place"):
        say(f"found equal and left there: {', '.join(names)}")
    interrupted = not isinstance(error, Exception)
    text = "interrupted" if interrupted else str(error) or type(error).__name__
    record.finish("interrupted" if interrupted else "failed", text)


def _in_order(
    session: Session,
    plan: Plan,
    replace: bool,
    resume: bool,
    ours: frozenset[str],
    say: Callable[[str], None],
) -> None:
    record, profile = session.record, session.profile
    instrument = session.open()
    prepare(instrument, record)
    say(f"output {' and '.join(map(str, profile.outputs.numbers))}: off, confirmed")
    instrument.formats()
    instrument.require_no_error("formats")
    there = _names_there(instrument, profile)
    _prove_byte_order(instrument, profile, record)
    if there is None and (resume or not replace):
        raise InputError(
            "names: this instrument cannot list them (commands.catalog is empty), so whether any "
            "is taken cannot be known; --replace without --resume says that overwriting is fine"
        )
    taken = [trace for trace in plan.traces if there is None or trace.name in there]
    equal = _in_place(instrument, taken, record) if resume else []
    others = [t.name for t in taken if t not in equal and not (resume and t.name in ours)]
    if others and not replace:
        raise InputError(
            f"names: expected them free, but {', '.join(others)} "
            f"{'is' if len(others) == 1 else 'are'} in the instrument; --replace overwrites"
        )
    missing = [trace for trace in plan.traces if trace not in equal]
    _room(instrument, [trace for trace in missing if there is not None and trace not in taken])
    for trace in missing:
        _one(instrument, trace, record, old=trace in taken, listed=there is not None)
        say(f"{trace.name}: {len(trace.data)} bytes, read back equal")
    if on := [n for n, state in instrument.outputs().items() if state]:
        raise SafetyError(f"output {on[0]}: expected off after loading, got on; who switched it?")
    instrument.require_no_error("the end")
    instrument.link.idle()
    record.put(
        output={"confirmed_off": True, "statement": "off, confirmed before and after loading"}
    )


def prepare(instrument: Instrument, record: LoadRecord) -> None:
    """Steps 1 to 4: errors cleared, identity matched, outputs off and confirmed, questions."""
    instrument.clear()
    record.put(identity=instrument.identify())
    if on := [n for n, state in instrument.switch_off().items() if state]:
        raise SafetyError(f"output {on[0]}: expected off after OFF was sent, got on")
    record.put(output={"confirmed_off": True, "statement": "off, confirmed before loading"})
    for question in instrument.profile.check:
        instrument.check(question)
    instrument.require_no_error("preparation")


def _names_there(instrument: Instrument, profile: Profile) -> list[str] | None:
    """The catalog, without a probe that a killed loader may have left."""
    there = instrument.catalog()
    probe = profile.names.probe.upper()
    if there is not None and probe in there:
        instrument.delete(probe)
        instrument.require_no_error(f"delete {probe}")
        there.remove(probe)
    return there


def _prove_byte_order(instrument: Instrument, profile: Profile, record: LoadRecord) -> None:
    """Write a few words as a block, read them as text: a swap both ways would hide otherwise."""
    says, data = profile.commands, profile.data
    if not (says.format_text and says.format_binary):
        record.line("byte order not proved: the profile has no text format")
        return
    probe = profile.names.probe.upper()
    codes = np.zeros((max(profile.memory.min_samples, profile.memory.granularity_samples), 2))
    codes = codes.astype(np.int16)
    count = min(len(codes), len(PROBE))
    codes[:count, 0] = PROBE[:count]
    gate = np.zeros(len(codes), bool)
    words = block.place(codes, data.bits, justify=data.justify, gate=gate, bit=None)
    values = words[:, 0] if data.layout == "apart" else words.reshape(-1)
    record.put(probe="sending")
    instrument.define(probe, len(values))
    instrument.store(probe, block.to_bytes(values, data.byte_order))
    instrument.require_no_error(f"transfer {probe}")
    instrument.formats(text=True)
    found = instrument.fetch_text(probe, len(values))
    instrument.formats()
    instrument.delete(probe)
    instrument.require_no_error("byte order proof")
    record.put(probe="removed")
    if found != values.tolist():
        raise ReadBackError(
            f"byte order: expected the words {values[:4].tolist()}... as text, "
            f"got {[int(v) if v == int(v) else v for v in found[:4]]}..."
        )
    record.line("byte order proved")


def _in_place(instrument: Instrument, taken: list[Trace], record: LoadRecord) -> list[Trace]:
    """Those whose read-back is equal already."""
    equal = []
    for trace in taken:
        found, wanted = _read_back(instrument, trace, instrument.profile.memory.max_bytes)
        if found == wanted:
            record.trace(trace.name, "in place")
            equal.append(trace)
    return equal


def _room(instrument: Instrument, new: list[Trace]) -> None:
    """InstrumentError if what comes new does not fit; what is replaced makes its own room."""
    free, needed = instrument.free_bytes(), sum(len(trace.data) for trace in new)
    if free is not None and free < needed:
        raise InstrumentError(f"memory: expected {needed} bytes free, got {free}")


def _one(
    instrument: Instrument, trace: Trace, record: LoadRecord, *, old: bool, listed: bool
) -> None:
    """Transfer one trace, read it back, compare."""
    record.trace(trace.name, "sending")
    if old:
        instrument.delete(trace.name)
        reports = instrument.errors(f"errors after: delete {trace.name}")
        if reports and listed:  # without a list it may well not have been there
            raise InstrumentError(f"delete {trace.name}: the instrument reports {reports[0]}")
    instrument.define(trace.name, trace.points)
    instrument.store(trace.name, trace.data)
    instrument.require_no_error(f"transfer {trace.name}")
    found, wanted = _read_back(instrument, trace, len(trace.data))
    if found == trace.data != wanted:
        raise ReadBackError(
            f"{trace.name}: expected the words in the other byte order when asked for it, got them "
            "in the same; leave the order that the instrument lacks empty in the profile's commands"
        )
    if found != wanted:
        raise ReadBackError(f"{trace.name}: {_difference(wanted, found)}")
    record.line("read back equal", trace=trace.name, data_sha256=trace.data_sha256)
    record.trace(trace.name, "loaded")


def _read_back(
    instrument: Instrument, trace: Trace, expected: int
) -> tuple[bytes | bytearray, bytes]:
    """What the instrument answers, and what it should: in the other byte order, if it has one.

    An instrument that takes words in the wrong order answers them in the wrong order too; asked
    for the other one, it cannot hide that. ``expected`` bytes set the deadline.
    """
    profile, wanted = instrument.profile, trace.data
    if instrument.both_orders:
        instrument.byte_order("little" if profile.data.byte_order == "big" else "big")
        wanted = np.frombuffer(trace.data, np.int16).byteswap().tobytes()
    found = instrument.fetch(trace.name, expected, profile.memory.max_bytes)
    if instrument.both_orders:
        instrument.byte_order(profile.data.byte_order)
    instrument.require_no_error(f"read back {trace.name}")
    return found, wanted


def _difference(written: bytes, found: bytes | bytearray) -> str:
    """Where two blocks differ, in words."""
    if len(found) != len(written):
        return f"expected {len(written)} bytes on reading back, got {len(found)}"
    differ = np.frombuffer(written, np.uint8) != np.frombuffer(found, np.uint8)
    first = int(np.argmax(differ))
    return (
        f"expected byte {written[first]:#04x} at {first} on reading back, "
        f"got {found[first]:#04x}; {int(np.count_nonzero(differ))} of {len(written)} differ"
    )
