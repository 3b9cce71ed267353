"""Answers for a home-made driver of an instrument that sends unasked: lines or binary frames."""

import struct
from collections import deque
from collections.abc import Mapping
from typing import Any

from ohmward.sim.plain import quantity
from ohmward.sim.responder import filled
from ohmward.sim.responder_roles import Behaviour
from ohmward.sim.responder_text import Numbers, ReplyWriter

INTERVAL_S = 0.25
MOST_UNREAD = 40
_FLOATS = {2: "e", 4: "f", 8: "d"}


class FreeResponder:
    """Sends the driver's first reading again and again, as often as its timing states."""

    message_based = False
    ends_line = b"\n"

    def __init__(self, driver: Mapping[str, Any], behaviour: Behaviour) -> None:
        self._driver = filled(driver)
        self._behaviour = behaviour
        self._name, reading = next(iter(self._driver["reading"].items()))
        self._frame = FrameWriter(self._driver["frame"], reading) if "frame" in driver else None
        self._line = ReplyWriter(reading, Numbers(self._driver.get("numbers", {})), self._driver)
        self._ends = self._driver.get("link", {}).get("read_termination", "\n").encode("latin-1")
        self._settings = first_settings(self._driver, reading)
        stated = self._driver.get("timing", {}).get("reading", {}).values()
        self._interval_s = max((quantity(each) for each in stated), default=INTERVAL_S)
        self._interval_s = self._interval_s or INTERVAL_S
        self._next_s = self._interval_s
        self._unread: deque[bytes] = deque(maxlen=MOST_UNREAD)

    def _send_until(self, now_s: float) -> None:
        missed = int((now_s - self._next_s) / self._interval_s) - MOST_UNREAD
        self._next_s += max(missed, 0) * self._interval_s
        while self._next_s <= now_s:
            found = self._behaviour.read(self._name, self._settings, (), self._next_s)
            values = {"": 0.0, **self._settings, **found}
            self._unread.append(
                self._frame.write(values, self._driver)
                if self._frame
                else self._line.write(values).encode("ascii") + self._ends
            )
            self._next_s += self._interval_s

    def opened(self, now_s: float) -> None:
        """Somebody listens: what was sent before is lost."""
        self._send_until(now_s)
        self._unread.clear()

    def refuses(self, now_s: float) -> bool:
        """Never."""
        return False

    def hung_up(self, now_s: float) -> bool:
        """Never."""
        return False

    def receive(self, data: bytes, now_s: float) -> None:
        """It takes no commands."""

    def due_s(self) -> float | None:
        """When the next reading is sent."""
        return self._next_s - self._interval_s if self._unread else self._next_s

    def take(self, now_s: float) -> bytes:
        """What has been sent and not been read."""
        self._send_until(now_s)
        sent = b"".join(self._unread)
        self._unread.clear()
        return sent

    def asked_in_vain(self, now_s: float) -> None:
        """Nothing to say about it."""

    def status_byte(self, now_s: float) -> int:
        """It has none."""
        return 0

    def clear(self, now_s: float) -> None:
        """What was not read is dropped."""
        self.opened(now_s)


def first_settings(driver: Mapping[str, Any], reading: Mapping[str, Any]) -> dict[str, Any]:
    """What a person has set with the keys: the first pair, 1 kHz where there is such a key."""
    meter = driver.get("meter", {})
    settings: dict[str, Any] = {}
    frequencies = [quantity(each) for each in meter.get("frequencies", ())]
    if frequencies:
        settings["frequency"] = 1e3 if 1e3 in frequencies else frequencies[0]
        settings["frequency_hz"] = settings["frequency"]
    if "level" in meter:
        settings["level"] = settings["level_v"] = quantity(meter["level"])
    settings["pair"] = meter.get("pair", "")
    for field in reading.get("fields", ()):
        if isinstance(field, dict) and field.get("name") == "pair" and field.get("words"):
            settings["pair"] = next(iter(field["words"]))
    return settings


