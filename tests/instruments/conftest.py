"""A link in memory to a peer that is written by hand in each test, and virtual time."""

from collections.abc import Awaitable, Callable
from typing import Protocol, TypeVar

import pytest
import trio
import trio.testing

from ohmward.errors import LinkError, LinkLost, LinkTimeout

T = TypeVar("T")


# what can become of a reply on its way; the reply to the command before comes last
MUTATIONS: dict[str, Callable[[bytes, bytes], bytes]] = {
    "half": lambda reply, previous: reply[len(reply) // 2 :],
    "head": lambda reply, previous: reply[: max(1, len(reply) - 3)],
    "comma": lambda reply, previous: reply.replace(b".", b","),
    "eighth bit": lambda reply, previous: (
        reply[:2] + bytes([reply[2] | 0x80]) + reply[3:] if len(reply) > 2 else b"\xff"
    ),
    "twice": lambda reply, previous: reply + reply,
    "empty": lambda reply, previous: b"",
    "previous": lambda reply, previous: previous,
}


class Peer(Protocol):
    def handle(self, line: bytes) -> bytes | None:
        """Obey one line; its answer, if it has one."""

    def restart(self) -> None:
        """Be switched off and on."""


class MemoryLink:
    """Keeps the promises of a link: one reply per query, dirty after a fault, then recovered.

    ``faults`` maps the number of an exchange, counted from 1, to what happens in it.
    """

    def __init__(self, peer: Peer) -> None:
        self.peer = peer
        self.identity_query = b"*IDN?"
        self.sent: list[bytes] = []
        self.faults: dict[int, str] = {}
        self.dirty = False
        self.recoveries = 0
        self.gone = False
        self._reply: bytes | None = None

    async def open(self) -> bytes:
        return self.peer.handle(self.identity_query) or b""

    async def write(self, message: bytes) -> None:
        self._check()
        await self._deliver(message)

    async def query(self, message: bytes, timeout_s: float | None = None) -> bytes:
        self._check()
        reply = await self._deliver(message)
        if reply is None:
            self.dirty = True
            await trio.sleep(timeout_s or 1.0)
            raise LinkTimeout("no reply")
        return reply

    async def receive(self, timeout_s: float | None = None) -> bytes:
        raise AssertionError("nothing comes unasked here")

    async def _deliver(self, message: bytes) -> bytes | None:
        await trio.lowlevel.checkpoint()
        self.sent.append(message)
        fault = self.faults.get(len(self.sent), "")
        if fault == "unheard":
            return None
        reply = self.peer.handle(message)
        if fault == "lost":
            self.dirty = True
            raise LinkLost("the peer is gone")
        if fault == "restarted":
            self.peer.restart()
            self.recoveries += 1
            return self.peer.handle(message)
        if fault == "late":
            return None
        previous, self._reply = self._reply, reply
        if reply is None or fault not in MUTATIONS:
            return reply
        return MUTATIONS[fault](reply, previous or b"")

    def _check(self) -> None:
        if self.dirty:
            raise AssertionError("sent over a dirty link")

    def distrust(self, reason: str, *, reopen: bool = False) -> None:
        self.dirty = True

    async def recover(self) -> None:
        if not self.dirty:
            return
        if self.gone:
            await trio.sleep(60.0)
            raise LinkError("beyond its budget")
        self.dirty = False
        self.recoveries += 1

    async def renew(self) -> None:
        self.dirty = True
        await self.recover()

    async def aclose(self) -> None:
        self.dirty = True


@pytest.fixture
def link_to() -> Callable[[Peer], MemoryLink]:
    return MemoryLink


@pytest.fixture
def virtually() -> Callable[[Callable[[], Awaitable[T]]], T]:
    """Run an async function under virtual time: waits cost nothing."""

    def run(work: Callable[[], Awaitable[T]]) -> T:
        return trio.run(work, clock=trio.testing.MockClock(autojump_threshold=0))

    return run
