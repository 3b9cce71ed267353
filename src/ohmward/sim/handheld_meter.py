"""Simulated handheld impedance meters that send of their own accord, as lines or as frames.

Written from docs/protocols/handheld-stream.md and handheld-frames.md. A person sets them with
their keys: ``press``.
"""

import math
from collections import deque
from collections.abc import Callable

from ohmward.sim.bridge import GOOD, LEVEL_LOW, OVERLOAD, Bridge, Drive, Reading
from ohmward.sim.meter_error import MeterError, MeterFigures
from ohmward.sim.meter_pairs import OVERFLOW
from ohmward.sim.terminals import Terminals

INTERVAL_S = 0.25
FREQUENCIES_HZ = {100.0: "100", 120.0: "120", 1e3: "1k", 1e4: "10k", 1e5: "100k"}
FREQUENCY_CODES = {100.0: 0, 120.0: 1, 1e3: 2, 1e4: 3, 1e5: 4}
PAIR_CODES = {"CSD": 0, "CPD": 1, "CSRS": 2, "LSQ": 3, "LSRS": 4, "RX": 5}
LEVEL_V = 0.6
SOURCE_OHM = 120.0
MOST_UNREAD_S = 10.0  # what a serial line's buffer holds; older output is lost
STATE_GOOD, STATE_OVERLOAD, STATE_BATTERY, STATE_RANGING = 0, 1, 2, 3

FIGURES = MeterFigures(
    knots=((100.0, 2.5e-3, 2.5e-3), (1e4, 2.5e-3, 2.5e-3), (1e5, 5e-3, 5e-3)),
    short_ohm=5e-3,
    open_s=5e-9,
    full_level_v=0.1,
    noise={"SHOR": 1e-4, "MED": 1e-4, "LONG": 1e-4},
)


def line_of(drive: Drive, found: Reading, state: int, counter: int) -> bytes:
    """A reading as a line."""
    first, second = _shown(found.first, 5), _shown(found.second, 4)
    if state == STATE_OVERLOAD:
        first = second = "+9.9E37"
    frequency = FREQUENCIES_HZ[drive.frequency_hz]
    return f"P={drive.pair} A={first} B={second} F={frequency} V=0.60 S={state}\r\n".encode()


def _shown(value: float, digits: int) -> str:
    """Sign, so many digits with a point, and a multiplier: ``+100.21n``."""
    value = float(f"{value:.{digits - 1}e}") if abs(value) < OVERFLOW else 0.0
    for factor, letter in (
        (1e-12, "p"),
        (1e-9, "n"),
        (1e-6, "u"),
        (1e-3, "m"),
        (1.0, ""),
        (1e3, "k"),
        (1e6, "M"),
    ):
        if letter == "p" and value == 0.0:
            continue
        if abs(value) < 1e3 * factor * (1 - 1e-9) or letter == "M":
            if value == 0.0:
                factor, letter = 1.0, ""
            scaled = value / factor
            whole = len(str(int(abs(scaled) * (1 + 1e-9))))
            return f"{scaled:+.{max(digits - whole, 0)}f}{letter}"
    raise AssertionError("the last multiplier takes everything")


def frame_of(drive: Drive, found: Reading, state: int, counter: int) -> bytes:
    """A reading as a frame of 16 bytes."""
    first, first_code = _digits(found.first)
    second, second_code = _digits(found.second)
    if state == STATE_OVERLOAD:
        first = second = 999999
    signs = (0x40 if found.first < 0 else 0) | (0x80 if found.second < 0 else 0)
    body = bytes(
        (
            PAIR_CODES[drive.pair] | FREQUENCY_CODES[drive.frequency_hz] << 4,
            state | (signs if state != STATE_OVERLOAD else 0),
            *bytes.fromhex(f"{first:06d}"),
            first_code,
            *bytes.fromhex(f"{second:06d}"),
            second_code,
            counter & 0xFF,
            counter >> 8 & 0xFF,
        )
    )
    return b"\xa5\x5a" + body + checksum(body).to_bytes(2, "big")


