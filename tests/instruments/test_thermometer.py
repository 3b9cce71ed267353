"""The thermometer: missing rather than wrong."""

from collections.abc import Callable
from math import isnan
from pathlib import Path
from typing import Any

import pytest

from ohmward.errors import LinkError, Problems
from ohmward.instruments.talker import Talker
from ohmward.instruments.thermometer import Thermometer
from ohmward.protocol.codec import codec_of
from ohmward.setup.driver import load_driver


class Room:
    def __init__(self) -> None:
        self.temperature = b"+2.315000E+01"
        self.humidity = b"+4.520000E+01"

    def restart(self) -> None:
        pass

    def handle(self, line: bytes) -> bytes | None:
        return {b"MEAS:TEMP?": self.temperature, b"MEAS:HUM?": self.humidity}.get(line)


@pytest.fixture
def room() -> Room:
    return Room()


@pytest.fixture
def link(room: Room, link_to: Callable[[Any], Any]) -> Any:
    return link_to(room)


@pytest.fixture
def thermometer(link: Any) -> Thermometer:
    driver = load_driver("scpi-thermometer", Path(), Problems())
    assert driver is not None
    return Thermometer(Talker(link, driver, codec_of(driver)))


def test_the_room(thermometer: Thermometer, virtually: Any) -> None:
    found = virtually(thermometer.read)
    assert (found.temperature_c, found.humidity_pct) == (23.15, 45.2)


@pytest.mark.parametrize(
    "reply", [b"9.9E37", b"9.91E37", b"+2.3", b"", b"-12", b"+2.315000E+05", b"23,15"]
)
def test_what_cannot_be_is_missing(
    thermometer: Thermometer, room: Room, virtually: Any, reply: bytes
) -> None:
    room.temperature = reply
    found = virtually(thermometer.read)
    assert isnan(found.temperature_c)


def test_a_late_reply_is_missing_and_the_next_is_there(
    thermometer: Thermometer, link: Any, virtually: Any
) -> None:
    async def work() -> None:
        link.faults[1] = "late"
        found = await thermometer.read()
        assert isnan(found.temperature_c)
        assert isnan(found.humidity_pct)
        assert (await thermometer.read()).temperature_c == 23.15

    virtually(work)


def test_beyond_recovery_is_raised(thermometer: Thermometer, link: Any, virtually: Any) -> None:
    link.dirty = link.gone = True
    with pytest.raises(LinkError):
        virtually(thermometer.read)
