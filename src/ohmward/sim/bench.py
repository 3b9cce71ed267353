"""A simulated bench: the instruments at their addresses, and what they are really wired to."""

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, field, fields, replace
from pathlib import Path
from typing import Any

from ohmward.sim import noise
from ohmward.sim.device import Device
from ohmward.sim.faults import FaultLayer
from ohmward.sim.fixture_terminals import FixtureTerminals
from ohmward.sim.handheld_meter import FIGURES as HANDHELD_FIGURES
from ohmward.sim.handheld_meter import HandheldMeter, frame_of, line_of
from ohmward.sim.impedance_meter import ImpedanceMeter
from ohmward.sim.meter_error import MeterError, MeterFigures
from ohmward.sim.parts import PhysicalPart
from ohmward.sim.physical import Physical, PhysicalFileError, read_physical
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
from ohmward.sim.scanner import Contacts, Scanner
from ohmward.sim.status_first_meter import StatusFirstMeter
from ohmward.sim.thermometer import Thermometer
from ohmward.sim.tray import Models, fill

IMPEDANCE_METER = "impedance-meter-scpi"
SCANNER = "scanner-scpi"
THERMOMETER = "thermometer-scpi"
STATUS_FIRST_METER = "impedance-meter-status-first"
HANDHELD_STREAM = "impedance-meter-handheld-stream"
HANDHELD_FRAMES = "impedance-meter-handheld-frames"
SIMULATORS = frozenset(
    {
        IMPEDANCE_METER,
        SCANNER,
        THERMOMETER,
        STATUS_FIRST_METER,
        HANDHELD_STREAM,
        HANDHELD_FRAMES,
    }
)


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


