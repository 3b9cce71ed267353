"""Arbitrary events against the ledger: nothing unlawful comes out of it, whatever goes in.

Two machines. In the first one events are arbitrary and even lie; what the ledger commands and
whom it leases must stay lawful all the same. In the second one a small bench stands behind it:
findings are taken from what the bench truly does (with relays that stick), and what is judged
is the part's true voltage.
"""

from math import isnan
from typing import ClassVar

import pytest
from hypothesis import settings
from hypothesis import strategies as st
from hypothesis.stateful import (
    RuleBasedStateMachine,
    initialize,
    invariant,
    precondition,
    rule,
    run_state_machine_as_test,
)

from ohmward.safety.ledger import Ledger
from ohmward.safety.permit import Ceiling, LawBroken, Laws, Permit
from ohmward.safety.rules import (
    DEAD_POSITION,
    LIVE_SOURCE,
    POSITION,
    SOURCE,
    TEST_SOURCE,
    Action,
    PositionEvent,
    PositionState,
    SourceEvent,
    SourceState,
)
from ohmward.terms.kind import Kind

POSITIONS = ("1", "2")
CEILING_V = {"1": 450.0, "2": 63.0}
PERMIT = Permit(
    brief_hash="a" * 64,
    bench_v=400.0,
    ceilings=tuple(
        Ceiling(
            part_id=f"C{position}",
            position=position,
            kind=Kind.CAPACITOR,
            voltage_v=CEILING_V[position],
            capacitance_min_f=80e-9,
            capacitance_max_f=120e-9,
            assumed_v=CEILING_V[position],
        )
        for position in POSITIONS
    ),
    laws=Laws(proof_valid_s=30.0),
)
LEAST_V = {"1": 400.0, "2": 63.0}  # by hand: the bench's ceiling, and the part's

_S, _P = SourceEvent, PositionEvent
Course = tuple[tuple[SourceEvent | None, PositionEvent | None], ...]
DEAD: Course = (
    (_S.MAKE_SAFE, None),
    (_S.OFF_CONFIRMED, _P.MAKE_SAFE),
    (None, _P.DISCHARGED),
    (None, _P.READ_DEAD),
    (_S.ISOLATE, None),
    (_S.ISOLATED, _P.STAYED_DOWN),
)
COURSES: tuple[Course, ...] = (
    (
        *DEAD,
        (None, _P.JOIN),
        (_S.JOIN, None),
        (_S.TEST, _P.CHECKED),
        (None, _P.CHARGE),
        (_S.RAMP, None),
        (_S.REACHED, _P.REACHED),
    ),
    (*DEAD, (None, _P.LEASE), (None, _P.RELEASE)),
    (*DEAD, (None, _P.LEASE), (_S.JOIN, None), (_S.TEST, None)),  # must be refused
    (
        *DEAD[:4],
        (None, _P.NOT_WITNESSED),
        (_S.TEST, None),
        (_S.FALL, _P.TEST_SEEN),
        (_S.OFF_CONFIRMED, _P.READ_DEAD),
    ),
)
courses = st.sampled_from(COURSES).flatmap(
    lambda course: st.one_of(
        st.just(course), st.integers(1, len(course)).map(lambda length: course[:length])
    )
)

REQUESTS = (_S.REACHED, _S.CHANGE, _S.FALL, _S.TRIP, _S.TRIP_INDUCTOR, _S.TEST)
POSITION_REQUESTS = (_P.REACHED, _P.CHANGE, _P.STOP, _P.RECOVER, _P.END, _P.RELEASE)

positions = st.sampled_from(POSITIONS)
voltages = st.one_of(
    st.floats(allow_nan=True, allow_infinity=True),
    st.sampled_from([0.0, 0.5, 1.0, 1.0001, 62.9, 63.0, 63.1, 400.0, 400.1, 450.0]),
)


