"""A scripted instrument in two worlds: behind a real TCP socket, and inside the process."""

import itertools
import os
import selectors
import socket
import struct
import threading
import time
from collections.abc import Awaitable, Callable, Iterator
from contextlib import AbstractContextManager, contextmanager
from dataclasses import dataclass, field
from typing import Any

import pytest
import pyvisa
import trio
from pyvisa import constants, rname
from pyvisa.constants import ResourceAttribute, StatusCode
from pyvisa.highlevel import VisaLibraryBase
from pyvisa.util import LibraryPath

from ohmward.clock import run_in_real_time, run_in_virtual_time
from ohmward.links.link import Hello, Link
from ohmward.links.settings import LinkSettings
from ohmward.links.thread_waiter import ThreadWaiter
from ohmward.links.virtual_waiter import VirtualWaiter

IDENTITY = b"GENERIC,SCRIPTED,17,1.0"
HANG_UP = b"<hang up>"

TIMEOUT_S = 0.25
LATE_S = 0.4
"""A reply that comes after its timeout, while the link is clean or just recovered again."""

Piece = tuple[float, bytes]


def echo(line: bytes) -> list[Piece]:
    """Answer ``Q17?`` with ``17``: every reply tells which query it belongs to."""
    if line == b"*IDN?":
        return [(0.0, IDENTITY + b"\n")]
    return [(0.0, line[1:-1] + b"\n")] if line.endswith(b"?") else []


@dataclass
class Script:
    """What the instrument says, piece by piece, and what it heard, session by session."""

    answer: Callable[[bytes], list[Piece]] = echo
    banner: list[Piece] = field(default_factory=list)
    heard: list[bytes] = field(default_factory=list)
    sessions: int = 0
    refused: int = 0
    """So many of the next attempts to connect fail."""

    def connects(self) -> bool:
        if self.refused:
            self.refused -= 1
            return False
        self.sessions += 1
        return True

    def hears(self, line: bytes) -> list[Piece]:
        self.heard.append(line)
        return self.answer(line)

    def once(self, line: bytes, pieces: list[Piece]) -> None:
        """Answer ``line`` in this way the first time."""
        usual, left = self.answer, [True]

        def answer(heard: bytes) -> list[Piece]:
            if heard == line and left[0]:
                left[0] = False
                return pieces
            return usual(heard)

        self.answer = answer


