"""The session over a real socket, against a peer that answers, stays silent, stops half-way or hangs up."""

import socket
import time

import pytest
from pyvisa import constants
from pyvisa.resources import TCPIPSocket

from drivers import Disconnected, Garbled, NoReply, VisaSession

PATIENCE = 0.05  # s; how long these sessions wait for what will not come


@pytest.fixture
def session():
    made = []

    def make(resource: str, terminator: bytes = b"\n", timeout: float = 5.0) -> VisaSession:
        made.append(VisaSession(resource, role="lcr", timeout=timeout, terminator=terminator))
        return made[-1]

    yield make
    for each in made:
        each.close()


@pytest.mark.parametrize("terminator", [b"\n", b"\r", b"\r\n"])
def test_a_line_comes_without_its_terminator(peer, session, terminator: bytes) -> None:
    other = peer(b"12.5" + terminator + b"late" + terminator)
    talk = session(other.resource, terminator)
    talk.write(b"MEAS:VOLT?" + terminator)
    assert talk.read_line() == b"12.5"
    assert talk.read_line() == b"late"
    assert other.heard == [b"MEAS:VOLT?" + terminator]


def test_a_cr_inside_a_crlf_line_ends_nothing(peer, session) -> None:
    talk = session(peer(b"a\rb\nc\r\n").resource, b"\r\n")
    talk.write(b"X\r\n")
    assert talk.read_line() == b"a\rb\nc"


def test_bytes_of_a_block_may_be_terminators(peer, session) -> None:
    block = bytes(range(256)) * 400  # every byte there is, 102400 of them, terminators included
    talk = session(peer(b"#6102400" + block + b';0,"No error"\n').resource)
    talk.write(b"TRAC?\n")
    assert talk.read_exactly(8) == b"#6102400"
    assert talk.read_exactly(len(block)) == block
    assert talk.read_line() == b';0,"No error"'


def test_no_reply_says_what_was_sent_and_what_to_do(peer, session) -> None:
    other = peer(b"")
    talk = session(other.resource, timeout=PATIENCE)
    talk.write(b"FETC?\n")
    with pytest.raises(NoReply) as caught:
        talk.read_line()
    text = str(caught.value)
    assert text.startswith(f"lcr ({other.resource}): no reply to 'FETC?' in 0.05 s; check")
    assert "'timeout'" in text


@pytest.mark.parametrize("reply", [b"12.", b"#15hal"])
def test_half_a_reply_is_garbled(peer, session, reply: bytes) -> None:
    talk = session(peer(reply).resource, timeout=PATIENCE)
    talk.write(b"FETC?\n")
    with pytest.raises(Garbled, match="broke off"):
        talk.read_exactly(8)


def test_a_terminator_that_never_comes_is_half_a_reply(peer, session) -> None:
    # What a wrong terminator in a dialect looks like.
    talk = session(peer(b"12.5\r").resource, timeout=PATIENCE)
    talk.write(b"FETC?\n")
    with pytest.raises(Garbled, match="terminator in the dialect"):
        talk.read_line()


@pytest.mark.parametrize("wanted", ["line", "bytes"])
def test_a_closed_connection_is_known_at_once(peer, session, wanted: str) -> None:
    talk = session(peer(None).resource, timeout=30.0)
    started = time.monotonic()
    talk.write(b"FETC?\n")
    with pytest.raises(Disconnected, match=r"connection lost after 'FETC\?'"):
        talk.read_line() if wanted == "line" else talk.read_exactly(2)
    assert time.monotonic() - started < 10  # of 30 s that a library that does not look would spin for


def test_after_reopening_nothing_is_left_of_before(peer, session) -> None:
    other = peer(b"old\nolder\n", b"new\n")
    talk = session(other.resource)
    talk.write(b"A\n")
    assert talk.read_line() == b"old"
    talk.reopen()
    talk.write(b"B\n")
    assert talk.read_line() == b"new"
    assert other.connections == 2


def test_a_lost_connection_can_be_reopened(peer, session) -> None:
    talk = session(peer(None, b"back\n").resource)
    talk.write(b"A\n")
    with pytest.raises(Disconnected):
        talk.read_line()
    talk.reopen()
    talk.write(b"B\n")
    assert talk.read_line() == b"back"


def test_where_nobody_listens_there_is_no_session(session) -> None:
    with socket.create_server(("127.0.0.1", 0)) as taken:
        port = taken.getsockname()[1]
    with pytest.raises(Disconnected, match=r"no connection: .*; check that it is on, the cable"):
        session(f"TCPIP::127.0.0.1::{port}::SOCKET")


@pytest.mark.parametrize(
    "resource", ["", "nonsense", "TCPIP::127.0.0.1::port::SOCKET", "ASRL/dev/none::INSTR"]
)
def test_a_name_that_is_none_is_no_connection(session, resource: str) -> None:
    with pytest.raises(Disconnected, match="the bench's 'resource'"):
        session(resource)


def test_a_closed_session_says_so_and_closes_twice(peer, session) -> None:
    talk = session(peer().resource)
    talk.close()
    talk.close()
    with pytest.raises(Disconnected, match="closed"):
        talk.write(b"A\n")


# ---- by VISA calls alone, as with a library whose sockets cannot be seen


@pytest.fixture
def unseen(monkeypatch: pytest.MonkeyPatch) -> None:
    by_visa = TCPIPSocket.set_visa_attribute

    def without_nodelay(resource, attribute, value):  # which pyvisa-py, standing in for the library, refuses
        if attribute != constants.ResourceAttribute.tcpip_nodelay:
            by_visa(resource, attribute, value)

    monkeypatch.setattr("drivers.visa._socket_below", lambda visa: None)
    monkeypatch.setattr(TCPIPSocket, "set_visa_attribute", without_nodelay)


@pytest.mark.usefixtures("unseen")
@pytest.mark.parametrize("terminator", [b"\n", b"\r", b"\r\n"])
def test_lines_and_blocks_come_by_visa_calls_alone(peer, session, terminator: bytes) -> None:
    block = bytes(range(256)) * 40
    talk = session(
        peer(b"12.5" + terminator, b"#510240" + block + b";0" + terminator, b"a\rb\r\n").resource, terminator
    )
    talk.write(b"MEAS:VOLT?" + terminator)
    assert talk.read_line() == b"12.5"
    talk.write(b"TRAC?" + terminator)
    assert talk.read_exactly(7) == b"#510240"
    assert talk.read_exactly(len(block)) == block
    assert talk.read_line() == b";0"


@pytest.mark.usefixtures("unseen")
def test_silence_is_no_reply_by_visa_calls_alone(peer, session) -> None:
    talk = session(peer(b"", b"12\n").resource, timeout=PATIENCE)
    talk.write(b"A\n")
    with pytest.raises(NoReply, match="no reply to 'A'"):
        talk.read_line()
    talk.reopen()
    talk.write(b"B\n")
    assert talk.read_line() == b"12"
