"""A simulated bench multimeter, written from docs/protocols/multimeter.md."""

import math

from ohmward.sim.meter_pairs import OVERFLOW
from ohmward.sim.scpi_device import ScpiDevice, format_number
from ohmward.sim.scpi_parameters import Boolean, Choice, Number, Quoted
from ohmward.sim.scpi_tree import Later
from ohmward.sim.supply_core import ScalarError, ScalarFigures
from ohmward.sim.terminals_dc import VoltagePort

FIGURES = {
    0.1: ScalarFigures(rel=1e-4, offset=10e-6),
    1.0: ScalarFigures(rel=5e-5, offset=20e-6),
    10.0: ScalarFigures(rel=5e-5, offset=100e-6),
    100.0: ScalarFigures(rel=1e-4, offset=2e-3),
    1000.0: ScalarFigures(rel=1e-4, offset=20e-3),
}
RANGES_V = tuple(FIGURES)
RESISTANCE_FIGURES = ScalarFigures(rel=1e-3, offset=0.01)
MOST_OHM = 1e9
APERTURE_S = {"SHOR": 0.002, "MED": 0.020, "LONG": 0.200}
OVERRANGE = 1.2
INPUT_OHM = 10e6
HIGH_INPUT_OHM = 20e9  # "above 10 GΩ"
_HIGH_UP_TO_V = 10.0


class Multimeter(ScpiDevice):
    """Direct voltage in five ranges, and two-wire resistance."""

    def __init__(
        self, name: str, serial_number: str, port: VoltagePort, errors: dict[float, ScalarError]
    ) -> None:
        super().__init__("MULTIMETER", serial_number)
        self.name = name
        self._port = port
        self._errors = errors
        self._set_defaults()
        self._add_settings()
        self.tree.add("READ?", self._read)
        self.tree.add("MEASure:VOLTage?", self._measure_voltage)
        port.load(0.0, INPUT_OHM)

    def _set_defaults(self) -> None:
        self._function = "VOLT"
        self._range_v = RANGES_V[-1]
        self._automatic = True
        self._aperture = "MED"
        self._high_input = False

    def reset(self, now_s: float) -> None:
        """Voltage, the highest range, automatic, 10 MΩ."""
        self._set_defaults()
        self._load(now_s)

    def _add_settings(self) -> None:
        self.add_setting(
            "[SENSe:]FUNCtion",
            Quoted(frozenset({"VOLT", "RES"})),
            lambda: f'"{self._function}"',
            lambda now_s, value: setattr(self, "_function", value),
        )
        self.add_setting(
            "[SENSe:]VOLTage:RANGe",
            Number(minimum=0.0, maximum=RANGES_V[-1], default=RANGES_V[-1], unit="V"),
            lambda: format_number(self._range_v),
            self._hold,
        )
        self.add_setting(
            "[SENSe:]VOLTage:RANGe:AUTO",
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
            "INPut:IMPedance:AUTO",
            Boolean(),
            lambda: str(int(self._high_input)),
            self._choose_input,
        )

    def _hold(self, now_s: float, value: object) -> None:
        asked = float(value)  # type: ignore[arg-type]  # the parameter is a Number
        self._automatic = False
        self._range_v = next(each for each in RANGES_V if each >= asked * (1 - 1e-9))
        self._load(now_s)

    def _choose_input(self, now_s: float, value: object) -> None:
        self._high_input = bool(value)
        self._load(now_s)

    def _load(self, now_s: float) -> None:
        high = self._high_input and self._range_v <= _HIGH_UP_TO_V
        self._port.load(now_s, HIGH_INPUT_OHM if high else INPUT_OHM)

    def _measure_voltage(self, now_s: float) -> Later:
        self._function = "VOLT"
        return self._read(now_s)

    def _read(self, now_s: float) -> Later:
        ends_s = now_s + APERTURE_S[self._aperture]
        if self._function == "RES":
            return Later(ends_s, self._resistance, True)
        if self._automatic:
            magnitude_v = abs(self._port.voltage_v(now_s))
            fits = (each for each in RANGES_V if magnitude_v <= OVERRANGE * each)
            self._range_v = next(fits, RANGES_V[-1])
            self._load(now_s)
        return Later(ends_s, self._voltage, True)

    def _voltage(self, now_s: float) -> str:
        value = self._port.voltage_v(now_s)
        if abs(value) > OVERRANGE * self._range_v:
            return format_number(math.copysign(OVERFLOW, value))
        return format_number(self._errors[self._range_v].read(value, FIGURES[self._range_v]))

    def _resistance(self, now_s: float) -> str:
        ohm = self._port.resistance_ohm(now_s)
        if ohm > MOST_OHM:
            return format_number(OVERFLOW)
        return format_number(self._errors[RANGES_V[-1]].read(ohm, RESISTANCE_FIGURES))
