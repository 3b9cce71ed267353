"""The two tables are complete, and from every state a trip leads to an end."""

from pathlib import Path

import pytest

from ohmward.safety.diagram import replaced, section
from ohmward.safety.rules import (
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

TABLES = [
    pytest.param(SOURCE, SourceState, SourceEvent, id="source"),
    pytest.param(POSITION, PositionState, PositionEvent, id="position"),
]
REQUESTS = {  # what a runner asks for; all other events are findings and trips
    SourceEvent.JOIN,
    SourceEvent.RAMP,
    SourceEvent.CHANGE,
    PositionEvent.LEASE,
    PositionEvent.JOIN,
    PositionEvent.CHARGE,
    PositionEvent.CHANGE,
}


@pytest.mark.parametrize(("table", "states", "events"), TABLES)
def test_every_pair_is_in_the_table_or_trips(table, states, events):
    for state in states:
        for event in events:
            step = table.step(state, event)
            if (state, event) in table.pairs:
                assert step is table.pairs[state, event]
            elif state in table.ends:
                assert step.state is state
                assert step.tripped
                assert step.actions == ()
            else:
                assert step == table.pairs[state, table.trip]
                assert step.tripped


@pytest.mark.parametrize(("table", "states", "events"), TABLES)
def test_every_state_but_the_ends_has_a_trip(table, states, events):
    for state in set(states) - table.ends:
        assert (state, table.trip) in table.pairs


@pytest.mark.parametrize(("table", "states", "events"), TABLES)
def test_every_state_and_event_is_used(table, states, events):
    reached = {table.start} | {step.state for step in table.pairs.values()}
    assert reached == set(states)
    assert {event for _, event in table.pairs} == set(events)


@pytest.mark.parametrize(("table", "states", "events"), TABLES)
def test_from_every_state_a_trip_reaches_both_ends_and_nothing_but_ends(table, states, events):
    """After a trip, without a request, every path can go on to an end; both ends are there."""
    for state in set(states) - table.ends:
        after = _reachable(table, table.pairs[state, table.trip].state, set(events) - REQUESTS)
        assert after & table.ends
        for each in after:  # no dead street: from wherever it stands, an end is in reach
            assert _reachable(table, each, set(events) - REQUESTS) & table.ends
        assert table.unproven in after
        if not (table is SOURCE and state is SourceState.CUTTING_OFF):
            assert table.proven in after  # a source that ignored OFF is never proven


def test_a_tripped_source_never_energises_again_above_the_test_voltage():
    for state in SourceState:
        if state in SOURCE.ends:
            continue
        after = _reachable(SOURCE, SOURCE.pairs[state, SourceEvent.TRIP].state, set(SourceEvent))
        assert not after & LIVE_SOURCE
        assert SourceState.OFF not in after
        assert SourceState.JOINED not in after
        assert after & TEST_SOURCE <= {SourceState.TRIPPED_TESTING}


def test_the_trip_of_an_energised_source_is_zero_and_off_at_once():
    for state in LIVE_SOURCE | TEST_SOURCE:
        actions = SOURCE.pairs[state, SourceEvent.TRIP].actions
        assert actions[:2] == (Action.ZERO, Action.OUTPUT_OFF)
        assert Action.SET_VOLTAGE not in actions


def test_an_inductor_trips_with_its_current_going_to_zero_before_anything_opens():
    opening = {Action.OPEN_SUPPLY, Action.DISCONNECT, Action.OPEN_METER, Action.OUTPUT_OFF}
    for state in LIVE_SOURCE | {SourceState.TESTING}:
        step = SOURCE.pairs[state, SourceEvent.TRIP_INDUCTOR]
        assert step.state is SourceState.RUNNING_DOWN
        assert step.actions == (Action.CURRENT_TO_ZERO,)
        assert not opening & set(step.actions)


def test_only_the_pass_at_one_volt_leads_to_a_ramp():
    """The source ramps only from TESTING or from a hold; a part charges only once READY."""
    into = {state for (state, _), step in SOURCE.pairs.items() if step.state in LIVE_SOURCE}
    assert into == {SourceState.TESTING, SourceState.RAMPING, SourceState.HOLDING}
    charge = {s for (s, e), step in POSITION.pairs.items() if step.state is PositionState.CHARGING}
    assert charge == {PositionState.READY, PositionState.SOAKING}
    ready = {s for (s, _), step in POSITION.pairs.items() if step.state is PositionState.READY}
    assert ready == {PositionState.JOINED}


def test_only_a_proof_leads_to_dead_and_only_dead_to_a_lease():
    into = {
        key
        for key, step in POSITION.pairs.items()
        if step.state is PositionState.DEAD and key[0] is not PositionState.DEAD
    }
    assert into == {
        (PositionState.RESTING, PositionEvent.STAYED_DOWN),
        (PositionState.PROVING_AGAIN, PositionEvent.READ_DEAD),
    }
    leased = {key for key, step in POSITION.pairs.items() if step.state is PositionState.LEASED}
    assert leased == {(PositionState.DEAD, PositionEvent.LEASE)}
    proven = {
        key
        for key, step in POSITION.pairs.items()
        if step.state is POSITION.proven and key[0] is not POSITION.proven
    }
    assert proven == {(PositionState.DEAD, PositionEvent.END)}


def test_the_bypass_is_closed_before_every_change_of_voltage():
    for step in SOURCE.pairs.values():
        for change in (Action.SET_VOLTAGE, Action.SET_TEST_VOLTAGE):
            if change in step.actions:
                assert Action.CLOSE_BYPASS in step.actions[: step.actions.index(change)]


def test_developers_page_shows_the_tables_as_they_are():
    page = (Path(__file__).parents[2] / "DEVELOPERS.md").read_text(encoding="utf-8")
    assert "## Safety tables" in page
    assert section() in page
    assert replaced(page) == page


def _reachable(table, start, events):
    found, waiting = {start}, [start]
    while waiting:
        state = waiting.pop()
        for event in events:
            following = table.step(state, event).state
            if following not in found:
                found.add(following)
                waiting.append(following)
    return found