class ArbitraryEvents(RuleBasedStateMachine):
    """Events in any order, also lies: what is commanded and leased stays lawful."""

    reached: ClassVar[set[object]] = set()

    def __init__(self) -> None:
        super().__init__()
        self.ledger = Ledger(PERMIT, POSITIONS)
        self.now_s = 0.0
        self.proven_at: dict[str, float] = {}
        self.ended = False
        self.source_has_tripped = False
        self.wild = True

    @initialize(position=positions, course=courses, wild=st.booleans())
    def begin_in_order(self, position: str, course: Course, wild: bool) -> None:
        """Half of the examples get events that no table knows; they trip soon, and for good."""
        self.wild = wild
        self.note()
        self.in_order(position, course)

    @precondition(lambda self: self.wild)
    @rule(event=st.sampled_from(SourceEvent))
    def any_event_of_the_source(self, event: SourceEvent) -> None:
        self.the_source(event)

    @rule(data=st.data())
    def a_known_event_of_the_source(self, data: st.DataObject) -> None:
        known = sorted(e for s, e in SOURCE.pairs if s is self.ledger.source)
        gentle = [e for e in known if e is not SourceEvent.TRIP] or known
        if gentle:
            self.the_source(data.draw(st.sampled_from(gentle)))

    def the_source(self, event: SourceEvent) -> None:
        try:
            self.ledger.source_event(event)
        except LawBroken:
            return
        self.note()
        if event in {SourceEvent.RAMP, SourceEvent.CHANGE} and self.ledger.source in LIVE_SOURCE:
            assert len(self.ledger.on_rail) <= 1
            assert self.ledger.scanner_is_clean
        self.source_has_tripped |= event in {SourceEvent.TRIP, SourceEvent.TRIP_INDUCTOR}

    @rule(joined=st.sets(positions))
    def the_rail_is_read_back(self, joined: set[str]) -> None:
        self.ledger.on_rail = joined

    @precondition(lambda self: self.wild)
    @rule(position=positions, event=st.sampled_from(PositionEvent))
    def any_event_of_a_position(self, position: str, event: PositionEvent) -> None:
        self.a_position(position, event)

    @rule(position=positions, data=st.data())
    def a_known_event_of_a_position(self, position: str, data: st.DataObject) -> None:
        state = self.ledger.positions[position]
        known = sorted(e for s, e in POSITION.pairs if s is state)
        ending = {PositionEvent.TRIP, PositionEvent.GIVE_UP}
        gentle = [e for e in known if e not in ending] or known
        if gentle:
            self.a_position(position, data.draw(st.sampled_from(gentle)))

    @rule(position=positions, course=courses)
    def in_order(self, position: str, course: Course) -> None:
        """An ordinary course, as far as the ledger lets it go."""
        self.ledger.on_rail = {position}
        for source, part in course:
            if source is not None:
                self.the_source(source)
            if part is not None:
                self.a_position(position, part)

    def a_position(self, position: str, event: PositionEvent) -> None:
        before = self.ledger.positions[position]
        leased = self.ledger.leased
        try:
            self.ledger.position_event(position, event, now_s=self.now_s)
        except LawBroken:
            assert self.ledger.positions[position] is before
            return
        self.note()
        after = self.ledger.positions[position]
        if after in DEAD_POSITION and before not in DEAD_POSITION:
            self.proven_at[position] = self.now_s
        if after is PositionState.LEASED and before is not PositionState.LEASED:
            assert leased is None
            assert self.ledger.source is SourceState.OFF
            assert self.ledger.scanner_is_clean
            assert before is PositionState.DEAD
            assert self.now_s - self.proven_at[position] <= 30.0

    @rule(position=positions, voltage_v=voltages)
    def a_voltage(self, position: str, voltage_v: float) -> None:
        try:
            commanded_v = self.ledger.command_voltage(f"C{position}", position, voltage_v)
        except LawBroken:
            return
        assert not isnan(commanded_v)
        if commanded_v > 1.0:
            assert self.ledger.source in LIVE_SOURCE
            assert self.ledger.positions[position] in {
                PositionState.CHARGING,
                PositionState.SOAKING,
            }
            assert commanded_v <= LEAST_V[position] * (1 + 1e-8)
        elif commanded_v != 0.0:
            assert commanded_v > 0.0
            assert self.ledger.source in LIVE_SOURCE | TEST_SOURCE

    @rule(wait_s=st.floats(min_value=0.0, max_value=60.0))
    def time_passes(self, wait_s: float) -> None:
        self.now_s += wait_s
        self.ledger.expire(now_s=self.now_s)

    @rule(clean=st.booleans())
    def the_scanner_link(self, clean: bool) -> None:
        self.ledger.scanner_is_clean = clean

    @invariant()
    def note(self) -> None:
        self.reached.add(("source", self.ledger.source))
        self.reached.update(("position", state) for state in self.ledger.positions.values())

    @invariant()
    def a_lease_stands_alone(self) -> None:
        leased = [p for p, s in self.ledger.positions.items() if s is PositionState.LEASED]
        assert len(leased) <= 1
        if leased:
            assert self.ledger.source not in LIVE_SOURCE | TEST_SOURCE
            assert self.ledger.commanded_v == 0.0
        assert (self.ledger.leased is not None) == bool(leased)

    @invariant()
    def only_one_part_at_a_time_is_above_the_test_voltage(self) -> None:
        if self.ledger.commanded_v > 1.0:
            live = {
                p
                for p, s in self.ledger.positions.items()
                if s in {PositionState.CHARGING, PositionState.SOAKING}
            }
            assert len(live) <= 1

    @invariant()
    def a_trip_is_for_good(self) -> None:
        if self.source_has_tripped:
            assert self.ledger.source not in LIVE_SOURCE | {SourceState.OFF, SourceState.JOINED}
            assert self.ledger.tripped

    @invariant()
    def an_expired_proof_is_none(self) -> None:
        for position in POSITIONS:
            if self.ledger.proof(position, now_s=self.now_s) is not None:
                assert self.ledger.positions[position] in DEAD_POSITION
                assert self.now_s - self.proven_at[position] <= 30.0


