"""Takes a part down and proves it dead: discharge, short, read, wait, read again, else test.

Live until proven dead: the voltmeter decides, and it has seen the applied voltage in this
charge, or sees a test voltage of at most 1 V.
"""

from itertools import pairwise

from ohmward.safety.faults import BenchFault, PositionUnproven
from ohmward.safety.permit import discharge_wait_s, short_target_v
from ohmward.safety.positions import Charge, Positions
from ohmward.safety.proof import Decay, Injection, Sample, is_dead, judge_decay
from ohmward.safety.rules import TEST_SOURCE, PositionEvent, PositionState, SourceState
from ohmward.safety.testing import Tester
from ohmward.safety.wiring import PositionWiring

E, P = PositionEvent, PositionState


class Prover:
    """The way down of one bench's positions.

    ``isolates`` says that each proof also shows that the supply's contact isolates; a trip
    with several positions leaves that to the last one, because it ends the source.
    """

    def __init__(self, positions: Positions, tester: Tester) -> None:
        self._positions = positions
        self._tester = tester
        self._desk = positions.desk
        self.isolates = True

    # ---- down

    async def discharge(self, position: str, event: PositionEvent) -> Decay:
        """From wherever the position is, through the discharge resistor down to the short.

        ``event`` is what the table calls the reason: make safe, stop, or trip. Afterwards the
        position is shorted, or PositionUnproven is raised. Returns what the decay said.
        """
        known, wired = self._positions.charge(position), self._positions.wired(position)
        if self._desk.ledger.positions[position] is P.ENDED_UNPROVEN:
            raise PositionUnproven(position, "it was given up before")
        from_v = (
            await self._positions.read_v() if all(map(self._desk.board.made, wired.sense)) else 0.0
        )
        began_s = self._desk.time.now_s()
        await self._positions.event(position, event)
        samples = [Sample(time_s=0.0, voltage_v=from_v)]
        await self._watch_decay(wired, known, samples, began_s)
        last_v = abs(samples[-1].voltage_v)
        target_v = short_target_v(self._desk.laws, wired)
        known.decay = self._judge(wired, known, samples)
        if known.decay is Decay.INSTANT or known.vanished:
            await self._positions.event(position, E.CONTACT_LOST)
            raise PositionUnproven(position, "its voltage vanished faster than the part can fall")
        if last_v > target_v or known.decay is Decay.STAYS:
            if self._desk.board.made(self._desk.wiring.supply) and not self._desk.source.suspect:
                raise BenchFault(f"{position} stays at {last_v:.3g} V", source_suspect=True)
            await self._positions.event(position, E.STAYS_UP)
            raise PositionUnproven(position, f"it stays at {last_v:.3g} V")
        known.witnessed = known.witnessed and known.decay is Decay.MATCHES
        known.bound_v = target_v
        await self._positions.event(position, E.DISCHARGED)
        return known.decay

    async def _watch_decay(
        self, wired: PositionWiring, known: Charge, samples: list[Sample], began_s: float
    ) -> None:
        """Read the voltage for R·C_max·ln(U0/U_target) at least, at most patience times that."""
        target_v = short_target_v(self._desk.laws, wired)
        from_v = max(abs(samples[0].voltage_v), known.bound_v)
        resistance_ohm = wired.series_ohm + wired.discharge_ohm
        wait_s = discharge_wait_s(
            resistance_ohm=resistance_ohm,
            capacitance_max_f=known.most_f + self._desk.wiring.node_capacitance_f(),
            from_v=from_v,
            target_v=target_v,
        )
        least_s = wait_s + self._desk.facts.settle_s
        most_s = self._desk.laws.decay_high * wait_s + 2.0 * self._desk.facts.settle_s
        every_s = max(self._desk.facts.voltmeter_interval_s, wait_s / 50.0)
        while True:
            volts = await self._positions.read_v()
            spent_s = self._desk.time.now_s() - began_s
            samples.append(Sample(time_s=spent_s, voltage_v=volts))
            down = abs(volts) <= target_v
            if spent_s >= most_s or (down and spent_s >= least_s):
                return
            await self._desk.time.sleep(every_s)

    def _judge(self, wired: PositionWiring, known: Charge, samples: list[Sample]) -> Decay:
        interval_s = max(
            self._desk.facts.voltmeter_interval_s,
            max((after.time_s - before.time_s) for before, after in pairwise(samples)),
        )
        return judge_decay(
            self._desk.laws,
            samples,
            resistance_ohm=wired.series_ohm + wired.discharge_ohm,
            capacitance_min_f=known.least_f,
            capacitance_max_f=known.most_f + self._desk.wiring.node_capacitance_f(),
            resolution_v=self._desk.facts.voltmeter_resolution_v,
            interval_s=interval_s,
        )

    # ---- and proven

    async def prove(self, position: str) -> None:
        """From the short to the proof; PositionUnproven when there is none."""
        known = self._positions.charge(position)
        short_s = self._desk.laws.first_short_s
        for _ in range(self._desk.laws.rebounds + 1):
            await self._desk.time.sleep(short_s)
            if not is_dead(self._desk.laws, await self._positions.read_v()):
                await self._positions.event(position, E.READ_LIVE)
                raise PositionUnproven(position, "the voltmeter sees it although it is shorted")
            await self._positions.event(position, E.READ_DEAD)
            await self._desk.time.sleep(self._desk.laws.rebound_wait_s)
            volts = await self._positions.read_v()
            if is_dead(self._desk.laws, volts):
                break
            known.bound_v = max(abs(volts), self._desk.laws.dead_v)
            await self._again(position)
            short_s *= 2.0
        else:
            await self._positions.event(position, E.GIVE_UP)
            raise PositionUnproven(position, "it keeps charging itself up")
        known.bound_v = self._desk.laws.dead_v
        if known.witnessed:
            if self.isolates:
                await self._tester.check_isolation(position)
            await self._positions.event(position, E.STAYED_DOWN)
        else:
            await self._prove_by_test(position)

    async def _again(self, position: str) -> None:
        """It charged itself up: once more through the resistor, then a longer short."""
        await self._positions.event(position, E.REBOUNDED)
        await self._desk.time.sleep(self._desk.facts.settle_s)
        wired, known = self._positions.wired(position), self._positions.charge(position)
        wait_s = discharge_wait_s(
            resistance_ohm=wired.series_ohm + wired.discharge_ohm,
            capacitance_max_f=known.most_f + self._desk.wiring.node_capacitance_f(),
            from_v=known.bound_v,
            target_v=short_target_v(self._desk.laws, wired),
        )
        await self._desk.time.sleep(wait_s)
        known.bound_v = min(known.bound_v, short_target_v(self._desk.laws, wired))
        await self._positions.event(position, E.DISCHARGED)

    async def _prove_by_test(self, position: str) -> None:
        """Prove, test, prove: the voltmeter shows that it sees the part, at no more than 1 V."""
        await self._positions.event(position, E.NOT_WITNESSED)
        try:
            found = await self._test(position)
        except BenchFault as error:
            await self._positions.event(position, E.TEST_NOT_SEEN)
            raise PositionUnproven(position, f"it could not be tested: {error}") from error
        if found is Injection.NOT_SEEN:
            await self._positions.event(position, E.TEST_NOT_SEEN)
            raise PositionUnproven(position, "a test voltage is not seen across it")
        if self.isolates:
            await self._tester.check_isolation(position)
        await self._positions.event(position, E.TEST_SEEN)
        await self._desk.time.sleep(self._desk.laws.first_short_s)
        if not is_dead(self._desk.laws, await self._positions.read_v()):
            await self._positions.event(position, E.READ_LIVE)
            raise PositionUnproven(position, "the voltmeter sees it although it is shorted")
        await self._positions.event(position, E.READ_DEAD)

    async def make_safe(self, position: str, event: PositionEvent = E.MAKE_SAFE) -> None:
        """Down and proven, whatever the position holds."""
        await self.discharge(position, event)
        await self.prove(position)

    async def _test(self, position: str) -> Injection:
        """Bring the supply back to the rail, if it may be used, and inject."""
        desk = self._desk
        if desk.ledger.source in {SourceState.ENDED_PROVEN, SourceState.ENDED_UNPROVEN}:
            raise BenchFault("the supply is not to be used any more")
        if not desk.board.made(desk.wiring.supply):
            await desk.source.join()
        try:
            return await self._tester.inject(position)
        except BenchFault:
            if desk.ledger.source in TEST_SOURCE:
                await desk.source.fall()
            raise
