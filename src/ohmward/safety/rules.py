"""The two tables of the safety rules: source and position, state x event -> state, actions.

Pure data and one function. A pair that is not in a table trips: it does what TRIP does in that
state. The end states swallow every event: nothing energises from there, and only a live reading
can take a proof back. The diagrams in DEVELOPERS.md are drawn from these tables.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from enum import StrEnum
from typing import Generic, TypeVar


class Action(StrEnum):
    """What a warden does on a transition, in the order given; each is read back."""

    # the source
    SET_LIMITS = "set the limits"
    ZERO = "set 0 V"
    OUTPUT_OFF = "switch the output off"
    OUTPUT_ON = "switch the output on"
    SET_TEST_VOLTAGE = "set at most 1 V"
    SET_VOLTAGE = "ramp to the voltage"
    CURRENT_TO_ZERO = "take the current to zero"
    CLOSE_SUPPLY = "close the supply's contact"
    OPEN_SUPPLY = "open the supply's contact"
    CLOSE_BYPASS = "close the current meter's bypass"
    # the position
    CLOSE_SENSE = "close the sense contacts"
    CONNECT = "connect the part to the rail"
    DISCONNECT = "take the part off the rail"
    CLOSE_DISCHARGE = "close the discharge"
    OPEN_DISCHARGE = "open the discharge"
    OPEN_SENSE = "open the sense contacts"
    CLOSE_SHORT = "close the short"
    OPEN_SHORT = "open the short"
    CLOSE_METER = "close the meter path"
    OPEN_METER = "open the meter path"


class SourceState(StrEnum):
    """Where the supply and its contact are."""

    UNKNOWN = "unknown"  # it may have woken with its output on
    MAKING_SAFE = "making safe"
    OFF = "off"  # 0 V, off, limits read back, isolated from the rail
    JOINED = "joined"  # off, its contact closed
    TESTING = "testing"  # on, at most 1 V
    RAMPING = "ramping"
    HOLDING = "holding"
    FALLING = "falling"  # 0 V and off commanded, not read back yet
    RUNNING_DOWN = "running down"  # tripped with an inductor: current on its way to zero
    TRIPPING = "tripping"  # 0 V and off commanded at once, not read back yet
    CUTTING_OFF = "cutting off"  # OFF was ignored: its contact is the last resort
    TRIPPED = "tripped"  # off is read back; still joined until the rail is dead
    TRIPPED_TESTING = "tripped, testing"  # on, at most 1 V, only to prove a part dead
    ENDED_PROVEN = "ended, proven"
    ENDED_UNPROVEN = "ended, unproven"


class SourceEvent(StrEnum):
    """What happens to the source: requests, findings, and the trip."""

    MAKE_SAFE = "make safe"
    JOIN = "join"
    TEST = "test"
    RAMP = "ramp"
    REACHED = "reached"
    CHANGE = "change"
    FALL = "fall"
    OFF_CONFIRMED = "off confirmed"
    OFF_IGNORED = "off ignored"
    ISOLATE = "isolate"
    ISOLATED = "isolated"
    STAYS_JOINED = "stays joined"
    CURRENT_ZERO = "current zero"
    CURRENT_STAYS = "current stays"
    END = "end"
    TRIP = "trip"
    TRIP_INDUCTOR = "trip with an inductor"


class PositionState(StrEnum):
    """Where a position's part is; live until proven dead."""

    UNKNOWN = "unknown"  # assumed charged
    DISCHARGING = "discharging"
    SHORTED = "shorted"
    RESTING = "resting"  # open again, to see whether it charges itself up
    TESTING = "testing"  # a voltage of at most 1 V shows whether the voltmeter sees it
    PROVING_AGAIN = "proving again"
    DEAD = "dead"  # proven, shorted, and the proof expires
    LEASED = "leased"
    JOINED = "joined"  # on the rail at 0 V
    READY = "ready"  # passed at 1 V: path, isolation, short and bypass are as they should be
    CHARGING = "charging"
    SOAKING = "soaking"
    RECOVERING = "recovering"  # lies open, absorption charges it up
    ENDED_PROVEN = "ended, proven"
    ENDED_UNPROVEN = "ended, unproven"


