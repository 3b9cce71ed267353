"""Responders that send unasked, read back by hand from the driver's own layout."""

import struct
import tomllib
from typing import Any

import pytest

from ohmward.sim.free_responder import FreeResponder, checksum


class Meter:
    """Answers the same pair for ever."""

    def __init__(self, first: float, second: float, status: str = "ok") -> None:
        self.values = {"first": first, "second": second, "status": status}

    def changed(self, setting: str, now_s: float) -> None:
        raise AssertionError("nothing can be set")

    def act(self, action: str, channels: tuple[str, ...], now_s: float) -> float:
        raise AssertionError("nothing can be asked for")

    def read(
        self, reading: str, settings: Any, channels: tuple[str, ...], now_s: float
    ) -> dict[str, Any]:
        return dict(self.values)


STREAM = """
codec = "stream"
status = { 0 = "ok", 1 = "overload" }
[link]
read_termination = "\\r\\n"
[timing]
reading = { medium = "0.5 s" }
[reading.impedance]
by = "label"
separator = " "
fields = [
  { name = "first", label = "C=", form = "NR2", decimals = 2, suffixes = { nF = 1e-9, uF = 1e-6 } },
  { name = "second", label = "D=", form = "NR2", decimals = 4 },
  { name = "status", label = "S=", kind = "status" },
]
"""


def test_lines_at_the_pace_that_the_driver_states() -> None:
    device = FreeResponder(tomllib.loads(STREAM), Meter(4.7e-7, 0.0123))
    device.opened(10.1)
    assert device.due_s() == pytest.approx(10.5)
    assert device.take(10.4) == b""
    assert device.take(11.1) == b"C=470.00nF D=0.0123 S=0\r\n" * 2
    assert len(device.take(90000.0).splitlines()) <= 40, "nobody keeps more than a buffer holds"


def test_a_status_by_its_code() -> None:
    device = FreeResponder(tomllib.loads(STREAM), Meter(1e-6, 0.0, "overload"))
    assert device.take(0.5).endswith(b"S=1\r\n")


FRAMES = """
codec = "frames"
status = { 0 = "ok", 3 = "overload" }
[frame]
header = "AA 01"
length_at = 2
length_adds = 3
check = "crc16-modbus"
check_from = 2
check_endian = "little"
[meter]
frequencies = ["100 Hz", "1 kHz"]
[reading.impedance]
by = "offset"
fields = [
  { name = "status", kind = "status", at = 3, length = 1, bits = [4, 7] },
  { name = "frequency_hz", at = 3, length = 1, bits = [0, 1], numbers = { 1 = 100.0, 2 = 1000.0 } },
  { name = "first", at = 4, length = 4, coding = "float", endian = "little" },
  { name = "second", at = 8, length = 2, coding = "signed", factor = 0.001 },
]
"""


def test_frames_with_floats_bits_and_a_counted_length() -> None:
    device = FreeResponder(tomllib.loads(FRAMES), Meter(4.7e-7, -0.25, "overload"))
    frame = device.take(0.25)
    assert len(frame) == 12
    assert frame[:3] == b"\xaa\x01" + bytes((12 - 3,))
    assert frame[3] == 3 << 4 | 2
    assert struct.unpack("<f", frame[4:8])[0] == pytest.approx(4.7e-7)
    assert struct.unpack(">h", frame[8:10])[0] == -250
    assert int.from_bytes(frame[10:], "little") == checksum("crc16-modbus", frame[2:10])


@pytest.mark.parametrize(
    ("kind", "value"),
    # catalogued check values over "123456789"; the sum and the exclusive or worked out by hand
    [("crc16-modbus", 0x4B37), ("crc16-ccitt", 0x29B1), ("sum8", 0xDD), ("xor8", 0x31)],
)
def test_checks_are_the_catalogued_ones(kind: str, value: int) -> None:
    assert checksum(kind, b"123456789") == value
