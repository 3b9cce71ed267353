"""A simulated meter of small currents, written from docs/protocols/current-meter.md."""

import math

from ohmward.sim.meter_pairs import OVERFLOW
from ohmward.sim.scpi_device import ScpiDevice, format_number
from ohmward.sim.scpi_parameters import Boolean, Choice, Number
from ohmward.sim.scpi_tree import Later
from ohmward.sim.supply_core import ScalarError, ScalarFigures
from ohmward.sim.terminals_dc import CurrentPort

FIGURES = {
    2e-9: ScalarFigures(rel=1e-2, offset=1e-12),
    20e-9: ScalarFigures(rel=5e-3, offset=5e-12),
    200e-9: ScalarFigures(rel=2e-3, offset=50e-12),
    2e-6: ScalarFigures(rel=2e-3, offset=500e-12),
    20e-6: ScalarFigures(rel=1e-3, offset=5e-9),
    200e-6: ScalarFigures(rel=1e-3, offset=50e-9),
    2e-3: ScalarFigures(rel=1e-3, offset=500e-9),
    20e-3: ScalarFigures(rel=1e-3, offset=5e-6),
}
RANGES_A = tuple(FIGURES)
APERTURE_S = {"SHOR": 0.010, "MED": 0.100, "LONG": 0.500}
RANGING_S = 0.050
BURDEN_V = 0.010
ZERO_CHECK_OHM = 10e3
_STEP_DOWN = 0.09  # of the range: the reading that makes automatic ranging take a lower one
_UNSETTLED_READINGS = 2


class CurrentMeter(ScpiDevice):
    """Eight ranges; with its zero check on it reads its own offset, off the terminals."""

    def __init__(
        self, name: str, serial_number: str, port: CurrentPort, errors: dict[float, ScalarError]
    ) -> None:
        super().__init__("CURRENT-METER", serial_number)
        self.name = name
        self._port = port
        self._errors = errors
        self._set_defaults()
        self._add_settings()
        self.tree.add("READ?", self._read)
        self._load(0.0)

    def _set_defaults(self) -> None:
        self._range_a = RANGES_A[-1]
        self._automatic = True
        self._aperture = "MED"
        self._zero = True
        self._unsettled = 0

    def reset(self, now_s: float) -> None:
        """The highest range, automatic, zero check on."""
        self._set_defaults()
        self._load(now_s)

    def _add_settings(self) -> None:
        self.add_setting(
            "[SENSe:]CURRent:RANGe",
            Number(minimum=0.0, maximum=RANGES_A[-1], default=RANGES_A[-1], unit="A"),
            lambda: format_number(self._range_a),
            self._hold,
        )
        self.add_setting(
            "[SENSe:]CURRent:RANGe:AUTO",
            Boolean(),
            lambda: str(int(self._automatic)),
            lambda now_s, value: setattr(self, "_automatic", value),
        )
        self.add_setting(
            "[SENSe:]APERture",
            Choice(("SHORt", "MEDium", "LONG")),
            lambda: self._aperture,
            lambda now_s, value: setattr(self, "_aperture", value),
        )
        self.add_setting(
            "INPut:ZERO[:STATe]", Boolean(), lambda: str(int(self._zero)), self._check_zero
        )

    def _hold(self, now_s: float, value: object) -> None:
        asked = float(value)  # type: ignore[arg-type]  # the parameter is a Number
        self._automatic = False
        self._take_range(now_s, next(each for each in RANGES_A if each >= asked * (1 - 1e-9)))

    def _take_range(self, now_s: float, range_a: float) -> bool:
        if range_a == self._range_a:
            return False
        self._range_a = range_a
        self._unsettled = _UNSETTLED_READINGS
        self._load(now_s)
        return True

    def _check_zero(self, now_s: float, value: object) -> None:
        self._zero = bool(value)
        self._load(now_s)

    def _load(self, now_s: float) -> None:
        """What lies between the terminals now: a range's burden, or what joins them meanwhile."""
        self._port.load(now_s, ZERO_CHECK_OHM if self._zero else BURDEN_V / self._range_a)

    def _current_a(self, now_s: float) -> float:
        return 0.0 if self._zero else self._port.current_a(now_s)

    def _read(self, now_s: float) -> Later:
        ends_s = now_s + APERTURE_S[self._aperture]
        if self._automatic and self._take_range(now_s, self._fitting(abs(self._current_a(now_s)))):
            ends_s += RANGING_S
        return Later(ends_s, self._measured, True)

    def _fitting(self, magnitude_a: float) -> float:
        """The range for a current; a lower one only when it is well within that."""
        if _STEP_DOWN * self._range_a <= magnitude_a <= self._range_a:
            return self._range_a
        return next((each for each in RANGES_A if magnitude_a <= each), RANGES_A[-1])

    def _measured(self, now_s: float) -> str:
        value = self._current_a(now_s)
        unsettled = self._unsettled > 0
        self._unsettled = max(self._unsettled - 1, 0)
        if abs(value) > self._range_a:
            return f"{math.copysign(OVERFLOW, value):+.6E},1,{self._range_a:+.6E}"
        seen = self._errors[self._range_a].read(value, FIGURES[self._range_a])
        return f"{seen:+.6E},{2 if unsettled else 0},{self._range_a:+.6E}"
