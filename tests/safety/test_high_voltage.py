"""The high-voltage warden on a small bench of closed forms, in virtual time.

What is judged is the truth of the bench: the part's voltage and the contacts, not what
instruments said. The circuit's laws: V(t) = V·(1 − e^(−t/RC)), I = (V/R)·e^(−t/RC) + V/R_leak.
"""

from collections.abc import Awaitable, Callable
from math import exp

import pytest
import trio
import trio.testing
from tests.safety.rc_bench import (
    DISCHARGE_OHM,
    DIVIDER_OHM,
    SERIES_OHM,
    Bench,
    Part,
    facts,
    permit,
    wiring,
)

from ohmward.errors import NotProvenSafe, SafetyTrip
from ohmward.safety.messages import Directive, Event, Hold, Observation, Recover
from ohmward.safety.rules import PositionState
from ohmward.safety.voltage import HighVoltageWarden
from ohmward.terms.kind import Kind

FILM = Hold(
    part_id="C1", position="1", voltage_v=400.0, ramp_v_per_s=100.0, soak_s=60.0, every_s=10.0
)


class Log:
    """Keeps observations and events; may answer with something else than 'continue'."""

    def __init__(self, answers: dict[int, Directive] | None = None) -> None:
        self.seen: list[Observation] = []
        self.events: list[Event] = []
        self.answers = answers or {}

    async def observe(self, observation: Observation) -> Directive:
        self.seen.append(observation)
        return self.answers.get(len(self.seen), Directive())

    def happened(self, event: Event) -> None:
        self.events.append(event)


def bench_of(farad: float, *, weak: dict[str, float] | None = None, **properties: float) -> Bench:
    parts = {n: Part(farad=farad, **properties) for n in ("1", "2")}
    return Bench(parts=parts, wired=wiring(weak=weak))


def warden_of(bench: Bench, log: Log, nominal_f: float, **limits: float) -> HighVoltageWarden:
    return HighVoltageWarden(
        permit=permit(nominal_f=nominal_f, **limits),
        wiring=bench.wired,
        equipment=bench.equipment(),
        facts=facts(),
        events=log,
    )


def virtual(main: Callable[[], Awaitable[None]]) -> None:
    trio.run(main, clock=trio.testing.MockClock(autojump_threshold=0))


def assert_dead(bench: Bench, *positions: str) -> None:
    for position in positions:
        assert bench.parts[position].volts <= 1.0
        place = bench.wired.at(position)
        assert place is not None
        assert bench.made(place.short)
    assert not bench.on
    assert not bench.made(bench.wired.supply)


# ---- the ordinary course


def test_charge_soak_read_discharge_and_proof():
    """4.7 µF at 400 V with 1 GΩ across it: the meter reads V/R_leak + V/R_divider + the tail."""
    bench, log = bench_of(4.7e-6, leak_ohm=1e9), Log()

    async def main() -> None:
        warden = warden_of(bench, log, 4.7e-6)
        await warden.start()
        held = await warden.hold(FILM, log)
        assert held.counts, held
        assert held.stopped == ""
        assert held.decay == "matches"
        assert bench.parts["1"].volts <= 1.0
        ending = await warden.stop()
        assert ending.proven, ending.reasons

    virtual(main)
    assert [round(each.since_voltage_s) for each in log.seen] == [10, 20, 30, 40, 50, 60]
    for each in log.seen[1:]:
        leak_a = 400.0 / 1e9
        assert each.voltage_v == pytest.approx(400.0, rel=1e-3)
        assert each.divider_a == pytest.approx(400.0 / DIVIDER_OHM, rel=1e-3)
        assert each.current_a is not None
        assert each.current_a - each.divider_a == pytest.approx(leak_a, rel=0.01)
    assert bench.highest_v <= 400.0 * (1 + 1e-9)
    assert bench.unlawful == []
    assert_dead(bench, "1")


