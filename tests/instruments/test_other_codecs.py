"""Talkers over exchanges of several lines, and over meters that talk unasked."""

from collections import deque
from collections.abc import Callable
from math import isnan
from pathlib import Path
from typing import Any

import pytest
import trio

from ohmward.errors import InstrumentRefused, LinkTimeout, Problems, ReplyMalformed
from ohmward.instruments.identity import identity_check
from ohmward.instruments.impedance_meter import ImpedanceMeter
from ohmward.instruments.line import hello_of, link_settings
from ohmward.instruments.talker import Talker
from ohmward.protocol.codec import codec_of
from ohmward.setup.driver import Driver, load_driver
from ohmward.terms.condition import Point
from ohmward.terms.status import Status


def driver_named(name: str) -> Driver:
    driver = load_driver(name, Path(), Problems())
    assert driver is not None
    return driver


class TerseSupply:
    """From docs/protocols/terse-high-voltage-supply.md, without the prompt, which the link eats."""

    def __init__(self) -> None:
        self.state = {"U": "0000.0", "L": "1.000", "N": "0", "W": "00"}
        self.most_v = 2000.0
        self.open_interlock = False

    def restart(self) -> None:
        self.state = {"U": "0000.0", "L": "1.000", "N": "0", "W": "00"}

    def handle(self, line: bytes) -> bytes | None:
        text = line.decode("ascii")
        return f"{text}\r{self._answer(text)}\r".encode("ascii")

    def _answer(self, text: str) -> str:
        if text == "T?":
            return "T HVS2000 0815"
        if text == "M?":
            volts = float(self.state["U"]) if self.state["N"] == "1" else 0.0
            return f"M{volts:+07.1f} +0.012 0"
        letter, value = text[:1], text[1:]
        if letter not in self.state:
            return "?1"
        if value == "?":
            return letter + self.state[letter]
        if letter == "N" and value == "1" and self.open_interlock:
            return "?3"
        if letter == "U":
            value = f"{min(float(value), self.most_v):06.1f}"
        self.state[letter] = value
        return "K"


@pytest.fixture
def supply() -> TerseSupply:
    return TerseSupply()


@pytest.fixture
def talker(supply: TerseSupply, link_to: Callable[[Any], Any]) -> Talker:
    driver = driver_named("terse-high-voltage-supply")
    link = link_to(supply)
    link.identity_query = b"T?"
    return Talker(link, driver, codec_of(driver))


def test_a_terse_supply_is_set_and_read_back(
    talker: Talker, supply: TerseSupply, virtually: Any
) -> None:
    async def work() -> None:
        assert await talker.identify() == "T HVS2000 0815"
        assert await talker.set("voltage", 500.0) == 500.0
        assert await talker.set("current_limit", 2.5e-3) == pytest.approx(2.5e-3)
        assert await talker.set("output", True) is True
        answer = await talker.ask("voltage")
        assert answer.values["voltage"] == 500.0
        assert answer.status is Status.OK
        await talker.act("off")
        assert supply.state["N"] == "0"

    virtually(work)


def test_a_refusal_leaves_the_link_clean(
    talker: Talker, supply: TerseSupply, virtually: Any
) -> None:
    supply.open_interlock = True

    async def work() -> None:
        with pytest.raises(InstrumentRefused, match=r"\?3"):
            await talker.set("output", True)
        assert not talker.link.dirty
        assert await talker.read_back("output") is False

    virtually(work)


def test_a_terse_supply_that_clamps(talker: Talker, supply: TerseSupply, virtually: Any) -> None:
    supply.most_v = 1500.0

    async def work() -> None:
        with pytest.raises(InstrumentRefused, match="voltage was set to 1600 and is 1500"):
            await talker.set("voltage", 1600.0)

    virtually(work)