class FrameWriter:
    """Writes frames of bytes: fields by offset and bits, digits in half bytes, then a check."""

    def __init__(self, frame: Mapping[str, Any], reading: Mapping[str, Any]) -> None:
        self._header = bytes.fromhex(frame["header"])
        self._check = frame.get("check", "none")
        self._check_bytes = {"none": 0, "sum8": 1, "xor8": 1}.get(self._check, 2)
        self._check_from = int(frame.get("check_from", 0))
        self._check_endian = frame.get("check_endian", "big")
        self._fields = [dict(each) for each in reading["fields"]]
        ends = max(int(each["at"]) + int(each["length"]) for each in self._fields)
        self._length = int(frame.get("length") or ends + self._check_bytes)
        self._counted_at = frame.get("length_at")
        self._counted_less = int(frame.get("length_adds", 0))

    def write(self, values: Mapping[str, Any], driver: Mapping[str, Any]) -> bytes:
        """One whole frame."""
        frame = bytearray(self._length)
        frame[: len(self._header)] = self._header
        if self._counted_at is not None:
            frame[int(self._counted_at)] = self._length - self._counted_less
        values = dict(values)
        for field in self._fields:  # scales and signs first: the numbers need them
            self._prepare(field, values)
        for field in self._fields:
            self._put(frame, field, self._bits(field, values, driver))
        if self._check_bytes:
            checked = bytes(frame[self._check_from : -self._check_bytes])
            frame[-self._check_bytes :] = checksum(self._check, checked).to_bytes(
                self._check_bytes, self._check_endian
            )
        return bytes(frame)

    def _prepare(self, field: Mapping[str, Any], values: dict[str, Any]) -> None:
        """Choose the scale of a field that another one scales, and split off its sign."""
        value = values.get(field["name"], 0.0)
        if field.get("negative_by") and isinstance(value, float):
            values[field["negative_by"]] = value < 0
            value = values[field["name"]] = abs(value)
        if field.get("scaled_by"):
            scale = next(each for each in self._fields if each["name"] == field["scaled_by"])
            most = 10.0 ** (2 * field["length"]) if field.get("coding") == "nibbles" else 2.0**15
            fits = [
                (factor, code)
                for code, factor in scale["factors"].items()
                if abs(value) / factor < most * (1 - 1e-6)
            ]
            largest = max((factor, code) for code, factor in scale["factors"].items())
            factor, code = min(fits, default=largest)
            values[scale["name"]] = int(code)
            values[field["name"]] = value / factor

    def _bits(
        self, field: Mapping[str, Any], values: Mapping[str, Any], driver: Mapping[str, Any]
    ) -> Any:
        """The whole number, the float or the text that a field holds."""
        value = values.get(field["name"], 0)
        kind = field.get("kind", "number")
        if kind == "status":
            codes = field.get("codes") or driver.get("status", {})
            return int(next((code for code, word in codes.items() if word == value), 0))
        if kind == "word":
            return int(field["words"].get(value, next(iter(field["words"].values()))))
        if field.get("numbers"):
            return int(min(field["numbers"].items(), key=lambda one: abs(one[1] - value))[0])
        if isinstance(value, str):
            return value
        value = value / quantity(field.get("factor", 1.0))
        return value if field.get("coding") == "float" else round(value)

    def _put(self, frame: bytearray, field: Mapping[str, Any], value: Any) -> None:
        at, length = int(field["at"]), int(field["length"])
        endian = field.get("endian", "big")
        coding = field.get("coding", "unsigned")
        if isinstance(value, str):
            frame[at : at + length] = value.encode("ascii")[:length].ljust(length)
            return
        if coding == "float":
            order = ">" if endian == "big" else "<"
            frame[at : at + length] = struct.pack(order + _FLOATS[length], value)
            return
        if coding == "nibbles":
            digits = min(int(value), 10 ** (2 * length) - 1)
            data = bytes.fromhex(f"{digits:0{2 * length}d}")
            frame[at : at + length] = data if endian == "big" else data[::-1]
            return
        first, last = field.get("bits") or (0, 8 * length - 1)
        width = last - first + 1
        mask = (1 << width) - 1
        limited = max(min(int(value), mask), 0) if coding == "unsigned" else int(value) & mask
        present = int.from_bytes(frame[at : at + length], endian)
        present = present & ~(mask << first) | limited << first
        frame[at : at + length] = present.to_bytes(length, endian)


def checksum(kind: str, data: bytes) -> int:
    """The check of a frame: a sum, an exclusive or, or one of two CRC-16."""
    if kind == "sum8":
        return sum(data) & 0xFF
    if kind == "xor8":
        value = 0
        for byte in data:
            value ^= byte
        return value
    value = 0xFFFF
    for byte in data:
        if kind == "crc16-modbus":  # lowest bit first, polynomial 0x8005 reflected
            value ^= byte
            for _ in range(8):
                value = value >> 1 ^ 0xA001 if value & 1 else value >> 1
        else:  # highest bit first, polynomial 0x1021
            value ^= byte << 8
            for _ in range(8):
                value = (value << 1 ^ 0x1021 if value & 0x8000 else value << 1) & 0xFFFF
    return value
