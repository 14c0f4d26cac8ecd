"""Everything that can go wrong, at every moment: never a wrong success, never a silent output.

The rules that every ending must obey stand in ``assert_honest``.
"""

from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
import stand_in
from awg_case import holds, plan, profile, run_load

from shaper.awg.link import LinkError, Reader
from shaper.awg.load import begin_record, load
from shaper.awg.record import read_record
from shaper.errors import ShaperError

SCHEDULES = 200
MUTATIONS = 10_000
SHORT = {"link": {"timeout_s": 0.5, "slowest_MB_per_s": 1000.0}}  # where something will stall
SHORTER = {"link": {"timeout_s": 0.1, "slowest_MB_per_s": 1000.0}}  # the same, many times

# Exit code that each fault may lead to; 0 where it may do no harm.
CODES = {
    "stall": {1},
    "stall_mid_block": {1},
    "late": {1},
    "close": {1},
    "close_mid_block": {1},
    "close_mid_answer": {1},
    "flip_stored": {5},
    "flip_answer": {5},
    "short_answer": {5},
    "cut_answer": {1},
    "refuse": {1, 4},  # 4 if it was OFF that was refused
    "flood": {1},
    "garbage": {1},
    "wrong_order": {5, 0},  # 0 if it struck where the order asked for was the one it keeps
    "deaf": {4, 0},  # 0 if the outputs were off anyway
    "switches_on": {4, 0},  # 0 if it struck before OFF was sent
    "no_entry": {1},
}
SILENT = {"stall", "stall_mid_block", "late", "cut_answer", "refuse"}


def attempt(made, generator, path):
    """Exit code, record and lines of a load that may fail."""
    lines = []
    with stand_in.running(generator) as (_, address):
        try:
            run_load(made, address, path, say=lines.append)
            code = 0
        except ShaperError as error:
            code = error.exit_code
            assert str(error)
        assert_honest(code, generator, made, read_record(path), lines)
        record = read_record(path)
        generator.faults.clear()
        again = plan_like(made)
        run_load(again, address, path, replace=True)  # on a fresh link all is well
        assert holds(generator, again) and not any(generator.on.values())
    return code, record, lines


def assert_honest(code, generator, made, record, lines):
    """What must hold after any load, whatever happened."""
    struck = {fault.kind for fault in generator.faults if fault.struck}
    confirmed, statement = record["output"]["confirmed_off"], record["output"]["statement"]
    assert record["status"] == ("done" if code == 0 else "failed")
    assert not generator.switched_on
    if code == 0:
        assert holds(generator, made) and confirmed
    if confirmed:
        assert not any(generator.told.values()), (statement, generator.told)
        assert "off, confirmed" in statement
    if any(generator.on.values()) and "switches_on" not in struck:
        assert not confirmed and "by hand" in statement
    if code:
        assert statement in lines
        gone = {t["name"] for t in record["traces"] if t["state"] in ("removed", "planned")}
        assert not gone & set(generator.traces)


def plan_like(made):
    """The same set with long deadlines."""
    from dataclasses import replace

    return replace(made, profile=made.profile.model_copy(update={"link": profile().link}))


@pytest.mark.parametrize(
    "kind, at, lasting, code",
    [
        ("stall", 1, False, 1),
        ("stall", 18, True, 1),
        ("stall_mid_block", 15, False, 1),
        ("late", 1, False, 1),
        ("late", 25, False, 1),
        ("close", 0, False, 1),
        ("close", 25, True, 1),
        ("close_mid_block", 15, False, 1),
        ("close_mid_answer", 27, False, 1),
        ("flip_stored", 20, False, 5),
        ("flip_answer", 20, False, 5),
        ("short_answer", 20, False, 5),
        ("cut_answer", 20, False, 1),
        ("refuse", 12, False, 1),
        ("refuse", 2, False, 4),
        ("refuse", 25, False, 1),
        ("flood", 0, True, 1),
        ("garbage", 1, False, 1),
        ("garbage", 27, False, 1),
        ("wrong_order", 0, True, 5),
        ("deaf", 0, True, 4),
        ("switches_on", 25, False, 4),
        ("no_entry", 0, False, 1),
        ("no_entry", 0, True, 1),
    ],
)
def test_each_fault(rng, tmp_path, kind, at, lasting, code):
    fault = stand_in.Fault(kind, at, lasting, seconds=1.0)
    changes = SHORT if kind in SILENT else {}
    order = "little" if kind == "wrong_order" else "big"
    made = plan(rng, into=profile(**changes, data={"byte_order": order}))
    generator = stand_in.Generator(on={1: True, 2: True}, faults=[fault])
    found, record, lines = attempt(made, generator, tmp_path / "r.load.json")
    assert fault.struck
    assert found == code, record["error"]
    reachable = not (lasting and kind in ("stall", "close", "deaf", "no_entry"))
    assert record["output"]["confirmed_off"] == reachable, lines


def test_random_schedules(tmp_path):
    """Several at a time, since most of them wait for a deadline."""
    with ThreadPoolExecutor(6) as pool:
        for _ in pool.map(lambda seed: one_schedule(seed, tmp_path), range(SCHEDULES)):
            pass


