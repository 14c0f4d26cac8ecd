"""Switching an output on: a step of its own, by the word of the person at the bench.

Before that word is asked for, the instrument must be the one that was loaded, its memory must hold
what the load record says, byte for byte, and the exposure computed from those bytes must be within
the limits. Whatever goes wrong, the outputs go off and the statement says whether they did.
"""

from __future__ import annotations

from collections.abc import Callable

from shaper.awg import block
from shaper.awg.files import sha256
from shaper.awg.instrument import Instrument
from shaper.awg.interrupts import one_interrupt
from shaper.awg.link import Link
from shaper.awg.load import fail, prepare
from shaper.awg.profile import Profile
from shaper.awg.record import LoadRecord
from shaper.awg.safety import Exposure, exposure, require_within
from shaper.awg.stop import Session, make_safe
from shaper.errors import ReadBackError, SafetyError, ShaperError


def require_loaded(loaded: dict, address: str) -> None:
    """SafetyError unless the record is of a finished load at this address."""
    if loaded["status"] != "done":
        raise SafetyError(
            f"load record: expected a load that is done, got status {loaded['status']!r}"
        )
    if loaded["address"] != address:
        raise SafetyError(f"load record: expected address {address!r}, got {loaded['address']!r}")
    if not loaded["traces"]:
        raise SafetyError("load record: expected at least one trace, got none")


def switch_on(
    loaded: dict,
    profile: Profile,
    connect: Callable[[], Link],
    record: LoadRecord,
    confirm: Callable[[list[Exposure]], bool],
    say: Callable[[str], None] = lambda text: None,
) -> None:
    """Check everything once more, ask, switch on, and confirm.

    Args:
        loaded: the load record, from ``shaper.awg.record.read_record``.
        record: of this step.
        confirm: gets the exposure of every pulse; True only by the word of the person at the
            bench.
        say: takes one line for people.
    Raises:
        SafetyError: another instrument, a limit exceeded, or no word given.
        ReadBackError: if the memory does not hold what was loaded.
        ShaperError: everything else; the outputs are off then, or the statement says otherwise.
    """
    session = Session(connect, profile, record)
    with one_interrupt() as interrupts:
        try:
            instrument = session.open()
            prepare(instrument, record)
            if record.document["identity"] != loaded["identity"]:
                raise SafetyError(
                    f"identity: expected {loaded['identity']} as loaded, "
                    f"got {record.document['identity']}"
                )
            found = _verified(instrument, loaded)
            say(f"{len(loaded['traces'])} traces are in the instrument as loaded")
            if not confirm(found):
                raise SafetyError("output: not switched on, the word was not given")
            _on(instrument, record, say)
            record.finish("done")
        except BaseException as error:
            interrupts.silence()
            fail(session, error, [], say)
            raise
        finally:
            session.close()


def switch_off(profile: Profile, connect: Callable[[], Link], record: LoadRecord) -> str:
    """All outputs off, whoever answers there.

    Returns:
        The statement.
    Raises:
        ShaperError: if it was not confirmed; its text is the statement.
    """
    session = Session(connect, profile, record)
    with one_interrupt() as interrupts:
        interrupts.silence()  # nothing is more urgent than this
        try:
            statement = make_safe(session, [])
        finally:
            session.close()
    if not record.document["output"]["confirmed_off"]:
        record.finish("failed", statement)
        raise ShaperError(statement)
    record.finish("done")
    return statement


def _verified(instrument: Instrument, loaded: dict) -> list[Exposure]:
    """The memory against the record, and what its bytes do to the load."""
    profile, held = instrument.profile, {}
    instrument.formats()
    instrument.require_no_error("formats")
    for trace in loaded["traces"]:
        data = instrument.fetch(trace["name"], trace["bytes"], profile.memory.max_bytes)
        if len(data) != trace["bytes"] or sha256(data) != trace["data_sha256"]:
            raise ReadBackError(
                f"{trace['name']}: the instrument does not hold what was loaded "
                f"(expected sha256 {trace['data_sha256'][:16]}..., got {sha256(data)[:16]}...)"
            )
        held[trace["name"]] = trace["part"], block.from_bytes(data, profile.data.byte_order)
    found = []
    for pulse in loaded["pulses"]:
        parts = dict(held[name] for name in pulse["traces"])
        words = block.join(parts)
        bit = profile.marker.bit if profile.marker else None
        codes, gate = block.unplace(words, profile.data.bits, profile.data.justify, bit)
        repetition = loaded["settings"]["repetition_Hz"]
        found.append(exposure(codes, gate, profile, repetition))
        require_within(found[-1], profile, pulse["pulse"])
    return found


def _on(instrument: Instrument, record: LoadRecord, say: Callable[[str], None]) -> None:
    instrument.link.idle()
    numbers = instrument.profile.outputs.numbers
    names = " and ".join(map(str, numbers))
    record.put(output={"confirmed_off": False, "statement": f"output {names}: being switched on"})
    for n in numbers:
        instrument.tell("output on", instrument.says.output_on.format(output=n))
    if off := [n for n, state in instrument.outputs().items() if not state]:
        raise ShaperError(f"output {off[0]}: expected on after ON was sent, got off")
    instrument.require_no_error("output on")
    statement = f"output {names}: ON, confirmed by the instrument"
    record.put(output={"confirmed_off": False, "statement": statement})
    say(statement)


def standard_profile() -> Profile:
    """Outputs 1 and 2 and the commands of SCPI-1999: enough to switch off, never to load."""
    return Profile.model_validate(
        {
            "identity": {"maker": "any", "model": "any"},
            "memory": {"max_samples": 1},
            "data": {"sample_rate_MSps": 1.0, "bits": 16},
            "outputs": {"i": 1, "q": 2, "full_scale_V": 1.0, "load_ohm": 50.0},
            "limits": {"peak_V": 1e-9, "mean_power_mW": 1e-9, "duty_cycle": 1e-9},
        }
    )
