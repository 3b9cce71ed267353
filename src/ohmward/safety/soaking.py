"""Charges a part and soaks it: the ramp with its charge, the watch under voltage, the readings."""

from collections.abc import Iterator
from dataclasses import dataclass, field
from itertools import count, pairwise, takewhile

import trio

from ohmward.safety.faults import BenchFault, PartFault
from ohmward.safety.messages import Directive, Hold, Observation, Observer
from ohmward.safety.permit import (
    LawBroken,
    charging_time_s,
    check_bypass_opening,
    check_meter_survives,
    limit_is_fault,
    ramp_v_per_s,
)
from ohmward.safety.positions import Positions, in_time
from ohmward.safety.proof import (
    Connection,
    Decay,
    Sample,
    charge_drawn_c,
    judge_charge,
    judge_droop,
)
from ohmward.safety.rules import PositionEvent, SourceEvent
from ohmward.safety.testing import Tester
from ohmward.terms.reading import CurrentReading, SupplyReading
from ohmward.terms.status import Status

DIVIDER_SHARE = 0.5  # an open bypass lets the meter see at least this share of the divider current
INSTANT_S = 1e-6  # clocks add up in floating point: what is due within this is due now
DRAIN_SURE = 1.1  # a bleeder is stated within a tenth: what passes this is the part's
CLOSED_SHARE = 0.2  # and a closed one at most this share of what flows


@dataclass(slots=True)
class Course:
    """What is known of one hold while it goes on."""

    set_v: float = 0.0
    reached: bool = False
    connection: Connection = Connection.UNRESOLVED
    drawn_c: float = 0.0
    range_a: float | None = None  # of the current meter while its bypass is open
    bypass_shown: bool = False
    flows_a: float = 0.0  # what the supply was seen to give the part, at least
    currents: list[tuple[float, float]] = field(default_factory=list)  # time s, supply's A
    from_v: float = 0.0
    ramp_s: float = 0.0
    decay: Decay = Decay.UNRESOLVED
    stopped: str = ""  # why the part ended early


