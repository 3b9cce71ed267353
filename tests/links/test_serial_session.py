"""A serial instrument on a pseudo-terminal: exclusive, without clear, drained and identified."""

import os
import selectors
import threading
import time
import tty
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
import pyvisa
import serial
import trio

from ohmward.errors import LinkError, LinkLost, LinkTimeout, WrongIdentity
from ohmward.links.link import Hello, Link
from ohmward.links.serial_session import SerialSession
from ohmward.links.sessions import register_sessions
from ohmward.links.settings import LinkSettings
from ohmward.links.stream_session import PatientSession
from ohmward.links.thread_waiter import ThreadWaiter

pytestmark = pytest.mark.processes


class PtyPeer:
    """A scripted instrument behind a pseudo-terminal, reached by a name that stays."""

    def __init__(self, script: Any, name: Path) -> None:
        self.script = script
        self.name = name
        self.plug_in()

    def plug_in(self) -> None:
        self._wake, self._waker = os.pipe()
        # the slave stays open here too, so that the line outlives the one who uses it
        self._master, self._slave = os.openpty()
        tty.setraw(self._slave)
        self.name.symlink_to(os.ttyname(self._slave))
        self._half = b""
        self._coming: list[tuple[float, bytes]] = []
        self._thread = threading.Thread(target=self._serve)
        self._thread.start()

    def pull_out(self) -> None:
        """The port is gone and reads fail."""
        os.close(self._waker)
        self._thread.join()
        self.name.unlink()
        for descriptor in (self._wake, self._master, self._slave):
            os.close(descriptor)

    def _serve(self) -> None:
        with selectors.DefaultSelector() as ears:
            ears.register(self._master, selectors.EVENT_READ)
            ears.register(self._wake, selectors.EVENT_READ)
            while True:
                now_s = time.monotonic()
                for piece in [piece for piece in self._coming if piece[0] <= now_s]:
                    self._coming.remove(piece)
                    os.write(self._master, piece[1])
                due_s = min((due_s for due_s, _ in self._coming), default=None)
                for key, _ in ears.select(None if due_s is None else max(0.0, due_s - now_s)):
                    if key.fd == self._wake:
                        return
                    self._listen()

    def _listen(self) -> None:
        *lines, self._half = (self._half + os.read(self._master, 4096)).split(b"\n")
        for line in lines:
            for after_s, data in self.script.hears(line):
                self._coming.append((time.monotonic() + after_s, data))


@pytest.fixture
def line(script, tmp_path) -> Iterator[PtyPeer]:
    peer = PtyPeer(script, tmp_path / "port")
    yield peer
    peer.pull_out()


@pytest.fixture
def manager() -> Iterator[pyvisa.ResourceManager]:
    register_sessions()
    opened = pyvisa.ResourceManager("@py")
    yield opened
    opened.close()


def run(line: PtyPeer, manager: pyvisa.ResourceManager, talk: Any, **changes: Any) -> None:
    settings = {"timeout_s": 0.25, "drain_s": 0.05, "reopen_budget_s": 3.0, "baud_rate": 115200}

    async def main() -> None:
        link = Link(
            address=f"ASRL{line.name}::INSTR",
            settings=LinkSettings(**{**settings, **changes}),
            manager=manager,
            waiter=ThreadWaiter(),
            hello=Hello(query=b"*IDN?", check=lambda _reply: None),
        )
        with trio.fail_after(60):
            await link.open()
            try:
                await talk(link)
            finally:
                await link.aclose()

    trio.run(main)


async def asks_rightly(link: Link, first: int = 100, count: int = 3) -> None:
    for number in range(first, first + count):
        assert await link.query(b"Q%d?" % number) == b"%d" % number


def test_queries(line, manager):
    async def talk(link):
        await asks_rightly(link, count=20)

    run(line, manager, talk)
    assert line.script.heard[:2] == [b"*IDN?", b"Q100?"]


def test_the_port_is_ours_alone(line, manager):
    async def talk(link):
        with pytest.raises(serial.SerialException, match="lock"):
            serial.Serial(str(line.name), exclusive=True)
        second = Link(
            address=link.address,
            settings=LinkSettings(),
            manager=manager,
            waiter=ThreadWaiter(),
            hello=Hello(query=b"*IDN?", check=lambda _reply: None),
        )
        with pytest.raises(LinkError, match="lock"):
            await second.open()
        await asks_rightly(link)

    run(line, manager, talk)


