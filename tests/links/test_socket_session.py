"""Our TCP session, as PyVISA sees it and as the waiter uses it, against sockets on loopback."""

import socket
import threading
from collections.abc import Iterator
from typing import Any

import pytest
import pyvisa
import trio
from pyvisa.constants import BufferOperation
from pyvisa.errors import VisaIOError
from pyvisa_py.sessions import Session

from ohmward.errors import LinkError, LinkLost, LinkTimeout, OhmwardError
from ohmward.links.link import Hello, Link
from ohmward.links.sessions import register_sessions
from ohmward.links.settings import LinkSettings
from ohmward.links.socket_session import SocketSession
from ohmward.links.stream_session import PatientSession
from ohmward.links.thread_waiter import ThreadWaiter

pytestmark = pytest.mark.processes


@pytest.fixture
def listener() -> Iterator[socket.socket]:
    with socket.create_server(("127.0.0.1", 0)) as listening:
        listening.settimeout(10)
        yield listening


@pytest.fixture
def manager() -> Iterator[pyvisa.ResourceManager]:
    register_sessions()
    opened = pyvisa.ResourceManager("@py")
    yield opened
    opened.close()


def address(listener: socket.socket) -> str:
    return f"TCPIP::127.0.0.1::{listener.getsockname()[1]}::SOCKET"


@pytest.fixture
def pair(listener, manager) -> Iterator[tuple[Any, socket.socket]]:
    """A PyVISA resource and the instrument's end of its connection."""
    resource = manager.open_resource(
        address(listener), read_termination="\n", write_termination="\n", timeout=10_000
    )
    peer, _ = listener.accept()
    with peer:
        yield resource, peer


def session_of(resource: Any) -> SocketSession:
    session = resource.visalib.sessions[resource.session]
    assert isinstance(session, SocketSession)
    return session


