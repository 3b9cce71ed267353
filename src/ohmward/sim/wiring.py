"""Wires the high voltage of a bench as its physical file says, with the lot's parts in place."""

from collections.abc import Mapping

from ohmward.sim.circuit import Circuit
from ohmward.sim.parts import PhysicalPart
from ohmward.sim.physical import Physical
from ohmward.sim.wired_circuit import WiredCircuit


def wire(
    physical: Physical, parts: Mapping[str, PhysicalPart], places: Mapping[str, str], seed: int
) -> WiredCircuit | None:
    """The high-voltage side of a bench; None where its physical file wires none.

    ``parts`` are by part_id, ``places`` says at which position each lies. A part at a position
    that high voltage does not reach is not in it.
    """
    if physical.path is None:
        return None
    reached = {place.name for place in physical.path.places}
    lying = {
        position: parts[part_id] for part_id, position in places.items() if position in reached
    }
    temperature_c = physical.room.temperature_c
    return WiredCircuit(Circuit(physical.path, lying, seed, temperature_c=temperature_c))
