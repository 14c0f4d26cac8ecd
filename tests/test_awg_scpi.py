"""The stand-in against the standard's rules, and a second client that knows nothing of the first.

``Plain`` is written from the rules of IEEE 488.2 and SCPI-1999 alone (from memory: program message
syntax, header paths, FORMat, TRACe); it shares no line with the loader. What one loads the other
reads.
"""

import random
import re
import socket
import struct

import numpy as np
import pytest
import stand_in
from awg_case import holds, plan, profile, run_load
from hypothesis import given, settings
from hypothesis import strategies as st


class Plain:
    """Another client: text and blocks over a socket, by the book."""

    def __init__(self, address):
        host, port = address.split(":")
        self.socket = socket.create_connection((host, int(port)), 30)
        self.file = self.socket.makefile("rb")

    def __enter__(self):
        return self

    def __exit__(self, *trouble):
        self.file.close()
        self.socket.close()

    def write(self, text, data=b""):
        self.socket.sendall(text.encode() + data + b"\n")

    def query(self, text):
        self.write(text)
        return self.file.readline().decode().rstrip("\r\n")

    def load(self, name, values):
        """Words as a block, most significant byte first, the count with leading zeros."""
        payload = struct.pack(f">{len(values)}h", *values)
        self.write("form:data int,16;bord norm")
        self.write(f"trac {name} , ", b"#9%09d" % len(payload) + payload)
        assert self.query("*OPC?") == "1"

    def read(self, name, order):
        self.write(f":FORM:DATA INT , 16;BORD {'NORM' if order == '>' else 'SWAP'}")
        self.write(f"TRAC? {name}")
        assert self.file.read(1) == b"#"
        count = int(self.file.read(int(self.file.read(1))))
        payload = self.file.read(count)
        assert self.file.read(1) == b"\n"
        return list(struct.unpack(f"{order}{count // 2}h", payload))

    def read_text(self, name):
        return [int(v) for v in self.query(f"FORM ASC;:TRAC:DATA? {name}").split(",")]


@pytest.fixture(scope="module")
def bench():
    with stand_in.running() as (generator, address):
        yield generator, address


@pytest.mark.parametrize("byte_order", ["big", "little"])
@pytest.mark.parametrize("layout", ["apart", "interleaved"])
def test_the_second_client_reads_what_the_loader_loaded(bench, rng, tmp_path, byte_order, layout):
    generator, address = bench
    generator.traces.clear()
    made = plan(rng, into=profile(data={"byte_order": byte_order, "layout": layout}), samples=500)
    run_load(made, address, tmp_path / "r.load.json")
    with Plain(address) as client:
        names = re.findall(r'"(\w+)"', client.query("TRAC:CAT?"))
        assert names == [trace.name for trace in made.traces]
        for trace in made.traces:
            sign = {"big": ">", "little": "<"}[byte_order]
            wanted = list(struct.unpack(f"{sign}{trace.points}h", trace.data))
            assert client.read(trace.name, ">") == wanted
            assert client.read(trace.name, "<") == wanted
            assert client.read_text(trace.name) == wanted
            assert client.query(f"TRAC:POIN? {trace.name}") == str(trace.points)


def test_the_loader_proves_what_the_second_client_loaded(bench, rng, tmp_path):
    generator, address = bench
    generator.traces.clear()
    made = plan(rng, into=profile(data={"byte_order": "little"}), samples=500)
    with Plain(address) as client:
        for trace in made.traces:
            client.load(trace.name, struct.unpack(f"<{trace.points}h", trace.data))
        assert client.query("SYST:ERR?").startswith("0,")
    record = run_load(made, address, tmp_path / "r.load.json", resume=True)
    assert {trace["state"] for trace in record["traces"]} == {"in place"}
    assert holds(generator, made)


def run(*messages, **settings):
    """Answers (text) of a fresh generator to messages; then its error queue."""
    generator = stand_in.Generator(**settings)
    answers = []
    for message in messages:
        reply = b"".join(generator.execute(message, [])).decode("latin-1")
        answers += [reply] if reply else []
    return answers, list(generator.errors), generator


