"""A stand-in for a waveform generator: IEEE 488.2 messages and a subset of SCPI-1999 over TCP.

It takes every form that the standard allows within the subset: long and short headers in any case,
optional nodes, compound messages with their header path, white space, decimal and #H #Q #B
numbers, number lists, definite-length blocks with leading zeros in the count. Where the standard
was not at hand the rule is from memory and marked (mem). Nothing is imported from the project.

Faults can be set; see ``FAULTS``. Meant for the loopback address only.
"""

from __future__ import annotations

import asyncio
import contextlib
import re
import socket
import struct
import threading
from collections import deque
from dataclasses import dataclass, field

import numpy as np

MAX_TEXT = 1 << 20  # bytes of a message without its blocks
CHUNK = 1 << 18  # bytes swapped at a time
QUEUE = 32  # errors kept (the last one becomes -350)
BLOCK_MARK = "\x01"  # where a block stood in the text of a message

FAULTS = {
    "stall": "from this message on, reads nothing and says nothing until the link is closed",
    "stall_mid_block": "stops reading in the middle of the next block",
    "late": "the answer comes, but after `seconds`",
    "close": "closes the link instead of executing",
    "close_mid_block": "closes the link in the middle of the next block that it receives",
    "close_mid_answer": "closes the link in the middle of an answer",
    "flip_stored": "one bit of the next stored trace is wrong",
    "flip_answer": "one bit of the next answered block is wrong",
    "short_answer": "the next answered block lacks its last word, the count agreeing",
    "cut_answer": "the next answered block ends early, the count promising more",
    "refuse": "an error in the queue instead of the deed, silence instead of an answer",
    "flood": "the error queue never ends",
    "garbage": "the answer is noise",
    "wrong_order": "FORMat:BORDer is ignored, both ways",
    "deaf": "OUTPut OFF is accepted and ignored",
    "switches_on": "an output goes on by itself",
    "no_entry": "new links are closed at once",
}


class ScpiError(Exception):
    """Goes into the error queue."""

    def __init__(self, number: int, text: str):
        super().__init__(text)
        self.number, self.text = number, text


@dataclass
class Fault:
    """``kind`` strikes at the message with this number (from 0), once or from then on."""

    kind: str
    at: int = 0
    lasting: bool = False
    seconds: float = 0.0
    struck: int = 0

    def due(self, message: int) -> bool:
        return message >= self.at and (self.lasting or not self.struck)


def pattern(spec: str) -> re.Pattern:
    """Regular expression of a header: capitals are the short form, [] optional, # a suffix."""

    def node(match):
        name = match.group()
        short = "".join(c for c in name if c.isupper())
        return f"(?:{name.upper()}|{short})"

    regex = re.sub(r"[A-Z][A-Za-z]+", node, spec.replace("[", "(?:").replace("]", ")?"))
    return re.compile(regex.replace("#", r"(\d*)") + r"\Z")


def number(text: str) -> float:
    """Decimal or nondecimal numeric program data."""
    bases = {"#H": 16, "#Q": 8, "#B": 2}
    try:
        if text[:2].upper() in bases:
            return int(text[2:], bases[text[:2].upper()])
        if not re.fullmatch(r"[+-]?(\d+\.?\d*|\.\d+)(\s*[Ee]\s*[+-]?\d+)?", text):
            raise ValueError
        return float(re.sub(r"\s", "", text))
    except ValueError:
        raise ScpiError(-104, "Data type error") from None


def whole(text: str) -> int:
    """A number, rounded as the standard asks for where whole numbers are needed."""
    return int(round(number(text)))


