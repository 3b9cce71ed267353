"""What happens when a library of someone else's making hangs in the middle of a read."""

import threading
from collections.abc import Iterator
from typing import Any

import pytest
import pyvisa
import trio
from pyvisa.constants import StatusCode

from ohmward.errors import LinkTimeout
from ohmward.links.link import Hello, Link
from ohmward.links.settings import LinkSettings
from ohmward.links.thread_waiter import ThreadWaiter

IDENTITY = b"GENERIC,A,1,1\n"


@pytest.fixture
def hanging(scripted_library: type) -> Iterator[Any]:
    """A library whose read of ``READ?`` returns only when the test says so."""

    class HangingLibrary(scripted_library):
        def _init(self) -> None:
            super()._init()
            self.released = threading.Event()
            self.readers: list[int] = []
            self.closed: list[int] = []
            self.last: dict[int, bytes] = {}

        def write(self, session: Any, data: bytes) -> tuple[int, StatusCode]:
            self.last[session] = data
            return len(data), self.handle_return_value(session, StatusCode.success)

        def read(self, session: Any, count: int) -> tuple[bytes, StatusCode]:
            if self.last[session] == b"SLOW?\n":
                self.readers.append(session)
                self.released.wait(30)
                return b"the reply to SLOW\n", StatusCode.success_termination_character_read
            if self.last[session] == b"SILENT?\n":
                return b"", self.handle_return_value(session, StatusCode.error_timeout)
            return IDENTITY, self.handle_return_value(session, StatusCode.success)

        def clear(self, session: Any) -> StatusCode:
            return self.handle_return_value(session, StatusCode.success)

        def close(self, session: Any) -> StatusCode:
            self.closed.append(session)
            return super().close(session)

        reply_due = None

    library = HangingLibrary("hanging library of the tests")
    yield library
    library.released.set()


def link_to(library: Any, grace_s: float) -> Link:
    return Link(
        address="GPIB0::7::INSTR",
        settings=LinkSettings(timeout_s=30.0, drain_s=0.01),
        manager=pyvisa.ResourceManager(library),
        waiter=ThreadWaiter(grace_s=grace_s),
        hello=Hello(query=b"*IDN?", check=lambda _reply: None),
    )


def test_a_hung_read_is_left_to_its_thread_and_a_fresh_session_used(hanging):
    async def main() -> None:
        link = link_to(hanging, grace_s=0.02)
        await link.open()
        (first,) = hanging.sessions
        with trio.move_on_after(0.05) as scope:
            await link.query(b"SLOW?")
        assert scope.cancelled_caught
        assert await link.query(b"OUTP?") == IDENTITY[:-1]
        assert hanging.readers == [first]
        assert first not in hanging.closed  # the thread is still in it
        assert len(hanging.last) == 2
        hanging.released.set()
        with trio.fail_after(10):
            while first not in hanging.closed:
                await trio.sleep(0.001)
        assert first not in hanging.sessions
        await link.aclose()

    trio.run(main)


def test_a_read_that_ends_within_the_grace_keeps_its_session(hanging):
    async def main() -> None:
        link = link_to(hanging, grace_s=10.0)
        await link.open()
        async with trio.open_nursery() as nursery:
            scope = trio.CancelScope()
            nursery.start_soon(ask_in, scope, link)
            while not hanging.readers:
                await trio.sleep(0.001)
            scope.cancel()
            await trio.sleep(0.01)  # so that the cancellation is there before the reply
            hanging.released.set()
        assert link.dirty
        assert await link.query(b"OUTP?") == IDENTITY[:-1]
        assert len(hanging.last) == 1
        assert not hanging.closed
        await link.aclose()

    async def ask_in(scope: trio.CancelScope, link: Link) -> None:
        with scope:
            await link.query(b"SLOW?")

    trio.run(main)


def test_its_timeout_is_a_timeout(hanging):
    async def main() -> None:
        link = link_to(hanging, grace_s=1.0)
        await link.open()
        with pytest.raises(LinkTimeout):
            await link.query(b"SILENT?")
        assert await link.query(b"OUTP?") == IDENTITY[:-1]
        await link.aclose()

    trio.run(main)


def test_a_cancelled_opening_closes_what_it_opened(hanging):
    gate = threading.Event()
    opens = hanging.open

    def slow_open(*arguments: Any, **keywords: Any) -> Any:
        gate.wait(10)
        return opens(*arguments, **keywords)

    hanging.open = slow_open

    async def main() -> None:
        link = link_to(hanging, grace_s=0.01)
        with trio.move_on_after(0.02) as scope:
            await link.open()
        assert scope.cancelled_caught
        assert not hanging.sessions
        gate.set()
        with trio.fail_after(10):
            while not hanging.closed:
                await trio.sleep(0.001)
        assert not hanging.sessions

    trio.run(main)