class ScriptedLibrary(VisaLibraryBase):
    """The least PyVISA library: sessions whose replies are due at instants of trio's clock."""

    @staticmethod
    def get_library_paths() -> tuple[LibraryPath, ...]:
        return (LibraryPath("scripted"),)

    def _init(self) -> None:
        self.script = Script()
        self.sessions: dict[int, dict[str, Any]] = {}
        self._numbers = itertools.count(1)

    def open_default_resource_manager(self) -> tuple[Any, StatusCode]:
        return 0, self.handle_return_value(None, StatusCode.success)

    def open(self, session: Any, resource_name: str, *_: Any, **__: Any) -> tuple[Any, StatusCode]:
        if not self.script.connects():
            return 0, self.handle_return_value(None, StatusCode.error_resource_not_found)
        number = next(self._numbers)
        self.sessions[number] = {
            "parsed": rname.parse_resource_name(resource_name),
            "attributes": {},
            "coming": [],
            "buffer": bytearray(),
            "gone": False,
            "looked_at": 0,
        }
        self._say(number, self.script.banner)
        return number, self.handle_return_value(number, StatusCode.success)

    def close(self, session: Any) -> StatusCode:
        if session in self.sessions:
            self.sessions[session]["gone"] = True
        return self.handle_return_value(None, StatusCode.success)

    def get_attribute(self, session: Any, attribute: Any) -> tuple[Any, StatusCode]:
        if attribute == ResourceAttribute.interface_type:
            return constants.InterfaceType.tcpip, StatusCode.success
        return self.sessions[session]["attributes"][attribute], StatusCode.success

    def set_attribute(self, session: Any, attribute: Any, attribute_state: Any) -> StatusCode:
        self.sessions[session]["attributes"][attribute] = attribute_state
        return self.handle_return_value(session, StatusCode.success)

    def disable_event(self, *_: Any) -> StatusCode:
        return StatusCode.success

    def discard_events(self, *_: Any) -> StatusCode:
        return StatusCode.success

    def flush(self, session: Any, mask: Any) -> StatusCode:
        self._arrive(session)["buffer"].clear()
        self.sessions[session]["looked_at"] = 0
        return self.handle_return_value(session, StatusCode.success)

    def write(self, session: Any, data: bytes) -> tuple[int, StatusCode]:
        if self._arrive(session)["gone"]:
            return 0, self.handle_return_value(session, StatusCode.error_connection_lost)
        for line in data.split(b"\n")[:-1]:
            self._say(session, self.script.hears(line))
        return len(data), self.handle_return_value(session, StatusCode.success)

    def read(self, session: Any, count: int) -> tuple[bytes, StatusCode]:
        state = self._arrive(session)
        buffer: bytearray = state["buffer"]
        end = buffer.find(state["attributes"][ResourceAttribute.termchar]) + 1
        if 0 < end <= count:
            status = StatusCode.success_termination_character_read
        elif len(buffer) >= count:
            end, status = count, StatusCode.success_max_count_read
        elif state["gone"]:
            end, status = 0, StatusCode.error_connection_lost
        else:
            end, status = 0, StatusCode.error_timeout
        message = bytes(buffer[:end])
        del buffer[:end]
        state["looked_at"] = len(buffer) if not end else 0
        return message, self.handle_return_value(session, status)

    def reply_due(self, session: int) -> float | None:
        state = self._arrive(session)
        if len(state["buffer"]) > state["looked_at"] or state["gone"]:
            return trio.current_time()
        return min((due_s for due_s, _ in state["coming"]), default=None)

    def _say(self, session: int, pieces: list[Piece]) -> None:
        if not pieces:
            return
        now_s = trio.current_time()
        self.sessions[session]["coming"] += [(now_s + after_s, data) for after_s, data in pieces]

    def _arrive(self, session: int) -> dict[str, Any]:
        state, now_s = self.sessions[session], trio.current_time()
        coming = sorted(state["coming"], key=lambda piece: piece[0])
        state["coming"] = [piece for piece in coming if piece[0] > now_s]
        for due_s, data in coming:
            if due_s <= now_s:
                if data == HANG_UP:
                    state["gone"] = True
                else:
                    state["buffer"] += data
        return state


class TcpPeer:
    """The same instrument behind a listening socket, served by one thread."""

    def __init__(self, script: Script) -> None:
        self.script = script
        self._listener = socket.create_server(("127.0.0.1", 0))
        self.port: int = self._listener.getsockname()[1]
        self._ears = selectors.DefaultSelector()
        self._ears.register(self._listener, selectors.EVENT_READ)
        self._wake, self._waker = socket.socketpair()
        self._ears.register(self._wake, selectors.EVENT_READ)
        self._coming: list[tuple[float, socket.socket, bytes]] = []
        self._halves: dict[socket.socket, bytes] = {}
        self._thread = threading.Thread(target=self._serve)
        self._thread.start()

    def close(self) -> None:
        self._waker.close()
        self._thread.join()

    def _serve(self) -> None:
        with self._ears, self._listener, self._wake:
            while self._turn():
                pass
            for connection in list(self._halves):
                self._hang_up(connection)

    def _turn(self) -> bool:
        now_s = time.monotonic()
        self._coming.sort(key=lambda piece: piece[0])
        while self._coming and self._coming[0][0] <= now_s:
            _due_s, connection, data = self._coming.pop(0)
            self._send(connection, data)
        patience_s = self._coming[0][0] - now_s if self._coming else None
        for key, _ in self._ears.select(patience_s):
            if key.fileobj is self._wake:
                return False
            if key.fileobj is self._listener:
                self._welcome()
            else:
                assert isinstance(key.fileobj, socket.socket)
                self._listen(key.fileobj)
        return True

    def _welcome(self) -> None:
        connection, _ = self._listener.accept()
        if not self.script.connects():
            connection.close()
            return
        connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self._ears.register(connection, selectors.EVENT_READ)
        self._halves[connection] = b""
        self._say(connection, self.script.banner)

    def _listen(self, connection: socket.socket) -> None:
        try:
            data = connection.recv(1 << 16)
        except OSError:
            data = b""
        if not data:
            self._hang_up(connection)
            return
        *lines, self._halves[connection] = (self._halves[connection] + data).split(b"\n")
        for line in lines:
            self._say(connection, self.script.hears(line))

    def _say(self, connection: socket.socket, pieces: list[Piece]) -> None:
        now_s = time.monotonic()
        for after_s, data in pieces:
            if after_s:
                self._coming.append((now_s + after_s, connection, data))
            else:
                self._send(connection, data)

    def _send(self, connection: socket.socket, data: bytes) -> None:
        if connection not in self._halves:
            return
        if data == HANG_UP:
            self._hang_up(connection)
            return
        try:
            connection.sendall(data)
        except OSError:
            self._hang_up(connection)

    def _hang_up(self, connection: socket.socket) -> None:
        self._ears.unregister(connection)
        del self._halves[connection]
        connection.close()


