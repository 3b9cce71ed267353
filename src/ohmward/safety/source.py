"""The supply as the warden handles it: every change is read back, and OFF never waits."""

from collections.abc import Awaitable, Callable
from typing import TypeVar

import trio

from ohmward.errors import InstrumentRefused, LinkError, LinkTimeout
from ohmward.safety.equipment import Equipment, Facts, ProcessTime
from ohmward.safety.faults import BenchFault
from ohmward.safety.ledger import Ledger
from ohmward.safety.permit import LawBroken, check_limit
from ohmward.safety.rules import Action, SourceEvent, SourceState
from ohmward.safety.switchboard import Switchboard
from ohmward.safety.wiring import Wiring
from ohmward.terms.reading import SupplyReading

T = TypeVar("T")


class Source:
    """Walks the source table; its methods are requests, and what they find is an event."""

    def __init__(
        self,
        *,
        equipment: Equipment,
        facts: Facts,
        wiring: Wiring,
        ledger: Ledger,
        board: Switchboard,
        time: ProcessTime,
    ) -> None:
        self._supply = equipment.supply
        self._facts = facts
        self._wiring = wiring
        self._ledger = ledger
        self._board = board
        self._time = time
        self.suspect = False  # it says off, and something still feeds
        self._pending = False  # a command was cut short: its reply may still come

    async def read(self) -> SupplyReading:
        """What the supply says now; LinkTimeout if it does not say it in its time."""
        return await self._say(self._supply.read)

    async def _say(self, command: Callable[..., Awaitable[T]], *values: float) -> T:
        """One command in its time; one that was cut short leaves its session to be abandoned."""
        self._pending = True
        with trio.move_on_after(self._facts.reply_s):
            answer = await command(*values)
            self._pending = False
            return answer
        raise LinkTimeout(f"the supply took longer than {self._facts.reply_s:g} s")

    async def make_safe(self) -> None:
        """From the unknown: 0 V, off, limits set, all read back."""
        check_limit(self._ledger.permit, self._facts.limit_a)
        await self._do(SourceEvent.MAKE_SAFE)
        await self.confirm_off()

    async def join(self) -> None:
        """Close the supply's contact while the supply is off and the rail dead."""
        await self._do(SourceEvent.JOIN)

    async def test(self) -> None:
        """Put at most 1 V on the rail."""
        await self._do(SourceEvent.TEST)
        reading = await self.read()
        if not reading.output_on:
            raise BenchFault("the supply's output does not come on")

    async def begin_ramp(self, event: SourceEvent = SourceEvent.RAMP) -> None:
        """From the test or from a hold: the way up, or to another voltage."""
        await self._do(event)

    def reached(self) -> None:
        """The part has the voltage."""
        self._ledger.source_event(SourceEvent.REACHED)

    async def command(self, part_id: str, position: str, voltage_v: float) -> None:
        """One setting of a ramp, by the ledger's leave."""
        await self._supply.set_voltage(self._ledger.command_voltage(part_id, position, voltage_v))

    async def fall(self) -> None:
        """The ordinary end: bypass closed, 0 V, off, read back."""
        await self._do(SourceEvent.FALL)
        await self.confirm_off()

    async def isolate(self) -> bool:
        """Open the supply's contact with the rail dead; whether it reads back open."""
        event = SourceEvent.ISOLATE
        if self._ledger.source in {SourceState.JOINED, SourceState.TRIPPED}:
            await self._do(event)
        return not self._board.made(self._wiring.supply)

    def isolated(self, proven: bool) -> None:
        """What was found of the supply's contact."""
        self._ledger.source_event(SourceEvent.ISOLATED if proven else SourceEvent.STAYS_JOINED)

    async def confirm_off(self) -> None:
        """Read the output back after OFF; BenchFault when it is not off."""
        reading = await self.read()
        if reading.output_on or reading.voltage_set_v != 0.0:
            raise BenchFault("the supply does not switch off")
        self._ledger.source_event(SourceEvent.OFF_CONFIRMED)

    # ---- the trip

    async def trip(self, *, inductor: bool) -> None:
        """Zero and off at once (an inductor's current first), read back, else cut off."""
        ledger = self._ledger
        if ledger.source in {SourceState.ENDED_PROVEN, SourceState.ENDED_UNPROVEN}:
            return
        ledger.source_event(SourceEvent.TRIP_INDUCTOR if inductor else SourceEvent.TRIP)
        if ledger.source is SourceState.RUNNING_DOWN:
            zero = await self._run_down()
            ledger.source_event(SourceEvent.CURRENT_ZERO if zero else SourceEvent.CURRENT_STAYS)
        if ledger.source is SourceState.TRIPPING:
            off = await self._off_at_once()
            await self._close_bypass()
            ledger.source_event(
                SourceEvent.OFF_CONFIRMED if off and not self.suspect else SourceEvent.OFF_IGNORED
            )
        if ledger.source is SourceState.CUTTING_OFF:
            await self._cut_off()

    async def distrust(self) -> None:
        """It says that it is off, and something feeds: cut it off."""
        self.suspect = True
        self._ledger.source_event(SourceEvent.OFF_IGNORED)
        if self._ledger.source is SourceState.CUTTING_OFF:
            await self._cut_off()

    async def leave_rail(self, *, bound_v: float) -> None:
        """The last act of a trip: open the contact, with what there may still be on the rail."""
        if self._ledger.source is not SourceState.TRIPPED:
            return
        try:
            await self._board.move(self._wiring.supply, make=False, voltage_v=bound_v)
        except (LinkError, BenchFault, LawBroken):
            self.isolated(proven=False)
        else:
            self.isolated(proven=True)

    async def _off_at_once(self) -> bool:
        """OFF and 0 V on a session that answers; whether the read-back says off.

        A command that is not done in its time is abandoned with its session: what may still
        be in flight there must not arrive after the OFF.
        """
        for attempt in range(3):
            with trio.move_on_after(self._facts.reply_s):
                try:
                    if attempt or self._pending:
                        await self._supply.renew()
                        self._pending = False
                    await self._supply.output(False)
                    await self._supply.set_voltage(0.0)
                    reading = await self._supply.read()
                except LinkError:
                    continue
                if not reading.output_on:
                    return True
        return False

    async def _run_down(self) -> bool:
        """Take an inductor's current to zero; whether it got there in the time it is given."""
        began_s = self._time.now_s()
        try:
            await self._say(self._supply.set_voltage, 0.0)
            while abs((await self.read()).current_a) > self._facts.supply_error_a:
                if self._time.now_s() - began_s > self._ledger.permit.laws.run_down_s:
                    return False
                await self._time.sleep(self._facts.settle_s)
        except LinkError:
            return False
        return True

    async def _close_bypass(self) -> None:
        try:
            await self._board.move(self._wiring.bypass, make=True)
        except (LinkError, BenchFault, LawBroken):
            return  # the current meter is not worth a delay of what follows

    async def _cut_off(self) -> None:
        """The supply ignores OFF: open its contact under load, if its rating allows that."""
        try:
            await self._board.refresh()
            await self._board.move(
                self._wiring.supply,
                make=False,
                voltage_v=self._ledger.permit.bench_v,
                current_a=self._facts.limit_a,
            )
        except (LinkError, BenchFault, LawBroken):
            self.isolated(proven=False)
        else:
            self.isolated(proven=True)

    # ---- actions

    async def _do(self, event: SourceEvent) -> None:
        for action in self._ledger.source_event(event):
            await self._perform(action)

    async def _perform(self, action: Action) -> None:
        facts, supply = self._facts, self._supply
        if action is Action.ZERO:
            await self._say(supply.set_voltage, 0.0)
        elif action is Action.OUTPUT_OFF:
            await self._say(supply.output, False)
        elif action is Action.OUTPUT_ON:
            await self._say(supply.output, True)
        elif action is Action.SET_LIMITS:
            await self._say(supply.set_limit, facts.limit_a)
            reading = await self.read()
            if abs(reading.limit_set_a - facts.limit_a) > 0.01 * facts.limit_a:
                raise InstrumentRefused(
                    f"the supply's current limit reads back {reading.limit_set_a:g} A"
                )
        elif action is Action.SET_TEST_VOLTAGE:
            volts = self._ledger.command_voltage("", "", self._ledger.permit.laws.injection_v)
            await self._say(supply.set_voltage, volts)
        elif action is Action.CLOSE_BYPASS:
            await self._board.move(self._wiring.bypass, make=True)
        elif action is Action.CLOSE_SUPPLY:
            await self._board.move(self._wiring.supply, make=True, voltage_v=0.0)
        elif action is Action.OPEN_SUPPLY:
            dead_v = self._ledger.permit.laws.dead_v
            await self._board.move(self._wiring.supply, make=False, voltage_v=dead_v)
        elif action is not Action.SET_VOLTAGE:  # the ramp itself is the charger's
            raise BenchFault(f"the source has no action '{action}'")