@pytest.mark.parametrize(
    "message, answer",
    [
        ("*IDN?", "Alder Bench,Stand-in,0,1.0"),
        ("*idn?", "Alder Bench,Stand-in,0,1.0"),
        ("  *OPC?  \r", "1"),
        ("OUTPut1:STATe?", "0"),
        ("outp?", "0"),
        (":OUTP:STAT ON;STAT?", "1"),  # the path stays at OUTP
        ("OUTP2 1;:OUTP2?", "1"),
        ("OUTP 0.4;:OUTP?", "0"),  # numbers are rounded for a boolean
        ("OUTP -1;:OUTP?", "1"),
        ("OUTP #H1;:OUTP?", "1"),
        ("FORM?", "ASC,0"),
        ("FORM INT;FORM?", "INT,16"),
        ("FORMat:DATA INTeger,16;BORDer SWAPped;DATA?;BORD?", "INT,16;SWAP"),
        ("FORM:BORD?", "NORM"),
        ("FORM REAL,64;*RST;:FORM?", "ASC,0"),
        ("FORM:BORD SWAP;*OPC?;BORD?", "1;SWAP"),  # a common command leaves the path alone
        ("TRAC:DEF A,3;DATA A,7;DATA? A", "7,7,7"),  # one number fills the trace
        ("TRAC A,1,-2,3;TRAC? A", "1,-2,3"),
        ("DATA:DATA A,1.4,2.6E0,-3.2e+00,#HFF,#Q17,#B101;:DATA? A", "1,3,-3,255,15,5"),
        ("TRAC:DEF A,3;DEF B,A;POIN? B", "3"),
        ("TRAC A,1,2;:TRAC:COPY B,A;CAT?", '"A","B"'),
        ("TRAC A,1,2;:TRAC:DEL A;CAT?", '""'),
        ("TRAC A,1,2;:TRAC:DEL:NAME A;:TRAC:CAT?", '""'),
        ("TRAC A,1,2;TRAC B,1;:TRACE:DELETE:ALL;:TRAC:CAT?", '""'),
        ("TRAC A,1,2,3;:TRAC:POIN A,2;:TRAC? A", "1,2"),
        ("TRAC a_1,5;TRAC? A_1", "5"),  # names know no case
        ("SYST:ERR?", '0,"No error"'),
        ("SYST:ERR:NEXT?;COUN?", '0,"No error";0'),
        ("SYSTEM:VERSION?", "1999.0"),
        ("*ESE 32;*ESE?;*SRE 16;*SRE?", "32;16"),
        ("*OPC;*ESR?;*ESR?", "1;0"),
        ("*WAI;*TST?", "0"),
        (";;*OPC?;", "1"),
    ],
)
def test_what_the_standard_allows(message, answer):
    assert run(message)[:2] == ([answer], [])


@pytest.mark.parametrize(
    "message, number",
    [
        ("NONESUCH?", -113),
        ("OUTPU ON", -113),  # neither the long nor the short form
        ("OUTP3 ON", -114),
        ("OUTP", -109),
        ("OUTP ON,OFF", -108),
        ("OUTP MAYBE", -104),
        ("TRAC 1A,2", -141),
        ("TRAC ABCDEFGHIJKLM,2", -144),
        ("TRAC? NONE", -224),
        ("TRAC A,1;:TRAC:DEF A,2", -293),
        ("TRAC:DEF A,0", -222),
        ("TRAC A,40000", -222),
        ("TRAC:DEF A,2;DATA A,1,2,3", -223),
        ("TRAC:DEF A,100000000", -225),
        ("FORM WORDS", -224),
        ("FORM INT,17", -224),
    ],
)
def test_what_it_does_not_allow(message, number):
    answers, errors, generator = run(message)
    assert answers == [] and [code for code, _ in errors] == [number]


def test_the_queue_overflows_and_clears():
    messages = ["NONESUCH"] * 40
    _, errors, generator = run(*messages)
    assert len(errors) == stand_in.QUEUE and errors[-1][0] == -350
    generator.execute("*CLS", [])
    assert b"".join(generator.execute("SYST:ERR?;*ESR?", [])) == b'0,"No error";0'