def one_schedule(seed, folder):
    rng = np.random.default_rng(seed)
    kinds = [str(kind) for kind in rng.choice(sorted(stand_in.FAULTS), size=rng.integers(1, 4))]
    faults = [
        stand_in.Fault(kind, int(rng.integers(0, 42)), bool(rng.random() < 0.2), seconds=0.2)
        for kind in kinds
    ]
    silent = bool(SILENT & set(kinds))
    order = {"byte_order": str(rng.choice(["big", "little"]))}
    made = plan(rng, into=profile(**(SHORTER if silent else {}), data=order))
    on = {1: bool(rng.random() < 0.5), 2: bool(rng.random() < 0.5)}
    generator = stand_in.Generator(on=on, faults=list(faults))
    code, record, _ = attempt(made, generator, folder / f"{seed}.load.json")
    struck = {fault.kind for fault in faults if fault.struck}
    allowed = set().union({0} if not struck else set(), *(CODES[kind] for kind in struck))
    if silent and "out of time" in (record["error"] or ""):
        allowed.add(1)  # a busy machine can be too slow for the short deadline
    assert code in allowed, (seed, faults, code, record["error"])


class MutatedLink(Reader):
    """A generator without a wire between; one answer is mutated, then the peer is silent."""

    address = "mutated"

    def __init__(self, generator, rng, at):
        self.generator, self.rng, self.at = generator, rng, at
        self.count, self.inbox, self.largest = 0, b"", 0

    def send(self, seconds, *pieces):
        message = b"".join(pieces)
        with self._exchange():
            plain, blocks = message.removesuffix(b"\n").decode("latin-1"), []
            if ",#" in plain:
                head, _, tail = plain.partition("#")
                digits = int(tail[0])
                size = int(tail[1 : 1 + digits])
                content = tail[1 + digits :]
                blocks = [bytearray(content[:size].encode("latin-1"))]
                plain = head + stand_in.BLOCK_MARK + content[size:]
            answer = b"".join(self.generator.execute(plain, blocks))
            if answer:
                self.inbox += (
                    self._mutated(answer + b"\n") if self.count == self.at else answer + b"\n"
                )
                self.count += 1

    def _mutated(self, answer):
        answer, rng = bytearray(answer), self.rng
        for _ in range(rng.integers(1, 4)):
            place, byte = rng.integers(0, len(answer) + 1), int(rng.integers(0, 256))
            if rng.random() < 0.3:
                byte = int(rng.choice(list(b'0123456789#,"\n+-')))
            way = rng.integers(0, 5)
            if way == 0 and place < len(answer):
                answer[place] = byte
            elif way == 1 and place < len(answer):
                del answer[place : place + int(rng.integers(1, 9))]
            elif way == 2:
                answer[place:place] = bytes([byte]) * int(rng.choice([1, 2, 12, 5000]))
            elif way == 3:
                answer = answer[:place]
            else:
                answer += answer[place:]
        return bytes(answer)

    def idle(self):
        with self._exchange():
            if self.inbox:
                raise LinkError("stray")

    def close(self):
        self.usable, self.inbox = False, b""

    def _exactly(self, count, deadline):
        self.largest = max(self.largest, count)
        if count > len(self.inbox):
            raise LinkError("out of time")
        taken, self.inbox = self.inbox[:count], self.inbox[count:]
        return taken

    def _line(self, limit, deadline):
        end = self.inbox.find(b"\n")
        self.largest = max(self.largest, end)
        if end < 0 or end > limit:
            raise LinkError("out of time")
        line, self.inbox = self.inbox[:end], self.inbox[end + 1 :]
        return line


@pytest.mark.parametrize("chunk", range(4))
def test_mutated_answers(chunk):
    """One answer of each load is mutated: a clear error, or exactly the right memory."""
    rng = np.random.default_rng(chunk)
    made = plan(rng, samples=16)
    healthy = MutatedLink(stand_in.Generator(), rng, at=-1)
    load(made, lambda: healthy, begin_record(made, None, "mutated"))
    harmless = 0
    for seed in range(chunk, MUTATIONS, 4):
        rng = np.random.default_rng(seed)
        generator = stand_in.Generator(on={1: True})
        at, links = int(rng.integers(0, healthy.count)), []

        def connect(generator=generator, rng=rng, at=at, links=links):
            links.append(MutatedLink(generator, rng, at if not links else -1))
            return links[-1]

        record, code = begin_record(made, None, "mutated"), 0
        try:
            load(made, connect, record)
            harmless += 1
        except ShaperError as error:
            code = error.exit_code
            assert 0 < len(str(error)) < 1000 and str(error).isprintable()
        assert code in (0, 1, 4, 5)
        stranger = "not the instrument" in record.document["output"]["statement"]
        assert stranger or not any(generator.on.values())
        if code == 0:
            assert holds(generator, made)
        else:
            assert generator.traces == {}
        assert max(link.largest for link in links) <= made.profile.memory.max_bytes
    assert harmless < MUTATIONS / 8  # most mutations must be noticed