def test_the_session_can_be_asked_without_blocking(line, manager):
    resource = manager.open_resource(f"ASRL{line.name}::INSTR")
    session = manager.visalib.sessions[resource.session]
    assert isinstance(session, SerialSession)
    assert isinstance(session, PatientSession)
    resource.read_termination = resource.write_termination = "\n"
    assert resource.query("Q7?") == "7"


@pytest.mark.parametrize("late_s", [0.27, 0.32, 0.4])
def test_a_late_reply_is_never_the_next_ones(line, manager, late_s):
    """The line outlives its session: what is late comes through a new one as well."""
    line.script.once(b"Q1?", [(late_s, b"1\n")])

    async def talk(link):
        with pytest.raises(LinkTimeout):
            await link.query(b"Q1?")
        await trio.sleep(late_s)
        await asks_rightly(link)

    run(line, manager, talk)


def test_a_reply_that_comes_where_the_identity_should_is_no_proof(line, manager):
    """In order, as instruments answer: the late reply first, the identity after it."""

    async def talk(link):
        line.script.once(b"Q1?", [])
        with pytest.raises(LinkTimeout):
            await link.query(b"Q1?")
        line.script.once(b"*IDN?", [(0.0, b"1\n"), (0.02, b"GENERIC,SCRIPTED,17,1.0\n")])
        await asks_rightly(link)

    run(line, manager, talk)


def test_an_identity_that_answers_an_earlier_query_is_followed_by_a_drain(line, manager):
    async def talk(link):
        link.distrust("a letter in a number")
        line.script.once(b"*IDN?", [(0.36, b"GENERIC,SCRIPTED,17,1.0\n")])
        await asks_rightly(link)

    run(line, manager, talk)


def test_a_reply_later_than_two_timeouts_is_not_another_instrument(line, manager):
    """The first reply comes where the second session's identity should, the others after it."""
    identity = b"GENERIC,SCRIPTED,17,1.0\n"

    async def talk(link):
        line.script.once(b"Q1?", [(0.7, b"1\n")])
        line.script.once(b"*IDN?", [(0.15, identity)])
        line.script.once(b"*IDN?", [(0.45, identity)])
        with pytest.raises(LinkTimeout):
            await link.query(b"Q1?")
        await asks_rightly(link)

    run(line, manager, talk)
    assert line.script.heard.count(b"*IDN?") == 4


def test_another_instrument_on_the_line_gets_no_command(line, manager):
    async def talk(link):
        line.script.once(b"Q1?", [])
        with pytest.raises(LinkTimeout):
            await link.query(b"Q1?")
        line.script.answer = lambda _line: [(0.0, b"GENERIC,SCRIPTED,18,1.0\n")]
        for _ in range(2):
            with pytest.raises(WrongIdentity, match="18"):
                await link.query(b"VOLT 1000?")

    run(line, manager, talk)
    assert set(line.script.heard) == {b"*IDN?", b"Q1?"}


def test_half_a_reply_is_never_a_reply(line, manager):
    line.script.once(b"Q1?", [(0.0, b"+1.234567E"), (0.28, b"-12\n")])

    async def talk(link):
        with pytest.raises(LinkTimeout):
            await link.query(b"Q1?")
        await asks_rightly(link)

    run(line, manager, talk)


def test_an_adapter_that_is_pulled_out_and_put_back(line, manager):
    async def talk(link):
        await asks_rightly(link)
        line.pull_out()
        with pytest.raises(LinkLost):
            await link.query(b"Q1?")
        line.plug_in()
        await link.recover()
        await asks_rightly(link)

    run(line, manager, talk, reopen_budget_s=0.3)


def test_a_reply_in_binary_is_received_as_it_is(line, manager):
    line.script.once(b"DUMP", [(0.0, bytes(range(256)))])

    async def talk(link):
        await link.write(b"DUMP")
        got = b""
        while len(got) < 256:
            got += await link.receive(timeout_s=5.0)
        assert got == bytes(range(256))

    async def main() -> None:
        link = Link(
            address=f"ASRL{line.name}::INSTR",
            settings=LinkSettings(read_termination=b"", free_running=True),
            manager=manager,
            waiter=ThreadWaiter(),
            hello=Hello(query=b"", check=lambda _reply: None),
        )
        await link.open()
        await talk(link)
        await link.aclose()

    trio.run(main)