def test_a_command_error_ends_the_message_and_others_do_not():
    assert run("TRAC? NONE;*OPC?")[0] == ["1"]
    assert run("NONESUCH;*OPC?")[0] == []


HEADERS = [
    ("SYSTem:ERRor[:NEXT]?", ""),
    ("OUTPut2[:STATe]", " OFF"),
    ("OUTPut[:STATe]?", ""),
    ("FORMat[:DATA]", " INTeger,16"),
    ("FORMat:BORDer", " NORMal"),
    ("TRACe[:DATA]?", " A"),
    ("DATA[:DATA]", " A,1,2"),
    ("TRACe:CATalog?", ""),
    ("TRACe:FREE?", ""),
    ("TRACe:POINts?", " A"),
    ("TRACe:DELete[:NAME]", " A"),
    ("*IDN?", ""),
    ("*OPC?", ""),
]


def spelled(spec, chance):
    """One of the spellings that the standard allows for a header or a keyword."""

    def node(match):
        word = match.group()
        word = word if chance.random() < 0.5 else "".join(c for c in word if c.isupper())
        return chance.choice([str.upper, str.lower, str.title])(word)

    keep = chance.random() < 0.5
    spec = re.sub(r"\[(.*?)\]", lambda m: m.group(1) if keep else "", spec)
    return re.sub(r"[A-Z][A-Za-z]+", node, spec)


@settings(max_examples=500, deadline=None)
@given(st.sampled_from(HEADERS), st.integers(0, 2**32))
def test_every_spelling_is_taken(command, seed):
    spec, parameters = command
    chance = random.Random(seed)
    colon = chance.choice(["", ":"]) if not spec.startswith("*") else ""
    blank = chance.choice([" ", "  ", "\t", " \t "])
    words = parameters.strip().split(",")
    text = chance.choice([",", " , ", ", "]).join(spelled(word, chance) for word in words)
    message = (
        chance.choice(["", " "]) + colon + spelled(spec, chance) + (blank + text if text else "")
    )
    generator = stand_in.Generator(traces={"A": bytearray(4)})
    reply = generator.execute(message + chance.choice(["", " ", "\r"]), [])
    assert not generator.errors, message
    assert bool(reply) == ("?" in spec), message


def test_blocks_over_the_wire(bench):
    generator, address = bench
    generator.traces.clear()
    with Plain(address) as client:
        client.write("FORM:DATA INT,16;BORD NORM;:TRAC A,", b"#14\x0a\x0a\x00\x3b;:TRAC B,#H10")
        assert client.read("A", ">") == [0x0A0A, 0x003B]  # newline and semicolon are data
        assert client.read_text("B") == [16]
        client.write("FORM REAL,32;:TRAC C,", b"#216" + struct.pack(">4f", 1, -2, 3.4, 1e3))
        assert client.read_text("C") == [1, -2, 3, 1000]
        client.write("FORM INT,8;:TRAC D,", b"#12\x01\xff")
        assert client.read_text("D") == [1, -1]
        client.write("FORM:DATA INT,32;BORD SWAP;:TRAC E,", b"#14" + struct.pack("<i", -5))
        assert client.read_text("E") == [-5]
        client.write("FORM:BORD NORM")
        for data in (b"#13abc", b"#12ab,#12ab", b"#12abx"):
            client.write("FORM INT,16;:TRAC F,", data)
            assert re.match("-(161|108)", client.query("SYST:ERR?")), data
        values = np.arange(-5, 5).tolist()
        client.write("FORM ASC;:TRAC G," + ",".join(map(str, values)))
        assert client.read("G", "<") == values
        assert client.query("SYST:ERR?").startswith("0,")


@pytest.mark.parametrize("bad", [b"TRAC A,#0ab", b"TRAC A,#3x00ab", b"TRAC A,#9999999999"])
def test_a_block_that_cannot_be_followed_ends_the_link(bad):
    with stand_in.running() as (generator, address), Plain(address) as client:
        client.write("", bad)
        assert client.file.read(1) == b""
        assert generator.errors[0][0] == -161