class HonestBench(RuleBasedStateMachine):
    """A bench behind the ledger: actions happen unless a relay sticks; findings are true."""

    reached: ClassVar[set[object]] = set()

    def __init__(self) -> None:
        super().__init__()
        self.ledger = Ledger(PERMIT, POSITIONS)
        self.now_s = 0.0
        self.on, self.set_v, self.obeys_off = True, 300.0, True  # a supply may wake like this
        self.wild = True
        self.made: dict[tuple[str, str], bool] = {("", "supply"): True}
        for position in POSITIONS:
            for contact in ("connect", "discharge", "short", "meter", "sense"):
                self.made[position, contact] = contact == "connect"
        self.stuck: set[tuple[str, str]] = set()
        self.part_v = {"1": 450.0, "2": 63.0}  # from the tray, charged as far as they can be
        self._physics()

    # ---- the bench

    def _physics(self) -> None:
        """Where everything settles, given contacts and supply."""
        fed = self.on and self.made["", "supply"]
        joined = [p for p in POSITIONS if self.made[p, "connect"]]
        for position in POSITIONS:
            if self.made[position, "short"] or (
                self.made[position, "discharge"] and not (fed and position in joined)
            ):
                self.part_v[position] = 0.0
            elif fed and position in joined:
                self.part_v[position] = max(self.set_v, self.part_v[position])

    def _move(self, key: tuple[str, str], made: bool) -> bool:
        """Move a relay; True if it did."""
        if self.made[key] != made and key not in self.stuck:
            self.made[key] = made
        self._physics()
        return self.made[key] == made

    def _perform(self, position: str, actions: tuple[Action, ...]) -> bool:
        """Carry actions out in order; the first that is not confirmed ends it with False."""
        contact = {
            Action.CONNECT: ("connect", True),
            Action.DISCONNECT: ("connect", False),
            Action.CLOSE_DISCHARGE: ("discharge", True),
            Action.OPEN_DISCHARGE: ("discharge", False),
            Action.CLOSE_SHORT: ("short", True),
            Action.OPEN_SHORT: ("short", False),
            Action.CLOSE_METER: ("meter", True),
            Action.OPEN_METER: ("meter", False),
            Action.CLOSE_SENSE: ("sense", True),
        }
        for action in actions:
            if action is Action.CLOSE_SUPPLY:
                done = self._move(("", "supply"), True)
            elif action is Action.OPEN_SUPPLY:
                done = self._move(("", "supply"), False)
            elif action in contact:
                name, made = contact[action]
                if action is Action.CLOSE_METER:
                    assert abs(self.part_v[position]) <= 1.0, "the meter met a live part"
                    assert not (self.on and self.made["", "supply"])
                done = self._move((position, name), made)
                self._read_back()
            else:
                done = self._source_action(action)
            if not done:
                return False
        return True

    def _read_back(self) -> None:
        self.ledger.on_rail = {p for p in POSITIONS if self.made[p, "connect"]}

    def _source_action(self, action: Action) -> bool:
        if action is Action.OUTPUT_ON:
            self.on = True
        elif action is Action.OUTPUT_OFF and self.obeys_off:
            self.on = False
        elif action is Action.ZERO and self.obeys_off:
            self.set_v = 0.0
        elif action is Action.SET_TEST_VOLTAGE:
            self.set_v = self.ledger.command_voltage("", "", 0.8)
        self._physics()
        return True

    def _source(self, event: SourceEvent) -> None:
        try:
            actions = self.ledger.source_event(event)
        except LawBroken:
            return
        self.note()
        if not self._perform("", actions):
            self._find_isolation()

    def _position(self, position: str, event: PositionEvent) -> None:
        try:
            actions = self.ledger.position_event(position, event, now_s=self.now_s)
        except LawBroken:
            return
        self.note()
        if not self._perform(position, actions) and event is not PositionEvent.TRIP:
            self._source(SourceEvent.TRIP)
            self._find_off()
            self._position(position, PositionEvent.TRIP)

    # ---- requests, in any order

    @precondition(lambda self: self.wild)
    @rule(event=st.sampled_from([SourceEvent.MAKE_SAFE, SourceEvent.JOIN, SourceEvent.TEST,
                                 SourceEvent.RAMP, SourceEvent.REACHED, SourceEvent.CHANGE,
                                 SourceEvent.FALL, SourceEvent.ISOLATE, SourceEvent.END,
                                 SourceEvent.TRIP, SourceEvent.TRIP_INDUCTOR]))  # fmt: skip
    def ask_the_source(self, event: SourceEvent) -> None:
        if event is SourceEvent.ISOLATE and any(
            self.made[p, "connect"] and self.part_v[p] > 1.0 for p in POSITIONS
        ):
            return  # the relay law forbids it; the ledger need not know
        self._source(event)

    @precondition(lambda self: self.wild)
    @rule(position=positions,
          event=st.sampled_from([PositionEvent.MAKE_SAFE, PositionEvent.LEASE,
                                 PositionEvent.RELEASE, PositionEvent.JOIN,
                                 PositionEvent.CHARGE, PositionEvent.REACHED,
                                 PositionEvent.CHANGE, PositionEvent.STOP, PositionEvent.END,
                                 PositionEvent.RECOVER, PositionEvent.TRIP]))  # fmt: skip
    def ask_a_position(self, position: str, event: PositionEvent) -> None:
        self._position(position, event)

    @rule(position=positions, voltage_v=voltages)
    def raise_the_voltage(self, position: str, voltage_v: float) -> None:
        try:
            self.set_v = self.ledger.command_voltage(f"C{position}", position, voltage_v)
        except LawBroken:
            return
        self._physics()

    @rule(wait_s=st.floats(min_value=0.0, max_value=60.0))
    def time_passes(self, wait_s: float) -> None:
        self.now_s += wait_s
        self.ledger.expire(now_s=self.now_s)

    # ---- faults

    @rule(position=positions,
          contact=st.sampled_from(["connect", "discharge", "short", "meter"]))  # fmt: skip
    def a_relay_sticks(self, position: str, contact: str) -> None:
        self.stuck.add((position, contact))

    @rule()
    def the_supply_contact_welds(self) -> None:
        if self.made["", "supply"]:
            self.stuck.add(("", "supply"))

    @precondition(lambda self: self.on)
    @rule()
    def the_supply_stops_obeying(self) -> None:
        self.obeys_off = False

    # ---- findings: what is true

    @rule()
    def _find_off(self) -> None:
        if self.ledger.source is SourceState.RUNNING_DOWN:
            self._source(SourceEvent.CURRENT_ZERO)
        if self.ledger.source in {
            SourceState.MAKING_SAFE,
            SourceState.FALLING,
            SourceState.TRIPPING,
        }:
            self._source(SourceEvent.OFF_IGNORED if self.on else SourceEvent.OFF_CONFIRMED)

    @rule()
    def _find_isolation(self) -> None:
        if self.ledger.source in {
            SourceState.JOINED,
            SourceState.TRIPPED,
            SourceState.CUTTING_OFF,
        }:
            joined = self.made["", "supply"]
            if joined and ("", "supply") not in self.stuck:
                return
            self._source(SourceEvent.STAYS_JOINED if joined else SourceEvent.ISOLATED)

    @rule(position=positions)
    def find_the_part(self, position: str) -> None:
        live = self.part_v[position] > 1.0
        finding = {
            PositionState.DISCHARGING: (PositionEvent.DISCHARGED, PositionEvent.STAYS_UP),
            PositionState.SHORTED: (PositionEvent.READ_DEAD, PositionEvent.READ_LIVE),
            PositionState.RESTING: (PositionEvent.STAYED_DOWN, PositionEvent.READ_LIVE),
            PositionState.PROVING_AGAIN: (PositionEvent.READ_DEAD, PositionEvent.READ_LIVE),
            PositionState.JOINED: (PositionEvent.CHECKED, PositionEvent.CHECK_FAILED),
        }.get(self.ledger.positions[position])
        if finding is not None:
            if finding[0] is PositionEvent.CHECKED:
                live = self.ledger.source is not SourceState.TESTING
                if not live:  # the check itself opens the short, at no more than 1 V
                    self._move((position, "short"), False)
                    live = self.made[position, "short"] or self.made[position, "meter"]
            self._position(position, finding[live])

    # ---- the ordinary course, as far as it goes

    @initialize(
        position=positions,
        lease=st.booleans(),
        voltage_v=st.floats(2.0, 60.0),
        wild=st.booleans(),
        stuck=st.sampled_from([None, None, None, "short", "discharge"]),
    )
    def begin_in_order(
        self, position: str, lease: bool, voltage_v: float, wild: bool, stuck: str | None
    ) -> None:
        self.wild = wild
        self.note()
        if stuck is not None:
            self.a_relay_sticks(position, stuck)
        self.in_order(position, lease, voltage_v)

    @rule(position=positions)
    def part_lies_open_after_its_short(self, position: str) -> None:
        """What an absorption reading needs."""
        for event in (PositionEvent.MAKE_SAFE, PositionEvent.STOP):
            if (self.ledger.positions[position], event) in POSITION.pairs:
                self.ask_the_source(SourceEvent.FALL)
                self._find_off()
                self._position(position, event)
        self.find_the_part(position)
        if self.ledger.positions[position] is PositionState.SHORTED:
            self._position(position, PositionEvent.RECOVER)

    @rule(position=positions, data=st.data())
    def go_on(self, position: str, data: st.DataObject) -> None:
        """The next request that the tables know."""
        state = self.ledger.source
        asked = [e for e in REQUESTS if (state, e) in SOURCE.pairs]
        if asked:
            self.ask_the_source(data.draw(st.sampled_from(asked)))
        there = self.ledger.positions[position]
        wanted = [e for e in POSITION_REQUESTS if (there, e) in POSITION.pairs]
        if wanted:
            self._position(position, data.draw(st.sampled_from(wanted)))

    @rule(position=positions, lease=st.booleans(), voltage_v=st.floats(2.0, 500.0))
    def in_order(self, position: str, lease: bool, voltage_v: float) -> None:
        for event in (SourceEvent.FALL, SourceEvent.MAKE_SAFE):
            if (self.ledger.source, event) in SOURCE.pairs:
                self._source(event)
            self._find_off()
        for each in (*(p for p in POSITIONS if p != position), position):
            for event in (PositionEvent.STOP, PositionEvent.RELEASE, PositionEvent.MAKE_SAFE):
                if (self.ledger.positions[each], event) in POSITION.pairs:
                    self._position(each, event)
            for _ in range(3 if each != position else 2):
                self.find_the_part(each)
            if each != position and self.ledger.positions[each] is PositionState.DEAD:
                self._position(each, PositionEvent.LEAVE)
        if self.ledger.source is SourceState.JOINED:
            self.ask_the_source(SourceEvent.ISOLATE)
        self._find_isolation()
        self.find_the_part(position)
        if lease:
            self._position(position, PositionEvent.LEASE)
            return
        self._position(position, PositionEvent.JOIN)
        self._source(SourceEvent.JOIN)
        self._source(SourceEvent.TEST)
        self.find_the_part(position)
        self._position(position, PositionEvent.CHARGE)
        self._source(SourceEvent.RAMP)
        self.raise_the_voltage(position, voltage_v)

    # ---- what must hold

    @invariant()
    def note(self) -> None:
        self.reached.add(("source", self.ledger.source))
        self.reached.update(("position", state) for state in self.ledger.positions.values())

    @invariant()
    def proven_means_dead(self) -> None:
        for position, state in self.ledger.positions.items():
            if state in DEAD_POSITION and self.ledger.proof(position, now_s=self.now_s):
                assert self.part_v[position] <= 1.0

    @invariant()
    def a_leased_part_is_dead_and_nothing_feeds_it(self) -> None:
        if self.ledger.leased is not None:
            assert self.part_v[self.ledger.leased] <= 1.0

    @invariant()
    def after_the_start_no_part_is_above_its_permit(self) -> None:
        for position in POSITIONS:
            if self.ledger.commanded_v > 1.0 and self.on and self.made["", "supply"]:
                charging = self.ledger.positions[position] in {
                    PositionState.CHARGING,
                    PositionState.SOAKING,
                }
                if charging:
                    assert self.part_v[position] <= LEAST_V[position] * (1 + 1e-8)

    @invariant()
    def a_proven_source_is_off_and_isolated(self) -> None:
        if self.ledger.source is SourceState.ENDED_PROVEN:
            assert not self.on
            assert not self.made["", "supply"]

    def teardown(self) -> None:
        """Whatever happened: a trip, true findings, and every path has ended."""
        self._source(SourceEvent.TRIP)
        self._find_off()
        for position in POSITIONS:
            if self.ledger.positions[position] not in DEAD_POSITION:
                self._position(position, PositionEvent.TRIP)
        for _ in range(6):
            for position in POSITIONS:
                self.find_the_part(position)
        if self.ledger.source is SourceState.TRIPPED:
            self._source(SourceEvent.ISOLATE)
        self._find_isolation()
        for position in POSITIONS:
            if self.ledger.positions[position] is PositionState.DEAD:
                self._position(position, PositionEvent.END)
            if self.ledger.positions[position] is PositionState.ENDED_PROVEN:
                assert self.part_v[position] <= 1.0


