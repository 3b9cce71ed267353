"""Every fault that the warden must survive, judged by the part's true voltage and contacts.

Whatever happens: nothing is called proven that is live, no part is above its permit, no contact
moves beyond its rating, and the run ends as the fault deserves.
"""

from collections.abc import Callable
from dataclasses import dataclass

import pytest
import trio
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.safety.rc_bench import Bench
from tests.safety.test_high_voltage import Log, bench_of, virtual, warden_of

from ohmward.errors import LinkTimeout, NotProvenSafe, OhmwardError, SafetyTrip
from ohmward.safety.handle import Ending
from ohmward.safety.messages import Held, Hold, Observation
from ohmward.safety.rules import PositionState, SourceState

HOLD = Hold(
    part_id="C1",
    position="1",
    voltage_v=400.0,
    ramp_v_per_s=100.0,
    soak_s=60.0,
    every_s=5.0,
    current_max_a=100e-6,
)
Fault = Callable[[Bench], None]
SOAK_V = 399.0  # the part has its voltage
RAMP_V = 200.0  # half way up


@dataclass
class Outcome:
    """What came of one hold: the result or what was raised, and the ending."""

    held: Held | None
    raised: OhmwardError | None
    ending: Ending
    position: PositionState
    source: SourceState


def relay(channel: str, stuck: str, *, lies: bool = True) -> Fault:
    def change(bench: Bench) -> None:
        bench.relays[channel].stuck = stuck
        bench.relays[channel].read_back_lies = lies

    return change


def put(**values: object) -> Fault:
    def change(bench: Bench) -> None:
        for name, value in values.items():
            setattr(bench, name, value)

    return change


def leak(ohm: float) -> Fault:
    def change(bench: Bench) -> None:
        bench.parts["1"].leak_ohm = ohm

    return change


def lost(bench: Bench) -> None:
    bench.contact_lost.add("1")


def suffer(
    farad: float,
    fault: Fault,
    *,
    at_v: float | None,
    after_s: float = 3.0,
    log: Log | None = None,
    weak: dict[str, float] | None = None,
) -> tuple[Bench, Outcome]:
    """One hold with one fault: from the beginning, or once the part has passed a voltage."""
    bench, log = bench_of(farad, weak=weak), log or Log()
    outcomes: list[Outcome] = []

    async def main() -> None:
        warden = warden_of(bench, log, farad)
        held, raised = None, None
        if at_v is None:
            fault(bench)
        else:
            bench.above(at_v, fault, after_s)
        try:
            await warden.start()
            held = await warden.hold(HOLD, log)
        except OhmwardError as error:
            raised = error
        ending = await warden.stop()
        ledger = warden._desk.ledger
        outcomes.append(Outcome(held, raised, ending, ledger.positions["1"], ledger.source))

    virtual(main)
    return bench, outcomes[0]


def assert_honest(bench: Bench, outcome: Outcome) -> None:
    """What must hold after any fault."""
    assert bench.highest_v <= 400.0 * (1 + 1e-9)
    assert bench.unlawful == []
    if outcome.position in {PositionState.DEAD, PositionState.ENDED_PROVEN}:
        assert bench.parts["1"].volts <= 1.0, "live and called proven"
    if outcome.source is SourceState.ENDED_PROVEN:
        assert not bench.on or bench.tripped
    if outcome.ending.proven:
        assert bench.parts["1"].volts <= 1.0
        assert outcome.position is PositionState.ENDED_PROVEN
        assert outcome.source is SourceState.ENDED_PROVEN
    else:
        assert outcome.ending.reasons
    if outcome.held is not None and outcome.held.counts:
        assert outcome.held.stopped == "" or bench.parts["1"].leak_ohm < 1e12


# ---- the bench is the cause: the lot stops, everything is proven

TRIPS = [
    pytest.param(put(enclosure_closed=False), "interlock", id="interlock opens"),
    pytest.param(put(tripped=True), "supply has tripped", id="supply trips"),
    pytest.param(put(on=False), "nobody switched it off", id="output goes off"),
]


@pytest.mark.parametrize(("fault", "words"), TRIPS)
@pytest.mark.parametrize("at_v", [RAMP_V, SOAK_V])
def test_the_bench_trips_and_the_part_is_proven_dead(fault, words, at_v):
    bench, outcome = suffer(4.7e-6, fault, at_v=at_v, after_s=0.0 if at_v is RAMP_V else 3.0)
    assert_honest(bench, outcome)
    assert isinstance(outcome.raised, SafetyTrip), outcome
    assert words in str(outcome.raised)
    assert outcome.ending.proven, outcome.ending.reasons
    assert bench.parts["1"].volts <= 1.0


