"""A simulated impedance meter, written from docs/protocols/impedance-meter.md."""

import cmath
import math

from ohmward.sim.meter_error import MeterError
from ohmward.sim.meter_pairs import NOT_A_NUMBER, OVERFLOW, PAIRS
from ohmward.sim.scpi_device import ScpiDevice, format_number
from ohmward.sim.scpi_parameters import Boolean, Choice, Number, Quoted
from ohmward.sim.scpi_status import ScpiError
from ohmward.sim.scpi_tree import Later
from ohmward.sim.terminals import Connection, Terminals

SOURCE_OHM = 100.0
APERTURE_S = {"SHOR": 0.010, "MED": 0.060, "LONG": 0.250}
SETTLING_S = 0.020
SETTLING_PERIODS = 2.0
RANGES_OHM = (1.0, 10.0, 100.0, 1e3, 1e4, 1e5, 1e6)
_REACH = math.sqrt(10.0)  # a range is meant for |Z| from R/reach to R·reach
_HYSTERESIS = 1.1
_HELD_OVERLOAD = 20.0
_NOTHING_OHM = 1e12
_OFFSET_LIMIT_A = 0.1
_OFFSET_LIMIT_V = 40.0
_CABLE_DELAY_S_PER_M = 5e-9

GOOD, OVERLOAD, UNBALANCED, LEVEL_LOW = 0, 1, 2, 3