def test_the_echo_of_another_command_makes_the_link_dirty(
    talker: Talker, supply: TerseSupply, virtually: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    async def work() -> None:
        await talker.set("voltage", 10.0)
        late = supply.handle(b"N?")
        monkeypatch.setattr(supply, "handle", lambda line: late)
        with pytest.raises(ReplyMalformed):
            await talker.read_back("voltage")
        assert talker.link.dirty

    virtually(work)


def test_the_identity_is_found_within_echo_and_prompt() -> None:
    driver = driver_named("terse-high-voltage-supply")
    codec = codec_of(driver)
    hello = hello_of(driver, codec, address="ASRL1", serial_number="0815")
    assert hello.query == b"T?"
    hello.check(b"T?\rT HVS2000 0815\r")
    with pytest.raises(Exception, match="HVS2000"):
        hello.check(b"T?\rT OTHER 0815\r")
    settings = link_settings(driver, codec)
    assert settings.read_termination == b">"
    assert settings.write_termination == b"\r"
    assert settings.gap_s == 0.02


class Unasked:
    """A link over which messages come at their times, whoever listens."""

    def __init__(self, every_s: float = 0.25) -> None:
        self.dirty = False
        self.recoveries = 0
        self.every_s = every_s
        self.now = "P=CSD A=+100.21n B=+0.0012 F=1k V=0.60 S=0"
        self.waiting: deque[bytes] = deque()
        self.started_s = 0.0
        self.sent = 0

    def _arrive(self) -> None:
        """What has come by now: a line holds what was connected when it was sent."""
        due = int((trio.current_time() - self.started_s) / self.every_s)
        while self.sent < due:
            self.waiting.append(self.now.encode("ascii"))
            self.sent += 1

    def change(self, line: str) -> None:
        """Someone connects another part, or presses a key."""
        self._arrive()
        self.now = line

    async def open(self) -> bytes:
        self.started_s = trio.current_time()
        return b""

    async def receive(self, timeout_s: float | None = None) -> bytes:
        deadline_s = trio.current_time() + (timeout_s or 2.0)
        while True:
            self._arrive()
            if self.waiting:
                await trio.lowlevel.checkpoint()
                return self.waiting.popleft()
            next_s = self.started_s + (self.sent + 1) * self.every_s + 1e-9
            if next_s > deadline_s:
                await trio.sleep_until(deadline_s)
                raise LinkTimeout("nothing came")
            await trio.sleep_until(next_s)

    async def write(self, message: bytes) -> None:
        raise AssertionError("it takes no commands")

    async def query(self, message: bytes, timeout_s: float | None = None) -> bytes:
        raise AssertionError("it takes no commands")

    def distrust(self, reason: str, *, reopen: bool = False) -> None:
        self.dirty = True

    async def recover(self) -> None:
        self.dirty = False
        self.recoveries += 1

    async def aclose(self) -> None:
        pass


POINT = Point(frequency_hz=1e3, level_v=0.6)


def handheld(link: Unasked) -> ImpedanceMeter:
    driver = driver_named("handheld-stream")
    return ImpedanceMeter(Talker(link, driver, codec_of(driver)))


def test_a_handheld_is_listened_to(virtually: Any) -> None:
    async def work() -> None:
        link = Unasked()
        await link.open()
        meter = handheld(link)
        found = await meter.prepare(pair=None, integration="medium", range_ohm=None)
        assert found == {"pair": ""}
        await meter.set_point(POINT)
        reading = await meter.read()
        assert (reading.pair, reading.status) == ("Cs-D", Status.OK)
        assert reading.first == pytest.approx(100.21e-9)
        assert reading.level_v == 0.6

    virtually(work)


def test_what_was_measured_before_is_not_read(virtually: Any) -> None:
    """Lines of the last part wait unread while the next one is connected."""

    async def work() -> None:
        link = Unasked()
        await link.open()
        meter = handheld(link)
        await meter.prepare(pair=None, integration="medium", range_ohm=None)
        await meter.set_point(POINT)
        await meter.read()
        await trio.sleep(10.0)
        link.change("P=CSD A=+47.100n B=+0.0040 F=1k V=0.60 S=0")
        reading = await meter.read()
        assert reading.first == pytest.approx(47.1e-9)

    virtually(work)


@pytest.mark.parametrize(
    ("line", "status"),
    [
        ("P=CSD A=+100.21n B=+0.0012 F=10k V=0.60 S=0", Status.NOT_SET),
        ("P=LSQ A=+4.7123m B=+35.10 F=1k V=0.60 S=0", Status.NOT_SET),
        ("P=CSD A=+9.9E37 B=+9.9E37 F=1k V=0.60 S=1", Status.OVERLOAD),
        ("P=CSD A=+100.21 nF", Status.TIMEOUT),
    ],
)
def test_a_handheld_that_is_set_otherwise(virtually: Any, line: str, status: Status) -> None:
    async def work() -> None:
        link = Unasked()
        await link.open()
        meter = handheld(link)
        await meter.prepare(pair="Cs-D", integration="medium", range_ohm=None)
        await meter.set_point(POINT)
        await meter.read()
        link.change(line)
        reading = await meter.read()
        assert reading.status is status
        assert isnan(reading.first)

    virtually(work)


def test_a_level_that_the_meter_does_not_have(virtually: Any) -> None:
    async def work() -> None:
        link = Unasked()
        await link.open()
        meter = handheld(link)
        await meter.prepare(pair=None, integration="medium", range_ohm=None)
        with pytest.raises(InstrumentRefused, match=r"0\.6 V"):
            await meter.set_point(Point(frequency_hz=1e3, level_v=1.0))
        with pytest.raises(InstrumentRefused, match="bias voltage"):
            await meter.set_point(Point(frequency_hz=1e3, level_v=0.6, bias_v=1.0))

    virtually(work)


def test_an_instrument_without_identity_is_taken_as_it_is() -> None:
    driver = driver_named("handheld-frames")
    codec = codec_of(driver)
    hello = hello_of(driver, codec, address="ASRL1", serial_number="1")
    assert hello.query == b""
    identity_check(driver)(b"anything")
    settings = link_settings(driver, codec)
    assert settings.free_running
    assert settings.read_termination == b""