def _digits(value: float) -> tuple[int, int]:
    """Six digits and the code of their multiplier, 10^(code − 15)."""
    magnitude = abs(value)
    if not magnitude < OVERFLOW or magnitude == 0.0:
        return 0, 0
    code = min(max(math.floor(math.log10(magnitude)) - 5 + 15, 0), 15)
    digits = round(magnitude / 10.0 ** (code - 15))
    if digits > 999999 and code < 15:
        code += 1
        digits = round(magnitude / 10.0 ** (code - 15))
    return min(digits, 999999), code


def checksum(data: bytes) -> int:
    """CRC-16, polynomial 0x1021, start 0xFFFF, highest bit first."""
    value = 0xFFFF
    for byte in data:
        value ^= byte << 8
        for _ in range(8):
            value = (value << 1 ^ 0x1021 if value & 0x8000 else value << 1) & 0xFFFF
    return value


class HandheldMeter:
    """Sends a reading four times a second; ``write`` makes it a line or a frame."""

    message_based = False
    ends_line = b"\n"

    def __init__(
        self,
        terminals: Terminals,
        error: MeterError,
        write: Callable[[Drive, Reading, int, int], bytes],
    ) -> None:
        self._terminals = terminals
        drive = Drive(frequency_hz=1e3, level_v=LEVEL_V, pair="CSD", aperture="MED")
        self._bridge = Bridge(terminals, error, source_ohm=SOURCE_OHM, drive=drive)
        self._write = write
        self._next_s = 0.0
        self._counter = 0
        self._pressed = False
        self._battery_low = False
        self._last: Reading | None = None
        self._unread: deque[bytes] = deque()

    def press(self, *, pair: str = "", frequency_hz: float = 0.0, now_s: float = 0.0) -> None:
        """A person presses keys; the reading under way still holds the old numbers."""
        self._send_until(now_s)
        if pair:
            if pair not in PAIR_CODES:
                raise ValueError(f"the keys are {', '.join(PAIR_CODES)}, not {pair}")
            self._bridge.drive.pair = pair
        if frequency_hz:
            if frequency_hz not in FREQUENCY_CODES:
                raise ValueError(f"it has no key for {frequency_hz} Hz")
            self._bridge.drive.frequency_hz = frequency_hz
        self._pressed = True

    def run_down(self) -> None:
        """The battery is low from now on."""
        self._battery_low = True

    def _send_until(self, now_s: float) -> None:
        if now_s - self._next_s > MOST_UNREAD_S:
            skipped = int((now_s - MOST_UNREAD_S - self._next_s) / INTERVAL_S)
            self._next_s += skipped * INTERVAL_S
            self._counter += skipped
        while self._next_s <= now_s:
            self._unread.append(self._reading(self._next_s))
            self._next_s += INTERVAL_S
            while len(self._unread) > MOST_UNREAD_S / INTERVAL_S:
                self._unread.popleft()

    def _reading(self, at_s: float) -> bytes:
        bridge = self._bridge
        self._counter += 1
        began_s = at_s - INTERVAL_S
        bridge.prepare(at_s)
        found = bridge.measure(math.inf, at_s)
        state = STATE_BATTERY if self._battery_low else STATE_GOOD
        if self._terminals.changed_s(at_s) > began_s:
            state = STATE_RANGING
        elif found.status == OVERLOAD:
            state = STATE_OVERLOAD
        elif self._pressed and self._last is not None and self._last.status in (GOOD, LEVEL_LOW):
            found, self._last = self._last, found
            self._pressed = False
            return self._write(bridge.drive, found, state, self._counter)
        self._pressed = False
        self._last = found
        return self._write(bridge.drive, found, state, self._counter)

    # -- the interface's side

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
        """When the next reading is sent; one always is."""
        return self._next_s - INTERVAL_S if self._unread else self._next_s

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
        self._send_until(now_s)
        self._unread.clear()
