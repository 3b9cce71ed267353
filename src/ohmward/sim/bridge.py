"""What every simulated impedance meter does behind its commands: drive, settle, range, measure."""

import cmath
import math
from dataclasses import dataclass, field

from ohmward.sim.meter_error import MeterError
from ohmward.sim.meter_pairs import NOT_A_NUMBER, OVERFLOW, PAIRS
from ohmward.sim.terminals import Connection, Terminals

GOOD, OVERLOAD, UNBALANCED, LEVEL_LOW = 0, 1, 2, 3
RANGES_OHM = (1.0, 10.0, 100.0, 1e3, 1e4, 1e5, 1e6)
_REACH = math.sqrt(10.0)  # a range is meant for |Z| from R/reach to R·reach
_HYSTERESIS = 1.1
_HELD_OVERLOAD = 20.0
_MOSTLY_OPEN = 0.01  # a larger error at a high impedance is the open's
_NOTHING_OHM = 1e12
_OFFSET_LIMIT_A = 0.1
_OFFSET_LIMIT_V = 40.0
_CABLE_DELAY_S_PER_M = 5e-9


@dataclass(frozen=True, slots=True)
class Reading:
    """One reading: a pair of numbers, a status, and the level and offset at the part."""

    first: float
    second: float
    status: int
    level_v: float
    offset_v: float


@dataclass(slots=True)
class Drive:
    """What a bridge is set to."""

    frequency_hz: float = 1000.0
    level_v: float = 1.0
    offset_v: float = 0.0
    offset_on: bool = False
    bias_a: float = 0.0
    bias_on: bool = False
    pair: str = "RX"
    aperture: str = "MED"
    range_ohm: float = 1e3
    automatic: bool = True
    open_on: bool = False
    short_on: bool = False
    load_on: bool = False
    length_m: float = 0.0


