"""Loading without an instrument: the same code, the same bytes, answers as they should be.

What goes over this link is exactly what would go over the wire to an empty, healthy instrument.
"""

from __future__ import annotations

from dataclasses import dataclass

from shaper.awg import block
from shaper.awg.files import sha256
from shaper.awg.profile import Profile

_SHOWN = 100  # characters of a message


@dataclass(frozen=True)
class Message:
    """One message that would be sent: its text (a block shown by its count), size, sha256."""

    text: str
    size: int
    sha256: str


class RehearsalLink:
    """A ``Link`` that notes each message and answers like the profile's instrument."""

    address = "rehearsal"
    usable = True

    def __init__(self, profile: Profile):
        self.profile = profile
        self.messages: list[Message] = []
        self._traces: dict[str, bytes] = {}
        self._text = False  # whether data are answered as text
        self._order = profile.data.byte_order
        self._answer = ""
        self._block = b""

    def send(self, seconds: float, *pieces: bytes) -> None:
        """See ``Link``."""
        message = b"".join(pieces)
        says, plain = self.profile.commands, message.removesuffix(b"\n")
        head, mark, rest = plain.partition(b"#")
        shown = plain.decode("latin-1")
        tail = f";{says.complete}".encode()
        if mark and plain.endswith(tail):
            digits = block.count_digits(mark + rest[:1])
            data = rest[1 + digits : -len(tail)]
            shown = f"{head.decode()}#{rest[: 1 + digits].decode()}<{len(data)} bytes>"
            shown += tail.decode()
            self._traces[head.decode()] = data
            self._answer = "1"
        else:
            self._reply(shown)
        self.messages.append(Message(shown[:_SHOWN], len(message), sha256(message)))

    def _reply(self, text: str) -> None:
        """What a healthy, empty instrument answers."""
        profile, says = self.profile, self.profile.commands
        known = {
            says.identify: ",".join(v or "0" for v in profile.identity.model_dump().values()),
            says.complete: "1",
            says.error: '0,"No error"',
            says.catalog: '""',
            says.free: f"{block.MAX_BYTES * 1000},0",
            **{check.ask: str(check.expect) for check in profile.check},
            **{says.output_state.format(output=n): "0" for n in profile.outputs.numbers},
        }
        if text in (says.order_big, says.order_little):
            self._order = "big" if text == says.order_big else "little"
        if text in (says.format_text, says.format_binary):
            self._text = text == says.format_text
        self._answer = known.get(text, "")
        for head, data in self._traces.items():
            name = next(n for n in self._names() if says.data.format(name=n) == head)
            if text == says.data_query.format(name=name):
                words = block.from_bytes(data, profile.data.byte_order)
                self._answer = ",".join(map(str, words.tolist())) if self._text else ""
                self._block = block.to_bytes(words, self._order)

    def _names(self) -> list[str]:
        """Names of the traces so far, from the messages that stored them."""
        before, _, after = self.profile.commands.data.partition("{name}")
        return [head[len(before) : len(head) - len(after)] for head in self._traces]

    def read_line(self, seconds: float, limit: int = 0) -> str:
        """See ``Link``."""
        return self._answer

    def read_block(self, seconds: float, limit: int) -> bytes:
        """See ``Link``."""
        return self._block

    def idle(self) -> None:
        """See ``Link``."""

    def close(self) -> None:
        """See ``Link``."""