class TestAsPyVisaSeesIt:
    def test_it_is_registered_once_and_quietly(self, caplog):
        register_sessions()
        register_sessions()
        kinds = Session._session_classes
        assert kinds[(pyvisa.constants.InterfaceType.tcpip, "SOCKET")] is SocketSession
        assert not caplog.records

    def test_it_can_be_asked_without_blocking(self, pair):
        assert isinstance(session_of(pair[0]), PatientSession)

    def test_a_query(self, pair):
        resource, peer = pair
        peer.sendall(b"GENERIC,A,1,1\n")
        assert resource.query("*IDN?") == "GENERIC,A,1,1"
        assert peer.recv(100) == b"*IDN?\n"

    def test_two_messages_in_one_packet_are_two_reads(self, pair):
        resource, peer = pair
        peer.sendall(b"one\ntwo\nthr")
        assert [resource.read(), resource.read()] == ["one", "two"]
        peer.sendall(b"ee\n")
        assert resource.read() == "three"

    def test_a_timeout_keeps_the_half_for_whoever_looks_next(self, pair):
        resource, peer = pair
        peer.sendall(b"+1.234567E")
        resource.timeout = 1
        with pytest.raises(VisaIOError, match="VI_ERROR_TMO"):
            resource.read()
        peer.sendall(b"-12\n")
        resource.timeout = 10_000
        assert resource.read() == "+1.234567E-12"

    def test_a_count_ends_a_read(self, pair):
        resource, peer = pair
        peer.sendall(b"0123456789\n")
        assert resource.read_bytes(4) == b"0123"
        assert resource.read() == "456789"

    def test_without_termination_whatever_is_there_is_read(self, pair):
        resource, peer = pair
        resource.read_termination = None
        peer.sendall(b"\x02\x00\n\xff")
        assert session_of(resource).complete_within(10.0, 100)
        assert resource.read_raw() == b"\x02\x00\n\xff"

    def test_a_closed_peer_is_a_lost_connection_at_once(self, pair):
        resource, peer = pair
        peer.sendall(b"last words\n")
        peer.close()
        resource.timeout = 3_600_000
        assert resource.read() == "last words"
        with pytest.raises(VisaIOError, match="VI_ERROR_CONN_LOST"):
            resource.read()

    @pytest.mark.parametrize("forget", ["clear", "flush"])
    def test_clear_and_flush_return_whatever_the_peer_does(self, pair, forget):
        resource, peer = pair

        def go() -> None:
            if forget == "clear":
                resource.clear()
            else:
                resource.flush(BufferOperation.discard_read_buffer)

        peer.sendall(b"old\n")
        assert session_of(resource).complete_within(10.0, 4)
        go()
        assert not session_of(resource).unread()
        peer.close()
        assert session_of(resource).complete_within(10.0, 1)
        with pytest.raises(ConnectionError):
            go()

    def test_small_packets_are_not_held_back(self, pair):
        options = session_of(pair[0]).interface
        assert options.getsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY)
        assert options.getsockopt(socket.IPPROTO_TCP, socket.TCP_USER_TIMEOUT) == 10_000
        assert options.getsockopt(socket.SOL_SOCKET, socket.SO_LINGER, 8) == b"\1\0\0\0\0\0\0\0"

    def test_a_write_has_a_timeout(self, pair):
        resource, _peer = pair
        resource.timeout = 50
        with pytest.raises(VisaIOError, match="VI_ERROR_TMO"):
            resource.write_raw(b"x" * 50_000_000)

    def test_a_long_write_arrives_whole(self, pair):
        resource, peer = pair
        received = bytearray()

        def drain() -> None:
            while len(received) < 10_000_000:
                received.extend(peer.recv(1 << 20))

        reader = threading.Thread(target=drain)
        reader.start()
        resource.write_raw(b"x" * 10_000_000)
        reader.join(10)
        assert len(received) == 10_000_000

    def test_what_was_not_delivered_is_not_delivered_later(self, pair):
        """A supply whose cable was out must not carry out the command when it is back."""
        resource, peer = pair
        resource.timeout = 50
        with pytest.raises(VisaIOError):
            resource.write_raw(b"x" * 50_000_000 + b"VOLT 1000\n")
        resource.close()
        received = bytearray()
        peer.settimeout(10)

        def read_on() -> None:
            while chunk := peer.recv(1 << 20):
                received.extend(chunk)

        with pytest.raises(ConnectionResetError):  # never an end in order, as if all was said
            read_on()
        assert b"VOLT" not in received

    def test_nothing_listens_there(self, listener, manager):
        listener.close()
        with socket.socket() as taken:
            taken.bind(("127.0.0.1", 0))  # a port that is bound and does not listen
            port = taken.getsockname()[1]
            with pytest.raises(ConnectionRefusedError):
                manager.open_resource(f"TCPIP::127.0.0.1::{port}::SOCKET")

    def test_the_handle_of_a_failed_opening_is_not_kept(self, manager):
        sessions = dict(manager.visalib.sessions)
        with pytest.raises(OSError):  # noqa: PT011 - the system's own reason
            manager.open_resource("TCPIP::127.0.0.1::1::SOCKET", open_timeout=1000)
        assert manager.visalib.sessions == sessions


class Peer:
    """A hand-held instrument: the test answers itself, from a thread."""

    def __init__(self, listener: socket.socket) -> None:
        self._listener = listener
        self.peer: socket.socket | None = None

    def close(self) -> None:
        if self.peer is not None:
            self.peer.close()

    async def greet(self) -> None:
        """Accept the connection and answer its identity query."""

        def answer() -> None:
            self.close()
            self.peer, _ = self._listener.accept()
            self.peer.settimeout(10)
            assert self.peer.recv(100) == b"*IDN?\n"
            self.peer.sendall(b"GENERIC,A,1,1\n")

        await trio.to_thread.run_sync(answer)

    async def hears(self) -> bytes:
        assert self.peer is not None
        return await trio.to_thread.run_sync(self.peer.recv, 1000)


@pytest.fixture
def peer(listener) -> Iterator[Peer]:
    made = Peer(listener)
    yield made
    made.close()


def link_to(listener: socket.socket, manager: pyvisa.ResourceManager, **settings: Any) -> Link:
    return Link(
        address=address(listener),
        settings=LinkSettings(**{"timeout_s": 10.0, "drain_s": 0.01, **settings}),
        manager=manager,
        waiter=ThreadWaiter(),
        hello=Hello(query=b"*IDN?", check=lambda _reply: None),
    )


async def opened(link: Link, peer: Peer) -> None:
    async with trio.open_nursery() as nursery:
        nursery.start_soon(peer.greet)
        await link.open()