class Charger:
    """The way up of one position, and its time there."""

    def __init__(self, positions: Positions, tester: Tester) -> None:
        self._positions = positions
        self._tester = tester
        self._desk = positions.desk

    async def run(self, hold: Hold, observer: Observer, course: Course) -> None:
        """Charge and soak until the time is over or the runner says stop.

        From READY, the source at the test voltage. Raises PartFault and BenchFault; whoever
        calls brings the part down.
        """
        laws, position = self._desk.laws, hold.position
        await self._positions.event(position, PositionEvent.CHARGE)
        await self._desk.source.begin_ramp()
        await self._range(self._watching_range_a())
        course.set_v, soak_s = laws.injection_v, hold.soak_s
        voltage_v: float | None = hold.voltage_v
        while voltage_v is not None:
            await self._ramp(hold, voltage_v, course)
            directive = await self._soak(hold, soak_s, observer, course)
            voltage_v = None
            if directive.do == "change":
                voltage_v = directive.voltage_v
                soak_s = hold.soak_s if directive.soak_s is None else directive.soak_s
                if voltage_v is None or voltage_v < course.set_v:
                    raise LawBroken("ramp", "a one-quadrant supply cannot take a part down")
                await self._positions.event(position, PositionEvent.CHANGE)
                await self._desk.source.begin_ramp(SourceEvent.CHANGE)
                course.range_a = None  # the change has closed the bypass
                await self._range(self._watching_range_a())

    def _watching_range_a(self) -> float:
        """The range on which a bypassed meter watches a ramp: an open bypass overloads it (A)."""
        ranges_a, least_a = self._desk.facts.ranges_a, CLOSED_SHARE * self._desk.facts.limit_a
        return next((range_a for range_a in ranges_a if range_a >= least_a), ranges_a[-1])

    # ---- up

    async def _ramp(self, hold: Hold, to_v: float, course: Course) -> None:
        desk, known = self._desk, self._positions.charge(hold.position)
        wired = self._positions.wired(hold.position)
        whole_f = known.most_f + desk.wiring.node_capacitance_f()
        rate = ramp_v_per_s(
            desk.laws,
            asked_v_per_s=hold.ramp_v_per_s,
            limit_a=desk.facts.limit_a,
            capacitance_max_f=whole_f,
        )
        expected_s = charging_time_s(
            desk.laws,
            change_v=to_v - course.set_v,
            ramp_v_per_s=rate,
            series_ohm=wired.series_ohm,
            capacitance_f=whole_f,
        )
        # where looking is seldom, a slow ramp needs no more settings than a fast one
        every_s = max(desk.facts.ramp_every_s, min(desk.facts.check_s / 5.0, 0.04 * expected_s))
        course.from_v, began_s = course.set_v, desk.time.now_s()
        course.currents = [(began_s, 0.0)]
        known.bound_v = max(known.bound_v, to_v)
        while True:
            spent_s = desk.time.now_s() - began_s
            course.set_v = min(course.from_v + rate * spent_s, to_v)
            await desk.source.command(hold.part_id, hold.position, course.set_v)
            supply, volts = await self._look(hold, course)
            course.currents.append((desk.time.now_s(), supply.current_a))
            if volts > max(0.5 * course.set_v, 2.0 * desk.laws.dead_v):
                known.witnessed = True  # the voltmeter follows what is applied
            await self._check_bypass_closed(supply)
            if course.set_v == to_v and volts >= (1.0 - self._within(hold)) * to_v:
                break
            if limit_is_fault(desk.laws, elapsed_s=spent_s, expected_s=expected_s):
                raise PartFault(_why_low(volts, course.set_v, supply))
            await desk.time.sleep(every_s)
        course.reached = True
        course.ramp_s = desk.time.now_s() - began_s
        await self._positions.event(hold.position, PositionEvent.REACHED)
        desk.source.reached()

    def _within(self, hold: Hold) -> float:
        """How far below the set voltage the part's own may be and count as reached (share)."""
        return self._desk.laws.within if hold.within_rel is None else hold.within_rel

    async def _check_bypass_closed(self, supply: SupplyReading) -> None:
        """While a ramp's current flows, the bypassed current meter must not see it."""
        flows_a = abs(supply.current_a) - self._desk.facts.supply_error_a
        if flows_a < 10.0 * self._desk.facts.supply_error_a:
            return
        reading = await self._read_current()
        most_a = CLOSED_SHARE * flows_a + 3.0 * self._error_a(self._watching_range_a())
        if reading.status is not Status.OK or abs(reading.current_a) > most_a:
            raise BenchFault("the current meter sees the ramp: its bypass does not make")

    # ---- under voltage

    async def _look(self, hold: Hold, course: Course) -> tuple[SupplyReading, float]:
        """Interlock, supply and the part's voltage; raises for whatever is not as it must be."""
        desk = self._desk
        with in_time(desk.facts.reply_s, "interlock"):
            closed = await desk.equipment.interlock.closed()
        if not closed:
            raise BenchFault("the interlock is open")
        supply = await desk.source.read()
        if supply.tripped:
            raise BenchFault("the supply has tripped")
        if not supply.output_on:
            raise BenchFault("the supply's output is off, and nobody switched it off")
        if abs(supply.voltage_set_v - course.set_v) > max(0.01 * course.set_v, 0.1):
            raise BenchFault(
                f"the supply is set to {supply.voltage_set_v:g} V, not to {course.set_v:g} V"
            )
        volts = await self._positions.read_v()
        ceiling = desk.permit.ceiling(hold.part_id, hold.position)
        highest_v = desk.permit.highest_v(ceiling) * (1.0 + desk.laws.within)
        if max(volts, supply.voltage_v) > highest_v + desk.facts.voltmeter_resolution_v:
            raise BenchFault(f"{max(volts, supply.voltage_v):.6g} V are above the permit")
        return supply, volts

    async def _watch(
        self, hold: Hold, since_s: float, course: Course
    ) -> tuple[SupplyReading, float]:
        """One look at a part that has its voltage."""
        desk, known = self._desk, self._positions.charge(hold.position)
        supply, volts = await self._look(hold, course)
        if abs(volts - course.set_v) > 2.0 * self._within(hold) * course.set_v:
            raise PartFault(_why_low(volts, course.set_v, supply))
        if supply.limiting:
            raise PartFault("it draws the current limit")
        settle_s = desk.laws.settle_time_constants * (
            self._positions.wired(hold.position).series_ohm * known.most_f
        )
        if course.currents:
            course.currents.append((desk.time.now_s(), supply.current_a))
            if since_s >= settle_s:
                self._judge_connection(hold, course)
        drained_a = volts / self._positions.drain_ohm()
        net_a = supply.current_a - DRAIN_SURE * drained_a - desk.facts.supply_error_a
        course.flows_a = net_a
        self._check_part(hold, net_a, volts)
        return supply, volts

    def _check_part(self, hold: Hold, net_a: float, volts: float) -> None:
        """The part's own limits of current and power, and its permit's."""
        ceiling = self._desk.permit.ceiling(hold.part_id, hold.position)
        if net_a > min(hold.current_max_a, ceiling.current_a):
            raise PartFault(f"its current of {net_a:.3g} A passes its limit")
        if net_a * volts > min(hold.power_max_w, ceiling.power_w):
            raise PartFault(f"its power of {net_a * volts:.3g} W passes its limit")

    def _judge_connection(self, hold: Hold, course: Course) -> None:
        """Once the part has settled: the charge of this ramp, net of leakage, against C·V.

        A ramp is a staircase; a supply that is asked now and then sees the charge of a step
        only where R·C is longer than the time between two answers.
        """
        desk, known = self._desk, self._positions.charge(hold.position)
        times = [time_s for time_s, _ in course.currents]
        apart_s = max(after - before for before, after in pairwise(times))
        spent_s = times[-1] - times[0]
        steady_a = max(course.currents[-1][1], 0.0)
        change_v = course.set_v - course.from_v
        leaked_c = steady_a * (spent_s - 0.5 * course.ramp_s)  # it grew with the voltage
        drawn_c = charge_drawn_c(course.currents) - leaked_c
        course.drawn_c = drawn_c - desk.wiring.node_capacitance_f() * change_v
        least_f, most_f = self._bounds(hold)
        seen = self._positions.wired(hold.position).series_ohm * least_f >= apart_s
        course.currents = []
        if not seen:
            return
        course.connection = judge_charge(
            desk.laws,
            drawn_c=course.drawn_c,
            uncertainty_c=desk.facts.supply_error_a * spent_s + 0.5 * leaked_c,
            change_v=change_v,
            capacitance_min_f=least_f,
            capacitance_max_f=most_f,
        )
        known.drain_a = steady_a
        if course.connection is Connection.ABSENT:
            raise PartFault(
                "it took no charge on this ramp: it is open or not connected",
                connection=Connection.ABSENT,
            )

    def _bounds(self, hold: Hold) -> tuple[float, float]:
        """Between what the part's capacitance lies: as measured, else as the permit says (F)."""
        if hold.measured_f is not None:
            return hold.measured_f, hold.measured_f
        known = self._positions.charge(hold.position)
        return known.least_f, known.most_f

    async def watch_droop(self, hold: Hold, course: Course) -> None:
        """Off and not yet discharged: the part droops through its divider as C·dV/dt = I says."""
        if course.connection is not Connection.UNRESOLVED:
            return
        desk, laws = self._desk, self._desk.laws
        least_f, most_f = self._bounds(hold)
        fastest_v_per_s = course.set_v / self._positions.drain_ohm() / max(least_f, 1e-15)
        if fastest_v_per_s * laws.droop_s < 10.0 * desk.facts.voltmeter_resolution_v:
            return  # too large a part to be seen drooping: its discharge will tell
        began_s, samples = desk.time.now_s(), []
        while True:
            volts = await self._positions.read_v()
            spent_s = desk.time.now_s() - began_s
            samples.append(Sample(time_s=spent_s, voltage_v=volts))
            fallen_v = samples[0].voltage_v - volts
            enough = fallen_v >= 20.0 * desk.facts.voltmeter_resolution_v
            if (enough and len(samples) >= 3) or spent_s >= laws.droop_s:
                break
            await desk.time.sleep(desk.facts.voltmeter_interval_s)
        mean_v = 0.5 * (samples[0].voltage_v + samples[-1].voltage_v)
        own_a = max(self._positions.charge(hold.position).drain_a, 0.0)
        drain_a = max(own_a, mean_v / desk.wiring.divider_ohm) + mean_v / desk.facts.rail_leak_ohm
        course.connection = judge_droop(
            laws,
            samples,
            drain_a=drain_a,
            resolution_v=desk.facts.voltmeter_resolution_v,
            capacitance_min_f=least_f,
            capacitance_max_f=most_f + desk.wiring.node_capacitance_f(),
        )
        if course.connection is Connection.ABSENT:
            self._positions.charge(hold.position).vanished = True

    async def _soak(
        self, hold: Hold, soak_s: float, observer: Observer, course: Course
    ) -> Directive:
        """Watch and read from the part's voltage on, until time or runner ends it."""
        desk = self._desk
        began_s = desk.time.now_s()
        readings = _times(hold, soak_s)
        reading_s, check_s = next(readings, None), 0.0
        while True:
            due_s = min(check_s, soak_s if reading_s is None else reading_s, soak_s)
            await desk.time.sleep(max(began_s + due_s - desk.time.now_s(), 0.0))
            since_s = desk.time.now_s() - began_s + INSTANT_S
            volts: float | None = None
            if since_s >= check_s:
                supply, volts = await self._watch(hold, since_s, course)
                check_s = since_s + desk.facts.check_s
                if course.range_a is None:
                    await self._open_bypass(hold, supply, course)
            if reading_s is not None and since_s >= reading_s:
                directive = await self._observe(hold, began_s, volts, observer, course)
                if directive.do != "continue":
                    return directive
                reading_s = next(readings, None)
            if since_s >= soak_s and reading_s is None:
                return Directive(do="stop")

    async def _observe(
        self,
        hold: Hold,
        began_s: float,
        seen_v: float | None,
        observer: Observer,
        course: Course,
    ) -> Directive:
        """One reading, kept by the runner before anything else is done; then its answer.

        ``seen_v`` is the part's voltage where this instant's check has read it already.
        """
        desk = self._desk
        volts = await self._positions.read_v() if seen_v is None else seen_v
        reading = await self._read_current() if course.range_a is not None else None
        while reading is not None and await self._fit_range(reading, course):
            reading = await self._read_current() if course.range_a is not None else None
        divider_a = volts / desk.wiring.divider_ohm
        if reading is not None:
            self._check_bypass_open(reading, divider_a, course)
        observation = Observation(
            part_id=hold.part_id,
            position=hold.position,
            since_voltage_s=desk.time.now_s() - began_s,
            voltage_set_v=course.set_v,
            voltage_v=volts,
            current_a=None if reading is None else reading.current_a,
            divider_a=divider_a,
            range_a=None if reading is None else reading.range_a,
            status=Status.UNSETTLED if reading is None else reading.status,
            current_reply="" if reading is None else reading.reply.decode("ascii", "replace"),
        )
        directive: Directive | None = None
        with trio.move_on_after(desk.facts.observer_s):
            directive = await observer.observe(observation)
        if directive is None:
            raise BenchFault("the runner does not answer")
        if reading is not None and reading.status is Status.OK:
            self._positions.charge(hold.position).drain_a = reading.current_a
            self._check_part(hold, reading.current_a - divider_a, volts)
        return directive

    # ---- the current meter and its bypass

    async def _open_bypass(self, hold: Hold, supply: SupplyReading, course: Course) -> None:
        """The lowest range whose half is above what is predicted; the bypass opens on it."""
        desk, laws = self._desk, self._desk.laws
        divider_a = course.set_v / desk.wiring.divider_ohm
        predicted_a = max(abs(supply.current_a), divider_a) + desk.facts.supply_error_a
        range_a = self._tester.range_for(predicted_a)
        if range_a is None:
            return
        await self._range(range_a)
        closed = await self._read_current()
        if abs(closed.current_a) > CLOSED_SHARE * predicted_a + 3.0 * self._error_a(range_a):
            raise BenchFault("the current meter sees current: its bypass does not make")
        check_meter_survives(
            voltage_v=course.set_v,
            series_ohm=self._positions.wired(hold.position).series_ohm,
            meter_survives_a=desk.wiring.meter_survives_a,
        )
        check_bypass_opening(laws, predicted_a=predicted_a, range_a=range_a)
        await desk.board.move(desk.wiring.bypass, make=False, current_a=predicted_a)
        course.range_a = range_a
        await desk.time.sleep(desk.facts.settle_s)
        await self._fit_range(await self._read_current(), course)

    async def _fit_range(self, reading: CurrentReading, course: Course) -> bool:
        """With the bypass open: a lower range, if what was read is below half of it.

        Where the range is too low the bypass closes, and opens again after the next check.
        Returns whether a reading has to be taken anew.
        """
        assert course.range_a is not None
        error_a = self._error_a(course.range_a)
        range_a = self._tester.range_for(abs(reading.current_a) + error_a)
        if reading.status is not Status.OK or range_a is None or range_a > course.range_a:
            await self._close_bypass(course)
            return False
        if range_a == course.range_a:
            return False
        await self._range(range_a)
        course.range_a = range_a
        await self._desk.time.sleep(self._desk.facts.settle_s)
        return True

    def _check_bypass_open(self, reading: CurrentReading, divider_a: float, course: Course) -> None:
        """The meter must see at least what the voltmeter's divider takes.

        Where that is too little for its range, what the supply was seen to give the part shows
        it as well: a bypass that is made takes all but a small share of either.
        """
        if reading.status is not Status.OK:
            return
        least_a = 3.0 * self._error_a(reading.range_a)
        if DIVIDER_SHARE * divider_a > least_a:
            if reading.current_a < DIVIDER_SHARE * divider_a:
                raise BenchFault("the current meter sees too little: its bypass does not open")
            course.bypass_shown = True
        elif reading.current_a >= DIVIDER_SHARE * course.flows_a > least_a:
            course.bypass_shown = True  # else it cannot be shown, and nothing of this hold counts

    async def _close_bypass(self, course: Course) -> None:
        await self._desk.board.move(self._desk.wiring.bypass, make=True)
        course.range_a = None

    async def _range(self, range_a: float) -> None:
        with in_time(self._desk.facts.reply_s, "current meter"):
            await self._desk.equipment.current_meter.set_range(range_a)

    async def _read_current(self) -> CurrentReading:
        with in_time(self._desk.facts.reply_s, "current meter"):
            return await self._desk.equipment.current_meter.read()

    def _error_a(self, range_a: float) -> float:
        """Half-width near zero on a range: the lowest range's, in proportion (A)."""
        return self._desk.facts.meter_error_a * range_a / self._desk.facts.ranges_a[0]


def _times(hold: Hold, soak_s: float) -> Iterator[float]:
    """When readings are due, in order, none twice; counted from the part's voltage (s)."""
    every = (
        set(takewhile(lambda t: t <= soak_s, (hold.every_s * n for n in count(1))))
        if hold.every_s > 0.0
        else set()
    )
    return iter(sorted(every | {t for t in hold.also_s if 0.0 <= t <= soak_s}))


def _why_low(volts: float, set_v: float, supply: SupplyReading) -> str:
    """What a part that has not its voltage most likely does, as far as the instruments say."""
    if supply.limiting:
        return f"it draws the current limit at {volts:.3g} V: it leaks or shorts"
    if volts > set_v:
        return f"its voltage of {volts:.6g} V is above the set {set_v:.6g} V"
    return f"it has {volts:.3g} V instead of {set_v:.3g} V: it leaks, or a contact is lost"
