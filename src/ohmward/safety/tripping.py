"""The trip: source off at once, then every part in the path down and proven, whatever breaks."""

from ohmward.safety.faults import BenchFault, PositionUnproven
from ohmward.safety.permit import trips_current_first
from ohmward.safety.positions import Positions
from ohmward.safety.proving import Prover
from ohmward.safety.rules import (
    DEAD_POSITION,
    POSITION,
    PositionEvent,
    PositionState,
    SourceState,
)

E, P = PositionEvent, PositionState
_IN_PATH = frozenset({P.JOINED, P.READY, P.CHARGING, P.SOAKING})


class Down:
    """Brings everything down; ``touched`` are the positions that this warden has had to do with.

    ``reasons`` say what could not be proven, in the words that a person at the bench needs.
    """

    def __init__(self, positions: Positions, prover: Prover) -> None:
        self._positions = positions
        self._prover = prover
        self._desk = positions.desk
        self.touched: set[str] = set()
        self.reasons: list[str] = []

    async def trip(self, *, suspect: bool) -> None:
        """Source off at once, then every part in the path down and proven; never raises."""
        desk = self._desk
        desk.source.suspect = desk.source.suspect or suspect
        await self._source_off()
        involved = sorted(
            name
            for name, state in desk.ledger.positions.items()
            if (name in self.touched or name in desk.ledger.on_rail)
            and state not in POSITION.ends | DEAD_POSITION
        )
        self.touched.update(involved)
        for name in involved:
            self._prover.isolates = name == involved[-1]
            await self._bring_down(name)
        if desk.ledger.source is SourceState.TRIPPED_TESTING:
            await self._source_off()
        bound_v = max(
            (self._positions.charge(name).bound_v for name in desk.ledger.on_rail),
            default=0.0,
        )
        await desk.source.leave_rail(bound_v=bound_v)
        if desk.ledger.source is not SourceState.ENDED_PROVEN:
            self.because("the supply is not proven off: switch it off at its mains switch")

    async def _source_off(self) -> None:
        try:
            await self._desk.source.trip(inductor=self._holds_inductor())
        except Exception as error:  # whatever breaks, the parts still have to come down
            self.because(f"the supply was not seen to go off: {error}")

    async def _bring_down(self, position: str) -> None:
        """One part of a trip: down and proven, or given up with a reason; never raises."""
        for _ in range(2):
            try:
                await self._desk.board.refresh()
                await self._prover.make_safe(position, E.TRIP)
            except PositionUnproven as error:
                self.because(str(error))
            except BenchFault as error:
                if error.source_suspect and not self._desk.source.suspect:
                    await self._desk.source.distrust()
                    continue
                await self._give_up(position, str(error))
            except Exception as error:
                await self._give_up(position, f"{type(error).__name__}: {error}")
            return

    async def _give_up(self, position: str, why: str) -> None:
        if self._desk.ledger.positions[position] not in DEAD_POSITION:
            self._desk.ledger.position_event(position, E.GIVE_UP, now_s=self._desk.time.now_s())
            self.because(str(PositionUnproven(position, why)))
        else:
            self.because(why)

    def _holds_inductor(self) -> bool:
        """Whether an inductor is in the path."""
        return any(
            trips_current_first(part.kind)
            for part in self._desk.permit.ceilings
            if self._desk.ledger.positions.get(part.position) in _IN_PATH
        )

    def because(self, reason: str) -> None:
        """Note once why something is not proven."""
        if reason not in self.reasons:
            self.reasons.append(reason)
