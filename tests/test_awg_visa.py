"""The optional transport: PyVISA with its pure-Python backend, to the same stand-in."""

import subprocess
import sys

import numpy as np
import pytest
import stand_in
from awg_case import holds, plan, profile, run_load
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from shaper.awg.instrument import Instrument
from shaper.awg.link import LinkError, SocketLink, open_link
from shaper.awg.visa import VisaLink
from shaper.errors import InputError

LONG, SOON = 30.0, 0.3  # s
INT16 = hnp.arrays(np.int16, st.integers(1, 200), elements=st.integers(-(2**15), 2**15 - 1))


def resource(address):
    host, port = address.split(":")
    return f"TCPIP::{host}::{port}::SOCKET"


@pytest.fixture(scope="module")
def bench():
    pytest.importorskip("pyvisa_py")
    with stand_in.running() as (generator, address):
        yield generator, address


def quiet(*args, **kwargs):
    """Takes no notes."""


def test_imported_only_when_asked_for(monkeypatch):
    code = "import sys, shaper.workflow.load; sys.exit('pyvisa' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code]).returncode == 0
    monkeypatch.setattr("importlib.util.find_spec", lambda name: None)  # as if not installed
    with pytest.raises(InputError, match="pip install"):
        open_link("GPIB0::10::INSTR", SOON)


@pytest.fixture(scope="module", params=["big", "little"])
def ends(bench, request):
    """The same instrument by VISA and by socket, in one byte order."""
    into = profile(data={"byte_order": request.param})
    made = [Instrument(open_link(a, LONG), into, quiet) for a in (resource(bench[1]), bench[1])]
    yield request.param, made
    for instrument in made:
        instrument.link.close()


@settings(max_examples=50, deadline=None)
@given(words=INT16)
def test_written_by_visa_read_by_socket_and_back(bench, ends, words):
    order, made = ends
    data = words.astype({"big": ">i2", "little": "<i2"}[order]).tobytes()
    for writer, reader in (made, made[::-1]):
        writer.formats()
        writer.store("RANDOM", data)
        assert bytes(reader.fetch("RANDOM", 1000, 1000)) == data
        assert bytes(bench[0].traces.pop("RANDOM")) == words.astype(">i2").tobytes()
        assert reader.errors("end") == []


@pytest.mark.parametrize("layout", ["apart", "interleaved"])
def test_whole_load(bench, rng, tmp_path, layout):
    generator, address = bench
    generator.traces.clear()
    made = plan(rng, "A", "B", into=profile(data={"layout": layout}), samples=5000)
    record = run_load(made, resource(address), tmp_path / "r.load.json")
    assert record["status"] == "done" and holds(generator, made)


@pytest.mark.parametrize("kind", ["stall", "close", "late", "garbage", "cut_answer"])
def test_faults_end_within_the_deadline(rng, tmp_path, kind):
    pytest.importorskip("pyvisa_py")
    fault = stand_in.Fault(kind, at=1 if kind != "cut_answer" else 20, seconds=2.0)
    made = plan(rng, into=profile(link={"timeout_s": 1.0}))
    lines = []
    generator = stand_in.Generator(on={1: True}, faults=[fault])
    with stand_in.running(generator) as (_, address):
        with pytest.raises(LinkError):
            run_load(made, resource(address), tmp_path / "r.load.json", say=lines.append)
    assert fault.struck and not generator.on[1] and generator.traces == {}
    assert "output 1 and 2: off, confirmed by the instrument" in lines


def test_a_peer_that_takes_nothing_is_given_up():
    """The backend itself would wait for ever here."""
    pytest.importorskip("pyvisa_py")
    fault = stand_in.Fault("stall")
    with stand_in.running(stand_in.Generator(faults=[fault])) as (_, address):
        link = open_link(resource(address), LONG)
        link.send(LONG, b"*CLS\n")
        with pytest.raises(LinkError, match="out of time sending"):
            link.send(SOON, bytes(50_000_000))
        assert not link.usable
        link.close()


def test_nobody_there():
    pytest.importorskip("pyvisa_py")
    import socket

    with socket.create_server(("127.0.0.1", 0)) as listener:
        port = listener.getsockname()[1]
    with pytest.raises(LinkError):
        link = open_link(f"TCPIP::127.0.0.1::{port}::SOCKET", 2.0)
        Instrument(link, profile(), quiet).identify()  # some backends notice only now


def test_resource_name_that_makes_no_sense():
    pytest.importorskip("pyvisa_py")
    with pytest.raises(LinkError, match="failed opening"):
        open_link("NONSENSE::1", 2.0)


def test_default_transport_needs_no_visa():
    with stand_in.running() as (_, address):
        link = open_link(address, LONG)
        assert isinstance(link, SocketLink)
        link.close()


class MarkedEnd:
    """What VISA gives for GPIB, USB, VXI-11 and HiSLIP: messages with a mark at their end.

    No such hardware is in the tests; this follows viRead: pieces with ``success_max_count_read``,
    the last one with ``success``.
    """

    def __init__(self, generator, piece):
        self.generator, self.piece, self.inbox = generator, piece, b""
        self.visalib, self.session, self.timeout = self, None, 0

    def write_raw(self, message):
        taken = message[:1000]  # a backend may take less than it was given
        self.unsent = getattr(self, "unsent", b"") + taken
        if self.unsent.endswith(b"\n") and len(taken) == len(message):
            plain, blocks = self.unsent[:-1], []
            if b",#" in plain:
                head, _, tail = plain.partition(b"#")
                digits = int(tail[:1])
                start, size = 1 + digits, int(tail[1 : 1 + digits])
                blocks = [bytearray(tail[start : start + size])]
                plain = head + stand_in.BLOCK_MARK.encode() + tail[start + size :]
            reply = b"".join(self.generator.execute(plain.decode("latin-1"), blocks))
            self.inbox = reply + b"\n" if reply else b""
            self.unsent = b""
        return len(taken)

    def read(self, session, count):
        from pyvisa.constants import StatusCode

        size = min(count, self.piece)
        data, self.inbox = self.inbox[:size], self.inbox[size:]
        return data, StatusCode.success_max_count_read if self.inbox else StatusCode.success

    def close(self):
        pass


@pytest.mark.parametrize("piece", [1000, 1 << 20])
@pytest.mark.parametrize("layout", ["apart", "interleaved"])
def test_links_that_mark_the_end_of_a_message(rng, monkeypatch, tmp_path, layout, piece):
    pytest.importorskip("pyvisa")
    generator = stand_in.Generator(on={1: True})

    def opened(link):
        link._resource = MarkedEnd(generator, piece)

    monkeypatch.setattr(VisaLink, "_open", opened)
    made = plan(rng, "A", "B", into=profile(data={"layout": layout}), samples=5000)
    record = run_load(made, "USB0::1::2::3::INSTR", tmp_path / "r.load.json")
    assert record["status"] == "done" and holds(generator, made) and not generator.on[1]