def test_a_last_command_arrives_before_an_orderly_close(listener, manager, peer):
    async def main() -> None:
        link = link_to(listener, manager)
        await opened(link, peer)
        await link.write(b"OUTP OFF")
        await link.aclose()
        assert await peer.hears() == b"OUTP OFF\n"

    trio.run(main)


def test_a_peer_that_never_reads_cannot_hang_a_command(listener, manager, peer):
    async def main() -> None:
        link = link_to(listener, manager, timeout_s=0.1)
        await opened(link, peer)
        with pytest.raises(LinkTimeout):
            await link.write(b"x" * 50_000_000)
        assert link.dirty
        async with trio.open_nursery() as nursery:  # a fresh session, never more of the old
            nursery.start_soon(peer.greet)
            await link.write(b"OUTP OFF")
        assert await peer.hears() == b"OUTP OFF\n"
        await link.aclose()

    trio.run(main)


def test_a_cancelled_command_is_cut_off(listener, manager, peer):
    async def main() -> None:
        link = link_to(listener, manager, timeout_s=60.0)
        await opened(link, peer)
        with trio.move_on_after(0.1) as scope:
            await link.write(b"x" * 50_000_000)
        assert scope.cancelled_caught
        async with trio.open_nursery() as nursery:
            nursery.start_soon(peer.greet)
            await link.write(b"OUTP OFF")
        assert await peer.hears() == b"OUTP OFF\n"
        await link.aclose()

    trio.run(main)


def test_a_half_open_peer_is_lost_and_met_again(listener, manager, peer):
    """The peer's machine restarted: what we send is answered with a reset."""

    async def main() -> None:
        link = link_to(listener, manager)
        await opened(link, peer)
        assert peer.peer is not None
        peer.peer.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, b"\1\0\0\0\0\0\0\0")
        peer.peer.close()
        async with trio.open_nursery() as nursery:
            nursery.start_soon(peer.greet)
            await link.write(b"OUTP OFF")
        assert await peer.hears() == b"OUTP OFF\n"
        await link.aclose()

    trio.run(main)


def test_nobody_else_waits_while_one_link_does(listener, manager, peer):
    """A slow reply leaves the loop free: the task beside it makes its thousand turns."""

    async def main() -> None:
        link = link_to(listener, manager)
        await opened(link, peer)
        turns = 0

        async def ask() -> None:
            assert await link.query(b"READ?") == b"1"
            scope.cancel()

        async def answer_after_a_thousand_turns() -> None:
            nonlocal turns
            await peer.hears()
            for _ in range(1000):
                await trio.lowlevel.checkpoint()
                turns += 1
            assert peer.peer is not None
            peer.peer.sendall(b"1\n")

        async with trio.open_nursery() as nursery:
            scope = nursery.cancel_scope
            nursery.start_soon(ask)
            nursery.start_soon(answer_after_a_thousand_turns)
        assert turns == 1000
        await link.aclose()

    trio.run(main)


def test_a_wrong_address_is_a_link_error_that_names_it(manager):
    async def main(where: str) -> None:
        link = Link(
            address=where,
            settings=LinkSettings(),
            manager=manager,
            waiter=ThreadWaiter(),
            hello=Hello(query=b"*IDN?", check=lambda _reply: None),
        )
        await link.open()

    for where in ("TCPIP::127.0.0.1::1::SOCKET", "no address at all", "ASRL/dev/none::INSTR"):
        with pytest.raises(LinkError, match=where.replace("[", r"\[")):
            trio.run(main, where)


def test_sockets_are_not_opened_under_the_virtual_clock(listener, manager):
    async def main() -> None:
        await link_to(listener, manager).open()

    with pytest.raises(OhmwardError, match="virtual clock"):
        trio.run(main, clock=trio.testing.MockClock(autojump_threshold=0))


def test_a_lost_link_says_so_when_its_peer_is_refused(listener, manager, peer):
    async def main() -> None:
        link = link_to(listener, manager, reopen_budget_s=0.05)
        await opened(link, peer)
        assert peer.peer is not None
        peer.peer.close()
        listener.close()
        with pytest.raises(LinkLost, match="nothing listens"):
            await link.query(b"READ?")
        await link.aclose()

    trio.run(main)
