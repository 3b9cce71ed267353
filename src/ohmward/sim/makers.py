"""Makes the simulated instruments of a bench, each on its ends of the bench's wiring."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, fields, replace
from typing import Any

from ohmward.sim import noise
from ohmward.sim.current_meter import RANGES_A, CurrentMeter
from ohmward.sim.device import Device
from ohmward.sim.free_responder import FreeResponder
from ohmward.sim.handheld_meter import FIGURES as HANDHELD_FIGURES
from ohmward.sim.handheld_meter import HandheldMeter, frame_of, line_of
from ohmward.sim.impedance_meter import ImpedanceMeter
from ohmward.sim.interlock import Interlock
from ohmward.sim.meter_error import MeterError, MeterFigures
from ohmward.sim.multimeter import RANGES_V, Multimeter
from ohmward.sim.physical import PhysicalFileError
from ohmward.sim.plain import quantity
from ohmward.sim.responder import Responder
from ohmward.sim.responder_roles import (
    Behaviour,
    Passive,
    PerfectMeter,
    PerfectScanner,
    PerfectThermometer,
)
from ohmward.sim.room import SimulatedRoom
from ohmward.sim.scanner import Scanner
from ohmward.sim.scpi_supply import BiasSource, HighVoltageSupply
from ohmward.sim.status_first_meter import StatusFirstMeter
from ohmward.sim.supply_core import ScalarError
from ohmward.sim.terminals import Relays, Terminals
from ohmward.sim.terminals_dc import Circuit
from ohmward.sim.terse_supply import TerseSupply
from ohmward.sim.thermometer import Thermometer

IMPEDANCE_METER = "impedance-meter-scpi"
SCANNER = "scanner-scpi"
THERMOMETER = "thermometer-scpi"


@dataclass(frozen=True, kw_only=True, slots=True)
class InstrumentAt:
    """An instrument of the bench file, as plain data.

    ``simulator`` names the simulated instrument that speaks like it (one of ``SIMULATORS``); else
    a responder is made of ``driver``, the driver file's content as plain data.
    """

    name: str
    address: str
    simulator: str = ""
    driver: Mapping[str, Any] = field(default_factory=dict)
    serial_number: str = ""


@dataclass(frozen=True, kw_only=True, slots=True)
class Surroundings:
    """What the instruments of one bench are connected to."""

    seed: int
    contacts: Relays
    terminals: Terminals
    room: SimulatedRoom
    circuit: Circuit

    def scalar_error(self, *key: object) -> ScalarError:
        """The error of an instrument that reads one number."""
        return ScalarError(noise.uniform, self.seed, "scalar", *key)


@dataclass(frozen=True, kw_only=True, slots=True)
class _Order:
    """One instrument to be made."""

    name: str
    serial_number: str
    figures: Mapping[str, Any]
    around: Surroundings


def make(instrument: InstrumentAt, figures: Mapping[str, Any], around: Surroundings) -> Device:
    """The device core of one instrument; ``figures`` is its table of the physical file."""
    maker = _MAKERS.get(instrument.simulator)
    if maker is None:
        if not instrument.driver:
            raise ValueError(f"{instrument.name}: nothing simulates {instrument.simulator or 'it'}")
        return _responder(instrument, around)
    own = {key: value for key, value in figures.items() if key not in _WIRING}
    serial_number = str(own.pop("serial_number", "SIM-1"))
    return maker(
        _Order(
            name=instrument.name,
            serial_number=instrument.serial_number or serial_number,
            figures=own,
            around=around,
        )
    )


_WIRING = frozenset({"channels", "stuck_open", "stuck_closed"})  # the bench has read these


def _responder(instrument: InstrumentAt, around: Surroundings) -> Device:
    driver = instrument.driver
    role = driver.get("role", "")
    behaviour: Behaviour = Passive()
    if role == "impedance meter":
        meter = driver.get("meter", {})
        source_ohm = quantity(meter.get("source_resistance", 100.0))
        behaviour = PerfectMeter(around.terminals, source_ohm, meter.get("pair", ""))
    elif role == "scanner":
        behaviour = PerfectScanner(around.contacts)
    elif role == "thermometer":
        behaviour = PerfectThermometer(around.room)
    if driver.get("codec") in ("stream", "frames"):
        return FreeResponder(driver, behaviour)
    return Responder(driver, instrument.serial_number, behaviour)


def _meter_error(order: _Order, base: MeterFigures) -> MeterError:
    figures = meter_figures(order.figures, order.name, base)
    return MeterError(figures, noise.normal, order.around.seed, order.name)


def _impedance_meter(order: _Order) -> Device:
    error = _meter_error(order, MeterFigures())
    return ImpedanceMeter(order.name, order.serial_number, order.around.terminals, error)


def _status_first(order: _Order) -> Device:
    error = _meter_error(order, MeterFigures())
    return StatusFirstMeter(order.name, order.serial_number, order.around.terminals, error)


def _handheld_stream(order: _Order) -> Device:
    error = _meter_error(order, HANDHELD_FIGURES)
    return HandheldMeter(order.around.terminals, error, line_of)


def _handheld_frames(order: _Order) -> Device:
    error = _meter_error(order, HANDHELD_FIGURES)
    return HandheldMeter(order.around.terminals, error, frame_of)


def _scanner(order: _Order) -> Device:
    return Scanner(order.name, order.serial_number, order.around.contacts)


def _thermometer(order: _Order) -> Device:
    first, second = (
        2.0 * noise.uniform(order.around.seed, "thermometer", order.name, which) - 1.0
        for which in ("temperature", "humidity")
    )
    return Thermometer(order.name, order.serial_number, order.around.room, (first, second))


def _both_errors(order: _Order) -> tuple[ScalarError, ScalarError]:
    scalar_error = order.around.scalar_error
    return scalar_error(order.name, "voltage"), scalar_error(order.name, "current")


def _high_voltage_supply(order: _Order) -> Device:
    port = order.around.circuit.supply(order.name, drain_ohm=10e6, output_f=10e-9)
    on = bool(order.figures.get("wakes_on", False))
    return HighVoltageSupply(order.name, order.serial_number, port, _both_errors(order), on=on)


def _terse_supply(order: _Order) -> Device:
    port = order.around.circuit.supply(order.name, drain_ohm=20e6, output_f=5e-9)
    return TerseSupply(order.serial_number, port, _both_errors(order))


def _bias_source(order: _Order) -> Device:
    port = order.around.circuit.supply(order.name, drain_ohm=1e6, output_f=1e-9, two_quadrant=True)
    return BiasSource(order.name, order.serial_number, port, _both_errors(order))


def _current_meter(order: _Order) -> Device:
    errors = {a: order.around.scalar_error(order.name, a) for a in RANGES_A}
    port = order.around.circuit.current_input(order.name)
    return CurrentMeter(order.name, order.serial_number, port, errors)


def _multimeter(order: _Order) -> Device:
    errors = {v: order.around.scalar_error(order.name, v) for v in RANGES_V}
    port = order.around.circuit.voltage_input(order.name)
    return Multimeter(order.name, order.serial_number, port, errors)


def _interlock(order: _Order) -> Device:
    return Interlock(order.name, order.serial_number, order.around.circuit)


_MAKERS: Mapping[str, Callable[[_Order], Device]] = {
    IMPEDANCE_METER: _impedance_meter,
    SCANNER: _scanner,
    THERMOMETER: _thermometer,
    "impedance-meter-status-first": _status_first,
    "impedance-meter-handheld-stream": _handheld_stream,
    "impedance-meter-handheld-frames": _handheld_frames,
    "high-voltage-supply-scpi": _high_voltage_supply,
    "high-voltage-supply-terse": _terse_supply,
    "bias-source-scpi": _bias_source,
    "current-meter-scpi": _current_meter,
    "multimeter-scpi": _multimeter,
    "interlock-scpi": _interlock,
}
SIMULATORS = frozenset(_MAKERS)


def meter_figures(
    figures: Mapping[str, Any], name: str, base: MeterFigures | None = None
) -> MeterFigures:
    """The figures of one impedance meter from its table of a physical file, laid over ``base``.

    Keys are the fields of MeterFigures; ``knots`` is a list of [hertz, magnitude, phase], and
    ``noise`` a table of ``short``, ``medium`` and ``long``. Raises PhysicalFileError.
    """
    known = {one.name for one in fields(MeterFigures)}
    unknown = sorted(set(figures) - known)
    if unknown:
        raise PhysicalFileError(f"instrument.{name}: unknown {', '.join(unknown)}")
    base = base or MeterFigures()
    made = dict(figures)
    try:
        if "knots" in made:
            made["knots"] = tuple((float(f), float(m), float(p)) for f, m, p in made["knots"])
        if "noise" in made:
            words = {"short": "SHOR", "medium": "MED", "long": "LONG"}
            made["noise"] = {words[key]: float(value) for key, value in made["noise"].items()}
            made["noise"] = {**base.noise, **made["noise"]}
        return replace(base, **made)
    except (TypeError, ValueError, KeyError) as error:
        raise PhysicalFileError(f"instrument.{name}: {error}") from error
