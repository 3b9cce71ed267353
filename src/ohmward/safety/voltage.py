"""The high-voltage warden, in the runner's process: walks the tables with the instruments.

Behind the same handle as the low-voltage one, plus ``hold``, ``recover`` and ``prove``. Whatever
goes wrong, it makes everything safe and proves it before it raises.
"""

from collections.abc import Awaitable, Callable
from typing import NoReturn, TypeVar

import trio

from ohmward.errors import NotProvenSafe, OhmwardError, SafetyTrip
from ohmward.safety.equipment import Equipment, Facts, LoopTime, ProcessTime
from ohmward.safety.faults import BenchFault, PartFault, PositionUnproven
from ohmward.safety.handle import Ending
from ohmward.safety.ledger import Ledger
from ohmward.safety.messages import (
    Event,
    Events,
    Held,
    Hold,
    Observation,
    Observer,
    Recover,
)
from ohmward.safety.permit import LawBroken, Permit, check_request, check_way_down
from ohmward.safety.positions import Desk, Positions
from ohmward.safety.proof import Connection, Decay
from ohmward.safety.proving import Prover
from ohmward.safety.rules import (
    OFF_SOURCE,
    POSITION,
    PositionEvent,
    PositionState,
    SourceEvent,
    SourceState,
)
from ohmward.safety.soaking import Charger, Course
from ohmward.safety.source import Source
from ohmward.safety.switchboard import Switchboard
from ohmward.safety.testing import Tester
from ohmward.safety.tripping import Down
from ohmward.safety.wiring import Wiring
from ohmward.terms.kind import Kind
from ohmward.terms.status import Status

T = TypeVar("T")
E, P = PositionEvent, PositionState


class _Silent:
    """Events that nobody wants."""

    def happened(self, event: Event) -> None:
        """Nothing."""