class PositionEvent(StrEnum):
    """What happens to a position: requests, findings, and the trip."""

    MAKE_SAFE = "make safe"
    DISCHARGED = "discharged"
    STAYS_UP = "stays up"
    CONTACT_LOST = "contact lost"
    READ_DEAD = "read dead"
    READ_LIVE = "read live"
    STAYED_DOWN = "stayed down"
    REBOUNDED = "rebounded"
    NOT_WITNESSED = "not witnessed"
    TEST_SEEN = "test seen"
    TEST_NOT_SEEN = "test not seen"
    LEASE = "lease"
    RELEASE = "release"
    JOIN = "join"
    CHECKED = "checked"
    CHECK_FAILED = "check failed"
    CHARGE = "charge"
    REACHED = "reached"
    CHANGE = "change"
    STOP = "stop"
    RECOVER = "recover"
    GIVE_UP = "give up"  # nothing more can be done from here: a person must
    LEAVE = "leave the rail"  # another position needs it
    EXPIRED = "expired"
    END = "end"
    TRIP = "trip"


State = TypeVar("State", SourceState, PositionState)
Event = TypeVar("Event", SourceEvent, PositionEvent)


@dataclass(frozen=True, slots=True)
class Step(Generic[State]):
    """What a pair leads to; ``tripped`` says that the machine is on its way to an end."""

    state: State
    actions: tuple[Action, ...] = ()
    tripped: bool = False


@dataclass(frozen=True, slots=True)
class Table(Generic[State, Event]):
    """One table: its pairs, its events that trip, and its two ends."""

    name: str
    start: State
    trip: Event
    proven: State
    unproven: State
    pairs: Mapping[tuple[State, Event], Step[State]]

    @property
    def ends(self) -> frozenset[State]:
        """The states that nothing leaves but a proof taken back."""
        return frozenset({self.proven, self.unproven})

    def step(self, state: State, event: Event) -> Step[State]:
        """What this event does in this state; an unknown pair trips."""
        found = self.pairs.get((state, event))
        if found is not None:
            return found
        if state in self.ends:
            return Step(state, (), tripped=True)
        return self.pairs[state, self.trip]


_S, _E, _A = SourceState, SourceEvent, Action
_OFF_AT_ONCE = (_A.ZERO, _A.OUTPUT_OFF, _A.CLOSE_BYPASS)


