"""Opens every instrument of a bench and hands out the ones that a run works with."""

from collections.abc import AsyncIterator, Mapping
from contextlib import asynccontextmanager
from dataclasses import dataclass

import pyvisa
import trio

from ohmward.errors import LinkError
from ohmward.instruments.impedance_meter import ImpedanceMeter
from ohmward.instruments.scanner import Scanner
from ohmward.instruments.talker import Talker, open_talker
from ohmward.instruments.thermometer import Thermometer
from ohmward.links.waiter import Waiter
from ohmward.safety.equipment import Operator
from ohmward.safety.handle import Warden
from ohmward.safety.inprocess import HandLoadedWarden, ScannerWarden
from ohmward.setup.bench import Bench
from ohmward.setup.driver import Driver
from ohmward.terms.role import Role

CANNOT_ENERGISE = frozenset({Role.SCANNER, Role.THERMOMETER})


@dataclass(frozen=True, kw_only=True, slots=True)
class Connections:
    """How instruments are reached: one VISA resource manager, one way of waiting."""

    manager: pyvisa.ResourceManager
    waiter: Waiter
    operator: Operator


@dataclass(frozen=True, kw_only=True, slots=True)
class OpenBench:
    """A bench whose instruments have all said who they are.

    Where ``only_meter_energises``, nothing on the bench can hold a voltage on a part while the
    meter's own bias is off, whatever the relays do.
    """

    identities: Mapping[str, str]
    meter: ImpedanceMeter
    meter_name: str
    thermometer: Thermometer | None
    warden: Warden
    only_meter_energises: bool


@asynccontextmanager
async def open_bench(
    bench: Bench, drivers: Mapping[str, Driver], connections: Connections
) -> AsyncIterator[OpenBench]:
    """Open all links, ask every identity, and close everything at the end.

    Raises LinkError or WrongIdentity naming the instrument; what was opened is closed again.
    """
    talkers: dict[str, Talker] = {}
    identities: dict[str, str] = {}
    try:
        for name, instrument in bench.instruments.items():
            talker = open_talker(
                address=instrument.address,
                driver=drivers[name],
                manager=connections.manager,
                waiter=connections.waiter,
                serial_number=instrument.serial_number,
            )
            talkers[name] = talker
            try:
                identities[name] = await talker.identify()
            except LinkError as error:
                error.add_note(f"instrument {name} of {bench.name}")
                raise
        yield _gather(bench, talkers, identities, connections.operator)
    finally:
        with trio.CancelScope(shield=True):
            for talker in talkers.values():
                await talker.aclose()


def _gather(
    bench: Bench, talkers: Mapping[str, Talker], identities: dict[str, str], operator: Operator
) -> OpenBench:
    names = {
        instrument.role: name for name, instrument in bench.instruments.items()
    }  # a role that a run needs stands once on a bench: the brief has checked it
    meter_name = names[Role.IMPEDANCE_METER]
    thermometer = names.get(Role.THERMOMETER)
    if bench.fixture.loading == "scanner":
        warden: Warden = ScannerWarden(
            scanner=Scanner(talkers[names[Role.SCANNER]]),
            meter_channels={place.name: place.meter_channels for place in bench.positions},
        )
    else:
        warden = HandLoadedWarden(
            operator=operator, positions=frozenset(place.name for place in bench.positions)
        )
    return OpenBench(
        identities=identities,
        meter=ImpedanceMeter(talkers[meter_name], cable_m=bench.instruments[meter_name].cable_m),
        meter_name=meter_name,
        thermometer=Thermometer(talkers[thermometer]) if thermometer else None,
        warden=warden,
        only_meter_energises=set(names) <= CANNOT_ENERGISE | {Role.IMPEDANCE_METER},
    )