HEADER = "!2sBBIQ"


def frame(kind: int, control: int, parameter: int, payload: bytes = b"") -> bytes:
    """A HiSLIP message (IVI-6.1): prologue, type, control code, parameter, length, payload."""
    return struct.pack(HEADER, b"HS", kind, control, parameter, len(payload)) + payload


class HislipPeer(TcpPeer):
    """The same instrument behind HiSLIP: a piece that ends a line ends a message."""

    def __init__(self, script: Script) -> None:
        self._ids: dict[socket.socket, int] = {}
        super().__init__(script)

    def _welcome(self) -> None:
        connection, _ = self._listener.accept()
        self._ears.register(connection, selectors.EVENT_READ)
        self._halves[connection] = b""

    def _listen(self, connection: socket.socket) -> None:
        try:
            data = connection.recv(1 << 16)
        except OSError:
            data = b""
        if not data:
            self._hang_up(connection)
            return
        self._halves[connection] += data
        while connection in self._halves and len(self._halves[connection]) >= 16:
            _, kind, _, parameter, length = struct.unpack(HEADER, self._halves[connection][:16])
            if len(self._halves[connection]) < 16 + length:
                return
            payload = self._halves[connection][16 : 16 + length]
            self._halves[connection] = self._halves[connection][16 + length :]
            self._frame(connection, kind, parameter, payload)

    def _frame(self, connection: socket.socket, kind: int, parameter: int, payload: bytes) -> None:
        if kind == 0 and not self.script.connects():  # Initialize
            self._hang_up(connection)
        elif kind == 0:
            self._send(connection, frame(1, 0, 0x0100 << 16 | 1))
            self._ids[connection] = 0xFFFF_FFFF
            self._say(connection, self.script.banner)
        elif kind == 17:  # AsyncInitialize
            self._send(connection, frame(18, 0, 0))
        elif kind == 15:  # AsyncMaxMsgSize
            self._send(connection, frame(16, 0, 0, payload))
        elif kind == 7:  # DataEnd
            self._ids[connection] = parameter
            for line in payload.split(b"\n")[:-1]:
                self._say(connection, self.script.hears(line))

    def _say(self, connection: socket.socket, pieces: list[Piece]) -> None:
        number = self._ids[connection]
        super()._say(
            connection,
            [
                (after_s, data if data == HANG_UP else self._framed(number, data))
                for after_s, data in pieces
            ],
        )

    def _framed(self, number: int, data: bytes) -> bytes:
        *lines, half = data.split(b"\n")
        framed = b"".join(frame(7, 0, number, line + b"\n") for line in lines)
        return framed + (frame(6, 0, number, half) if half else b"")