def test_a_voltage_that_somebody_else_has_set_trips():
    bench, outcome = suffer(4.7e-6, put(set_v=420.0), at_v=SOAK_V)
    assert isinstance(outcome.raised, SafetyTrip), outcome
    assert "set to 420 V" in str(outcome.raised)
    assert outcome.ending.proven, outcome.ending.reasons
    assert bench.parts["1"].volts <= 1.0


@pytest.mark.parametrize("at_v", [RAMP_V, SOAK_V])
def test_a_supply_that_hangs_is_abandoned_and_switched_off_over_a_fresh_session(at_v):
    bench, outcome = suffer(4.7e-6, put(supply_hangs=True), at_v=at_v)
    assert_honest(bench, outcome)
    assert bench.renewed >= 1
    assert isinstance(outcome.raised, LinkTimeout), outcome
    assert outcome.ending.proven, outcome.ending.reasons


def test_a_bypass_that_stays_made_is_found_before_a_reading_counts():
    log = Log()
    bench, outcome = suffer(4.7e-6, relay("2", "made"), at_v=RAMP_V, log=log)
    assert_honest(bench, outcome)
    assert isinstance(outcome.raised, SafetyTrip), outcome
    assert "bypass does not open" in str(outcome.raised)
    assert log.seen == []
    assert outcome.ending.proven


def test_a_bypass_that_does_not_make_is_found_on_the_ramp():
    bench, outcome = suffer(47e-6, relay("2", "broken"), at_v=None)
    assert_honest(bench, outcome)
    assert isinstance(outcome.raised, SafetyTrip), outcome
    assert "bypass does not make" in str(outcome.raised)
    assert bench.highest_v < 100.0
    assert outcome.ending.proven


def test_a_runner_that_does_not_answer_trips():
    class Silent(Log):
        async def observe(self, observation: Observation) -> None:  # type: ignore[override]
            await trio.sleep_forever()

    bench, outcome = suffer(4.7e-6, lambda bench: None, at_v=None, log=Silent())
    assert_honest(bench, outcome)
    assert isinstance(outcome.raised, SafetyTrip)
    assert "does not answer" in str(outcome.raised)
    assert outcome.ending.proven


@pytest.mark.parametrize("channel", ["106", "107"])
def test_a_welded_meter_contact_is_found_at_one_volt(channel):
    """Both tell their coil's state; the other one alone then brings the meter to the part."""
    bench, outcome = suffer(4.7e-6, relay(channel, "made"), at_v=None)
    assert_honest(bench, outcome)
    assert isinstance(outcome.raised, SafetyTrip), outcome
    assert "does not isolate" in str(outcome.raised)
    assert bench.highest_v <= 1.0


def test_a_short_that_does_not_make_is_found_at_one_volt():
    bench, outcome = suffer(4.7e-6, relay("103", "broken"), at_v=None)
    assert_honest(bench, outcome)
    assert isinstance(outcome.raised, NotProvenSafe), outcome
    assert "short of 1 does not make" in str(outcome.raised)
    assert bench.highest_v <= 1.0


# ---- the bench is the cause and the safe state cannot be proven: loud

UNPROVEN = [
    pytest.param(relay("1", "made"), SOAK_V, "welded", id="supply contact welds"),
    pytest.param(relay("1", "made", lies=False), SOAK_V, "", id="supply contact welds and says so"),
    pytest.param(put(obeys_off=False), SOAK_V, "mains switch", id="supply ignores OFF"),
    pytest.param(
        put(obeys_off=False, lies_about_off=True), SOAK_V, "", id="supply ignores OFF and lies"
    ),
    pytest.param(relay("102", "broken"), SOAK_V, "stays at", id="discharge does not make"),
    pytest.param(put(sense_broken=True), SOAK_V, "not seen", id="sense breaks"),
    pytest.param(lost, SOAK_V, "", id="contact is lost under voltage"),
    pytest.param(put(scanner_dead=True), SOAK_V, "scanner", id="scanner dies"),
]


@pytest.mark.parametrize(("fault", "at_v", "words"), UNPROVEN)
def test_what_cannot_be_proven_is_said_loudly(fault, at_v, words):
    bench, outcome = suffer(4.7e-6, fault, at_v=at_v)
    assert_honest(bench, outcome)
    assert isinstance(outcome.raised, NotProvenSafe), outcome
    assert not outcome.ending.proven
    assert words in f"{outcome.raised} {outcome.ending.reasons}"
    assert "by hand" in str(outcome.ending.reasons) or "switch it off" in str(
        outcome.ending.reasons
    )