def test_a_part_too_small_for_the_voltmeter_is_proven_by_a_test_voltage():
    """100 nF through 110 kΩ falls in 11 ms; the voltmeter reads every 20 ms."""
    assert facts().voltmeter_interval_s > 100e-9 * (SERIES_OHM + DISCHARGE_OHM)
    bench, log = bench_of(100e-9), Log()

    async def main() -> None:
        warden = warden_of(bench, log, 100e-9)
        await warden.start()
        held = await warden.hold(FILM, log)
        assert held.decay == "unresolved"
        assert held.connection == "agrees"
        assert held.counts
        assert (await warden.stop()).proven

    virtual(main)
    assert bench.unlawful == []
    assert_dead(bench, "1")


def test_a_part_from_the_tray_is_made_dead_before_the_meter_sees_it():
    bench, log = bench_of(47e-6), Log()
    bench.parts["1"].volts = 430.0
    seen_by_meter: list[float] = []
    meter = bench.wired.positions[0].meter

    async def main() -> None:
        warden = warden_of(bench, log, 47e-6)
        await warden.start()
        assert bench.parts["1"].volts > 400.0  # nothing has touched it yet
        bench.when(
            lambda b: any(map(b.made, meter)),
            lambda b: seen_by_meter.append(b.parts["1"].volts),
        )
        await warden.lease("1", "C1")
        assert warden.leased == "1"
        assert all(map(bench.made, meter))
        others = (bench.wired.supply, *bench.wired.positions[0].sense)
        assert not any(map(bench.made, others))
        await warden.release()
        assert not any(map(bench.made, meter))
        assert (await warden.stop()).proven

    virtual(main)
    assert seen_by_meter
    assert seen_by_meter[0] <= 1.0
    assert bench.unlawful == []


def test_two_positions_in_turn_and_a_lease_between():
    bench, log = bench_of(1e-6), Log()

    async def main() -> None:
        warden = warden_of(bench, log, 1e-6)
        await warden.start()
        for n in ("1", "2"):
            await warden.lease(n, f"C{n}")
            await warden.release()
            held = await warden.hold(
                Hold(
                    part_id=f"C{n}",
                    position=n,
                    voltage_v=300.0,
                    ramp_v_per_s=200.0,
                    soak_s=5.0,
                    every_s=5.0,
                ),
                log,
            )
            assert held.counts, held
            other = "2" if n == "1" else "1"
            assert bench.parts[other].volts <= 1.0
            await warden.lease(n, f"C{n}")
            await warden.release()
        ending = await warden.stop()
        assert ending.proven, ending.reasons

    virtual(main)
    assert bench.unlawful == []
    assert_dead(bench, "1", "2")


def test_the_runner_raises_the_voltage_and_stops():
    """A reform: next voltage, then stop; the part never sees more than the last one."""
    bench, log = bench_of(10e-6, leak_ohm=200e6), Log()
    log.answers = {2: Directive(do="change", voltage_v=300.0), 4: Directive(do="stop")}
    hold = Hold(
        part_id="C1", position="1", voltage_v=200.0, ramp_v_per_s=50.0, soak_s=600.0, every_s=10.0
    )

    async def main() -> None:
        warden = warden_of(bench, log, 10e-6)
        await warden.start()
        held = await warden.hold(hold, log)
        assert held.counts
        assert (await warden.stop()).proven

    virtual(main)
    assert [each.voltage_set_v for each in log.seen] == [200.0, 200.0, 300.0, 300.0]
    assert bench.highest_v <= 300.0 * (1 + 1e-9)
    assert_dead(bench, "1")


