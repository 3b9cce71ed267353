"""A simulated bench: the instruments at their addresses, and what they are really wired to."""

from collections.abc import Collection, Mapping, Sequence
from pathlib import Path
from typing import Any

from ohmward.sim.device import Device
from ohmward.sim.faults import FaultLayer
from ohmward.sim.fixture_terminals import FixtureTerminals
from ohmward.sim.makers import SIMULATORS, InstrumentAt, Surroundings, make
from ohmward.sim.open_ports import OpenCircuit
from ohmward.sim.parts import PhysicalPart
from ohmward.sim.physical import Physical, read_physical
from ohmward.sim.record import Recorded
from ohmward.sim.responder import Responder
from ohmward.sim.room import SimulatedRoom
from ohmward.sim.scanner import Contacts
from ohmward.sim.scpi_device import ScpiDevice
from ohmward.sim.shared_link import SharedLink
from ohmward.sim.standards import IDEAL, Standard
from ohmward.sim.terminals import Relays
from ohmward.sim.terminals_dc import Circuit
from ohmward.sim.tray import Models, fill
from ohmward.sim.wired_circuit import CircuitRelays, WiredCircuit
from ohmward.sim.wiring import wire

__all__ = ["SIMULATORS", "InstrumentAt", "SimulatedBench"]


class SimulatedBench:
    """All simulated instruments of one bench, over the same relays, parts and room.

    ``positions`` gives the scanner channels that connect each position to the meter; a position
    without channels is loaded by hand (``place``) and empty until then. ``parts`` are rows of
    the parts list as plain data: part_id, position, kind, nominal, tolerance_low and _high,
    rated_v, rated_a, dielectric, polarity. ``models`` is the folder of part models; one
    named ``parts`` beside the physical file comes first. ``faulty`` names the instruments that
    get a fault layer and a record, ``circuit`` is the high-voltage side; without one it is wired
    as the physical file says. Raises PhysicalFileError or ValueError for what cannot be simulated.
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
        circuit: Circuit | None = None,
    ) -> None:
        self._physical = read_physical(physical) if physical else Physical()
        self._seed = seed
        self._insertions = 0
        folders = [physical.parent / "parts"] if physical else []
        folders += [models] if models else []
        self.parts: dict[str, PhysicalPart] = fill(
            parts, self._physical.parts, Models(folders), seed
        )
        self._places = {str(row["part_id"]): str(row.get("position") or "") for row in parts}
        self._by_hand = frozenset(name for name, channels in positions.items() if not channels)
        room = self._physical.room
        self.room = SimulatedRoom(room.temperature_c, room.swing_k, room.humidity_pct)
        self.contacts: Relays = self._contacts(instruments, positions)
        self.circuit: Circuit = (
            circuit or wire(self._physical, self.parts, self._lying(), seed) or OpenCircuit()
        )
        if isinstance(self.circuit, WiredCircuit):
            self.contacts = CircuitRelays(self.circuit, self.contacts)
        self.terminals = FixtureTerminals(
            self.contacts, positions, self._physical.fixture, self.room
        )
        self._load_positions(positions)
        self.named: dict[str, Device] = {}
        self.devices: dict[str, Device] = {}
        self.layers: dict[str, FaultLayer] = {}
        self.records: dict[str, Recorded] = {}
        self._install(
            instruments,
            Surroundings(
                seed=seed,
                contacts=self.contacts,
                terminals=self.terminals,
                room=self.room,
                circuit=self.circuit,
            ),
            faulty,
        )

    def _install(
        self,
        instruments: Sequence[InstrumentAt],
        around: Surroundings,
        faulty: Collection[str],
    ) -> None:
        by_address: dict[str, list[InstrumentAt]] = {}
        for instrument in instruments:
            by_address.setdefault(instrument.address, []).append(instrument)
        for address, neighbours in by_address.items():
            device = self._device(neighbours, around)
            if any(one.name in faulty for one in neighbours):
                recorded = Recorded(device)
                device = layer = FaultLayer(recorded, around.seed)
                self.layers.update({one.name: layer for one in neighbours})
                self.records.update({one.name: recorded for one in neighbours})
            self.devices[address] = device
            self.named.update({one.name: device for one in neighbours})

    def _device(self, neighbours: Sequence[InstrumentAt], around: Surroundings) -> Device:
        """The core behind one address, which several instruments may share."""
        made = [make(one, self._figures(one.name), around) for one in neighbours]
        if len(made) == 1:
            return made[0]
        sharing = [one for one in made if isinstance(one, ScpiDevice | Responder)]
        if len(sharing) != len(made):
            names = ", ".join(one.name for one in neighbours)
            raise ValueError(f"{names} cannot share {neighbours[0].address}")
        return SharedLink(sharing)

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

    def _lying(self) -> dict[str, str]:
        """Where each part lies from the beginning; what is loaded by hand lies nowhere yet."""
        return {name: place for name, place in self._places.items() if place not in self._by_hand}

    def _load_positions(self, positions: Mapping[str, Sequence[str]]) -> None:
        lying: dict[str, dict[str, PhysicalPart]] = {name: {} for name in positions}
        for part_id, position in self._places.items():
            if position in lying and position not in self._by_hand:
                lying[position][part_id] = self.parts[part_id]
        for position, parts in lying.items():
            self.terminals.load(position, parts)

    def _figures(self, name: str) -> Mapping[str, Any]:
        return self._physical.instruments.get(name, {})

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

    def place_standard(self, kind: str, position: str, now_s: float = float("-inf")) -> None:
        """Put the open, short or load into a position, instead of what lay there.

        Its contacts are drawn anew each time. Raises KeyError for a position that is not there,
        ValueError for another kind.
        """
        self._insertions += 1
        truth = self._physical.standards.get(kind) or IDEAL.get(kind, IDEAL["open"])
        standard = Standard(kind, truth, self._seed, position, self._insertions)
        self.terminals.load(position, {f"the {kind}": standard}, now_s)

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
