"""The socket and its deadlines: silence, drops, drips, floods, late answers."""

import contextlib
import socket
import threading

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from shaper.awg import block
from shaper.awg.link import LinkError, SocketLink, open_link, split_address
from shaper.errors import InputError

SOON = 0.2  # s; deadline where the peer stays silent
LONG = 30.0  # s; deadline where it answers


@contextlib.contextmanager
def peer(talk):
    """A server whose one connection is handled by ``talk(socket)``; its address."""
    with socket.create_server(("127.0.0.1", 0)) as listener:

        def run():
            link, _ = listener.accept()
            with link, contextlib.suppress(OSError):
                talk(link)

        thread = threading.Thread(target=run)
        thread.start()
        yield f"127.0.0.1:{listener.getsockname()[1]}"
        thread.join()


def until_closed(link):
    while link.recv(4096):
        pass


def saying(*pieces):
    """A peer that says this and then waits for the end."""

    def talk(link):
        for piece in pieces:
            link.sendall(piece)
        until_closed(link)

    return talk


@pytest.mark.parametrize(
    "text, parts",
    [
        ("awg.local:5025", ("awg.local", 5025)),
        ("127.0.0.1", ("127.0.0.1", 5025)),
        ("[::1]:80", ("::1", 80)),
        ("[::1]", ("::1", 5025)),
    ],
)
def test_addresses(text, parts):
    assert split_address(text) == parts


@pytest.mark.parametrize("text", ["", ":5025", "host:", "host:0", "host:65536", "host:x", "host:१"])
def test_addresses_that_make_no_sense(text):
    with pytest.raises(InputError, match="address"):
        split_address(text)


def test_closed_port_is_known_at_once():
    with socket.create_server(("127.0.0.1", 0)) as listener:
        port = listener.getsockname()[1]
    with pytest.raises(LinkError, match="cannot connect"):
        open_link(f"127.0.0.1:{port}", LONG)


def test_answers_in_pieces_and_together():
    with peer(saying(b"4", b"2\r\n#12", b"\n#\n1\n")) as address:
        link = SocketLink(address, LONG)
        assert link.read_line(LONG) == "42"
        assert bytes(link.read_block(LONG, 10)) == b"\n#"  # a newline in a block is data
        assert link.read_line(LONG) == "1"
        link.close()


def test_silence_ends_and_breaks_the_link():
    with peer(until_closed) as address:
        link = SocketLink(address, LONG)
        with pytest.raises(LinkError, match="out of time"):
            link.read_line(SOON)
        assert not link.usable
        for use in (lambda: link.send(SOON, b"x\n"), lambda: link.read_line(SOON), link.idle):
            with pytest.raises(LinkError, match="link is broken"):
                use()
        link.close()


def test_a_drip_does_not_extend_the_deadline():
    """A byte now and then must not keep an answer alive for ever."""
    stop = threading.Event()

    def drip(link):
        while not stop.wait(SOON / 10):
            link.sendall(b"x")

    with peer(drip) as address:
        link = SocketLink(address, LONG)
        with pytest.raises(LinkError, match="out of time"):
            link.read_line(SOON)
        link.close()
        stop.set()


def test_a_peer_that_takes_nothing():
    stop = threading.Event()
    with peer(lambda link: stop.wait()) as address:
        link = SocketLink(address, LONG)
        with pytest.raises(LinkError, match="out of time sending"):
            link.send(SOON, bytes(50_000_000))
        assert not link.usable
        link.close()
        stop.set()


@pytest.mark.parametrize("start", [b"", b"4", b"#", b"#3", b"#3100", b"#3100abc"])
def test_closed_by_the_peer(start):
    with peer(lambda link: link.sendall(start)) as address:
        link = SocketLink(address, LONG)
        with pytest.raises(LinkError, match="closed|reset"):
            link.read_block(LONG, 1000) if start.startswith(b"#") else link.read_line(LONG)
        link.close()