def test_the_ramp_stays_below_the_current_limit():
    """470 µF at 10 mA: 0.8·I/C_max = 14.2 V/s although 500 V/s were asked; 300 V take 21 s."""
    bench, log = bench_of(470e-6), Log()
    hold = Hold(
        part_id="C1", position="1", voltage_v=300.0, ramp_v_per_s=500.0, soak_s=90.0, every_s=90.0
    )
    reached: list[float] = []

    async def main() -> None:
        warden = warden_of(bench, log, 470e-6)
        await warden.start()
        bench.above(1.0, lambda b: reached.append(b.now_s))
        bench.above(297.0, lambda b: reached.append(b.now_s))
        held = await warden.hold(hold, log)
        assert held.counts, held
        assert held.drawn_c == pytest.approx(470e-6 * 300.0, rel=0.05)
        assert (await warden.stop()).proven

    virtual(main)
    took_s = reached[1] - reached[0]
    assert took_s >= 296.0 / (0.8 * 10e-3 / (1.2 * 470e-6))
    assert_dead(bench, "1")


def test_absorption_is_shorted_again_until_it_stays_down():
    """10 % of the charge sits behind 20 s: after the first short the part charges itself up."""
    bench, log = bench_of(10e-6, absorbs_f=1e-6, absorbs_ohm=20e6), Log()
    hold = Hold(
        part_id="C1", position="1", voltage_v=400.0, ramp_v_per_s=100.0, soak_s=60.0, every_s=60.0
    )
    highest_when_proven: list[float] = []

    async def main() -> None:
        warden = warden_of(bench, log, 10e-6)
        await warden.start()
        held = await warden.hold(hold, log)
        highest_when_proven.append(bench.parts["1"].volts)
        assert held.decay == "matches"
        ending = await warden.stop()
        assert ending.proven, ending.reasons

    virtual(main)
    assert highest_when_proven[0] <= 1.0
    assert bench.unlawful == []
    assert_dead(bench, "1")


def test_recovery_is_read_in_moments():
    """C_a behind R_a gives V·C_a/(C + C_a)·(1 − e^(−t/τ)) back, less what the short took."""
    bench, log = bench_of(1e-6, absorbs_f=0.02e-6, absorbs_ohm=5e9), Log()
    hold = Hold(
        part_id="C1", position="1", voltage_v=400.0, ramp_v_per_s=200.0, soak_s=900.0, every_s=900.0
    )

    async def main() -> None:
        warden = warden_of(bench, log, 1e-6)
        await warden.start()
        held = await warden.recover(Recover(hold=hold, short_s=10.0, read_s=(900.0,)), log)
        assert held.counts
        ending = await warden.stop()
        assert ending.proven, ending.reasons

    virtual(main)
    back = log.seen[-1]
    assert back.since_voltage_s == pytest.approx(900.0, abs=1.0)
    tau_s = 5e9 * 0.02e-6 / 1.02
    left = (1 - exp(-900.0 / 100.0)) * exp(-12.0 / 100.0)  # in C_a after charge and short
    expected_v = 400.0 * left * 0.02 / 1.02 * (1 - exp(-900.0 / tau_s))
    assert back.voltage_v == pytest.approx(expected_v, rel=0.05)
    assert_dead(bench, "1")


# ---- what is refused


@pytest.mark.parametrize(
    ("hold", "words"),
    [
        (Hold(part_id="C1", position="1", voltage_v=460.0, ramp_v_per_s=10, soak_s=1, every_s=1),
         "allowed 450 V"),
        (Hold(part_id="C1", position="1", voltage_v=-1.0, ramp_v_per_s=10, soak_s=1, every_s=1),
         "allowed -0 V"),
        (Hold(part_id="C2", position="1", voltage_v=10.0, ramp_v_per_s=10, soak_s=1, every_s=1),
         "names no part"),
    ],
)  # fmt: skip
def test_a_request_beyond_the_permit_trips_before_anything_is_energised(hold, words):
    bench, log = bench_of(1e-6), Log()

    async def main() -> None:
        warden = warden_of(bench, log, 1e-6)
        await warden.start()
        with pytest.raises(SafetyTrip, match=words):
            await warden.hold(hold, log)
        with pytest.raises(SafetyTrip, match="has tripped"):
            await warden.lease("1", "C1")
        assert (await warden.stop()).proven

    virtual(main)
    assert not any(entry == "on" for _, entry in bench.log)


