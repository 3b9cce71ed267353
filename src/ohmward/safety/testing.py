"""Tests a path with at most 1 V: before each charge, and where nothing else proves a part dead."""

from ohmward.errors import LinkError
from ohmward.safety.faults import BenchFault, PartFault
from ohmward.safety.permit import check_bypass_opening
from ohmward.safety.positions import Positions, in_time
from ohmward.safety.proof import (
    Connection,
    Injection,
    Sample,
    holds_test_voltage,
    judge_injection,
)
from ohmward.safety.rules import PositionEvent, SourceState
from ohmward.safety.wiring import PositionWiring


class Tester:
    """What can be shown of a position's path at no more than 1 V."""

    def __init__(self, positions: Positions) -> None:
        self._positions = positions
        self._desk = positions.desk

    async def inject(self, position: str) -> Injection:
        """At most 1 V through the supply's contact: what the voltmeter and the current say."""
        await self._desk.source.test()
        await self._desk.time.sleep(self.settling_s(position))
        volts = await self._positions.read_v()
        injected_v = self._desk.laws.injection_v
        conducts_a = injected_v / max(
            self._positions.wired(position).series_ohm, self._desk.laws.path_ohm
        )
        current_a, error_a = await self._test_current(conducts_a)
        await self._desk.source.fall()
        floor_a = 3.0 * error_a + 2.0 * injected_v / self._desk.wiring.divider_ohm
        return judge_injection(
            self._desk.laws,
            voltage_v=volts,
            current_a=current_a,
            current_floor_a=floor_a,
            injected_v=injected_v,
        )

    async def _test_current(self, conducts_a: float) -> tuple[float, float]:
        """The current of a test and its half-width, by the supply or the current meter (A)."""
        if conducts_a > 10.0 * self._desk.facts.supply_error_a:
            return (await self._desk.source.read()).current_a, self._desk.facts.supply_error_a
        range_a = self.range_for(conducts_a)
        if range_a is None:
            return 0.0, self._desk.facts.supply_error_a
        meter = self._desk.equipment.current_meter
        with in_time(self._desk.facts.reply_s, "current meter"):
            await meter.set_range(range_a)
            check_bypass_opening(self._desk.laws, predicted_a=conducts_a, range_a=range_a)
            await self._desk.board.move(self._desk.wiring.bypass, make=False, current_a=conducts_a)
        await self._desk.time.sleep(self._desk.facts.settle_s)
        with in_time(self._desk.facts.reply_s, "current meter"):
            reading = await meter.read()
        await self._desk.board.move(self._desk.wiring.bypass, make=True)
        return reading.current_a, max(self._desk.facts.meter_error_a, 1e-3 * range_a)

    def range_for(self, predicted_a: float) -> float | None:
        """The lowest range whose half is above the predicted current, or None (A)."""
        share = self._desk.laws.bypass_share
        return next((r for r in self._desk.facts.ranges_a if abs(predicted_a) < share * r), None)

    def settling_s(self, position: str) -> float:
        """How long a test voltage needs until the part has it (s)."""
        wired, known = self._positions.wired(position), self._positions.charge(position)
        whole_f = known.most_f + self._desk.wiring.node_capacitance_f()
        limited_s = whole_f * self._desk.laws.injection_v / self._desk.facts.limit_a
        return (
            self._desk.laws.settle_time_constants * wired.series_ohm * whole_f
            + self._desk.laws.limit_patience * limited_s
            + self._desk.facts.settle_s
        )

    async def check_isolation(self, position: str) -> None:
        """Open the supply's contact and show, at no more than 1 V, that it isolates.

        The part lies open at this moment and the voltmeter is known to see it: a contact that
        is welded would bring the test voltage to it.
        """
        source, ledger = self._desk.source, self._desk.ledger
        if ledger.source not in {SourceState.JOINED, SourceState.TRIPPED}:
            return  # isolated and shown before, or cut off for good
        if not await source.isolate():
            source.isolated(proven=False)
            raise BenchFault("the supply's contact does not open")
        least_v = self._desk.laws.injection_rel * self._desk.laws.injection_v
        found_v = await self._seen_behind(position)
        if found_v is None:
            source.isolated(proven=True)
            return
        welded = found_v > least_v
        if welded:
            # or absorption charges the part up: then it did so with the supply off, and more
            await self._empty(position)
            await self._desk.time.sleep(self.settling_s(position))
            alone_v = abs(await self._positions.read_v())
            welded = (await self._seen_behind(position) or 0.0) - alone_v > least_v
        source.isolated(proven=not welded)
        if welded:
            raise BenchFault("the supply's contact reads back open and conducts: it is welded")

    async def _seen_behind(self, position: str) -> float | None:
        """What a test voltage behind the open contact brings to the part (V).

        None where a supply that is down cannot show it: the read-back of the contact has to do.
        """
        source = self._desk.source
        await self._empty(position)
        try:
            await source.test()
        except (BenchFault, LinkError):
            if not self._desk.ledger.tripped:
                raise
            await source.fall()
            return None
        await self._desk.time.sleep(self.settling_s(position))
        volts = await self._positions.read_v()
        await source.fall()
        return abs(volts)

    async def _empty(self, position: str) -> None:
        """A part that still holds the test voltage is shorted for a moment: it is below 1 V."""
        laws, desk = self._desk.laws, self._desk
        if abs(await self._positions.read_v()) <= 0.5 * laws.injection_rel * laws.injection_v:
            return
        short = self._positions.wired(position).short
        await desk.board.move(short, make=True, voltage_v=laws.test_ceiling_v)
        await desk.time.sleep(desk.facts.settle_s)
        if abs(await self._positions.read_v()) > 0.5 * laws.injection_v:
            raise BenchFault(f"the short of {position} does not make")
        await desk.board.move(short, make=False, voltage_v=laws.test_ceiling_v)

    # ---- the pass at 1 V before each charge

    async def check(self, position: str) -> None:
        """Path, short, meter isolation and sense, each shown at no more than 1 V.

        From JOINED with the short still closed and the supply's contact made. Raises PartFault
        for what is the part's fault, BenchFault for the bench's. The source stays at the test
        voltage, from which the ramp goes on.
        """
        wired, laws = self._positions.wired(position), self._desk.laws
        await self._desk.source.test()
        await self._desk.time.sleep(self._desk.facts.settle_s)
        if abs(await self._positions.read_v()) > 0.5 * laws.injection_v:
            raise BenchFault(f"the short of {position} does not make")
        await self._desk.board.move(wired.short, make=False, voltage_v=laws.test_ceiling_v)
        await self._desk.time.sleep(self.settling_s(position))
        await self._see_test_voltage(wired, "")
        if len(wired.meter) > 1:
            for contact in wired.meter:
                await self._desk.board.move(contact, make=True, voltage_v=laws.test_ceiling_v)
                await self._desk.time.sleep(self._desk.facts.settle_s)
                await self._see_test_voltage(wired, contact.channel)
                await self._desk.board.move(contact, make=False, voltage_v=laws.test_ceiling_v)
        await self._hold_test_voltage(position)
        await self._desk.source.test()
        await self._desk.time.sleep(self.settling_s(position))
        await self._positions.event(position, PositionEvent.CHECKED)

    async def _hold_test_voltage(self, position: str) -> None:
        """Off again, the part holds the test voltage: it is there, before it gets more."""
        began_s = self._desk.time.now_s()
        await self._desk.source.fall()
        volts = await self._positions.read_v()
        samples = (
            Sample(time_s=0.0, voltage_v=self._desk.laws.injection_v),
            Sample(time_s=self._desk.time.now_s() - began_s, voltage_v=volts),
        )
        holds = holds_test_voltage(
            self._desk.laws,
            samples,
            drain_ohm=self._positions.drain_ohm(),
            capacitance_min_f=self._positions.charge(position).least_f,
        )
        if holds is False:
            raise PartFault(
                f"it does not hold {self._desk.laws.injection_v:g} V: it is open, leaks, "
                f"or is not connected",
                connection=Connection.ABSENT,
            )

    async def _see_test_voltage(self, wired: PositionWiring, made: str) -> None:
        """The part has the test voltage, also while one of the meter's contacts is made."""
        volts = await self._positions.read_v()
        reading = await self._desk.source.read()
        error_a = self._desk.facts.supply_error_a
        floor_a = 3.0 * error_a + 2.0 * self._desk.laws.injection_v / self._desk.wiring.divider_ohm
        found = judge_injection(
            self._desk.laws,
            voltage_v=volts,
            current_a=reading.current_a,
            current_floor_a=floor_a,
            injected_v=self._desk.laws.injection_v,
        )
        if found is Injection.SEEN:
            return
        if made:
            raise BenchFault(f"with {made} made, the meter's other contact does not isolate")
        if found is Injection.CONDUCTS:
            raise PartFault(f"it conducts at {self._desk.laws.injection_v:g} V")
        raise PartFault(
            "the test voltage is not seen across it: a contact is lost",
            connection=Connection.ABSENT,
        )