@pytest.mark.parametrize(
    "answer, words",
    [
        (b"#0abc\n", "indefinite"),
        (b"#9999999999abc", "at most 1000 bytes, got 999999999"),
        (b"#41001" + bytes(1001) + b"\n", "at most 1000 bytes"),
        (b"#13abcd\n", "newline after 3 bytes"),
        (b"1\n", "expected #"),
        (b"#1x", "digits of byte count"),
    ],
)
def test_blocks_that_are_not_one(answer, words):
    with peer(saying(answer)) as address:
        link = SocketLink(address, LONG)
        with pytest.raises(LinkError, match=words):
            link.read_block(LONG, 1000)
        assert not link.usable
        link.close()


@pytest.mark.parametrize("answer", [b"\xff\n", b"a\x00b\n", b"x" * 5000 + b"\n", b"x" * 100_000])
def test_lines_that_are_not_text_or_never_end(answer):
    with peer(saying(answer)) as address:
        link = SocketLink(address, LONG)
        with pytest.raises(LinkError, match="line of text|at most 4096"):
            link.read_line(LONG)
        link.close()


def test_what_nobody_asked_for_is_found():
    with peer(saying(b"1\nLATE\n")) as address:
        link = SocketLink(address, LONG)
        assert link.read_line(LONG) == "1"
        with pytest.raises(LinkError, match="expected silence, got b'LATE"):
            link.idle()
        link.close()


def test_interrupt_in_the_middle_breaks_the_link(monkeypatch):
    with peer(until_closed) as address:
        link = SocketLink(address, LONG)

        def interrupted(limit, deadline):
            raise KeyboardInterrupt

        monkeypatch.setattr(link, "_line", interrupted)
        with pytest.raises(KeyboardInterrupt):
            link.read_line(LONG)
        assert not link.usable
        link.close()


def test_no_delay():
    """Without it every small message would wait 40 ms for an acknowledgement."""
    with peer(until_closed) as address:
        link = SocketLink(address, LONG)
        assert link._socket.getsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY)
        link.close()


ANSWERS = st.one_of(
    st.binary(max_size=300).map(lambda data: ("block", data)),
    st.text(st.characters(min_codepoint=32, max_codepoint=126), max_size=60).map(
        lambda text: ("line", text)
    ),
)


@settings(max_examples=60, deadline=None)
@given(st.lists(ANSWERS, max_size=8), st.data())
def test_any_answers_in_any_pieces(answers, data):
    """However the wire cuts them, lines and blocks come out whole and in order."""
    stream = b"".join(
        (block.encode(value) if kind == "block" else value.encode()) + b"\n"
        for kind, value in answers
    )
    cuts = sorted(data.draw(st.lists(st.integers(0, len(stream)), max_size=12)))
    pieces = [stream[a:b] for a, b in zip([0, *cuts], [*cuts, len(stream)], strict=True)]
    with peer(saying(*pieces)) as address:
        link = SocketLink(address, LONG)
        for kind, value in answers:
            found = link.read_block(LONG, 300) if kind == "block" else link.read_line(LONG)
            assert (bytes(found) if kind == "block" else found) == value
        link.idle()
        link.close()


@settings(max_examples=60, deadline=None)
@given(st.binary(max_size=400), st.booleans())
def test_any_bytes_are_an_answer_or_a_clear_error(stream, as_block):
    with peer(lambda link: link.sendall(stream)) as address:
        link = SocketLink(address, LONG)
        try:
            found = link.read_block(LONG, 300) if as_block else link.read_line(LONG)
        except LinkError as error:
            assert str(error).isprintable() and len(str(error)) < 500
        else:
            whole = block.encode(found) if as_block else found.encode()
            assert as_block or stream.startswith((whole + b"\n", whole + b"\r\n"))
            assert bytes(found) in stream if as_block else True
        link.close()