class SimulatedBench:
    """All simulated instruments of one bench, over the same relays, parts and room.

    ``positions`` gives the scanner channels that connect each position to the meter; a position
    without channels is loaded by hand (``place``) and empty until then. ``parts`` are rows of
    the parts list as plain data: part_id, position, kind, nominal, tolerance_low and _high,
    rated_v, rated_a, dielectric, polarity. ``models`` is the folder of part models; one
    named ``parts`` beside the physical file comes first. ``faulty`` names the instruments that
    get a fault layer. Raises PhysicalFileError or ValueError for what cannot be simulated.
    """

    def __init__(
        self,
        physical: Path | None,
        instruments: Sequence[InstrumentAt],
        positions: Mapping[str, Sequence[str]],
        parts: Sequence[Mapping[str, object]],
        seed: int,
        *,
        models: Path | None = None,
        faulty: Collection[str] = (),
    ) -> None:
        self._seed = seed
        self._physical = read_physical(physical) if physical else Physical()
        folders = [physical.parent / "parts"] if physical else []
        folders += [models] if models else []
        self.parts: dict[str, PhysicalPart] = fill(
            parts, self._physical.parts, Models(folders), seed
        )
        self._places = {str(row["part_id"]): str(row.get("position") or "") for row in parts}
        self._by_hand = frozenset(name for name, channels in positions.items() if not channels)
        room = self._physical.room
        self.room = SimulatedRoom(room.temperature_c, room.swing_k, room.humidity_pct)
        self.contacts = self._contacts(instruments, positions)
        self.terminals = FixtureTerminals(
            self.contacts, positions, self._physical.fixture, self.room
        )
        self._load_positions(positions)
        self.named: dict[str, Device] = {}
        self.devices: dict[str, Device] = {}
        self.layers: dict[str, FaultLayer] = {}
        for instrument in instruments:
            self._add(instrument, instrument.name in faulty)

    def _contacts(
        self, instruments: Sequence[InstrumentAt], positions: Mapping[str, Sequence[str]]
    ) -> Contacts:
        channels = {channel for each in positions.values() for channel in each}
        stuck: dict[str, bool] = {}
        for instrument in instruments:
            figures = self._figures(instrument.name)
            channels.update(map(str, figures.get("channels", ())))
            for key, closed in (("stuck_open", False), ("stuck_closed", True)):
                stuck.update({str(channel): closed for channel in figures.get(key, ())})
        return Contacts(channels, stuck)

    def _load_positions(self, positions: Mapping[str, Sequence[str]]) -> None:
        lying: dict[str, dict[str, PhysicalPart]] = {name: {} for name in positions}
        for part_id, position in self._places.items():
            if position in lying and position not in self._by_hand:
                lying[position][part_id] = self.parts[part_id]
        for position, parts in lying.items():
            self.terminals.load(position, parts)

    def _figures(self, name: str) -> Mapping[str, Any]:
        return self._physical.instruments.get(name, {})

    # -- instruments

    def _add(self, instrument: InstrumentAt, faulty: bool) -> None:
        device = self._made(instrument)
        if faulty:
            device = self.layers[instrument.name] = FaultLayer(device, self._seed)
        self.named[instrument.name] = device
        self.devices.setdefault(instrument.address, device)

    def _made(self, instrument: InstrumentAt) -> Device:
        if instrument.simulator not in SIMULATORS:
            if not instrument.driver:
                raise ValueError(
                    f"{instrument.name}: nothing simulates {instrument.simulator or 'it'}"
                )
            return self._responder(instrument)
        name = instrument.name
        figures = dict(self._figures(name))
        serial_number = instrument.serial_number or str(figures.pop("serial_number", "SIM-1"))
        for key in ("channels", "stuck_open", "stuck_closed", "serial_number"):
            figures.pop(key, None)
        if instrument.simulator == SCANNER:
            return Scanner(name, serial_number, self.contacts)
        if instrument.simulator == THERMOMETER:
            first, second = (
                2.0 * noise.uniform(self._seed, "thermometer", name, which) - 1.0
                for which in ("temperature", "humidity")
            )
            return Thermometer(name, serial_number, self.room, (first, second))
        return self._impedance_meter(instrument.simulator, name, serial_number, figures)

    def _impedance_meter(
        self, simulator: str, name: str, serial_number: str, figures: Mapping[str, Any]
    ) -> Device:
        handheld = simulator in (HANDHELD_STREAM, HANDHELD_FRAMES)
        base = HANDHELD_FIGURES if handheld else MeterFigures()
        error = MeterError(meter_figures(figures, name, base), noise.normal, self._seed, name)
        if simulator == STATUS_FIRST_METER:
            return StatusFirstMeter(name, serial_number, self.terminals, error)
        if handheld:
            write = line_of if simulator == HANDHELD_STREAM else frame_of
            return HandheldMeter(self.terminals, error, write)
        return ImpedanceMeter(name, serial_number, self.terminals, error)

    def _responder(self, instrument: InstrumentAt) -> Responder:
        driver = instrument.driver
        role = driver.get("role", "")
        behaviour: Behaviour = Passive()
        if role == "impedance meter":
            meter = driver.get("meter", {})
            source_ohm = quantity(meter.get("source_resistance", 100.0))
            behaviour = PerfectMeter(self.terminals, source_ohm, meter.get("pair", ""))
        elif role == "scanner":
            behaviour = PerfectScanner(self.contacts)
        elif role == "thermometer":
            behaviour = PerfectThermometer(self.room)
        return Responder(driver, instrument.serial_number, behaviour)

    # -- what is really there

    def place(self, part_id: str, position: str = "", now_s: float = float("-inf")) -> None:
        """Put a part into a position that is loaded by hand, and take out what lay in the others.

        Without ``position`` it goes where its row says, or into the only position there is.
        """
        wanted = position or self._places.get(part_id, "")
        if wanted not in self._by_hand:
            if position or len(self._by_hand) != 1:
                raise KeyError(wanted)
            (wanted,) = self._by_hand
        for name in sorted(self._by_hand):
            here = {part_id: self.parts[part_id]} if name == wanted else {}
            self.terminals.load(name, here, now_s)

    def truth(
        self,
        part_id: str,
        quantity: str,
        *,
        frequency_hz: float = float("nan"),
        level_v: float = 0.0,
        bias_v: float = 0.0,
        bias_a: float = 0.0,
        temperature_c: float | None = None,
    ) -> float:
        """The true value of a quantity of a part, SI; NaN where it has none."""
        return self.parts[part_id].truth(
            quantity,
            frequency_hz=frequency_hz,
            bias_v=bias_v,
            level_v=level_v,
            bias_a=bias_a,
            temperature_c=(
                self._physical.room.temperature_c if temperature_c is None else temperature_c
            ),
        )

    def fault(self, part_id: str) -> str:
        """What is wrong with a part; empty for a good one."""
        return self.parts[part_id].fault


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