class HighVoltageWarden:
    """Alone energises, connects and proves parts; one request at a time."""

    def __init__(
        self,
        *,
        permit: Permit,
        wiring: Wiring,
        equipment: Equipment,
        facts: Facts,
        time: ProcessTime | None = None,
        events: Events | None = None,
    ) -> None:
        clock = LoopTime() if time is None else time
        ledger = Ledger(permit, (wired.position for wired in wiring.positions))
        board = Switchboard(scanner=equipment.scanner, wiring=wiring, ledger=ledger)
        source = Source(
            equipment=equipment,
            facts=facts,
            wiring=wiring,
            ledger=ledger,
            board=board,
            time=clock,
        )
        self._desk = Desk(permit, equipment, facts, wiring, ledger, board, source, clock)
        self._positions = Positions(self._desk)
        self._tester = Tester(self._positions)
        self._prover = Prover(self._positions, self._tester)
        self._charger = Charger(self._positions, self._tester)
        self._events = _Silent() if events is None else events
        self._down = Down(self._positions, self._prover)

    @property
    def leased(self) -> str | None:
        """The position that the meter is connected to."""
        return self._desk.ledger.leased

    @property
    def tripped(self) -> bool:
        """Whether it has tripped: then nothing is energised or connected any more."""
        return self._desk.ledger.tripped

    # ---- the handle

    async def start(self) -> None:
        """Source off with its limits set; every part that is in the path made safe and proven."""

        async def work() -> None:
            desk = self._desk
            await desk.board.refresh()
            await desk.source.make_safe()
            if not desk.board.made(desk.wiring.supply):
                desk.source.isolated(proven=True)
            suspects = []
            for wired in desk.wiring.positions:
                if any(map(desk.board.made, (wired.connect, *wired.meter))):
                    suspects.append(wired.position)
                    continue
                await self._positions.sense(wired.position, make=False)
            for position in suspects:
                self._down.touched.add(position)
                await self._prover.make_safe(position)
                await self._positions.event(position, E.LEAVE)

        await self._guarded("start", work)

    async def lease(self, position: str, part_id: str = "") -> None:
        """Prove the part at this position dead and connect the meter to it."""

        async def work() -> None:
            desk = self._desk
            if part_id:
                desk.permit.ceiling(part_id, position)
            await self._prepare(position)
            await self._positions.event(position, E.LEASE)
            wired = self._positions.wired(position)
            desk.board.expect(wired.meter, among=(desk.wiring.supply, *wired.contacts()))

        await self._guarded(position, work)

    async def holds(self) -> bool:
        """Whether the meter's contacts at the leased position, and no others, read back made."""

        async def work() -> bool:
            desk, position = self._desk, self._desk.ledger.leased
            if position is None:
                return False
            await desk.board.refresh()
            wired = self._positions.wired(position)
            others = (
                contact
                for other in desk.wiring.positions
                if other.position != position
                for contact in (other.connect, *other.meter)
            )
            found = {
                contact
                for contact in (desk.wiring.supply, *wired.contacts(), *others)
                if desk.board.made(contact)
            }
            return found == set(wired.meter)

        return await self._guarded(self._desk.ledger.leased or "", work)

    async def release(self) -> None:
        """Open the meter path; the meter may have charged the part with its own bias."""

        async def work() -> None:
            position = self._desk.ledger.leased
            if position is None:
                raise LawBroken("lease", "one was given back that was never given")
            await self._positions.event(position, E.RELEASE)
            self._positions.forget(position, bound_v=self._desk.facts.meter_bias_v)

        await self._guarded(self._desk.ledger.leased or "", work)

    async def stop(self) -> Ending:
        """Make safe whatever was touched, prove it, isolate the source, and say how it ended."""
        with trio.CancelScope(shield=True):
            if not self._desk.ledger.tripped:
                try:
                    await self._guarded("", self._end)
                except OhmwardError as error:
                    self._down.because(str(error))
            for position in sorted(self._down.touched):
                if self._desk.ledger.positions[position] is P.DEAD:
                    await self._end_of(position)
        return self._ending()

    # ---- requests

    async def hold(self, hold: Hold, observer: Observer) -> Held:
        """Charge, soak, read; then down and proven. A part that misbehaves ends early."""
        course = Course()

        async def work() -> Held:
            await self._up(hold, observer, course)
            course.decay = await self._prover.discharge(hold.position, E.STOP)
            await self._prover.prove(hold.position)
            return self._held(hold, course)

        return await self._guarded(hold.position, work)

    async def recover(self, recover: Recover, observer: Observer) -> Held:
        """A hold whose part is shorted, left open, and read as absorption charges it up."""
        course, hold = Course(), recover.hold

        async def work() -> Held:
            await self._up(hold, observer, course)
            course.decay = await self._prover.discharge(hold.position, E.STOP)
            if not course.stopped:
                await self._desk.time.sleep(recover.short_s)
                await self._read_recovery(recover, observer)
                await self._prover.make_safe(hold.position)
            else:
                await self._prover.prove(hold.position)
            return self._held(hold, course)

        return await self._guarded(hold.position, work)

    async def prove(self, position: str) -> None:
        """Make one position safe and prove it, whatever it holds."""

        async def work() -> None:
            await self._prepare(position)

        await self._guarded(position, work)

    # ---- what they are made of

    async def _prepare(self, position: str) -> None:
        """This position alone at rail and voltmeter, and proven dead."""
        desk = self._desk
        desk.ledger.state_of(position)
        if desk.ledger.leased is not None:
            raise LawBroken("lease", f"{desk.ledger.leased} has an open lease")
        desk.ledger.expire(now_s=desk.time.now_s())
        for wired in desk.wiring.positions:
            other = wired.position
            if other != position and any(map(desk.board.made, (wired.connect, *wired.sense))):
                await self._positions.event(other, E.LEAVE)
        self._down.touched.add(position)
        if desk.ledger.proof(position, now_s=desk.time.now_s()) is None:
            await self._prover.make_safe(position)

    async def _up(self, hold: Hold, observer: Observer, course: Course) -> None:
        """From proven dead to the end of the soak; then the source is off again."""
        desk = self._desk
        ceiling = check_request(desk.permit, hold.part_id, hold.position, bias_v=hold.voltage_v)
        if ceiling.kind is Kind.INDUCTOR:
            raise LawBroken("permit", f"{hold.part_id} is an inductor and holds no voltage")
        await self._prepare(hold.position)
        known = self._positions.charge(hold.position)
        known.least_f, known.most_f = ceiling.capacitance_min_f, ceiling.capacitance_max_f
        if hold.measured_f is not None:
            known.least_f = min(known.least_f, 0.9 * hold.measured_f)
            known.most_f = max(known.most_f, 1.1 * hold.measured_f)
        known.witnessed = known.vanished = False
        check_way_down(
            desk.laws,
            self._positions.wired(hold.position),
            voltage_v=desk.permit.highest_v(ceiling),
            divider_ohm=desk.wiring.divider_ohm,
        )
        await self._positions.event(hold.position, E.JOIN)
        await desk.source.join()
        self._say("connected", hold.position, hold.part_id)
        try:
            await self._tester.check(hold.position)
            self._say("energised", hold.position, f"{hold.voltage_v:g} V")
            await self._charger.run(hold, observer, course)
        except PartFault as fault:
            course.stopped = str(fault)
            course.connection = (
                Connection(fault.connection) if fault.connection else (course.connection)
            )
            self._say("part stopped", hold.position, course.stopped)
        await desk.source.fall()
        self._say("off", hold.position, "")
        if course.reached and not course.stopped:
            await self._charger.watch_droop(hold, course)

    def _held(self, hold: Hold, course: Course) -> Held:
        """The outcome; charge that the decay gives back stands for the charge drawn."""
        decay, connection = course.decay, course.connection
        if connection is Connection.UNRESOLVED and decay is Decay.MATCHES:
            connection = Connection.AGREES
        self._say("proven dead", hold.position, f"connection {connection}, decay {decay}")
        return Held(
            part_id=hold.part_id,
            position=hold.position,
            reached=course.reached,
            connection=connection.value,
            drawn_c=course.drawn_c,
            decay=decay.value,
            bypass_shown=course.bypass_shown,
            stopped=course.stopped,
        )

    async def _read_recovery(self, recover: Recover, observer: Observer) -> None:
        """Open everything, and connect the voltmeter for the moments of reading only."""
        desk, position = self._desk, recover.hold.position
        await self._positions.event(position, E.RECOVER)
        began_s = desk.time.now_s()
        known = self._positions.charge(position)
        known.bound_v = max(known.bound_v, 0.2 * recover.hold.voltage_v)  # far beyond absorption
        for read_s in recover.read_s:
            await self._positions.sense(position, make=False)
            await desk.time.sleep(max(began_s + read_s - desk.time.now_s(), 0.0))
            await self._positions.sense(position, make=True)
            volts = await self._positions.read_v()
            observation = Observation(
                part_id=recover.hold.part_id,
                position=position,
                since_voltage_s=desk.time.now_s() - began_s,
                voltage_set_v=0.0,
                voltage_v=volts,
                current_a=None,
                divider_a=volts / desk.wiring.divider_ohm,
                range_a=None,
                status=Status.OK,
            )
            with trio.move_on_after(desk.facts.observer_s) as scope:
                await observer.observe(observation)
            if scope.cancelled_caught:
                raise BenchFault("the runner does not answer")
        await self._positions.sense(position, make=True)

    # ---- ends

    async def _end(self) -> None:
        """The ordinary end: leases given back, all that was touched proven, source isolated."""
        desk = self._desk
        if desk.ledger.leased is not None:
            position = desk.ledger.leased
            await self._positions.event(position, E.RELEASE)
            self._positions.forget(position, bound_v=desk.facts.meter_bias_v)
        for position in sorted(self._down.touched):
            if desk.ledger.positions[position] in POSITION.ends:
                continue
            await self._prepare(position)
            await self._end_of(position)
        if desk.ledger.source is SourceState.JOINED and await desk.source.isolate():
            desk.source.isolated(proven=True)
        desk.ledger.source_event(SourceEvent.END)

    async def _end_of(self, position: str) -> None:
        """A proven part ends shorted."""
        try:
            await self._positions.event(position, E.END)
        except OhmwardError as error:
            self._down.because(f"position {position} was proven dead, but: {error}")

    def _ending(self) -> Ending:
        ledger, reasons = self._desk.ledger, list(self._down.reasons)
        if ledger.source is not SourceState.ENDED_PROVEN:
            cut = "its contact is open" if ledger.isolated else "its contact may be closed"
            reasons.append(
                f"the supply is not proven off ({cut}): switch it off at its mains switch"
            )
        for position in sorted(self._down.touched):
            if ledger.positions[position] is not P.ENDED_PROVEN:
                reasons.append(str(PositionUnproven(position, "it ended without proof")))
        if not ledger.scanner_is_clean:
            reasons.append("the scanner does not answer: switch it off, relays then fall to rest")
        proven = (
            ledger.scanner_is_clean
            and ledger.source is SourceState.ENDED_PROVEN
            and all(ledger.positions[p] is P.ENDED_PROVEN for p in self._down.touched)
        )
        return Ending(proven=proven, reasons=() if proven else tuple(dict.fromkeys(reasons)))

    async def _guarded(self, position: str, work: Callable[[], Awaitable[T]]) -> T:
        """Do it; whatever goes wrong, everything is made safe before that is said."""
        if self._desk.ledger.tripped:
            raise SafetyTrip("the warden has tripped; nothing is energised or connected any more")
        try:
            return await work()
        except PositionUnproven as error:
            self._down.because(str(error))
            self._say("not proven", position, str(error))
            if self._desk.ledger.source not in OFF_SOURCE:
                with trio.CancelScope(shield=True):
                    await self._down.trip(suspect=False)
            raise
        except BaseException as error:
            suspect = isinstance(error, BenchFault) and error.source_suspect
            cause = str(error) if isinstance(error, OhmwardError) else type(error).__name__
            self._say("trip", position, cause)
            with trio.CancelScope(shield=True):
                await self._down.trip(suspect=suspect)
            self._raise(error, cause)

    def _raise(self, error: BaseException, cause: str) -> NoReturn:
        """What a trip ends with: the safe state proven or not, and what began it."""
        if not isinstance(error, Exception):
            raise error  # a cancel or an interrupt goes on; the ending says the rest
        if self._down.reasons:
            raise NotProvenSafe(f"{cause}; {'; '.join(self._down.reasons)}") from error
        if isinstance(error, BenchFault | LawBroken | PartFault):
            raise SafetyTrip(cause) from error
        raise error  # a link's error, or a fault of our own: the safe state is proven

    def _say(self, kind: str, position: str, detail: str) -> None:
        self._events.happened(Event(kind=kind, position=position, detail=detail))
