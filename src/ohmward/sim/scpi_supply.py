"""Simulated SCPI supplies, from docs/protocols/high-voltage-supply.md and bias-source.md."""

from ohmward.sim.scpi_device import ScpiDevice, format_number
from ohmward.sim.scpi_parameters import Boolean, Number
from ohmward.sim.scpi_status import ScpiError
from ohmward.sim.scpi_tree import Later
from ohmward.sim.supply_core import ScalarError, ScalarFigures, SupplyCore
from ohmward.sim.terminals_dc import SupplyPort


class ScpiSupply(ScpiDevice):
    """What the two supplies have in common: level, limit, output and read-back."""

    voltage_figures = ScalarFigures(rel=0.0, offset=0.0)
    current_figures = ScalarFigures(rel=0.0, offset=0.0)
    measuring_s = 0.050
    reported = 0x0F
    slew_v_per_s = 100.0

    def __init__(
        self,
        kind: str,
        name: str,
        serial_number: str,
        port: SupplyPort,
        errors: tuple[ScalarError, ScalarError],
        *,
        on: bool = False,
    ) -> None:
        super().__init__(kind, serial_number)
        self.name = name
        self.core = SupplyCore(port, on=on, slew_v_per_s=self.slew_v_per_s)
        self._voltage_error, self._current_error = errors
        self._add_output_commands()
        self.core.apply(0.0)

    def heard(self, now_s: float) -> None:
        """Any command keeps the watchdog quiet."""
        self.core.heard(now_s)
        self.status.questionable.set_condition(self.core.condition(now_s) & self.reported)

    def reset(self, now_s: float) -> None:
        """0 V, off."""
        core = self.core
        core.level_v, core.on, core.limit_a, core.watchdog_s = 0.0, False, 1e-3, 0.0
        core.slew_v_per_s = self.slew_v_per_s
        core.apply(now_s)

    def add_core_setting(self, pattern: str, parameter: Number, attribute: str) -> None:
        """A number of the core that is ordered at once."""

        def put(now_s: float, value: object) -> None:
            setattr(self.core, attribute, value)
            self.core.apply(now_s)

        self.add_setting(
            pattern, parameter, lambda: format_number(getattr(self.core, attribute)), put
        )

    def _add_output_commands(self) -> None:
        self.add_setting("OUTPut[:STATe]", Boolean(), lambda: str(int(self.core.on)), self._switch)
        self.tree.add("MEASure:VOLTage?", self._measure_voltage)
        self.tree.add("MEASure:CURRent?", self._measure_current)

    def _switch(self, now_s: float, value: object) -> None:
        if value and not self.core.may_turn_on(now_s):
            raise ScpiError(-221)
        self.core.on = bool(value)
        self.core.apply(now_s)

    def _measure_voltage(self, now_s: float) -> Later:
        def finish(at_s: float) -> str:
            value = self.core.port.voltage_v(at_s)
            return format_number(self._voltage_error.read(value, self.voltage_figures))

        return Later(now_s + self.measuring_s, finish, True)

    def _measure_current(self, now_s: float) -> Later:
        def finish(at_s: float) -> str:
            value = self.core.port.current_a(at_s)
            return format_number(self._current_error.read(value, self.current_figures))

        return Later(now_s + self.measuring_s, finish, True)


class HighVoltageSupply(ScpiSupply):
    """0 … 1000 V, one quadrant, with an interlock and a watchdog."""

    voltage_figures = ScalarFigures(rel=1e-3, offset=0.2)
    current_figures = ScalarFigures(rel=5e-3, offset=100e-9)

    def __init__(
        self,
        name: str,
        serial_number: str,
        port: SupplyPort,
        errors: tuple[ScalarError, ScalarError],
        *,
        on: bool = False,
    ) -> None:
        self._limit_v = 1000.0
        super().__init__("HIGH-VOLTAGE-SUPPLY", name, serial_number, port, errors, on=on)
        self.add_setting(
            "[SOURce:]VOLTage[:LEVel]",
            Number(minimum=0.0, maximum=1000.0, default=0.0, unit="V"),
            lambda: format_number(self.core.level_v),
            self._put_level,
        )
        self.add_setting(
            "[SOURce:]VOLTage:LIMit",
            Number(minimum=10.0, maximum=1000.0, default=1000.0, unit="V"),
            lambda: format_number(self._limit_v),
            self._put_limit,
        )
        slew = Number(minimum=1.0, maximum=1000.0, default=100.0)
        self.add_core_setting("[SOURce:]VOLTage:SLEW", slew, "slew_v_per_s")
        limit = Number(minimum=1e-6, maximum=10e-3, default=1e-3, unit="A")
        self.add_core_setting("[SOURce:]CURRent:LIMit", limit, "limit_a")
        self.add_setting(
            "SYSTem:WATChdog",
            Number(minimum=0.0, maximum=60.0, default=0.0, unit="S"),
            lambda: format_number(self.core.watchdog_s),
            self._put_watchdog,
        )
        self.tree.add("OUTPut:PROTection:CLEar", self._clear_trip)

    def reset(self, now_s: float) -> None:
        """0 V, off, all limits as after power-up."""
        self._limit_v = 1000.0
        super().reset(now_s)

    def _put_level(self, now_s: float, value: object) -> None:
        level_v = float(value)  # type: ignore[arg-type]  # the parameter is a Number
        if level_v > self._limit_v:
            raise ScpiError(-222)
        self.core.level_v = level_v
        self.core.apply(now_s)

    def _put_limit(self, now_s: float, value: object) -> None:
        limit_v = float(value)  # type: ignore[arg-type]  # the parameter is a Number
        if limit_v < self.core.level_v:
            raise ScpiError(-221)
        self._limit_v = limit_v

    def _put_watchdog(self, now_s: float, value: object) -> None:
        term_s = float(value)  # type: ignore[arg-type]  # the parameter is a Number
        if 0.0 < term_s < 1.0:
            raise ScpiError(-222)
        self.core.watchdog_s = term_s
        self.core.apply(now_s)

    def _clear_trip(self, now_s: float) -> None:
        if not self.core.port.interlock_closed(now_s):
            raise ScpiError(-221)
        self.core.tripped = False


class BiasSource(ScpiSupply):
    """−200 … +200 V, two quadrants of current, up to 20 mA."""

    voltage_figures = ScalarFigures(rel=5e-4, offset=5e-3)
    current_figures = ScalarFigures(rel=2e-3, offset=20e-9)
    measuring_s = 0.020
    reported = 0x03
    slew_v_per_s = 200.0 / 0.005  # a change arrives within 5 ms

    def __init__(
        self,
        name: str,
        serial_number: str,
        port: SupplyPort,
        errors: tuple[ScalarError, ScalarError],
    ) -> None:
        super().__init__("BIAS-SOURCE", name, serial_number, port, errors)
        level = Number(minimum=-200.0, maximum=200.0, default=0.0, unit="V")
        self.add_core_setting("[SOURce:]VOLTage[:LEVel]", level, "level_v")
        limit = Number(minimum=1e-6, maximum=20e-3, default=1e-3, unit="A")
        self.add_core_setting("[SOURce:]CURRent:LIMit", limit, "limit_a")
