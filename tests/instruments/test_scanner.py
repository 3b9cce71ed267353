"""The scanner against relays written by hand: every move is read back."""

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from ohmward.errors import InstrumentRefused, LinkError, Problems
from ohmward.instruments.scanner import Scanner
from ohmward.instruments.talker import Talker
from ohmward.protocol.codec import codec_of
from ohmward.protocol.scpi import read_channels, write_channels
from ohmward.setup.driver import load_driver


class Relays:
    def __init__(self) -> None:
        self.closed: set[int] = set()
        self.stuck: set[int] = set()
        self.errors: list[str] = []
        self.history: list[str] = []

    def restart(self) -> None:
        self.closed.clear()

    def handle(self, line: bytes) -> bytes | None:
        text = line.decode("ascii")
        self.history.append(text)
        if text == "*CLS":
            self.errors.clear()
            return None
        if text == "*OPC?":
            return b"1"
        if text == "SYST:ERR?":
            return (self.errors.pop(0) if self.errors else '+0,"No error"').encode()
        if text == "ROUT:CLOS:STAT?":
            return write_channels(sorted(self.closed)).encode()
        if text == "ROUT:OPEN:ALL":
            self.closed &= self.stuck
            return None
        header, _, channels = text.partition(" ")
        moved = set(read_channels(channels)) - self.stuck
        if max(moved, default=0) > 299:
            self.errors.append('-222,"Data out of range"')
            return None
        self.closed = self.closed | moved if header == "ROUT:CLOS" else self.closed - moved
        return None


@pytest.fixture
def relays() -> Relays:
    return Relays()


@pytest.fixture
def link(relays: Relays, link_to: Callable[[Any], Any]) -> Any:
    return link_to(relays)


@pytest.fixture
def scanner(link: Any) -> Scanner:
    driver = load_driver("scpi-scanner", Path(), Problems())
    assert driver is not None
    return Scanner(Talker(link, driver, codec_of(driver)))


def test_moves(scanner: Scanner, relays: Relays, virtually: Any) -> None:
    async def work() -> None:
        await scanner.close(("101", "201"))
        assert await scanner.closed() == {"101", "201"}
        await scanner.open(("101",))
        assert await scanner.closed() == {"201"}
        await scanner.open_all()
        assert await scanner.closed() == frozenset()
        assert relays.history[:3] == ["ROUT:CLOS (@101,201)", "*OPC?", "ROUT:CLOS:STAT?"]

    virtually(work)


def test_a_relay_that_does_not_close(scanner: Scanner, relays: Relays, virtually: Any) -> None:
    relays.stuck = {201}
    with pytest.raises(InstrumentRefused, match="201"):
        virtually(lambda: scanner.close(("101", "201")))


@pytest.mark.parametrize("how", ["one", "all"])
def test_a_welded_relay(scanner: Scanner, relays: Relays, virtually: Any, how: str) -> None:
    relays.closed, relays.stuck = {101, 201}, {201}
    with pytest.raises(InstrumentRefused, match="201"):
        virtually(scanner.open_all if how == "all" else lambda: scanner.open(("201",)))


def test_a_channel_that_is_not_fitted(scanner: Scanner, virtually: Any) -> None:
    with pytest.raises(InstrumentRefused, match="-222, Data out of range"):
        virtually(lambda: scanner.close(("301",)))


@pytest.mark.parametrize("channels", [("A1",), (), ("1 ",), ("-1",), ("¹",)])
def test_what_is_no_channel_is_not_sent(
    scanner: Scanner, relays: Relays, virtually: Any, channels: tuple[str, ...]
) -> None:
    with pytest.raises(InstrumentRefused):
        virtually(lambda: scanner.close(channels))
    assert relays.history == []


@pytest.mark.parametrize("when", [1, 2, 3, 4])
def test_a_fault_is_raised_and_the_next_move_starts_clean(
    scanner: Scanner, relays: Relays, link: Any, virtually: Any, when: int
) -> None:
    async def work() -> None:
        link.faults[when] = "lost"
        with pytest.raises(LinkError):
            await scanner.close(("101",))
        await scanner.open_all()
        assert relays.closed == set()

    virtually(work)