def _source_pairs() -> dict[tuple[SourceState, SourceEvent], Step[SourceState]]:
    fall = Step(_S.FALLING, (_A.CLOSE_BYPASS, _A.ZERO, _A.OUTPUT_OFF))
    cut_off = Step(_S.CUTTING_OFF, (_A.OPEN_SUPPLY,), tripped=True)
    pairs = {
        (_S.UNKNOWN, _E.MAKE_SAFE): Step(
            _S.MAKING_SAFE, (_A.ZERO, _A.OUTPUT_OFF, _A.SET_LIMITS, _A.CLOSE_BYPASS)
        ),
        (_S.MAKING_SAFE, _E.OFF_CONFIRMED): Step(_S.JOINED),
        (_S.MAKING_SAFE, _E.OFF_IGNORED): cut_off,
        (_S.OFF, _E.MAKE_SAFE): Step(
            _S.MAKING_SAFE, (_A.ZERO, _A.OUTPUT_OFF, _A.SET_LIMITS, _A.CLOSE_BYPASS)
        ),
        (_S.OFF, _E.JOIN): Step(_S.JOINED, (_A.CLOSE_BYPASS, _A.CLOSE_SUPPLY)),
        (_S.OFF, _E.END): Step(_S.ENDED_PROVEN),
        (_S.JOINED, _E.TEST): Step(
            _S.TESTING, (_A.CLOSE_BYPASS, _A.SET_TEST_VOLTAGE, _A.OUTPUT_ON)
        ),
        (_S.JOINED, _E.ISOLATE): Step(_S.JOINED, (_A.OPEN_SUPPLY,)),
        (_S.JOINED, _E.ISOLATED): Step(_S.OFF),
        (_S.JOINED, _E.STAYS_JOINED): Step(_S.ENDED_UNPROVEN, (), tripped=True),
        (_S.TESTING, _E.RAMP): Step(_S.RAMPING, (_A.CLOSE_BYPASS, _A.SET_VOLTAGE)),
        (_S.RAMPING, _E.REACHED): Step(_S.HOLDING),
        (_S.HOLDING, _E.CHANGE): Step(_S.RAMPING, (_A.CLOSE_BYPASS, _A.SET_VOLTAGE)),
        (_S.TESTING, _E.FALL): fall,
        (_S.RAMPING, _E.FALL): fall,
        (_S.HOLDING, _E.FALL): fall,
        (_S.FALLING, _E.OFF_CONFIRMED): Step(_S.JOINED),
        (_S.FALLING, _E.OFF_IGNORED): cut_off,
        (_S.RUNNING_DOWN, _E.CURRENT_ZERO): Step(_S.TRIPPING, _OFF_AT_ONCE, tripped=True),
        (_S.RUNNING_DOWN, _E.CURRENT_STAYS): Step(_S.TRIPPING, _OFF_AT_ONCE, tripped=True),
        (_S.TRIPPING, _E.OFF_CONFIRMED): Step(_S.TRIPPED, (), tripped=True),
        (_S.TRIPPING, _E.OFF_IGNORED): cut_off,
        (_S.TRIPPED, _E.ISOLATE): Step(_S.TRIPPED, (_A.OPEN_SUPPLY,), tripped=True),
        (_S.TRIPPED, _E.ISOLATED): Step(_S.ENDED_PROVEN, (), tripped=True),
        (_S.TRIPPED, _E.STAYS_JOINED): Step(_S.ENDED_UNPROVEN, (), tripped=True),
        (_S.TRIPPED, _E.OFF_IGNORED): cut_off,
        (_S.TRIPPED, _E.JOIN): Step(_S.TRIPPED, (_A.CLOSE_BYPASS, _A.CLOSE_SUPPLY), tripped=True),
        (_S.TRIPPED, _E.TEST): Step(
            _S.TRIPPED_TESTING, (_A.CLOSE_BYPASS, _A.SET_TEST_VOLTAGE, _A.OUTPUT_ON), tripped=True
        ),
        (_S.TRIPPED_TESTING, _E.FALL): Step(_S.TRIPPING, _OFF_AT_ONCE, tripped=True),
        (_S.CUTTING_OFF, _E.ISOLATED): Step(_S.ENDED_UNPROVEN, (), tripped=True),
        (_S.CUTTING_OFF, _E.STAYS_JOINED): Step(_S.ENDED_UNPROVEN, (), tripped=True),
        (_S.ENDED_PROVEN, _E.OFF_IGNORED): Step(_S.ENDED_UNPROVEN, (), tripped=True),
        (_S.ENDED_PROVEN, _E.STAYS_JOINED): Step(_S.ENDED_UNPROVEN, (), tripped=True),
    }
    at_once = Step(_S.TRIPPING, _OFF_AT_ONCE, tripped=True)
    current_first = Step(_S.RUNNING_DOWN, (_A.CURRENT_TO_ZERO,), tripped=True)
    for state in _S:
        if state in (_S.ENDED_PROVEN, _S.ENDED_UNPROVEN):
            continue
        pairs[state, _E.TRIP] = at_once
        on = state in (_S.TESTING, _S.RAMPING, _S.HOLDING, _S.FALLING, _S.UNKNOWN)
        pairs[state, _E.TRIP_INDUCTOR] = current_first if on else at_once
    pairs[_S.CUTTING_OFF, _E.TRIP] = cut_off
    pairs[_S.CUTTING_OFF, _E.TRIP_INDUCTOR] = cut_off
    return pairs


SOURCE: Table[SourceState, SourceEvent] = Table(
    name="source",
    start=SourceState.UNKNOWN,
    trip=SourceEvent.TRIP,
    proven=SourceState.ENDED_PROVEN,
    unproven=SourceState.ENDED_UNPROVEN,
    pairs=_source_pairs(),
)

_P, _V = PositionState, PositionEvent