@dataclass
class Generator:
    """State and language of the instrument; no input or output here."""

    identity: str = "Alder Bench,Stand-in,0,1.0"
    outputs: int = 2
    memory: int = 64_000_000  # bytes
    on: dict[int, bool] = field(default_factory=dict)
    traces: dict[str, bytearray] = field(default_factory=dict)  # big-endian int16
    errors: deque = field(default_factory=deque)
    answers_to: dict[str, str] = field(default_factory=dict)  # further queries, for checks
    faults: list[Fault] = field(default_factory=list)
    log: list[str] = field(default_factory=list)  # every message executed, blocks as <n bytes>
    switched_on: list[str] = field(default_factory=list)  # every command that switched one on
    told: dict[int, bool] = field(default_factory=dict)  # last answer to OUTPut?
    stored_while_on: int = 0
    messages: int = 0

    def __post_init__(self):
        on = {n: self.on.get(n, False) for n in range(1, self.outputs + 1)}
        self.event, self.enables = 0, {"ESE": 0, "SRE": 0}
        self.reset()
        self.on = on

    def reset(self):
        """*RST: settings, not traces (mem) and not the error queue."""
        self.format, self.width, self.swapped = "ASC", 0, False
        self.on = dict.fromkeys(self.on, False)

    # -- faults ------------------------------------------------------------------------------

    def strikes(self, kind: str) -> Fault | None:
        """The fault of this kind that is due now; it counts as struck."""
        for fault in self.faults:
            if fault.kind == kind and fault.due(self.messages):
                fault.struck += 1
                return fault
        return None

    # -- messages ----------------------------------------------------------------------------

    def execute(self, text: str, blocks: list) -> list:
        """Run one whole message; the pieces of its answer without the newline."""
        blocks, answers, path = deque(blocks), [], ""
        if self.strikes("switches_on"):
            self.on[1] = True
        refused = self.strikes("refuse")
        for unit in split_outside_quotes(text, ";"):
            if not (unit := unit.strip(" \t\r\n\x00")):
                continue
            try:
                if refused:
                    raise ScpiError(-200, "Execution error")
                answer, path = self._unit(unit, blocks, path)
                if answer is not None:
                    pieces = answer if isinstance(answer, tuple) else (answer,)
                    answers += [b";", *pieces] if answers else pieces
            except ScpiError as error:
                self.fail(error.number, error.text)
                if -200 < error.number <= -100:  # a command error: the rest cannot be trusted
                    break
        return answers

    def fail(self, code: int, text: str):
        """Into the error queue and the event register."""
        self.event |= {1: 32, 2: 16, 3: 8, 4: 4}.get(-code // 100, 8)
        if len(self.errors) >= QUEUE:
            self.errors[-1] = (-350, "Queue overflow")
        else:
            self.errors.append((code, text))

    def _unit(self, unit: str, blocks: deque, path: str) -> tuple:
        head, _, rest = unit.replace("\t", " ").partition(" ")
        head = head.upper()
        parameters = [p.strip() for p in split_outside_quotes(rest, ",")] if rest.strip() else []
        values = [blocks.popleft() if p == BLOCK_MARK else p for p in parameters]
        if any(isinstance(v, str) and BLOCK_MARK in v for v in values):
            raise ScpiError(-161, "Invalid block data")
        if not head.startswith("*"):
            full = head[1:] if head.startswith(":") else path + head
            path = full.removesuffix("?").rpartition(":")[0] + ":"
            path, head = path if path != ":" else "", full
        for expression, deed in COMMANDS:
            if match := expression.match(head):
                return deed(self, match, values), path
        if unit in self.answers_to:
            return self.answers_to[unit].encode(), path
        raise ScpiError(-113, "Undefined header")

    # -- the subset --------------------------------------------------------------------------

    def identify(self, match, values):
        return self.identity.encode()

    def clear(self, match, values):
        self.errors.clear()
        self.event = 0

    def restart(self, match, values):
        self.reset()

    def nothing(self, match, values):
        return None

    def complete(self, match, values):
        self.event |= 1

    def complete_query(self, match, values):
        return b"1"

    def event_query(self, match, values):
        value, self.event = self.event, 0
        return b"%d" % value

    def status_query(self, match, values):
        summary = 32 if self.event & self.enables["ESE"] else 0
        return b"%d" % (summary | (4 if self.errors else 0))

    def enable(self, match, values):
        self.enables[match.group()[1:4]] = whole(one(values)) & 255

    def enable_query(self, match, values):
        return b"%d" % self.enables[match.group()[1:4]]

    def self_test(self, match, values):
        return b"0"

    def error_query(self, match, values):
        if self.strikes("flood"):
            return b'-310,"System error"'
        code, text = self.errors.popleft() if self.errors else (0, "No error")
        return f'{code},"{text}"'.encode()

    def error_count(self, match, values):
        return b"%d" % len(self.errors)

    def version(self, match, values):
        return b"1999.0"

    def _output(self, match) -> int:
        n = int(match.group(1) or 1)
        if n not in self.on:
            raise ScpiError(-114, "Header suffix out of range")
        return n

    def output(self, match, values):
        n, word = self._output(match), one(values).upper()
        state = word == "ON" if word in ("ON", "OFF") else bool(whole(word))
        if state:
            self.switched_on.append(match.group())
        elif self.strikes("deaf"):
            return
        self.on[n] = state

    def output_query(self, match, values):
        n = self._output(match)
        self.told[n] = self.on[n]
        return b"%d" % self.on[n]

    def set_format(self, match, values):
        kind = one(values[:1]).upper()
        names = {"ASC": "ASC", "ASCII": "ASC", "INT": "INT", "INTEGER": "INT", "REAL": "REAL"}
        widths = {"ASC": range(0, 256), "INT": (8, 16, 32), "REAL": (32, 64)}
        if kind not in names or len(values) > 2:
            raise ScpiError(-224, "Illegal parameter value")
        kind = names[kind]
        width = whole(values[1]) if len(values) == 2 else {"ASC": 0, "INT": 16, "REAL": 32}[kind]
        if width not in widths[kind]:
            raise ScpiError(-224, "Illegal parameter value")
        self.format, self.width = kind, width

    def format_query(self, match, values):
        return f"{self.format},{self.width}".encode()

    def border(self, match, values):
        word = one(values).upper()
        if word not in ("NORM", "NORMAL", "SWAP", "SWAPPED"):
            raise ScpiError(-224, "Illegal parameter value")
        self.swapped = word.startswith("SWAP")

    def border_query(self, match, values):
        return b"SWAP" if self.swapped else b"NORM"

    def _code(self) -> str:
        """struct code of one value in a block."""
        swapped = False if self.strikes("wrong_order") else self.swapped
        kinds = {("INT", 8): "b", ("INT", 16): "h", ("INT", 32): "i"}
        kinds |= {("REAL", 32): "f", ("REAL", 64): "d"}
        return ("<" if swapped else ">") + kinds.get((self.format, self.width), "h")

    def _used(self) -> int:
        return sum(map(len, self.traces.values()))

    def _room(self, extra: int):
        if self._used() + extra > self.memory:
            raise ScpiError(-225, "Out of memory")

    def _known(self, text) -> str:
        name = trace_name(text)
        if name not in self.traces:
            raise ScpiError(-224, "Illegal parameter value")
        return name

    def define(self, match, values):
        name = trace_name(one(values[:1]))
        if name in self.traces:
            raise ScpiError(-293, "Referenced name already exists")
        size = 1
        if len(values) == 2:
            size_text = one(values[1:])
            is_name = re.match("[A-Za-z]", size_text)
            size = len(self.traces[self._known(size_text)]) // 2 if is_name else whole(size_text)
        if len(values) > 2:
            raise ScpiError(-108, "Parameter not allowed")
        if size < 1:
            raise ScpiError(-222, "Data out of range")
        self._room(2 * size)
        self.traces[name] = bytearray(2 * size)

    def data(self, match, values):
        if len(values) < 2:
            raise ScpiError(-109, "Missing parameter")
        name, block = trace_name(values[0]), values[1]
        size = len(self.traces[name]) // 2 if name in self.traces else None
        if isinstance(block, str):
            numbers = [number(v) for v in map(one, ([v] for v in values[1:]))]
            if len(numbers) == 1 and size is not None:
                numbers *= size  # a single number fills the whole trace
        elif len(values) > 2:
            raise ScpiError(-108, "Parameter not allowed")
        elif self.format in ("INT", "ASC") and self.width in (0, 16):
            numbers = None  # words as they are
            if len(block) % 2:
                raise ScpiError(-161, "Invalid block data")
            content = block if self._code()[0] == ">" else swap(block)
        else:
            code = self._code()
            width = struct.calcsize(code)
            if len(block) % width:
                raise ScpiError(-161, "Invalid block data")
            numbers = list(struct.unpack(f"{code[0]}{len(block) // width}{code[1]}", block))
        if numbers is not None:
            try:
                content = struct.pack(f">{len(numbers)}h", *(round(v) for v in numbers))
            except (struct.error, ValueError, OverflowError):
                raise ScpiError(-222, "Data out of range") from None
        if size is None:
            self._room(len(content))
            self.traces[name] = bytearray(content)
        elif len(content) > 2 * size:
            raise ScpiError(-223, "Too much data")
        elif len(content) == 2 * size:
            self.traces[name] = content if isinstance(content, bytearray) else bytearray(content)
        else:
            self.traces[name][: len(content)] = content  # the rest keeps its values (mem)
        if self.strikes("flip_stored") and content:
            self.traces[name][len(content) // 2] ^= 0x10
        self.stored_while_on += any(self.on.values())

    def data_query(self, match, values):
        content = self.traces[self._known(one(values))]
        if self.format == "ASC":
            words = struct.unpack(f">{len(content) // 2}h", content)
            return ",".join(map(str, words)).encode()
        code = self._code()
        if code[1] == "h":
            data = content
            if code[0] == "<":
                data = swap(content) if len(content) <= CHUNK else SwappedLater(content)
        else:
            words = struct.unpack(f">{len(content) // 2}h", content)
            try:
                data = struct.pack(f"{code[0]}{len(words)}{code[1]}", *words)
            except struct.error:
                raise ScpiError(-222, "Data out of range") from None
        if self.strikes("flip_answer") and data:
            data = bytearray(b"".join(data) if isinstance(data, SwappedLater) else data)
            data[len(data) // 3] ^= 1
        if self.strikes("short_answer"):
            data = data[:-2]
        count = b"%d" % len(data)
        if self.strikes("cut_answer"):
            data = data[: len(data) // 4 * 2]
        return b"#%d%s" % (len(count), count), data

    def catalog(self, match, values):
        return ",".join(f'"{name}"' for name in self.traces).encode() or b'""'

    def free(self, match, values):
        return b"%d,%d" % (self.memory - self._used(), self._used())

    def points(self, match, values):
        name = self._known(one(values[:1]))
        old = self.traces[name]
        size = 2 * whole(one(values[1:]))
        if size < 2:
            raise ScpiError(-222, "Data out of range")
        self._room(size - len(old))
        self.traces[name] = old[:size] + bytearray(max(0, size - len(old)))

    def points_query(self, match, values):
        return b"%d" % (len(self.traces[self._known(one(values))]) // 2)

    def delete(self, match, values):
        del self.traces[self._known(one(values))]

    def delete_all(self, match, values):
        self.traces.clear()

    def copy(self, match, values):
        target, source = trace_name(one(values[:1])), one(values[1:])
        content = self.traces[self._known(source)]
        self._room(len(content) - len(self.traces.get(target, b"")))
        self.traces[target] = bytearray(content)


COMMANDS = [
    (pattern(spec), deed)
    for spec, deed in {
        r"\*IDN\?": Generator.identify,
        r"\*CLS": Generator.clear,
        r"\*RST": Generator.restart,
        r"\*WAI": Generator.nothing,
        r"\*OPC": Generator.complete,
        r"\*OPC\?": Generator.complete_query,
        r"\*ESR\?": Generator.event_query,
        r"\*STB\?": Generator.status_query,
        r"\*ESE": Generator.enable,
        r"\*SRE": Generator.enable,
        r"\*ESE\?": Generator.enable_query,
        r"\*SRE\?": Generator.enable_query,
        r"\*TST\?": Generator.self_test,
        r"SYSTem:ERRor[:NEXT]\?": Generator.error_query,
        r"SYSTem:ERRor:COUNt\?": Generator.error_count,
        r"SYSTem:VERSion\?": Generator.version,
        r"OUTPut#[:STATe]": Generator.output,
        r"OUTPut#[:STATe]\?": Generator.output_query,
        r"FORMat[:DATA]": Generator.set_format,
        r"FORMat[:DATA]\?": Generator.format_query,
        r"FORMat:BORDer": Generator.border,
        r"FORMat:BORDer\?": Generator.border_query,
        r"(?:TRACe|DATA):DEFine": Generator.define,
        r"(?:TRACe|DATA)[:DATA]": Generator.data,
        r"(?:TRACe|DATA)[:DATA]\?": Generator.data_query,
        r"(?:TRACe|DATA):CATalog\?": Generator.catalog,
        r"(?:TRACe|DATA):FREE\?": Generator.free,
        r"(?:TRACe|DATA):POINts": Generator.points,
        r"(?:TRACe|DATA):POINts\?": Generator.points_query,
        r"(?:TRACe|DATA):DELete[:NAME]": Generator.delete,
        r"(?:TRACe|DATA):DELete:ALL": Generator.delete_all,
        r"(?:TRACe|DATA):COPY": Generator.copy,
    }.items()
]


def one(values: list) -> str:
    """The only parameter, which must not be a block."""
    if len(values) != 1:
        raise ScpiError(
            *((-108, "Parameter not allowed") if values else (-109, "Missing parameter"))
        )
    if not isinstance(values[0], str):
        raise ScpiError(-168, "Block data not allowed")
    return values[0]


def trace_name(text) -> str:
    """Character program data: a letter, then letters, digits, underscores; at most 12."""
    if not isinstance(text, str):
        raise ScpiError(-168, "Block data not allowed")
    if not re.fullmatch(r"[A-Za-z][A-Za-z0-9_]*", text):
        raise ScpiError(-141, "Invalid character data")
    if len(text) > 12:
        raise ScpiError(-144, "Character data too long")
    return text.upper()


def swap(data) -> memoryview:
    """Every two bytes exchanged."""
    return memoryview(np.frombuffer(data, np.uint16).byteswap()).cast("B")


class SwappedLater:
    """A long trace in the other byte order, made piece by piece while it is sent."""

    def __init__(self, data):
        self.data = memoryview(data)

    def __len__(self):
        return len(self.data)

    def __getitem__(self, part: slice):
        return SwappedLater(self.data[part])

    def __iter__(self):
        for start in range(0, len(self), CHUNK):
            yield swap(self.data[start : start + CHUNK])


def split_outside_quotes(text: str, separator: str) -> list[str]:
    """The parts between separators that do not stand in a quoted string."""
    if '"' not in text and "'" not in text:
        return text.split(separator)
    parts, quote = [""], ""
    for c in text:
        quote = "" if c == quote else (c if not quote and c in "\"'" else quote)
        if c == separator and not quote:
            parts.append("")
        else:
            parts[-1] += c
    return parts


class Closed(Exception):
    """The link is gone, or a fault says so."""


class Session:
    """One link: bytes into messages, answers into bytes."""

    def __init__(self, generator: Generator, link: socket.socket):
        self.generator, self.link = generator, link
        self.loop = asyncio.get_running_loop()
        self.ahead = b""

    async def run(self):
        try:
            while True:
                text, blocks = await self.message()
                await self.answer(text, blocks)
        except (Closed, OSError):
            pass
        finally:
            self.link.close()

    async def more(self) -> bytes:
        data = await self.loop.sock_recv(self.link, 65536)
        if not data:
            raise Closed
        return data

    async def message(self) -> tuple[str, list]:
        """Everything up to a newline that is not in a block; each block gives its mark."""
        text, blocks, start = b"", [], 0
        while True:
            while not (stop := re.compile(rb"\n|#[0-9]").search(self.ahead, start)):
                if len(self.ahead) + len(text) > MAX_TEXT:
                    self.generator.fail(-223, "Too much data")
                    raise Closed
                start = max(0, len(self.ahead) - 1)  # a # may wait for its digit
                self.ahead += await self.more()
            text += self.ahead[: stop.start()].replace(BLOCK_MARK.encode(), b"?")
            found, self.ahead, start = stop.group(), self.ahead[stop.end() :], 0
            if found == b"\n":
                return text.decode("latin-1"), blocks
            if found == b"#0":  # the indefinite form needs an END that a socket does not have
                self.generator.fail(-161, "Invalid block data")
                raise Closed
            blocks.append(await self.block(int(found[1:])))
            text += BLOCK_MARK.encode()

    async def block(self, digits: int) -> bytearray:
        while len(self.ahead) < digits:
            self.ahead += await self.more()
        count = self.ahead[:digits]
        if not count.isdigit() or int(count) > self.generator.memory:
            self.generator.fail(-161, "Invalid block data")
            raise Closed
        data = bytearray(int(count))
        view = memoryview(data)
        filled = min(len(data), len(self.ahead) - digits)
        view[:filled] = self.ahead[digits : digits + filled]
        self.ahead = self.ahead[digits + filled :]
        await self.mid_block(filled, data)
        while filled < len(data):
            got = await self.loop.sock_recv_into(self.link, view[filled:])
            if not got:
                raise Closed
            filled += got
            await self.mid_block(filled, data)
        return data

    async def mid_block(self, filled: int, data: bytearray):
        """Faults that strike when half of a block has come."""
        if filled >= len(data) // 2:
            if self.generator.strikes("close_mid_block"):
                raise Closed
            if self.generator.strikes("stall_mid_block"):
                await self.until_closed()

    async def until_closed(self):
        """Neither read nor write until the other side gives up (seen by looking, not reading)."""
        established = 1
        while not hasattr(socket, "TCP_INFO") or established == 1:
            await asyncio.sleep(0.02)
            if hasattr(socket, "TCP_INFO"):
                established = self.link.getsockopt(socket.IPPROTO_TCP, socket.TCP_INFO, 1)[0]
        raise Closed

    async def answer(self, text: str, blocks: list):
        generator = self.generator
        if generator.strikes("stall"):
            await self.until_closed()
        if generator.strikes("close"):
            raise Closed
        shown = text
        for data in blocks:
            shown = shown.replace(BLOCK_MARK, f"<{len(data)} bytes>", 1)
        generator.log.append(shown)
        late = generator.strikes("late") if "?" in text else None
        reply = generator.execute(text, blocks)
        generator.messages += 1
        if not reply:
            return
        if generator.strikes("garbage"):
            reply = [bytes((7 * n + 129) % 256 for n in range(len(reply[0]))).replace(b"\n", b"?")]
        if len(reply[-1]) < 4096:
            reply = [b"".join(reply) + b"\n"]
        else:
            reply.append(b"\n")
        if late:
            await asyncio.sleep(late.seconds)
        if generator.strikes("close_mid_answer"):
            await self.loop.sock_sendall(self.link, reply[0][: len(reply[0]) // 2])
            raise Closed
        for piece in reply:
            for part in piece if isinstance(piece, SwappedLater) else (piece,):
                await self.loop.sock_sendall(self.link, part)


async def serve(generator: Generator, listener: socket.socket):
    """Take links until cancelled; none is left open then."""
    loop, tasks = asyncio.get_running_loop(), set()
    listener.setblocking(False)

    def take():
        try:
            link, _ = listener.accept()
        except OSError:  # gone again
            return
        link.setblocking(False)
        link.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        if generator.strikes("no_entry"):
            link.close()
            return
        task = loop.create_task(Session(generator, link).run())
        tasks.add(task)
        task.add_done_callback(tasks.discard)
        task.add_done_callback(lambda task: link.close())

    loop.add_reader(listener, take)
    try:
        await asyncio.Event().wait()
    finally:
        loop.remove_reader(listener)
        for task in list(tasks):
            task.cancel()
        await asyncio.gather(*tasks, return_exceptions=True)


@contextlib.contextmanager
def running(generator: Generator | None = None):
    """The stand-in in a thread of its own on a free loopback port; gives it and its address."""
    generator = generator or Generator()
    listener = socket.create_server(("127.0.0.1", 0))
    loop = asyncio.new_event_loop()
    task = loop.create_task(serve(generator, listener))

    def run():
        with contextlib.suppress(asyncio.CancelledError):
            loop.run_until_complete(task)
        loop.close()

    thread = threading.Thread(target=run)
    thread.start()
    try:
        yield generator, f"127.0.0.1:{listener.getsockname()[1]}"
    finally:
        loop.call_soon_threadsafe(task.cancel)
        thread.join()
        listener.close()