def test_a_supply_that_ignores_off_is_cut_off_and_the_part_is_dead_all_the_same():
    bench, outcome = suffer(4.7e-6, put(obeys_off=False), at_v=SOAK_V)
    assert bench.on
    assert not bench.made(bench.wired.supply)
    assert outcome.position is PositionState.ENDED_PROVEN
    assert bench.parts["1"].volts <= 1.0
    assert outcome.source is SourceState.ENDED_UNPROVEN


def test_a_supply_that_lies_about_off_is_found_by_the_part_that_stays_up():
    bench, outcome = suffer(4.7e-6, put(obeys_off=False, lies_about_off=True), at_v=SOAK_V)
    assert not bench.made(bench.wired.supply)
    assert bench.parts["1"].volts <= 1.0
    assert outcome.source is SourceState.ENDED_UNPROVEN


def test_a_lost_contact_leaves_a_live_part_that_nobody_calls_dead():
    bench, outcome = suffer(4.7e-6, lost, at_v=SOAK_V)
    assert bench.parts["1"].volts > 100.0
    assert outcome.position is PositionState.ENDED_UNPROVEN
    assert not bench.on


def test_a_supply_contact_that_may_not_break_its_current_stays_closed():
    """Rated for 50 V: opening it under 400 V would weld it; a person has to switch off."""
    bench, outcome = suffer(4.7e-6, put(obeys_off=False), at_v=SOAK_V, weak={"1": 50.0})
    assert_honest(bench, outcome)
    assert isinstance(outcome.raised, NotProvenSafe)
    assert bench.made(bench.wired.supply)
    assert "may be closed" in str(outcome.ending.reasons)
    assert outcome.position is PositionState.ENDED_UNPROVEN
    assert not bench.made(bench.wired.positions[0].discharge)  # nor is the resistor cooked


def test_a_contact_that_is_lost_on_the_way_down_is_noticed_though_it_comes_back():
    bench, log = bench_of(4.7e-6), Log()
    discharge = bench.wired.positions[0].discharge
    bench.above(
        SOAK_V,
        lambda b: b.when(lambda x: x.made(discharge) and x.parts["1"].volts < 300.0, lost),
    )
    bench.when(
        lambda b: "1" in b.contact_lost,
        lambda b: b.at(b.now_s + 1.0, lambda x: x.contact_lost.clear()),
    )

    async def main() -> None:
        warden = warden_of(bench, log, 4.7e-6)
        await warden.start()
        with pytest.raises(NotProvenSafe, match="vanished faster"):
            await warden.hold(HOLD, log)
        assert not (await warden.stop()).proven

    virtual(main)


# ---- the part is the cause: it stops, the lot goes on


def test_a_part_that_shorts_under_voltage_stops_and_is_proven_by_conduction():
    bench, outcome = suffer(4.7e-6, leak(1.0), at_v=SOAK_V)
    assert_honest(bench, outcome)
    assert outcome.raised is None
    assert outcome.held is not None
    assert "leaks" in outcome.held.stopped
    assert outcome.ending.proven, outcome.ending.reasons


def test_a_part_that_is_a_short_gets_no_more_than_one_volt():
    bench, outcome = suffer(4.7e-6, leak(0.5), at_v=None)
    assert_honest(bench, outcome)
    assert outcome.held is not None
    assert "conducts" in outcome.held.stopped
    assert not outcome.held.reached
    assert bench.highest_v <= 1.0
    assert outcome.ending.proven, outcome.ending.reasons


def test_a_part_that_leaks_more_than_its_limit_stops():
    """400 V across 1 MΩ is 400 µA; the limit is 100 µA."""
    bench, outcome = suffer(4.7e-6, leak(1e6), at_v=SOAK_V, after_s=10.0)
    assert_honest(bench, outcome)
    assert outcome.held is not None, outcome
    assert outcome.held.stopped
    assert outcome.ending.proven, outcome.ending.reasons


def test_a_part_that_never_gets_its_voltage_stops_after_its_patience():
    """30 kΩ with 10 kΩ before it never has more than 300 V; 1.5 × (4 s + 5·R·C) later it stops."""
    bench, outcome = suffer(4.7e-6, leak(30e3), at_v=RAMP_V, after_s=0.0)
    assert_honest(bench, outcome)
    assert outcome.held is not None, outcome
    assert "leaks" in outcome.held.stopped
    assert not outcome.held.reached
    assert not outcome.held.counts
    assert outcome.ending.proven, outcome.ending.reasons


