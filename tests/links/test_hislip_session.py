"""Our HiSLIP session against a peer that breaks off in the middle of frames."""

import socket
import struct
import threading
from collections.abc import Callable, Iterator
from typing import Any

import pytest
import pyvisa
from pyvisa.errors import VisaIOError

from ohmward.links.hislip_session import HislipSession
from ohmward.links.sessions import register_sessions
from ohmward.links.stream_session import PatientSession

pytestmark = pytest.mark.processes

HEADER = "!2sBBIQ"  # IVI-6.1: prologue, type, control code, message parameter, payload length
DATA, DATA_END = 6, 7


def frame(kind: int, parameter: int, payload: bytes = b"") -> bytes:
    return struct.pack(HEADER, b"HS", kind, 0, parameter, len(payload)) + payload


def hear(peer: socket.socket) -> tuple[int, int, bytes]:
    """The next frame: type, parameter, payload."""
    _, kind, _, parameter, length = struct.unpack(HEADER, exactly(peer, 16))
    return kind, parameter, exactly(peer, length)


def exactly(peer: socket.socket, count: int) -> bytes:
    data = bytearray()
    while len(data) < count:
        data += peer.recv(count - len(data))
    return bytes(data)


def welcome(listener: socket.socket, peers: list[socket.socket]) -> None:
    """The opening of both channels."""
    for _ in range(2):
        peer, _ = listener.accept()
        peer.settimeout(10)
        peers.append(peer)
        kind, _, _ = hear(peer)
        peer.sendall(frame(1, 0x0100 << 16 | 1) if kind == 0 else frame(18, 0))
    _, _, size = hear(peers[1])
    peers[1].sendall(frame(16, 0, size))


@pytest.fixture
def pair() -> Iterator[tuple[Any, socket.socket]]:
    """A PyVISA resource and the instrument's end of its synchronous channel."""
    register_sessions()
    manager = pyvisa.ResourceManager("@py")
    peers: list[socket.socket] = []
    with socket.create_server(("127.0.0.1", 0)) as listener:
        listener.settimeout(10)
        server = threading.Thread(target=welcome, args=(listener, peers))
        server.start()
        resource = manager.open_resource(
            f"TCPIP::127.0.0.1::hislip0,{listener.getsockname()[1]}::INSTR", timeout=10_000
        )
        server.join()
    yield resource, peers[0]
    manager.close()
    for peer in peers:
        peer.close()


@pytest.fixture
def asked(pair) -> tuple[Any, Callable[[bytes], None], int]:
    """A resource that has asked; how to send to it; the number of its message."""
    resource, peer = pair
    resource.write_raw(b"READ?\n")
    kind, number, payload = hear(peer)
    assert (kind, payload) == (DATA_END, b"READ?\n")
    return resource, peer.sendall, number


def session_of(resource: Any) -> HislipSession:
    session = resource.visalib.sessions[resource.session]
    assert isinstance(session, HislipSession)
    assert isinstance(session, PatientSession)
    return session


def times_out(resource: Any) -> None:
    resource.timeout = 1
    with pytest.raises(VisaIOError, match="VI_ERROR_TMO"):
        resource.read_raw()
    resource.timeout = 10_000


def test_a_reply(asked):
    resource, send, number = asked
    send(frame(DATA_END, number, b"+1.0\n"))
    assert resource.read_raw() == b"+1.0\n"


def test_a_reply_in_several_frames(asked):
    resource, send, number = asked
    send(
        frame(DATA, number, b"+1.234567E") + frame(DATA, number) + frame(DATA_END, number, b"-12\n")
    )
    assert resource.read_raw() == b"+1.234567E-12\n"


@pytest.mark.parametrize("cut", [1, 15, 16, 17, 20])
def test_a_timeout_anywhere_in_a_frame_keeps_the_place(asked, cut):
    resource, send, number = asked
    whole = frame(DATA_END, number, b"+1.0\n")
    send(whole[:cut])
    times_out(resource)
    send(whole[cut:])
    assert resource.read_raw() == b"+1.0\n"


def test_reading_with_nothing_on_its_way_is_a_timeout(asked):
    resource, send, number = asked
    send(frame(DATA_END, number, b"+1.0\n"))
    resource.read_raw()
    times_out(resource)


def test_a_reply_to_an_earlier_message_is_thrown_away(asked):
    resource, send, number = asked
    times_out(resource)
    resource.write_raw(b"OUTP?\n")
    late = frame(DATA, number, b"+1.2") + frame(DATA_END, number, b"3\n")
    send(late + frame(DATA_END, number + 2, b"0\n"))
    assert resource.read_raw() == b"0\n"


def test_half_of_an_earlier_reply_is_thrown_away_too(asked):
    resource, send, number = asked
    send(frame(DATA_END, number, b"+1.234567E-12\n")[:26])
    times_out(resource)
    resource.write_raw(b"OUTP?\n")
    send(b"-12\n"[-4:] + frame(DATA_END, number + 2, b"0\n"))
    assert resource.read_raw() == b"0\n"


@pytest.mark.parametrize("number_off", [0, -2], ids=["our reply", "a stale reply"])
def test_a_peer_that_dies_inside_a_payload_is_lost(pair, asked, number_off):
    resource, send, number = asked
    send(frame(DATA_END, number + number_off, b"x" * 100)[:50])
    pair[1].close()
    with pytest.raises(VisaIOError, match="VI_ERROR_CONN_LOST"):
        resource.read_raw()
    with pytest.raises(ConnectionError):
        session_of(resource).discard()


@pytest.mark.parametrize("garbage", [b"GARBAGE!" * 4, frame(2, 0, b"fatal"), frame(3, 0, b"error")])
def test_a_peer_that_breaks_the_protocol_is_lost(asked, garbage):
    resource, send, _number = asked
    send(garbage)
    with pytest.raises(VisaIOError, match="VI_ERROR_CONN_LOST"):
        resource.read_raw()


def test_other_frames_are_passed_over(asked):
    resource, send, number = asked
    send(frame(13, number) + frame(200, 0, b"vendor") + frame(DATA_END, number, b"1\n"))
    assert resource.read_raw() == b"1\n"


def test_a_long_reply_is_read_in_parts_and_never_stored_whole(asked):
    resource, send, number = asked
    send(frame(DATA_END, number, b"0123456789"))
    assert resource.read_bytes(4) == b"0123"
    assert resource.read_bytes(4) == b"4567"
    assert resource.read_raw() == b"89"


def test_an_endless_payload_does_not_fill_the_memory(pair, asked):
    resource, send, number = asked
    send(struct.pack(HEADER, b"HS", DATA, 0, number, 1 << 60) + b"1" * 100_000)
    session = session_of(resource)
    assert session.complete_within(10.0, 1000)
    assert len(resource.read_bytes(1000)) == 1000
    while session.complete_within(0.0, 1 << 30) is False and session.discard():
        pass
    assert not session.unread()


def test_an_opening_that_fails_closes_both_channels(recwarn):
    register_sessions()
    manager = pyvisa.ResourceManager("@py")
    with socket.create_server(("127.0.0.1", 0)) as listener:

        def refuse() -> None:
            peer, _ = listener.accept()
            hear(peer)
            peer.close()

        server = threading.Thread(target=refuse)
        server.start()
        with pytest.raises(RuntimeError, match="dropped"):
            manager.open_resource(f"TCPIP::127.0.0.1::hislip0,{listener.getsockname()[1]}::INSTR")
        server.join()
    manager.close()
    assert not recwarn
