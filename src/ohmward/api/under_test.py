"""What the shipped pytest fixture needs of the simulator: a bench of one instrument, and faults."""

from collections.abc import Sequence
from dataclasses import fields

from ohmward.api.simulation import simulator_of
from ohmward.setup.driver import Driver
from ohmward.setup.resources import shipped
from ohmward.sim.bench import InstrumentAt, SimulatedBench
from ohmward.sim.faults import KINDS, Chance, Fault
from ohmward.terms.part import Part
from ohmward.terms.role import Role

__all__ = [
    "ADDRESS",
    "INSTRUMENT",
    "KINDS",
    "Chance",
    "Fault",
    "SimulatedBench",
    "bench_of_driver",
]

INSTRUMENT = "instrument"
ADDRESS = "TCPIP::192.0.2.1::5025::SOCKET"
CHANNELS = tuple(str(bank + n) for bank in (100, 200) for n in range(1, 11))


def bench_of_driver(driver: Driver, parts: Sequence[Part], seed: int) -> SimulatedBench:
    """The one instrument of a driver behind a layer of faults; the first part lies at its leads."""
    positions = {"1": CHANNELS if driver.role is Role.SCANNER else ()}
    instrument = InstrumentAt(
        name=INSTRUMENT,
        address=ADDRESS,
        simulator=simulator_of(driver),
        driver=driver.merged,
    )
    rows = [
        {one.name: getattr(part, one.name) for one in fields(part)}
        | {"kind": part.kind.value, "polarity": part.polarity.value, "position": "1"}
        for part in parts
    ]
    bench = SimulatedBench(
        None,
        [instrument],
        positions,
        rows,
        seed,
        models=shipped("simulators") / "parts",
        faulty=(INSTRUMENT,),
    )
    if parts and driver.role is Role.IMPEDANCE_METER:
        bench.place(parts[0].part_id)
    return bench