def check_identity(reply: bytes) -> None:
    """What a driver's check does: another maker or type is another instrument."""
    from ohmward.errors import WrongIdentity

    if not reply.startswith(b"GENERIC,SCRIPTED,"):
        raise WrongIdentity(f"expected GENERIC,SCRIPTED, found {reply!r}")


@dataclass
class World:
    """One way in which a link can reach the scripted instrument."""

    script: Script
    address: str
    manager: pyvisa.ResourceManager
    make_waiter: Callable[[], Any]
    enter: Callable[[Callable[[Any], Awaitable[Any]]], Any]
    virtual: bool

    def link(self, **changes: Any) -> Link:
        settings = {
            "timeout_s": TIMEOUT_S,
            "drain_s": 0.05,
            "reopen_budget_s": 5.0,
            "open_timeout_s": 2.0,
        }
        return Link(
            address=self.address,
            settings=LinkSettings(**{**settings, **changes}),
            manager=self.manager,
            waiter=self.make_waiter(),
            hello=Hello(query=b"*IDN?", check=check_identity),
        )

    def run(self, talk: Callable[[Link], Awaitable[None]], **changes: Any) -> None:
        """Open a link, talk, close; the whole within 60 s of its own clock."""

        async def main(_clock: Any) -> None:
            with trio.fail_after(60):
                link = self.link(**changes)
                await link.open()
                try:
                    await talk(link)
                finally:
                    await link.aclose()

        self.enter(main)


@pytest.fixture
def tcp() -> Iterator[World]:
    yield from real_world(TcpPeer, "TCPIP::127.0.0.1::{port}::SOCKET")


@pytest.fixture
def hislip() -> Iterator[World]:
    yield from real_world(HislipPeer, "TCPIP::127.0.0.1::hislip0,{port}::INSTR")


def real_world(make_peer: type[TcpPeer], address: str) -> Iterator[World]:
    script = Script()
    peer = make_peer(script)
    manager = pyvisa.ResourceManager("@py")
    try:
        yield World(
            script=script,
            address=address.format(port=peer.port),
            manager=manager,
            make_waiter=ThreadWaiter,
            enter=run_in_real_time,
            virtual=False,
        )
    finally:
        manager.close()
        peer.close()


@pytest.fixture
def simulated() -> Iterator[World]:
    yield from simulated_world()


def simulated_world() -> Iterator[World]:
    library = ScriptedLibrary(f"scripted-{os.urandom(8).hex()}")
    manager = pyvisa.ResourceManager(library)
    try:
        yield World(
            script=library.script,
            address="TCPIP::127.0.0.1::5025::SOCKET",
            manager=manager,
            make_waiter=VirtualWaiter,
            enter=run_in_virtual_time,
            virtual=True,
        )
    finally:
        manager.close()


@pytest.fixture(
    params=[
        pytest.param("tcp", marks=pytest.mark.processes),
        pytest.param("hislip", marks=pytest.mark.processes),
        pytest.param("simulated"),
    ]
)
def world(request: pytest.FixtureRequest) -> World:
    """Every world, one after the other: the contract holds in each."""
    found: World = request.getfixturevalue(request.param)
    return found


@pytest.fixture(
    params=[pytest.param("tcp", marks=pytest.mark.processes), pytest.param("simulated")]
)
def stream_world(request: pytest.FixtureRequest) -> World:
    """The worlds whose interface does not itself mark the end of a message."""
    found: World = request.getfixturevalue(request.param)
    return found


@pytest.fixture(scope="session")
def worlds() -> Callable[[], AbstractContextManager[World]]:
    """Makes a fresh simulated world for each example of a property."""
    return contextmanager(simulated_world)


@pytest.fixture(scope="session")
def scripted_library() -> type[ScriptedLibrary]:
    """The class, for tests that need a library with a fault of its own."""
    return ScriptedLibrary


@pytest.fixture
def script() -> Script:
    """A script for peers of a test's own."""
    return Script()