EVERYWHERE = {("source", state) for state in SourceState} | {
    ("position", state) for state in PositionState
}
WHERE_IT_MATTERS = {  # an exploration that never came here has shown nothing
    ("source", SourceState.RAMPING),
    ("source", SourceState.TRIPPING),
    ("source", SourceState.ENDED_UNPROVEN),
    ("position", PositionState.LEASED),
    ("position", PositionState.CHARGING),
    ("position", PositionState.DISCHARGING),
    ("position", PositionState.DEAD),
    ("position", PositionState.ENDED_UNPROVEN),
}


def assert_explored(reached: set[object]) -> None:
    """What is drawn differs from one version to the next, so a few rare states may be missing."""
    assert reached >= WHERE_IT_MATTERS
    assert len(reached & EVERYWHERE) >= 0.75 * len(EVERYWHERE)


def run(machine: type[RuleBasedStateMachine]) -> None:
    run_state_machine_as_test(
        machine,
        settings=settings(
            max_examples=200, stateful_step_count=60, deadline=None, derandomize=True
        ),
    )


@pytest.mark.slow
def test_arbitrary_events_stay_lawful():
    ArbitraryEvents.reached = set()
    run(ArbitraryEvents)
    assert_explored(ArbitraryEvents.reached)


@pytest.mark.slow
def test_an_honest_bench_stays_safe():
    HonestBench.reached = set()
    run(HonestBench)
    assert_explored(HonestBench.reached)


def test_a_lease_keeps_the_source_from_the_rail():
    """In order up to the lease; then nothing that energises, not even at 1 V."""
    ledger = Ledger(PERMIT, POSITIONS)
    ledger.on_rail = set()
    for source, part in (*DEAD, (None, _P.LEASE)):
        if source is not None:
            ledger.source_event(source)
        if part is not None:
            ledger.position_event("1", part, now_s=0.0)
    assert ledger.leased == "1"
    for event in (_S.JOIN, _S.TEST, _S.RAMP, _S.CHANGE):
        with pytest.raises(LawBroken, match="open lease"):
            ledger.source_event(event)
    with pytest.raises(LawBroken):
        ledger.position_event("2", _P.LEASE, now_s=0.0)
    assert ledger.source is SourceState.OFF
    assert ledger.commanded_v == 0.0
