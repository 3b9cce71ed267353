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
from ohmward.instruments.transcript import Transcripts
from ohmward.links.waiter import Waiter
from ohmward.run.high_voltage import high_voltage_warden
from ohmward.run.persistent import PersistentWarden
from ohmward.safety.equipment import Operator
from ohmward.safety.handle import Warden
from ohmward.safety.inprocess import HandLoadedWarden, ScannerWarden
from ohmward.safety.messages import Events
from ohmward.safety.permit import Permit
from ohmward.safety.voltage import HighVoltageWarden
from ohmward.setup.bench import Bench
from ohmward.setup.driver import Driver
from ohmward.terms.role import Role

CANNOT_ENERGISE = frozenset({Role.SCANNER, Role.THERMOMETER})


@dataclass(frozen=True, kw_only=True, slots=True)
class Connections:
    """How instruments are reached: one VISA resource manager, one way of waiting.

    ``look_s`` is how often a part under voltage is looked at, beside its readings. With
    ``transcripts`` the exchanges of each instrument are kept in them.
    """

    manager: pyvisa.ResourceManager
    waiter: Waiter
    operator: Operator
    look_s: float = 0.5
    transcripts: Transcripts | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class Leave:
    """What a run may do with high voltage: its permit, and who is told of what happens.

    ``meter_bias_v`` is the highest bias that the impedance meter puts on any part.
    """

    permit: Permit
    meter_bias_v: float = 0.0
    events: Events | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class OpenBench:
    """A bench whose instruments have all said who they are.

    Where ``only_meter_energises``, nothing on the bench can hold a voltage on a part while the
    meter's own bias is off, whatever the relays do. ``high_voltage`` is the warden as one that
    may energise, None where this bench or this run has no leave to.
    """

    identities: Mapping[str, str]
    meter: ImpedanceMeter
    meter_name: str
    thermometer: Thermometer | None
    warden: Warden
    only_meter_energises: bool
    high_voltage: HighVoltageWarden | None = None


@asynccontextmanager
async def open_bench(
    bench: Bench,
    drivers: Mapping[str, Driver],
    connections: Connections,
    leave: Leave | None = None,
) -> AsyncIterator[OpenBench]:
    """Open all links, ask every identity, and close everything at the end.

    With ``leave``, a bench that has high voltage gets the warden that may energise it.

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
                transcript=connections.transcripts.of(name) if connections.transcripts else None,
            )
            talkers[name] = talker
            try:
                identities[name] = await talker.identify()
            except LinkError as error:
                error.add_note(f"instrument {name} of {bench.name}")
                raise
        high = _high_voltage(bench, drivers, talkers, connections, leave)
        yield _gather(bench, talkers, identities, connections.operator, high)
    finally:
        with trio.CancelScope(shield=True):
            for talker in talkers.values():
                await talker.aclose()


def _high_voltage(
    bench: Bench,
    drivers: Mapping[str, Driver],
    talkers: Mapping[str, Talker],
    connections: Connections,
    leave: Leave | None,
) -> HighVoltageWarden | None:
    if leave is None or bench.high_voltage is None:
        return None
    return high_voltage_warden(
        bench,
        drivers,
        talkers,
        permit=leave.permit,
        look_s=connections.look_s,
        meter_bias_v=leave.meter_bias_v,
        events=leave.events,
    )


def _gather(
    bench: Bench,
    talkers: Mapping[str, Talker],
    identities: dict[str, str],
    operator: Operator,
    high: HighVoltageWarden | None,
) -> OpenBench:
    names = {
        instrument.role: name for name, instrument in bench.instruments.items()
    }  # a role that a run needs stands once on a bench: the brief has checked it
    meter_name = names[Role.IMPEDANCE_METER]
    thermometer = names.get(Role.THERMOMETER)
    warden: Warden
    if high is not None:
        warden = high
    elif bench.fixture.loading == "scanner":
        warden = PersistentWarden(
            ScannerWarden(
                scanner=Scanner(talkers[names[Role.SCANNER]]),
                meter_channels={place.name: place.meter_channels for place in bench.positions},
            )
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
        high_voltage=high,
    )