def _position_pairs() -> dict[tuple[PositionState, PositionEvent], Step[PositionState]]:
    discharge = Step(_P.DISCHARGING, (_A.CLOSE_SENSE, _A.CONNECT, _A.CLOSE_DISCHARGE))
    trip = Step(discharge.state, discharge.actions, tripped=True)
    unproven = Step(_P.ENDED_UNPROVEN, (), tripped=True)
    dead = Step(_P.DEAD, (_A.CLOSE_DISCHARGE, _A.CLOSE_SHORT))
    leave = (_A.DISCONNECT, _A.OPEN_SENSE)
    again = Step(_P.PROVING_AGAIN, (_A.CLOSE_DISCHARGE, _A.CLOSE_SHORT))
    pairs = {
        (_P.UNKNOWN, _V.MAKE_SAFE): discharge,
        (_P.DISCHARGING, _V.DISCHARGED): Step(_P.SHORTED, (_A.OPEN_METER, _A.CLOSE_SHORT)),
        (_P.DISCHARGING, _V.STAYS_UP): unproven,
        (_P.DISCHARGING, _V.CONTACT_LOST): unproven,
        (_P.SHORTED, _V.READ_DEAD): Step(_P.RESTING, (_A.OPEN_SHORT, _A.OPEN_DISCHARGE)),
        (_P.SHORTED, _V.READ_LIVE): unproven,
        (_P.SHORTED, _V.RECOVER): Step(
            _P.RECOVERING, (_A.OPEN_SHORT, _A.OPEN_DISCHARGE, _A.DISCONNECT)
        ),
        (_P.RECOVERING, _V.MAKE_SAFE): discharge,
        (_P.RESTING, _V.STAYED_DOWN): dead,
        (_P.RESTING, _V.REBOUNDED): discharge,
        (_P.RESTING, _V.NOT_WITNESSED): Step(_P.TESTING),
        (_P.RESTING, _V.READ_LIVE): unproven,
        (_P.TESTING, _V.TEST_SEEN): again,
        (_P.TESTING, _V.TEST_NOT_SEEN): unproven,
        (_P.PROVING_AGAIN, _V.READ_DEAD): Step(_P.DEAD),
        (_P.PROVING_AGAIN, _V.READ_LIVE): unproven,
        (_P.DEAD, _V.EXPIRED): Step(_P.UNKNOWN),
        (_P.DEAD, _V.MAKE_SAFE): discharge,
        (_P.DEAD, _V.LEASE): Step(
            _P.LEASED,
            (
                _A.OPEN_SHORT,
                _A.OPEN_DISCHARGE,
                _A.DISCONNECT,
                _A.OPEN_SENSE,  # its divider would be measured along with the part
                _A.CLOSE_METER,
            ),
        ),
        (_P.LEASED, _V.RELEASE): Step(_P.UNKNOWN, (_A.CLOSE_SENSE, _A.OPEN_METER, _A.OPEN_SENSE)),
        (_P.DEAD, _V.JOIN): Step(_P.JOINED, (_A.CLOSE_SENSE, _A.CONNECT, _A.OPEN_DISCHARGE)),
        (_P.JOINED, _V.CHECKED): Step(_P.READY),
        (_P.JOINED, _V.CHECK_FAILED): discharge,
        (_P.READY, _V.CHARGE): Step(_P.CHARGING),
        (_P.CHARGING, _V.REACHED): Step(_P.SOAKING),
        (_P.SOAKING, _V.CHANGE): Step(_P.CHARGING),
        (_P.JOINED, _V.STOP): discharge,
        (_P.READY, _V.STOP): discharge,
        (_P.CHARGING, _V.STOP): discharge,
        (_P.SOAKING, _V.STOP): discharge,
        (_P.DEAD, _V.LEAVE): Step(_P.DEAD, leave),
        (_P.UNKNOWN, _V.LEAVE): Step(_P.UNKNOWN, leave),
        (_P.ENDED_PROVEN, _V.LEAVE): Step(_P.ENDED_PROVEN, leave, tripped=True),
        (_P.ENDED_UNPROVEN, _V.LEAVE): Step(_P.ENDED_UNPROVEN, leave, tripped=True),
        (_P.DEAD, _V.END): Step(_P.ENDED_PROVEN, (_A.CLOSE_SHORT,)),
        (_P.ENDED_PROVEN, _V.READ_LIVE): unproven,
    }
    for state in _P:
        if state not in (_P.ENDED_PROVEN, _P.ENDED_UNPROVEN):
            pairs[state, _V.TRIP] = trip
            pairs[state, _V.GIVE_UP] = unproven
    return pairs


POSITION: Table[PositionState, PositionEvent] = Table(
    name="position",
    start=PositionState.UNKNOWN,
    trip=PositionEvent.TRIP,
    proven=PositionState.ENDED_PROVEN,
    unproven=PositionState.ENDED_UNPROVEN,
    pairs=_position_pairs(),
)

TEST_SOURCE = frozenset({_S.TESTING, _S.TRIPPED_TESTING})  # on, at most 1 V
LIVE_SOURCE = frozenset({_S.RAMPING, _S.HOLDING})  # on, at any voltage of the permit
OFF_SOURCE = frozenset({_S.OFF, _S.JOINED, _S.TRIPPED, _S.ENDED_PROVEN})  # read back off
DEAD_POSITION = frozenset({_P.DEAD, _P.ENDED_PROVEN})