class ImpedanceMeter(ScpiDevice):
    """Measures what lies between its leads, with the errors that ``error`` draws."""

    def __init__(
        self, name: str, serial_number: str, terminals: Terminals, error: MeterError
    ) -> None:
        super().__init__("IMPEDANCE-METER", serial_number)
        self.name = name
        self._terminals = terminals
        self._error = error
        self._readings = 0
        self._set_defaults()
        self._changed_s = -math.inf
        self._seen_contacts_s = -math.inf
        self._offset_from_v = 0.0
        self._offset_changed_s = -math.inf
        self._last: str | None = None
        self._add_source_commands()
        self._add_sense_commands()

    def _set_defaults(self) -> None:
        self._frequency_hz = 1000.0
        self._level_v = 1.0
        self._offset_v = 0.0
        self._offset_on = False
        self._bias_a = 0.0
        self._bias_on = False
        self._pair = "RX"
        self._aperture = "MED"
        self._range_ohm = 1e3
        self._automatic = True
        self._corrections = {"OPEN": False, "SHORt": False, "LOAD": False}
        self._length_m = 0.0

    def reset(self, now_s: float) -> None:
        """Every setting as after power-up, both offsets off."""
        self._offset_moves(now_s)
        self._set_defaults()
        self._changed_s = now_s
        self._last = None

    # -- commands

    def _number(self, pattern: str, parameter: Number, attribute: str) -> None:
        """A numeric setting that the meter has to settle after."""

        def put(now_s: float, value: object) -> None:
            setattr(self, attribute, value)
            self._changed_s = now_s

        self.add_setting(pattern, parameter, lambda: format_number(getattr(self, attribute)), put)

    def _add_source_commands(self) -> None:
        frequency = Number(minimum=20.0, maximum=2e6, default=1e3, unit="HZ")
        self._number("[SOURce:]FREQuency[:CW]", frequency, "_frequency_hz")
        level = Number(minimum=5e-3, maximum=2.0, default=1.0, unit="V")
        self._number("[SOURce:]VOLTage[:LEVel]", level, "_level_v")
        self.add_setting(
            "[SOURce:]VOLTage:OFFSet",
            Number(minimum=-40.0, maximum=40.0, default=0.0, unit="V"),
            lambda: format_number(self._offset_v),
            lambda now_s, value: self._put_offset(now_s, "_offset_v", value),
        )
        self.add_setting(
            "[SOURce:]CURRent:OFFSet",
            Number(minimum=0.0, maximum=0.1, default=0.0, unit="A"),
            lambda: format_number(self._bias_a),
            lambda now_s, value: self._put_offset(now_s, "_bias_a", value),
        )
        self.add_setting(
            "[SOURce:]VOLTage:OFFSet:STATe",
            Boolean(),
            lambda: str(int(self._offset_on)),
            lambda now_s, value: self._switch(now_s, bool(value), False),
        )
        self.add_setting(
            "[SOURce:]CURRent:OFFSet:STATe",
            Boolean(),
            lambda: str(int(self._bias_on)),
            lambda now_s, value: self._switch(now_s, False, bool(value)),
        )

    def _add_sense_commands(self) -> None:
        self.add_setting(
            "[SENSe:]FUNCtion",
            Quoted(frozenset(PAIRS)),
            lambda: f'"{self._pair}"',
            lambda now_s, value: setattr(self, "_pair", value),
        )
        self.add_setting(
            "[SENSe:]APERture",
            Choice(("SHORt", "MEDium", "LONG")),
            lambda: self._aperture,
            lambda now_s, value: setattr(self, "_aperture", value),
        )
        self.add_setting(
            "[SENSe:]RANGe",
            Number(minimum=RANGES_OHM[0], maximum=RANGES_OHM[-1], default=1e3, unit="OHM"),
            lambda: format_number(self._range_ohm),
            self._hold_range,
        )
        self.add_setting(
            "[SENSe:]RANGe:AUTO",
            Boolean(),
            lambda: str(int(self._automatic)),
            lambda now_s, value: setattr(self, "_automatic", value),
        )
        for kind in self._corrections:
            self._add_correction(kind)
        length = Number(minimum=0.0, maximum=4.0, default=0.0, unit="M")
        self._number("[SENSe:]CORRection:LENGth", length, "_length_m")
        self.tree.add("READ?", self._read)
        self.tree.add("FETCh?", self._fetch)

    def _add_correction(self, kind: str) -> None:
        self.add_setting(
            f"[SENSe:]CORRection:{kind}[:STATe]",
            Boolean(),
            lambda: str(int(self._corrections[kind])),
            lambda now_s, value: self._corrections.__setitem__(kind, bool(value)),
        )

    def _put_offset(self, now_s: float, attribute: str, value: object) -> None:
        self._offset_moves(now_s)
        setattr(self, attribute, value)

    def _switch(self, now_s: float, voltage_on: bool, current_on: bool) -> None:
        self._offset_moves(now_s)
        self._offset_on, self._bias_on = voltage_on, current_on

    def _hold_range(self, now_s: float, value: object) -> None:
        asked = float(value)  # type: ignore[arg-type]
        self._range_ohm = next(each for each in RANGES_OHM if each >= asked * (1 - 1e-9))
        self._automatic = False
        self._changed_s = now_s

    # -- measuring

    def _read(self, now_s: float) -> Later:
        """Start a measurement: settle, range, integrate."""
        frequency_hz = self._frequency_hz
        periods_s = SETTLING_PERIODS / frequency_hz
        self._notice_contacts(now_s)
        if self._automatic:
            self._choose_range(now_s)
        starts_s = max(now_s, self._changed_s + SETTLING_S + periods_s)
        ends_s = starts_s + max(APERTURE_S[self._aperture], periods_s)
        return Later(ends_s, lambda at_s: self._measure(starts_s, at_s), True)

    def _choose_range(self, now_s: float) -> None:
        z = self._seen_impedance(self._terminals.connection(now_s), self._target_offset_v())
        magnitude = abs(z)
        range_ohm = self._range_ohm
        reach = _REACH * _HYSTERESIS
        if range_ohm / reach <= magnitude <= range_ohm * reach:
            return
        fitting = next((r for r in RANGES_OHM if magnitude <= r * _REACH), RANGES_OHM[-1])
        if fitting != range_ohm:
            self._range_ohm = fitting
            self._changed_s = now_s

    def _measure(self, started_s: float, now_s: float) -> str:
        """One reading at the end of its integration, as the answer to READ?."""
        self._readings += 1
        connection = self._terminals.connection(now_s)
        offset_v = self._offset_at(connection, now_s)
        z = self._seen_impedance(connection, offset_v)
        level_v = self._level_v * _share(z)
        if self._terminals.changed_s(now_s) > started_s:
            return self._answer(NOT_A_NUMBER, NOT_A_NUMBER, UNBALANCED, level_v, offset_v)
        if self._overloaded(abs(z), connection):
            return self._answer(OVERFLOW, OVERFLOW, OVERLOAD, level_v, offset_v)
        seen = self._with_error(z, connection)
        first, second = PAIRS[self._pair](seen, 2.0 * math.pi * self._frequency_hz)
        status = LEVEL_LOW if level_v < 0.5 * self._level_v else GOOD
        return self._answer(first, second, status, level_v, offset_v)

    def _answer(
        self, first: float, second: float, status: int, level_v: float, offset_v: float
    ) -> str:
        self._last = (
            f"{_shown(first):+.6E},{_shown(second):+.6E},{status},"
            f"{level_v:+.6E},{offset_v:+.6E},{self._range_ohm:+.6E}"
        )
        return self._last

    def _fetch(self, now_s: float) -> str:
        if self._last is None:
            raise ScpiError(-230)
        return self._last

    def _seen_impedance(self, connection: Connection, offset_v: float) -> complex:
        """The impedance at the fixture, at the level that the source resistance leaves."""
        frequency_hz = self._frequency_hz * self._error.frequency_ratio
        bias_a = self._direct_current_a(connection, offset_v)
        z = connection.impedance(frequency_hz, self._level_v, offset_v, bias_a)
        share = _share(z)
        if share < 0.99:
            z = connection.impedance(frequency_hz, self._level_v * share, offset_v, bias_a)
        return z

    def _with_error(self, z: complex, connection: Connection) -> complex:
        """What the meter makes of z: its own correction, its error, its leads and its noise."""
        frequency_hz = self._frequency_hz
        corrections = self._corrections
        if corrections["OPEN"] or corrections["SHORt"]:
            z = self._corrected(z, connection)
        error = self._error
        figures = error.figures
        magnitude = abs(z)
        widths = figures.half_widths(frequency_hz, magnitude, self._level_v)
        shares = error.share(connection.key, frequency_hz)
        trim = 0.5 if corrections["LOAD"] else 1.0
        noise = figures.noise[self._aperture] * figures.level_factor(self._level_v)
        if magnitude > _HELD_OVERLOAD * self._range_ohm and self._range_ohm < RANGES_OHM[-1]:
            noise *= magnitude / (_HELD_OVERLOAD * self._range_ohm)
        drawn = error.noise(connection.key, self._readings)
        relative = trim * widths[0] * shares[0] + noise * drawn[0]
        turn_rad = trim * widths[1] * shares[1] + noise * drawn[1]
        if figures.cable_m is not None:
            wrong_m = figures.cable_m - self._length_m
            turn_rad += 2.0 * math.pi * frequency_hz * _CABLE_DELAY_S_PER_M * wrong_m
        return z * (1.0 + relative) * cmath.exp(1j * turn_rad)

    def _corrected(self, z: complex, connection: Connection) -> complex:
        """z with the fixture taken out, as far as the corrections are on."""
        z_open = connection.open_impedance(self._frequency_hz)
        z_short = connection.short_impedance(self._frequency_hz)
        if not self._corrections["SHORt"]:
            return _parallel_removed(z, z_open)
        if not self._corrections["OPEN"]:
            return z - z_short
        return _parallel_removed(z - z_short, z_open - z_short)

    def _overloaded(self, magnitude: float, connection: Connection) -> bool:
        if not 0.0 < magnitude < _NOTHING_OHM:
            return True
        if not self._automatic and magnitude < self._range_ohm / _HELD_OVERLOAD:
            return True
        if self._offset_on and self._offset_v:
            return abs(self._offset_v) / (SOURCE_OHM + connection.resistance_dc_ohm()) > (
                _OFFSET_LIMIT_A
            )
        if self._bias_on and self._bias_a:
            return self._bias_a * (SOURCE_OHM + connection.resistance_dc_ohm()) > _OFFSET_LIMIT_V
        return False

    # -- the DC offset

    def _target_offset_v(self) -> float:
        return self._offset_v if self._offset_on else 0.0

    def _direct_current_a(self, connection: Connection, offset_v: float) -> float:
        if self._bias_on:
            return self._bias_a
        if offset_v == 0.0:
            return 0.0
        return offset_v / max(connection.resistance_dc_ohm(), 1e-6)

    def _offset_at(self, connection: Connection, now_s: float) -> float:
        """The DC voltage at the part now: V·R/(R + 100 Ω), reached through 100 Ω.

        It moves as 1 − e^(−t/τ) with τ = 100 Ω · C, where C is the series capacitance at the
        measuring frequency.
        """
        if self._bias_on:
            direct_ohm = connection.resistance_dc_ohm()
            return self._bias_a * direct_ohm if math.isfinite(direct_ohm) else 0.0
        target_v = self._target_offset_v()
        if target_v:
            direct_ohm = connection.resistance_dc_ohm()
            if math.isfinite(direct_ohm):
                target_v *= direct_ohm / (direct_ohm + SOURCE_OHM)
        from_v = self._offset_from_v
        if from_v == target_v:
            return target_v
        tau_s = self._time_constant_s(connection)
        elapsed_s = now_s - self._offset_changed_s
        if elapsed_s > 40.0 * tau_s:
            return target_v
        return target_v + (from_v - target_v) * math.exp(-elapsed_s / tau_s)

    def _time_constant_s(self, connection: Connection) -> float:
        frequency_hz = self._frequency_hz
        z = connection.impedance(frequency_hz, self._level_v, 0.0, 0.0)
        if not cmath.isfinite(z) or z.imag >= 0.0:
            return 1e-6
        return max(SOURCE_OHM / (2.0 * math.pi * frequency_hz * -z.imag), 1e-6)

    def _notice_contacts(self, now_s: float) -> None:
        """A part that has been connected since starts without an offset."""
        contacts_s = self._terminals.changed_s(now_s)
        if contacts_s > self._seen_contacts_s:
            self._seen_contacts_s = contacts_s
            self._offset_from_v = 0.0
            self._offset_changed_s = max(self._offset_changed_s, contacts_s)

    def _offset_moves(self, now_s: float) -> None:
        """The offset is about to be set: remember from where it will move."""
        self._notice_contacts(now_s)
        self._offset_from_v = self._offset_at(self._terminals.connection(now_s), now_s)
        self._offset_changed_s = now_s
        self._changed_s = now_s


def _share(z: complex) -> float:
    """The share of the source's open-circuit level that is left at z."""
    if not cmath.isfinite(z):
        return 1.0
    return abs(z) / abs(z + SOURCE_OHM)


def _shown(value: float) -> float:
    """A number as the instrument can show it."""
    if value == NOT_A_NUMBER or -OVERFLOW < value < OVERFLOW:
        return value
    return math.copysign(OVERFLOW, value)


def _parallel_removed(z: complex, parallel: complex) -> complex:
    """z without an impedance that lies in parallel to it."""
    admittance = 1.0 / z - (1.0 / parallel if parallel and cmath.isfinite(parallel) else 0.0)
    return 1.0 / admittance if admittance else complex(math.inf, 0.0)
