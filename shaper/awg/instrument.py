"""What is said to the instrument, message by message, each exchange noted in the record.

The messages come from the profile. Answers are taken strictly: what is not the expected form is
an error, never a guess.
"""

from __future__ import annotations

import re
import time
from collections.abc import Callable

from shaper.awg import block
from shaper.awg.link import Link, LinkError
from shaper.awg.profile import CheckSection, Profile
from shaper.errors import SafetyError, ShaperError

ERROR_READS = 64  # the error queue must be empty by then
_CATALOG_LIMIT = 1 << 20  # bytes
_WHOLE = re.compile(r"[+-]?\d{1,12}")
_ERROR = re.compile(r'([+-]?\d{1,6})\s*,\s*"((?:[^"]|"")*)"')


class InstrumentError(ShaperError):
    """The instrument reports an error, or lacks what is needed."""


class StrangerError(SafetyError):
    """It answers, but it is not the instrument of the profile; it must be left alone."""


class Instrument:
    """One session with one instrument.

    Attributes:
        link: open, from ``shaper.awg.link``.
        profile: how to speak to it.
        note: called as ``note(step, sent=..., answer=..., seconds=...)`` after each exchange.
    """

    def __init__(self, link: Link, profile: Profile, note: Callable[..., None]):
        self.link, self.profile, self.note = link, profile, note
        self.says = profile.commands
        self.timeout = profile.link.timeout_s

    # -- one exchange --------------------------------------------------------------------------

    def tell(self, step: str, text: str) -> None:
        """A command without an answer."""
        self._exchange(step, text, lambda: None)

    def ask(self, step: str, text: str, limit: int = 4096) -> str:
        """A query with one line as its answer."""
        return self._exchange(step, text, lambda: self.link.read_line(self.timeout, limit))

    def whole(self, step: str, text: str) -> int:
        """A query whose answer is a whole number (NR1 of IEEE 488.2: a sign is allowed)."""
        answer = self.ask(step, text)
        if not _WHOLE.fullmatch(answer.strip()):
            raise LinkError(f"{text}: expected a whole number, got {answer[:80]!r}")
        return int(answer)

    def _exchange(self, step: str, text: str, answer: Callable):
        begin = time.monotonic()
        reply = None
        try:
            self.link.idle()  # an answer that nobody asked for must not be taken for this one
            self.link.send(self.timeout, text.encode("ascii") + b"\n")
            reply = answer()
            return reply
        finally:  # also when it failed: the record shows how far it came
            self.note(step, sent=text, answer=reply, seconds=round(time.monotonic() - begin, 6))

    # -- who and in what state -----------------------------------------------------------------

    def clear(self) -> None:
        """Empty error queue and status."""
        self.tell("clear errors", self.says.clear)

    def identify(self) -> dict[str, str]:
        """The four fields of ``*IDN?``.

        Raises:
            SafetyError: if it is not the instrument of the profile.
        """
        answer = self.ask("identify", self.says.identify)
        fields = [field.strip() for field in answer.split(",")]
        if len(fields) != 4:
            raise LinkError(f"identity: expected four fields, got {answer[:80]!r}")
        names = ("maker", "model", "serial", "firmware")
        found: dict[str, str] = dict(zip(names, fields, strict=True))
        wanted = self.profile.identity.model_dump()
        for key, value in wanted.items():
            if value and value != found[key]:
                raise StrangerError(
                    f"identity: expected {key} {value!r} as in the profile, got {found[key][:40]!r}"
                )
        return found

    def check(self, question: CheckSection) -> None:
        """Ask one question of the profile.

        Raises:
            SafetyError: if the answer is not the expected one.
        """
        answer = self.ask("check", question.ask).strip()
        right = answer == question.expect
        if isinstance(question.expect, float):
            try:
                right = abs(float(answer) - question.expect) <= question.tolerance
            except ValueError:
                right = False
        if not right:
            raise SafetyError(f"{question.ask}: expected {question.expect!r}, got {answer[:80]!r}")

    def errors(self, step: str) -> list[str]:
        """Read the error queue to its end, at most ``ERROR_READS`` entries."""
        found = []
        for _ in range(ERROR_READS):
            answer = self.ask(step, self.says.error)
            match = _ERROR.fullmatch(answer.strip())
            if not match:
                raise LinkError(f'error queue: expected number,"text", got {answer[:80]!r}')
            if int(match.group(1)) == 0:
                return found
            found.append(answer.strip()[:200])
        raise InstrumentError(
            f"error queue: expected it to end, got {ERROR_READS} errors, first {found[0]}"
        )

    def require_no_error(self, step: str) -> None:
        """InstrumentError if anything is in the error queue."""
        if found := self.errors(f"errors after: {step}"):
            raise InstrumentError(f"{step}: the instrument reports {'; '.join(found)[:400]}")

    # -- outputs -------------------------------------------------------------------------------

    def outputs(self) -> dict[int, bool]:
        """Which outputs are on."""
        states = {}
        for n in self.profile.outputs.numbers:
            value = self.whole("output on?", self.says.output_state.format(output=n))
            if value not in (0, 1):
                raise LinkError(f"output {n}: expected 0 or 1, got {value}")
            states[n] = bool(value)
        return states

    def switch_off(self) -> dict[int, bool]:
        """All outputs off, first of all; then what they say."""
        for n in self.profile.outputs.numbers:
            self.tell("output off", self.says.output_off.format(output=n))
        return self.outputs()

    # -- memory --------------------------------------------------------------------------------

    @property
    def both_orders(self) -> bool:
        """Whether the instrument can be asked for either byte order."""
        return bool(self.says.order_big and self.says.order_little)

    def formats(self, *, text: bool = False) -> None:
        """How data are to be answered and taken: words in the profile's byte order, or text."""
        if command := self.says.format_text if text else self.says.format_binary:
            self.tell("format", command)
        self.byte_order(self.profile.data.byte_order)

    def byte_order(self, order: str) -> None:
        """Words "big" or "little" from now on, where the instrument wants to be told."""
        if command := self.says.order_big if order == "big" else self.says.order_little:
            self.tell("byte order", command)

    def catalog(self) -> list[str] | None:
        """Names of all traces, in capitals; None if the instrument cannot say."""
        if not self.says.catalog:
            return None
        answer = self.ask("catalog", self.says.catalog, _CATALOG_LIMIT).strip()
        if not re.fullmatch(r'("[^"]*"|[A-Za-z0-9_]+)(\s*,\s*("[^"]*"|[A-Za-z0-9_]+))*', answer):
            raise LinkError(f"catalog: expected names, got {answer[:80]!r}")
        names = (name.strip().strip('"') for name in answer.split(","))
        return [name.upper() for name in names if name]

    def free_bytes(self) -> int | None:
        """Free memory; None if the instrument cannot say."""
        if not self.says.free:
            return None
        answer = self.ask("free memory", self.says.free)
        free = answer.split(",")[0]
        try:
            value = float(free)
            if not 0 <= value < 1e18:
                raise ValueError
        except ValueError:
            raise LinkError(
                f"free memory: expected a number of bytes, got {answer[:80]!r}"
            ) from None
        return int(value)

    def define(self, name: str, points: int) -> None:
        """Room for a trace, where the instrument wants to be told."""
        if self.says.define:
            self.tell("define", self.says.define.format(name=name, points=points))
            self.require_no_error(f"define {name}")

    def delete(self, name: str) -> None:
        """Remove a trace."""
        self.tell("delete", self.says.delete.format(name=name))

    def store(self, name: str, data: bytes) -> None:
        """Transfer a trace and wait for completion, in one message."""
        head = self.says.data.format(name=name)
        tail = ";" + self.says.complete
        prefix = block.header(len(data))
        begin, answer = time.monotonic(), ""
        try:
            self.link.idle()
            seconds = self.profile.link.transfer_seconds(len(data))
            self.link.send(seconds, head.encode() + prefix, data, tail.encode() + b"\n")
            answer = self.link.read_line(seconds)
        finally:
            self.note(
                "transfer",
                sent=f"{head}{prefix.decode()}<{len(data)} bytes>{tail}",
                answer=answer or None,
                seconds=round(time.monotonic() - begin, 6),
            )
        if not _WHOLE.fullmatch(answer.strip()) or int(answer) != 1:
            raise LinkError(f"transfer {name}: expected 1 on completion, got {answer[:80]!r}")

    def fetch(self, name: str, expected: int, limit: int) -> bytes | bytearray:
        """Read a trace back: in time for ``expected`` bytes, refused beyond ``limit`` bytes."""
        text = self.says.data_query.format(name=name)
        begin, data = time.monotonic(), b""
        try:
            self.link.idle()
            self.link.send(self.timeout, text.encode("ascii") + b"\n")
            data = self.link.read_block(self.profile.link.transfer_seconds(expected), limit)
        finally:
            self.note(
                "read back",
                sent=text,
                answer=f"<{len(data)} bytes>" if data else None,
                seconds=round(time.monotonic() - begin, 6),
            )
        return data

    def fetch_text(self, name: str, points: int) -> list[float]:
        """Read a short trace back as decimal numbers."""
        text = self.says.data_query.format(name=name)
        answer = self.ask("read back as text", text, 32 * points + 100)
        try:
            return [float(value) for value in answer.split(",")]
        except ValueError:
            raise LinkError(f"{text}: expected decimal numbers, got {answer[:80]!r}") from None
