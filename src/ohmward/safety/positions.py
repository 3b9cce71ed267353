"""One bench's positions: what is known of each charge, and how each action of the table is done."""

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass

import trio

from ohmward.errors import LinkTimeout
from ohmward.safety.equipment import Equipment, Facts, ProcessTime
from ohmward.safety.faults import BenchFault
from ohmward.safety.ledger import Ledger
from ohmward.safety.permit import Laws, Permit, closing_current_a
from ohmward.safety.proof import Decay
from ohmward.safety.rules import Action, PositionEvent
from ohmward.safety.source import Source
from ohmward.safety.switchboard import Switchboard
from ohmward.safety.wiring import PositionWiring, Wiring
from ohmward.terms.status import Status


@contextmanager
def in_time(seconds: float, name: str) -> Iterator[None]:
    """Raise LinkTimeout when what is inside takes longer than an instrument has."""
    with trio.move_on_after(seconds) as scope:
        yield
    if scope.cancelled_caught:
        raise LinkTimeout(f"the {name} took longer than {seconds:g} s")


@dataclass(frozen=True, slots=True)
class Desk:
    """All that the parts of one warden share."""

    permit: Permit
    equipment: Equipment
    facts: Facts
    wiring: Wiring
    ledger: Ledger
    board: Switchboard
    source: Source
    time: ProcessTime

    @property
    def laws(self) -> Laws:
        """The numbers of the safety rules."""
        return self.permit.laws


@dataclass(slots=True)
class Charge:
    """What is known of the charge at one position.

    ``bound_v`` bounds the part's voltage when nobody measures it; ``witnessed`` says that the
    voltmeter has seen the applied voltage in this charge, ``vanished`` that what was charged no
    longer stands behind the terminals: its contact was lost while it was live.
    """

    bound_v: float
    least_f: float
    most_f: float
    witnessed: bool = False
    vanished: bool = False
    drain_a: float = 0.0  # what it drew last when settled, its divider included
    decay: Decay = Decay.UNRESOLVED


class Positions:
    """Moves positions through their table and keeps what is known of their charges."""

    def __init__(self, desk: Desk) -> None:
        self.desk = desk
        self._charges: dict[str, Charge] = {}

    # ---- what is known

    def charge(self, position: str) -> Charge:
        """What is known of this position; a part nobody knows is assumed charged."""
        known = self._charges.get(position)
        if known is None:
            parts = self.desk.permit.at_position(position)
            known = Charge(
                bound_v=self.desk.permit.assumed_v(position),
                least_f=min((part.capacitance_min_f for part in parts), default=0.0),
                most_f=max((part.capacitance_max_f for part in parts), default=0.0),
            )
            self._charges[position] = known
        return known

    def forget(self, position: str, *, bound_v: float) -> None:
        """Something else may have charged the part up to ``bound_v`` since it was proven."""
        known = self.charge(position)
        known.bound_v = max(bound_v, self.desk.laws.dead_v)
        known.witnessed = False

    def wired(self, position: str) -> PositionWiring:
        """The wiring of a position that the ledger knows."""
        self.desk.ledger.state_of(position)
        found = self.desk.wiring.at(position)
        assert found is not None  # the ledger was made from this wiring
        return found

    async def read_v(self) -> float:
        """The voltmeter's reading; BenchFault when it is none.

        One that ranges by itself is asked again where the voltage has left its range meanwhile.
        """
        with in_time(self.desk.facts.reply_s, "voltmeter"):
            reading = await self.desk.equipment.voltmeter.read()
            if reading.status is Status.OVERLOAD:
                reading = await self.desk.equipment.voltmeter.read()
        if reading.status is not Status.OK:
            raise BenchFault(f"the voltmeter says {reading.status}")
        return reading.voltage_v

    # ---- moving one position through its table

    async def event(self, position: str, event: PositionEvent) -> None:
        """Move the position and carry out what the table says."""
        actions = self.desk.ledger.position_event(position, event, now_s=self.desk.time.now_s())
        wired = self.wired(position)
        for action in actions:
            await self._perform(wired, action)

    async def _perform(self, wired: PositionWiring, action: Action) -> None:
        """One action, with what it may have to switch."""
        move, bound_v = self.desk.board.move, self.charge(wired.position).bound_v
        through_ohm = wired.series_ohm + wired.discharge_ohm
        if action is Action.CLOSE_SENSE or action is Action.OPEN_SENSE:
            if action is Action.CLOSE_SENSE:
                await self._free_voltmeter(wired.position)
            await self.sense(wired.position, make=action is Action.CLOSE_SENSE)
        elif action is Action.CONNECT:
            current_a = closing_current_a(
                self.desk.laws, voltage_v=bound_v, resistance_ohm=wired.series_ohm
            )
            await move(wired.connect, make=True, voltage_v=bound_v, current_a=current_a)
        elif action is Action.DISCONNECT:
            current_a = bound_v / through_ohm if self.desk.board.made(wired.discharge) else 0.0
            await move(wired.connect, make=False, voltage_v=bound_v, current_a=current_a)
        elif action is Action.CLOSE_DISCHARGE:
            current_a = closing_current_a(
                self.desk.laws, voltage_v=bound_v, resistance_ohm=wired.discharge_ohm
            )
            await move(wired.discharge, make=True, voltage_v=bound_v, current_a=current_a)
        elif action is Action.OPEN_DISCHARGE:
            await move(wired.discharge, make=False, voltage_v=self.desk.laws.dead_v)
        elif action is Action.CLOSE_SHORT:
            current_a = closing_current_a(
                self.desk.laws, voltage_v=bound_v, resistance_ohm=wired.short_ohm
            )
            await move(wired.short, make=True, voltage_v=bound_v, current_a=current_a)
        elif action is Action.OPEN_SHORT:
            await move(wired.short, make=False, voltage_v=self.desk.laws.dead_v)
        elif action is Action.CLOSE_METER or action is Action.OPEN_METER:
            await self._meter(wired, make=action is Action.CLOSE_METER)
        else:
            raise BenchFault(f"a position has no action '{action}'")

    async def _free_voltmeter(self, position: str) -> None:
        """The voltmeter is at one part at a time: two would be joined through it."""
        for other in self.desk.wiring.positions:
            if other.position != position:
                await self.sense(other.position, make=False)

    async def sense(self, position: str, *, make: bool) -> None:
        """Bring the voltmeter to a part, or take it away: the divider's current flows."""
        bound_v = self.charge(position).bound_v
        for contact in self.wired(position).sense:
            await self.desk.board.move(
                contact,
                make=make,
                voltage_v=bound_v,
                current_a=bound_v / self.desk.wiring.divider_ohm,
            )

    def drain_ohm(self) -> float:
        """What drains a part while the supply is off and joined: divider and rail (ohm)."""
        return 1.0 / (1.0 / self.desk.wiring.divider_ohm + 1.0 / self.desk.facts.rail_leak_ohm)

    async def _meter(self, wired: PositionWiring, *, make: bool) -> None:
        """The meter path moves below the meter's own foreign voltage, never above."""
        if any(self.desk.board.made(contact) != make for contact in wired.meter):
            volts = self.desk.laws.dead_v if make else await self.read_v()
            if abs(volts) > self.desk.laws.meter_foreign_v:
                raise BenchFault(f"{volts:.3g} V are on the meter path of {wired.position}")
        for contact in wired.meter:
            await self.desk.board.move(contact, make=make, voltage_v=self.desk.laws.meter_foreign_v)
