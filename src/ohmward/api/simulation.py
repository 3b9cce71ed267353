"""Puts a simulated bench behind a brief: the one place where ohmward meets its simulator."""

from collections.abc import Callable, Mapping
from dataclasses import fields
from math import isnan, nan

import pyvisa
import trio

from ohmward.api.preparing import Prepared
from ohmward.api.witness import Witness
from ohmward.links.virtual_waiter import VirtualWaiter
from ohmward.run.bench import Connections
from ohmward.setup.bench import Bench
from ohmward.setup.driver import Driver
from ohmward.setup.resources import shipped
from ohmward.sim.backend import InProcessLibrary
from ohmward.sim.bench import SIMULATORS, InstrumentAt, SimulatedBench
from ohmward.sim.faults import KINDS, Chance, Fault
from ohmward.terms.part import Part
from ohmward.terms.quantity import QUANTITIES

# the simulator's own names are here for the room beside: only this module knows the simulator
__all__ = [
    "KINDS",
    "Chance",
    "Fault",
    "InstrumentAt",
    "SimulatedBench",
    "SimulatedOperator",
    "build",
    "build_bench",
    "connections",
    "notes",
    "simulator_of",
    "truth_of",
]

ResultRow = dict[str, object]

LOOK_S = 10.0  # a simulated part needs no closer watch than its readings, and looking takes time


class SimulatedOperator:
    """The person at a hand-loaded fixture, who is at once and always right."""

    def __init__(self, bench: SimulatedBench) -> None:
        self._bench = bench

    async def place(self, part_id: str, position: str) -> None:
        """Put the part into the position."""
        self._bench.place(part_id, position, trio.current_time())


def build(prepared: Prepared, *, seed: int, with_faults: bool = False) -> SimulatedBench:
    """The simulated bench for a prepared brief: its parts, wiring and instruments, by seed."""
    return build_bench(
        prepared.bench, prepared.drivers, prepared.parts, seed=seed, with_faults=with_faults
    )


def build_bench(
    bench: Bench,
    drivers: Mapping[str, Driver],
    parts: tuple[Part, ...],
    *,
    seed: int,
    with_faults: bool = False,
) -> SimulatedBench:
    """The simulated bench that stands behind a bench file.

    ``with_faults`` puts every instrument behind a layer of faults, which does nothing until it
    is told to.
    """
    instruments = [
        InstrumentAt(
            name=name,
            address=one.address,
            simulator=simulator_of(drivers[name]),
            driver=drivers[name].merged,
            serial_number=one.serial_number,
        )
        for name, one in bench.instruments.items()
    ]
    return SimulatedBench(
        bench.physical_path,
        instruments,
        {place.name: place.meter_channels for place in bench.positions},
        [_plain(part) for part in parts],
        seed,
        models=shipped("simulators") / "parts",
        faulty=tuple(bench.instruments) if with_faults else (),
    )


def simulator_of(driver: Driver) -> str:
    """The simulated instrument that a driver meets in a dry run; empty for a home-made driver."""
    return driver.simulated_by if driver.simulated_by in SIMULATORS else ""


def connections(bench: SimulatedBench) -> Connections:
    """Links to the simulated instruments within this process, under trio's clock."""
    library = InProcessLibrary(bench, trio.current_time)
    return Connections(
        manager=pyvisa.ResourceManager(library),
        waiter=VirtualWaiter(),
        operator=SimulatedOperator(bench),
        look_s=LOOK_S,
    )


def truth_of(
    bench: SimulatedBench, witness: Witness | None = None, befell: Mapping[str, str] | None = None
) -> Callable[[ResultRow], tuple[float, str]]:
    """What the simulated part of a row of results.csv really is, and its fault.

    Under voltage it is what ``witness`` saw; ``befell`` names what a person let befall a part.
    """

    def truth(row: ResultRow) -> tuple[float, str]:
        part_id, quantity = str(row["part_id"]), str(row["quantity"])
        fault = " and ".join(
            each for each in (bench.fault(part_id), (befell or {}).get(part_id, "")) if each
        )
        if QUANTITIES[quantity].per in ("time", "hold"):
            if witness is None:
                return nan, fault
            since_s = _number(row["since_voltage_s"], nan)
            return witness.truth(part_id, str(row["stage"]), quantity, since_s), fault
        if _number(row.get("reference_age_s"), 0.0):
            return nan, fault  # simulated parts do not age
        carried_to_c = _number(row.get("reference_temperature_c"), nan)
        value = bench.truth(
            part_id,
            quantity,
            frequency_hz=_number(row["frequency_hz"], nan),
            level_v=_number(row["level_v"], 0.0),
            bias_v=_number(row["bias_v"], 0.0),
            bias_a=_number(row["bias_a"], 0.0),
            temperature_c=None if isnan(carried_to_c) else carried_to_c,
        )
        return value, fault

    return truth


def notes(prepared: Prepared) -> tuple[str, ...]:
    """What a dry run does not prove, for the person who reads its decisions."""
    home_made = [name for name, driver in prepared.drivers.items() if not simulator_of(driver)]
    said = [
        "This was a dry run: no part was measured. It shows nothing of the wiring, the polarity "
        "of parts, or what the real instruments do."
    ]
    if home_made:
        said.append(
            f"The driver of {', '.join(home_made)} met a responder made of its own file: this "
            "proves the sequence, not the driver."
        )
    return tuple(said)


def _number(value: object, missing: float) -> float:
    return missing if not isinstance(value, float) or isnan(value) else value


def _plain(part: Part) -> dict[str, object]:
    """A part as the simulator takes it: plain values by name."""
    row = {one.name: getattr(part, one.name) for one in fields(part)}
    return {**row, "kind": part.kind.value, "polarity": part.polarity.value}
