"""A simulated serial high-voltage supply, from docs/protocols/terse-high-voltage-supply.md."""

import re

from ohmward.sim.supply_core import INTERLOCK_OPEN, LIMITING, ScalarError, ScalarFigures, SupplyCore
from ohmward.sim.terminals_dc import SupplyPort

SLEW_V_PER_S = 200.0
REST_S = 0.020
_ROUNDING_S = 1e-6
VOLTAGE_FIGURES = ScalarFigures(rel=5e-3, offset=1.0)
CURRENT_FIGURES = ScalarFigures(rel=1e-2, offset=2e-6)
UNKNOWN, OUT_OF_RANGE, NOT_NOW = "?1", "?2", "?3"
_FORMS = {
    "U": re.compile(r"\d{4}\.\d"),
    "L": re.compile(r"\d\.\d{3}"),
    "N": re.compile(r"[01]"),
    "W": re.compile(r"\d{2}"),
}


class TerseSupply:
    """0 … 2000 V: a letter and digits, every character echoed, a prompt at the end."""

    message_based = False
    ends_line = b"\r"

    def __init__(
        self, serial_number: str, port: SupplyPort, errors: tuple[ScalarError, ScalarError]
    ) -> None:
        self.core = SupplyCore(port, slew_v_per_s=SLEW_V_PER_S)
        self._serial_number = serial_number
        self._voltage_error, self._current_error = errors
        self._line = bytearray()
        self._output = bytearray()
        self._ready_s = 0.0
        self._greeted = False
        self._seen_s = 0.0
        self.core.apply(0.0)

    # -- the interface's side

    def opened(self, now_s: float) -> None:
        """The first one to listen hears that it is ready."""
        self._line.clear()
        self._output.clear()
        if not self._greeted:
            self._greeted = True
            self._output += b"\rREADY\r>"

    def refuses(self, now_s: float) -> bool:
        """Never."""
        return False

    def hung_up(self, now_s: float) -> bool:
        """Never."""
        return False

    def receive(self, data: bytes, now_s: float) -> None:
        """Echo and obey; what comes too soon after a prompt is not heard."""
        self._seen_s = now_s
        for byte in data:
            if now_s < self._ready_s - _ROUNDING_S:
                continue
            self._output.append(byte)
            if byte != self.ends_line[0]:
                self._line.append(byte)
                continue
            command = self._line.decode("latin-1").strip()
            self._line.clear()
            if command:
                self._output += self._obey(command, now_s).encode("ascii") + b"\r"
            self._output += b">"
            self._ready_s = now_s + REST_S

    def due_s(self) -> float | None:
        """At once, when there is something to say."""
        return self._seen_s if self._output else None

    def take(self, now_s: float) -> bytes:
        """What has been said."""
        said = bytes(self._output)
        self._output.clear()
        return said

    def asked_in_vain(self, now_s: float) -> None:
        """Nothing to say about it."""

    def status_byte(self, now_s: float) -> int:
        """It has none."""
        return 0

    def clear(self, now_s: float) -> None:
        """Forget what came half and what was not read."""
        self._line.clear()
        self._output.clear()

    # -- commands

    def _obey(self, command: str, now_s: float) -> str:
        core = self.core
        core.heard(now_s)
        if command in ("T?", "U?", "L?", "N?", "W?", "M?"):
            return self._answer(command[0], now_s)
        if command == "R":
            if not core.port.interlock_closed(now_s):
                return NOT_NOW
            core.tripped = False
            return "K"
        letter, digits = command[0], command[1:]
        form = _FORMS.get(letter)
        if form is None or form.fullmatch(digits) is None:
            return UNKNOWN
        return self._set(letter, float(digits), now_s)

    def _set(self, letter: str, value: float, now_s: float) -> str:
        core = self.core
        if letter == "U":
            if value > 2000.0:
                return OUT_OF_RANGE
            core.level_v = value
        elif letter == "L":
            if not 0.001 <= value <= 5.0:
                return OUT_OF_RANGE
            core.limit_a = value / 1e3
        elif letter == "W":
            core.watchdog_s = value
        else:
            if value and not core.may_turn_on(now_s):
                return NOT_NOW
            core.on = bool(value)
        core.apply(now_s)
        return "K"

    def _answer(self, letter: str, now_s: float) -> str:
        core = self.core
        if letter == "T":
            return f"T HVS2000 {self._serial_number}"
        if letter == "U":
            return f"U{core.level_v:06.1f}"
        if letter == "L":
            return f"L{core.limit_a * 1e3:05.3f}"
        if letter == "N":
            return f"N{int(core.on)}"
        if letter == "W":
            return f"W{round(core.watchdog_s):02d}"
        volts = self._voltage_error.read(core.port.voltage_v(now_s), VOLTAGE_FIGURES)
        milliamperes = 1e3 * self._current_error.read(core.port.current_a(now_s), CURRENT_FIGURES)
        condition = core.condition(now_s)
        state = 2 if core.tripped or condition & INTERLOCK_OPEN else int(bool(condition & LIMITING))
        return f"M{volts:+07.1f} {milliamperes:+06.3f} {state}"
