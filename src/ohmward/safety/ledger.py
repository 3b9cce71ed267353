"""The warden's book: where source and positions are, what is proven, and what that forbids.

Pure: time is an argument. It walks the two tables of :mod:`ohmward.safety.rules` together and
holds the laws that need both: no lease without proof, nothing energised beside a lease, no
discharge into a source that is not off, no ramp that the 1 V pass has not come before.
"""

from collections.abc import Iterable

from ohmward.safety.permit import (
    LawBroken,
    Permit,
    Proof,
    Surroundings,
    check_energise,
    check_lease,
    check_request,
)
from ohmward.safety.rules import (
    DEAD_POSITION,
    LIVE_SOURCE,
    OFF_SOURCE,
    POSITION,
    SOURCE,
    TEST_SOURCE,
    Action,
    PositionEvent,
    PositionState,
    SourceEvent,
    SourceState,
)

_ENERGISING = frozenset({SourceEvent.JOIN, SourceEvent.TEST, SourceEvent.RAMP, SourceEvent.CHANGE})


class Ledger:
    """States of one bench; every method either moves a table and returns actions, or refuses.

    A refusal (LawBroken) changes nothing but the refused request: the caller trips.
    """

    def __init__(self, permit: Permit, positions: Iterable[str]) -> None:
        self.permit = permit
        self.source = SOURCE.start
        self.positions = dict.fromkeys(positions, POSITION.start)
        self.on_rail = set(self.positions)  # until it is read back otherwise
        self.leased: str | None = None
        self.scanner_is_clean = True
        self.tripped = False
        self.isolated = False
        self.off_confirmed = False
        self.commanded_v = 0.0
        self._proofs: dict[str, Proof] = {}

    # ---- the source

    def source_event(self, event: SourceEvent) -> tuple[Action, ...]:
        """Move the source; raises LawBroken for an energising event that a law forbids."""
        if event in _ENERGISING:
            self._check_energising(event)
        step = SOURCE.step(self.source, event)
        self.source = step.state
        self.tripped = self.tripped or step.tripped
        if event is SourceEvent.ISOLATED:
            self.isolated = True
        elif Action.CLOSE_SUPPLY in step.actions or event is SourceEvent.STAYS_JOINED:
            self.isolated = False
        if event is SourceEvent.OFF_CONFIRMED:
            self.off_confirmed = step.state in OFF_SOURCE
        elif event is SourceEvent.OFF_IGNORED or Action.OUTPUT_ON in step.actions:
            self.off_confirmed = False
        if Action.ZERO in step.actions:
            self.commanded_v = 0.0
        return step.actions

    def command_voltage(self, part_id: str, position: str, voltage_v: float) -> float:
        """The only way to a commanded voltage: checked against state and permit; returns it (V).

        While testing, at most 1 V; while ramping or holding, at most the permit's ceiling of
        the part that is charging; else nothing but 0 V.
        """
        if voltage_v == 0.0:
            self.commanded_v = 0.0
            return 0.0
        if self.source in TEST_SOURCE:
            if not 0.0 < voltage_v <= self.permit.laws.test_ceiling_v:
                raise LawBroken("test", f"{voltage_v} V is no test voltage")
        elif self.source in LIVE_SOURCE:
            if self.positions.get(position) not in {
                PositionState.CHARGING,
                PositionState.SOAKING,
            }:
                raise LawBroken("ceiling", f"the part at {position} is not being charged")
            check_request(self.permit, part_id, position, bias_v=voltage_v)
        else:
            raise LawBroken("ceiling", f"{voltage_v} V were asked of a source that is not on")
        self.commanded_v = voltage_v
        return voltage_v

    # ---- the positions

    def state_of(self, position: str) -> PositionState:
        """Where this position is; LawBroken for one that the bench has not."""
        try:
            return self.positions[position]
        except KeyError:
            raise LawBroken("permit", f"this bench has no position {position}") from None

    def position_event(
        self, position: str, event: PositionEvent, *, now_s: float
    ) -> tuple[Action, ...]:
        """Move a position; raises LawBroken for an event that the other tables forbid."""
        state = self.state_of(position)
        if event is PositionEvent.LEASE:
            check_lease(
                position, self._proofs.get(position), self.surroundings(position), now_s=now_s
            )
        elif event is PositionEvent.JOIN:
            self._check_join(position, now_s=now_s)
        elif event is PositionEvent.CHARGE:
            check_energise(self.surroundings(position))
        step = POSITION.step(state, event)
        if Action.CLOSE_DISCHARGE in step.actions and not self.may_discharge:
            raise LawBroken("discharge", "the source is neither read back off nor isolated")
        self.positions[position] = step.state
        self._keep_proofs(position, step.state, now_s)
        if step.state is PositionState.LEASED:
            self.leased = position
        elif self.leased == position:
            self.leased = None
        return step.actions

    def proof(self, position: str, *, now_s: float) -> Proof | None:
        """The proof that this position's part is dead, if it has one that holds."""
        proof = self._proofs.get(position)
        return proof if proof is not None and proof.holds(now_s) else None

    def expire(self, *, now_s: float) -> tuple[str, ...]:
        """Positions whose proof has run out become unknown again; returns them."""
        gone = tuple(
            position
            for position, proof in self._proofs.items()
            if not proof.holds(now_s) and self.positions[position] is PositionState.DEAD
        )
        for position in gone:
            self.position_event(position, PositionEvent.EXPIRED, now_s=now_s)
        return gone

    @property
    def may_discharge(self) -> bool:
        """Whether a discharge contact may close: the source is read back off, or cut off."""
        return self.off_confirmed or self.isolated

    def surroundings(self, position: str) -> Surroundings:
        """What a lease or a charge at this position must know of the rest."""
        joined = frozenset(self.on_rail - {position})
        return Surroundings(
            joined=joined,
            live=frozenset(p for p in joined if self.positions[p] not in DEAD_POSITION),
            leased=self.leased,
            source_is_off=self.source is SourceState.OFF,
            scanner_is_clean=self.scanner_is_clean,
        )

    # ---- laws that need both tables

    def _check_energising(self, event: SourceEvent) -> None:
        if self.leased is not None:
            raise LawBroken("lease", f"{self.leased} has an open lease")
        if not self.scanner_is_clean:
            raise LawBroken("lease", "the scanner's link is dirty: nobody knows what is connected")
        if event in {SourceEvent.JOIN, SourceEvent.TEST}:
            return
        charging = [p for p, s in self.positions.items() if s is PositionState.CHARGING]
        if len(charging) != 1:
            raise LawBroken("check", "no position has passed its check at 1 V and is to be charged")
        check_energise(self.surroundings(charging[0]))

    def _check_join(self, position: str, *, now_s: float) -> None:
        if self.source is not SourceState.OFF:
            raise LawBroken("join", "the source is not proven off and isolated")
        check_energise(self.surroundings(position))
        if self.proof(position, now_s=now_s) is None:
            raise LawBroken("join", f"there is no valid proof that the part at {position} is dead")

    def _keep_proofs(self, position: str, state: PositionState, now_s: float) -> None:
        if state not in DEAD_POSITION:
            self._proofs.pop(position, None)
        elif position not in self._proofs:
            self._proofs[position] = Proof(
                position=position, proven_s=now_s, valid_s=self.permit.laws.proof_valid_s
            )