@dataclass(slots=True)
class Bridge:
    """A sine behind ``source_ohm``, the part, and what the instrument makes of both.

    ``drive`` may be changed at will; ``touched`` says when, so that it settles first. Before
    the offset is changed ``offset_moves`` is called: a capacitor does not follow at once.
    """

    terminals: Terminals
    error: MeterError
    source_ohm: float = 100.0
    drive: Drive = field(default_factory=Drive)
    readings: int = 0
    changed_s: float = -math.inf
    _seen_contacts_s: float = -math.inf
    _offset_from_v: float = 0.0
    _offset_changed_s: float = -math.inf

    def touched(self, now_s: float) -> None:
        """A setting has changed that the bridge has to settle after."""
        self.changed_s = now_s

    def prepare(self, now_s: float) -> None:
        """A measurement begins: notice a new part, and take the range that fits it."""
        self._notice_contacts(now_s)
        if self.drive.automatic:
            self._choose_range(now_s)

    def _choose_range(self, now_s: float) -> None:
        drive = self.drive
        connection = self.terminals.connection(now_s)
        offset_v = self._target_offset_v()
        bias_a = self._direct_current_a(connection, offset_v)
        z = connection.impedance(drive.frequency_hz, drive.level_v, offset_v, bias_a)
        magnitude = abs(z)
        range_ohm = drive.range_ohm
        reach = _REACH * _HYSTERESIS
        if range_ohm / reach <= magnitude <= range_ohm * reach:
            return
        fitting = next((r for r in RANGES_OHM if magnitude <= r * _REACH), RANGES_OHM[-1])
        if fitting != range_ohm:
            drive.range_ohm = fitting
            self.changed_s = now_s

    def measure(self, started_s: float, now_s: float) -> Reading:
        """The reading at the end of an integration that began at ``started_s``."""
        self.readings += 1
        connection = self.terminals.connection(now_s)
        offset_v = self._offset_at(connection, now_s)
        z = self._seen_impedance(connection, offset_v)
        drive = self.drive
        level_v = drive.level_v * self._share(z)
        if self.terminals.changed_s(now_s) > started_s:
            return Reading(NOT_A_NUMBER, NOT_A_NUMBER, UNBALANCED, level_v, offset_v)
        if self._overloaded(abs(z), connection):
            return Reading(OVERFLOW, OVERFLOW, OVERLOAD, level_v, offset_v)
        seen = self._with_error(z, connection)
        first, second = PAIRS[drive.pair](seen, 2.0 * math.pi * drive.frequency_hz)
        status = LEVEL_LOW if level_v < 0.5 * drive.level_v else GOOD
        return Reading(_shown(first), _shown(second), status, level_v, offset_v)

    def _seen_impedance(self, connection: Connection, offset_v: float) -> complex:
        """The impedance at the fixture, at the level that the source resistance leaves."""
        drive = self.drive
        frequency_hz = drive.frequency_hz * self.error.frequency_ratio
        bias_a = self._direct_current_a(connection, offset_v)
        z = connection.impedance(frequency_hz, drive.level_v, offset_v, bias_a)
        share = self._share(z)
        if share < 0.99:
            z = connection.impedance(frequency_hz, drive.level_v * share, offset_v, bias_a)
        return z

    def _with_error(self, z: complex, connection: Connection) -> complex:
        """What the meter makes of z: its own correction, its error, its leads and its noise."""
        drive = self.drive
        frequency_hz = drive.frequency_hz
        if drive.open_on or drive.short_on:
            z = self._corrected(z, connection)
        error = self.error
        figures = error.figures
        magnitude = abs(z)
        widths = figures.half_widths(frequency_hz, magnitude, drive.level_v)
        shares = error.share(connection.key, frequency_hz)
        trim = 0.5 if drive.load_on else 1.0
        noise = figures.noise[drive.aperture] * figures.level_factor(drive.level_v)
        if magnitude > _HELD_OVERLOAD * drive.range_ohm and drive.range_ohm < RANGES_OHM[-1]:
            noise *= magnitude / (_HELD_OVERLOAD * drive.range_ohm)
        drawn = error.noise(connection.key, self.readings)
        relative = trim * widths[0] * shares[0] + noise * drawn[0]
        turn_rad = trim * widths[1] * shares[1] + noise * drawn[1]
        if figures.cable_m is not None:
            wrong_m = figures.cable_m - drive.length_m
            turn_rad += 2.0 * math.pi * frequency_hz * _CABLE_DELAY_S_PER_M * wrong_m
        if widths[0] > _MOSTLY_OPEN and magnitude > drive.range_ohm:
            # what an open leaves over is an admittance that adds to the part's own
            return z / (complex(1.0 - relative, -turn_rad) or 1e-12)
        return z * (1.0 + relative) * cmath.exp(1j * turn_rad)

    def _corrected(self, z: complex, connection: Connection) -> complex:
        """z with the fixture taken out, as far as the corrections are on."""
        drive = self.drive
        z_open = connection.open_impedance(drive.frequency_hz)
        z_short = connection.short_impedance(drive.frequency_hz)
        if not drive.short_on:
            return _parallel_removed(z, z_open)
        if not drive.open_on:
            return z - z_short
        return _parallel_removed(z - z_short, z_open - z_short)

    def _overloaded(self, magnitude: float, connection: Connection) -> bool:
        drive = self.drive
        if not 0.0 < magnitude < _NOTHING_OHM:
            return True
        if not drive.automatic and magnitude < drive.range_ohm / _HELD_OVERLOAD:
            return True
        if drive.offset_on and drive.offset_v:
            path_ohm = self.source_ohm + connection.resistance_dc_ohm()
            return abs(drive.offset_v) > _OFFSET_LIMIT_A * path_ohm
        if drive.bias_on and drive.bias_a:
            path_ohm = self.source_ohm + connection.resistance_dc_ohm()
            return drive.bias_a * path_ohm > _OFFSET_LIMIT_V
        return False

    def _target_offset_v(self) -> float:
        return self.drive.offset_v if self.drive.offset_on else 0.0

    def _direct_current_a(self, connection: Connection, offset_v: float) -> float:
        drive = self.drive
        if drive.bias_on:
            return drive.bias_a
        if offset_v == 0.0:
            return 0.0
        return offset_v / max(connection.resistance_dc_ohm(), 1e-6)

    def _offset_at(self, connection: Connection, now_s: float) -> float:
        """The DC voltage at the part now: V·R/(R + 100 Ω), reached through 100 Ω.

        It moves as 1 − e^(−t/τ) with τ = 100 Ω · C, where C is the series capacitance at the
        measuring frequency.
        """
        drive = self.drive
        if drive.bias_on:
            direct_ohm = connection.resistance_dc_ohm()
            return min(drive.bias_a * direct_ohm, _OFFSET_LIMIT_V) if drive.bias_a else 0.0
        target_v = self._target_offset_v()
        if target_v:
            direct_ohm = connection.resistance_dc_ohm()
            if math.isfinite(direct_ohm):
                target_v *= direct_ohm / (direct_ohm + self.source_ohm)
        from_v = self._offset_from_v
        if from_v == target_v:
            return target_v
        tau_s = self._time_constant_s(connection)
        elapsed_s = now_s - self._offset_changed_s
        if elapsed_s > 40.0 * tau_s:
            return target_v
        return target_v + (from_v - target_v) * math.exp(-elapsed_s / tau_s)

    def _share(self, z: complex) -> float:
        """The share of the source's open-circuit level that is left at z."""
        if not cmath.isfinite(z):
            return 1.0
        return abs(z) / abs(z + self.source_ohm)

    def _time_constant_s(self, connection: Connection) -> float:
        frequency_hz = self.drive.frequency_hz
        z = connection.impedance(frequency_hz, self.drive.level_v, 0.0, 0.0)
        if not cmath.isfinite(z) or z.imag >= 0.0:
            return 1e-6
        return max(self.source_ohm / (2.0 * math.pi * frequency_hz * -z.imag), 1e-6)

    def _notice_contacts(self, now_s: float) -> None:
        """A part that has been connected since starts without an offset."""
        contacts_s = self.terminals.changed_s(now_s)
        if contacts_s > self._seen_contacts_s:
            self._seen_contacts_s = contacts_s
            self._offset_from_v = 0.0
            self._offset_changed_s = max(self._offset_changed_s, contacts_s)

    def offset_moves(self, now_s: float) -> None:
        """The offset is about to be set: remember from where it will move."""
        self._notice_contacts(now_s)
        self._offset_from_v = self._offset_at(self.terminals.connection(now_s), now_s)
        self._offset_changed_s = now_s
        self.changed_s = now_s


def _shown(value: float) -> float:
    """A number as the instrument can show it."""
    if value == NOT_A_NUMBER or -OVERFLOW < value < OVERFLOW:
        return value
    return math.copysign(OVERFLOW, value)


def _parallel_removed(z: complex, parallel: complex) -> complex:
    """z without an impedance that lies in parallel to it."""
    admittance = 1.0 / z - (1.0 / parallel if parallel and cmath.isfinite(parallel) else 0.0)
    return 1.0 / admittance if admittance else complex(math.inf, 0.0)