def test_an_open_part_gets_no_more_than_one_volt_and_never_counts():
    """A lead is off: 5 pF of stray capacitance is all that there is."""
    bench, log = bench_of(5e-12), Log()
    held: list[Held] = []

    async def main() -> None:
        warden = warden_of(bench, log, 4.7e-6)  # the list says 4.7 µF
        await warden.start()
        held.append(await warden.hold(HOLD, log))
        assert (await warden.stop()).proven

    virtual(main)
    assert not held[0].counts
    assert held[0].connection == "absent"
    assert bench.highest_v <= 1.0


def test_a_part_whose_contact_was_never_there_is_not_proven():
    bench, outcome = suffer(4.7e-6, lost, at_v=None)
    assert_honest(bench, outcome)
    assert isinstance(outcome.raised, NotProvenSafe)
    assert not outcome.ending.proven
    assert bench.highest_v <= 1.0


def test_after_a_part_fault_the_other_position_goes_on():
    bench, log = bench_of(4.7e-6), Log()
    bench.above(SOAK_V, leak(1.0), 3.0)

    async def main() -> None:
        warden = warden_of(bench, log, 4.7e-6)
        await warden.start()
        first = await warden.hold(HOLD, log)
        assert first.stopped
        second = await warden.hold(
            Hold(
                part_id="C2",
                position="2",
                voltage_v=300.0,
                ramp_v_per_s=100.0,
                soak_s=20.0,
                every_s=10.0,
            ),
            log,
        )
        assert second.counts, second
        ending = await warden.stop()
        assert ending.proven, ending.reasons

    virtual(main)
    assert bench.unlawful == []


# ---- any fault at any time

ANY = {
    "interlock opens": put(enclosure_closed=False),
    "supply trips": put(tripped=True),
    "output goes off": put(on=False),
    "supply hangs": put(supply_hangs=True),
    "supply ignores OFF": put(obeys_off=False),
    "supply ignores OFF and lies": put(obeys_off=False, lies_about_off=True),
    "sense breaks": put(sense_broken=True),
    "contact is lost": lost,
    "scanner dies": put(scanner_dead=True),
    "part shorts": leak(1.0),
    "part leaks": leak(1e6),
    **{
        f"relay {channel} is stuck {stuck}": relay(channel, stuck)
        for channel in ("1", "2", "101", "102", "103", "104", "106", "107")
        for stuck in ("made", "broken")
    },
}


@pytest.mark.slow
@settings(max_examples=250, deadline=None, derandomize=True)
@given(
    fault=st.sampled_from(sorted(ANY)),
    second=st.one_of(st.none(), st.sampled_from(sorted(ANY))),
    farad=st.sampled_from([10e-9, 100e-9, 1e-6, 4.7e-6, 47e-6]),
    at_s=st.floats(0.0, 40.0),
    later_s=st.floats(0.0, 10.0),
)
def test_one_or_two_faults_at_any_instant(fault, second, farad, at_s, later_s):
    """No end but proven or unproven, and proven means dead; the supply never above the permit."""
    bench, log = bench_of(farad), Log()
    bench.at(at_s, ANY[fault])
    if second is not None:
        bench.at(at_s + later_s, ANY[second])
    hold = Hold(
        part_id="C1", position="1", voltage_v=400.0, ramp_v_per_s=100.0, soak_s=10.0, every_s=2.0
    )
    outcomes: list[Outcome] = []

    async def main() -> None:
        warden = warden_of(bench, log, farad)
        held, raised = None, None
        try:
            await warden.start()
            held = await warden.hold(hold, log)
        except OhmwardError as error:
            raised = error
        ending = await warden.stop()
        ledger = warden._desk.ledger
        outcomes.append(Outcome(held, raised, ending, ledger.positions["1"], ledger.source))

    virtual(main)
    assert bench.highest_v <= 400.0 * (1 + 1e-9)
    outcome = outcomes[0]
    if outcome.ending.proven:
        assert bench.parts["1"].volts <= 1.0
        assert not bench.on or bench.tripped
        assert outcome.source is SourceState.ENDED_PROVEN
    else:
        assert outcome.ending.reasons
    if outcome.position in {PositionState.DEAD, PositionState.ENDED_PROVEN}:
        assert bench.parts["1"].volts <= 1.0