@pytest.mark.parametrize("channel", ["102", "104"])
def test_a_part_whose_way_down_could_not_be_switched_is_not_charged(channel):
    """A discharge or sense contact rated for 300 V below a part of 450 V."""
    bench, log = bench_of(1e-6, weak={channel: 300.0}), Log()

    async def main() -> None:
        warden = warden_of(bench, log, 1e-6)
        await warden.start()
        with pytest.raises((SafetyTrip, NotProvenSafe), match=f"contact {channel} may move at 300"):
            await warden.hold(FILM, log)

    virtual(main)
    assert bench.highest_v <= 1.0
    assert bench.unlawful == []


def test_an_inductor_holds_no_voltage():
    bench, log = bench_of(1e-6), Log()

    async def main() -> None:
        warden = warden_of(bench, log, 0.0, kind=Kind.INDUCTOR)
        await warden.start()
        with pytest.raises(SafetyTrip, match="inductor"):
            await warden.hold(FILM, log)

    virtual(main)


def test_nothing_is_energised_while_a_lease_is_open():
    bench, log = bench_of(1e-6), Log()

    async def main() -> None:
        warden = warden_of(bench, log, 1e-6)
        await warden.start()
        await warden.lease("1", "C1")
        with pytest.raises(SafetyTrip):
            await warden.hold(
                Hold(
                    part_id="C2",
                    position="2",
                    voltage_v=50.0,
                    ramp_v_per_s=10.0,
                    soak_s=1.0,
                    every_s=1.0,
                ),
                log,
            )
        assert (await warden.stop()).proven

    virtual(main)
    assert bench.highest_v <= 1.0
    assert bench.unlawful == []


# ---- waking up


def test_a_supply_that_wakes_up_on_is_off_before_anything_else():
    bench, log = bench_of(1e-6), Log()
    bench.on, bench.set_v = True, 350.0

    async def main() -> None:
        warden = warden_of(bench, log, 1e-6)
        await warden.start()
        assert not bench.on
        assert bench.set_v == 0.0
        assert (await warden.stop()).proven

    virtual(main)


def test_after_a_power_failure_a_live_part_in_the_path_is_proven_dead():
    """Relays as a killed run left them: joined, charged to 400 V, output on."""
    bench, log = bench_of(4.7e-6), Log()
    bench.on, bench.set_v = True, 400.0
    bench.parts["1"].volts = 400.0
    for channel in ("1", "101", "102", "104", "105"):  # 102 powered: the discharge is broken
        bench.relays[channel].powered = True

    async def main() -> None:
        warden = warden_of(bench, log, 4.7e-6)
        await warden.start()
        assert bench.parts["1"].volts <= 1.0
        ending = await warden.stop()
        assert ending.proven, ending.reasons

    virtual(main)
    assert bench.unlawful == []
    assert_dead(bench, "1")


def test_stop_after_a_cancel_proves_everything():
    bench, log = bench_of(4.7e-6), Log()

    async def main() -> None:
        warden = warden_of(bench, log, 4.7e-6)
        await warden.start()
        with trio.move_on_after(90.0) as scope:
            await warden.hold(
                Hold(
                    part_id="C1",
                    position="1",
                    voltage_v=400.0,
                    ramp_v_per_s=100.0,
                    soak_s=3600.0,
                    every_s=60.0,
                ),
                log,
            )
        assert scope.cancelled_caught
        assert bench.parts["1"].volts <= 1.0
        ending = await warden.stop()
        assert ending.proven, ending.reasons

    virtual(main)
    assert_dead(bench, "1")


def test_positions_that_were_never_touched_are_not_claimed():
    bench, log = bench_of(1e-6), Log()
    bench.parts["2"].volts = 300.0

    async def main() -> None:
        warden = warden_of(bench, log, 1e-6)
        await warden.start()
        await warden.prove("1")
        assert (await warden.stop()).proven
        assert warden._desk.ledger.positions["2"] is PositionState.UNKNOWN

    virtual(main)
    assert bench.parts["2"].volts > 250.0  # nobody claimed it, nobody connected it
