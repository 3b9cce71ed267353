"""The high-voltage bench in time: charging, discharging, who sees which current, relays, wires."""

import itertools
import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.sim.bench_path import (
    DISCHARGE_OHM,
    DIVIDER_OHM,
    OPERATE_S,
    RELEASE_S,
    SERIES_OHM,
    SHORT_OHM,
    close,
    ideal,
    kinds,
    made,
    open_,
    wait,
    wired,
)

from ohmward.sim.circuit import Circuit
from ohmward.sim.path import SupplyTruth

PERFECT = SupplyTruth(bleeder_ohm=1e15)
HV = ("supply", "bypass", "A.connect")
SENSE = ("A.high", "A.low")


def charged(farad: float, volts: float) -> Circuit:
    """An ideal capacitor at A, charged and left alone with its relays open."""
    circuit = Circuit(wired(), {"A": ideal(farad)})
    close(circuit, *HV)
    circuit.set_supply(volts, 10.0, True)
    wait(circuit, 20 * SERIES_OHM * farad + 1.0)
    open_(circuit, "A.connect", "supply")
    return circuit


# ---- charging


def test_charging_current_after_a_minute() -> None:
    # values.md, leakage over time: 10 µF at 400 V through 1 MΩ still takes 0.99 µA after 60 s
    circuit = Circuit(wired(series_ohm=1e6), {"A": ideal(10e-6)})
    close(circuit, *HV)
    open_(circuit, "bypass")
    circuit.set_supply(400.0, 10e-3, True)
    wait(circuit, 60.0)
    assert circuit.meter_current() == pytest.approx(0.99e-6, abs=0.005e-6)


@given(st.floats(1e-6, 1e-4), st.floats(1e-5, 1e-3), st.floats(200.0, 1000.0))
@settings(max_examples=12, deadline=None)
def test_a_current_limit_charges_in_a_straight_line(
    farad: float, limit_a: float, volts: float
) -> None:
    circuit = Circuit(wired(supply=PERFECT), {"A": ideal(farad)})
    close(circuit, *HV)
    circuit.set_supply(volts, limit_a, True)
    full_s = (farad + 10.2e-9) * volts / limit_a
    wait(circuit, 0.3 * full_s)
    before_v, before_s = circuit.voltage("A"), circuit.now_s
    assert circuit.supply_way == "current"
    assert circuit.supply_current() == limit_a
    wait(circuit, 0.2 * full_s)
    rise_v_s = (circuit.voltage("A") - before_v) / (circuit.now_s - before_s)
    assert rise_v_s == pytest.approx(limit_a / (farad + 10.2e-9), rel=1e-3)
    wait(circuit, 5 * full_s + 50 * SERIES_OHM * farad)
    assert circuit.voltage("A") == pytest.approx(volts, rel=1e-3)
    assert circuit.supply_way == "voltage"


def test_the_level_follows_at_its_slew() -> None:
    circuit = Circuit(wired(), {"A": ideal(100e-9)})
    close(circuit, *HV)
    circuit.set_supply(400.0, 10e-3, True, 100.0)
    wait(circuit, 2.0)
    assert circuit.supply_voltage() == pytest.approx(200.0, rel=1e-3)
    assert circuit.supply_level_v == pytest.approx(200.0, rel=1e-9)
    # C·dV/dt is what a ramp draws, and 1 mV/s on 1 µF is 1 nA (values.md)
    drawn = 100.0 * (100e-9 + 10.2e-9) + circuit.supply_voltage() / 10e6
    assert circuit.supply_current() == pytest.approx(drawn, rel=1e-3)
    wait(circuit, 2.5)
    assert circuit.voltage("A") == pytest.approx(400.0, rel=1e-4)


@pytest.mark.parametrize("begin_s", [0.0, 1e4, 3e6])
def test_a_level_that_falls_meets_the_limit_late_in_the_day(begin_s: float) -> None:
    """A clock that reads weeks tells microseconds apart, not what supply and rail settle in."""
    circuit = Circuit(wired(), {"A": ideal(1e-6)})
    circuit.advance(begin_s)
    close(circuit, "supply", "bypass")
    circuit.set_supply(400.0, 1e-5, True, 500.0)
    wait(circuit, 0.3)
    for volts in (0.0, 300.0, 10.0, 200.0):
        circuit.set_supply(volts, 1e-5, True, 500.0)
        wait(circuit, 0.05)
        close(circuit, "A.connect")
        open_(circuit, "A.connect")
    circuit.set_supply(50.0, 1e-3, True, 500.0)
    close(circuit, "A.connect")
    wait(circuit, 600.0)
    assert circuit.voltage("A") == pytest.approx(50.0, rel=1e-3)


def test_one_quadrant_cannot_pull_a_part_down() -> None:
    farad = 1e-6
    circuit = Circuit(wired(), {"A": ideal(farad)})
    close(circuit, *HV)
    circuit.set_supply(400.0, 10e-3, True)
    wait(circuit, 1.0)
    circuit.set_supply(100.0, 10e-3, True)
    assert circuit.supply_way == "blocked"
    assert circuit.supply_current() == 0.0
    start_s = circuit.now_s
    wait(circuit, 2.0)
    # the supply's bleeder of 10 MΩ alone
    tau_s = 10e6 * (farad + 10.2e-9)
    assert circuit.voltage("A") == pytest.approx(
        400.0 * math.exp(-(circuit.now_s - start_s) / tau_s), rel=2e-3
    )
    wait(circuit, 30.0)
    assert circuit.supply_way == "voltage"
    assert circuit.voltage("A") == pytest.approx(100.0, rel=1e-3)


# ---- discharging


@pytest.mark.parametrize(
    ("ohm", "farad", "from_v", "to_v", "seconds"),
    [(100e3, 47e-6, 450.0, 60.0, 9.4700), (100e3, 100e-6, 1000.0, 60.0, 28.134)],
)
def test_discharge_times(
    ohm: float, farad: float, from_v: float, to_v: float, seconds: float
) -> None:
    # values.md, hazard thresholds: R·C·ln(U0/U), 10 kΩ there being 100 kΩ here
    circuit = Circuit(wired(discharge_at="part"), {"A": ideal(farad)})
    close(circuit, *HV)
    circuit.set_supply(from_v, 1.0, True)
    wait(circuit, 30 * SERIES_OHM * farad)
    open_(circuit, "supply", "A.connect")
    circuit.relay("A.discharge", True)
    wait(circuit, OPERATE_S)
    start_v = circuit.voltage("A")
    wait(circuit, seconds)
    assert ohm == DISCHARGE_OHM
    assert circuit.voltage("A") == pytest.approx(to_v * start_v / from_v, rel=1e-3)


def test_discharge_at_the_rail_goes_through_both_resistors() -> None:
    farad = 1e-6
    circuit = charged(farad, 400.0)
    close(circuit, "A.connect")
    close(circuit, "A.discharge")
    start_v, start_s = circuit.voltage("A"), circuit.now_s
    wait(circuit, 0.1)
    tau_s = (SERIES_OHM + DISCHARGE_OHM) * farad
    assert circuit.voltage("A") == pytest.approx(
        start_v * math.exp(-(circuit.now_s - start_s) / tau_s), rel=2e-3
    )


def test_a_part_left_alone_keeps_its_charge_for_a_week() -> None:
    circuit = charged(1e-6, 400.0)
    before_v = circuit.voltage("A")
    wait(circuit, 7 * 86400.0)
    # 1e14 Ω of insulation
    assert circuit.voltage("A") == pytest.approx(before_v, rel=0.01)
    assert circuit.voltage("A") < before_v


def test_absorption_charges_a_part_up_again() -> None:
    part = made("film-pet", 100e-9, 400.0)
    circuit = Circuit(wired(), {"A": part})
    close(circuit, *HV)
    circuit.set_supply(100.0, 10e-3, True)
    wait(circuit, 900.0)
    circuit.set_supply(0.0, 10e-3, False)
    close(circuit, "A.discharge")
    wait(circuit, 0.2)
    close(circuit, "A.short")
    open_(circuit, "A.connect")
    wait(circuit, 10.0)
    assert abs(circuit.voltage("A")) < 1e-3
    open_(circuit, "A.short")
    wait(circuit, 900.0)
    # values.md: PET .20 to .25 %; drawn a little about it
    assert 0.0015 < circuit.voltage("A") / 100.0 < 0.003


# ---- who sees which current


def test_the_divider_takes_its_current_through_the_meter() -> None:
    circuit = Circuit(wired(), {"A": ideal(100e-9)})
    close(circuit, *HV, *SENSE)
    open_(circuit, "bypass")
    circuit.set_supply(500.0, 10e-3, True)
    wait(circuit, 10.0)
    assert circuit.divider_voltage() == pytest.approx(500.0, rel=1e-4)
    assert circuit.meter_current() == pytest.approx(500.0 / DIVIDER_OHM, rel=1e-3)
    open_(circuit, *SENSE)
    wait(circuit, 1.0)
    assert circuit.meter_current() == pytest.approx(500.0 / 1e14, rel=0.01)
    assert circuit.divider_voltage() == 0.0


def test_a_closed_bypass_leaves_the_meter_its_share() -> None:
    circuit = Circuit(wired(), {"A": made("film-pp", 1e-7, 630.0, fault="shorted")})
    circuit.set_burden(9.9)
    close(circuit, *HV)
    circuit.set_supply(10.0, 10e-3, True)
    wait(circuit, 1.0)
    through_a = 10.0 / (SERIES_OHM + 0.4)
    assert circuit.meter_current() == pytest.approx(through_a * 0.1 / 10.0, rel=1e-3)
    open_(circuit, "bypass")
    assert circuit.meter_current() == pytest.approx(through_a, rel=2e-3)


def test_a_part_that_shorts_may_burn_the_meter() -> None:
    part = made("film-pp", 10e-9, 630.0, fault="breaks down")
    circuit = Circuit(wired(series_ohm=100.0, survives_a=1.0), {"A": part})
    close(circuit, *HV)
    open_(circuit, "bypass")
    circuit.set_supply(800.0, 10e-3, True, 100.0)
    wait(circuit, 20.0)
    # 10 nF of the supply through 100 Ω: amperes for a microsecond
    assert kinds(circuit) == ["breakdown", "current meter destroyed"]
    assert circuit.meter_current() == 0.0


def test_two_positions_on_one_rail_share_their_charge() -> None:
    path = wired(supply=PERFECT)
    circuit = Circuit(path, {"A": ideal(1e-6, "C1"), "B": ideal(3e-6, "C2")})
    close(circuit, *HV)
    circuit.set_supply(400.0, 10e-3, True)
    wait(circuit, 1.0)
    open_(circuit, "supply")
    close(circuit, "B.connect")
    wait(circuit, 5.0)
    assert circuit.voltage("A") == pytest.approx(400.0 * 1e-6 / 4e-6, rel=1e-3)
    assert circuit.voltage("B") == pytest.approx(circuit.voltage("A"), rel=1e-6)


@given(st.lists(st.floats(0.01, 2000.0), min_size=1, max_size=12))
@settings(max_examples=6, deadline=None)
def test_looking_changes_nothing(looks: list[float]) -> None:
    def bench() -> Circuit:
        circuit = Circuit(wired(), {"A": made("film-pet", 1e-6, 400.0)})
        close(circuit, *HV, *SENSE)
        open_(circuit, "bypass")
        circuit.set_supply(400.0, 1e-3, True, 100.0)
        return circuit

    watched, alone = bench(), bench()
    for seconds in sorted(looks):
        watched.advance(1.0 + seconds)
        watched.voltage("A")
        watched.meter_current()
    alone.advance(watched.now_s)
    assert watched.voltage("A") == alone.voltage("A")
    assert watched.meter_current() == alone.meter_current()


# ---- relays


def test_a_contact_follows_its_coil() -> None:
    circuit = Circuit(wired(), {})
    assert not circuit.contact_closed("A.connect")
    rest_s = circuit.relay("A.connect", True)
    assert circuit.channel_closed("A.connect")
    circuit.advance(OPERATE_S * 0.99)
    assert not circuit.contact_closed("A.connect")
    circuit.advance(rest_s)
    assert circuit.contact_closed("A.connect")
    start_s = circuit.now_s
    circuit.relay("A.connect", False)
    circuit.advance(start_s + RELEASE_S * 0.99)
    assert circuit.contact_closed("A.connect")
    circuit.advance(start_s + RELEASE_S)
    assert not circuit.contact_closed("A.connect")


def test_a_closing_contact_bounces_where_there_is_voltage() -> None:
    circuit = charged(1e-6, 400.0)
    close(circuit, "A.discharge")
    open_(circuit, "A.discharge")
    start_s = circuit.now_s
    circuit.relay("A.connect", True)
    seen = []
    for step in range(400):
        circuit.advance(start_s + step * 2e-5)
        seen.append(circuit.contact_closed("A.connect"))
    changes = sum(a != b for a, b in itertools.pairwise(seen))
    assert changes == 5, "closed, and twice open again"
    assert seen[-1]


def test_a_coil_that_is_told_otherwise_in_time_moves_nothing() -> None:
    circuit = Circuit(wired(), {})
    circuit.relay("A.connect", True)
    circuit.advance(OPERATE_S / 2)
    circuit.relay("A.connect", False)
    circuit.advance(1.0)
    assert not circuit.contact_closed("A.connect")
    assert circuit.events == []


def test_hot_switching_beyond_the_rating_welds() -> None:
    circuit = charged(10e-6, 400.0)
    close(circuit, "A.short")
    # 400 V into 10 Ω: 40 A through a contact of 0.5 A
    assert kinds(circuit) == ["hot switched", "welded"]
    assert circuit.voltage("A") == pytest.approx(0.0, abs=1e-6)
    open_(circuit, "A.short")
    assert circuit.contact_closed("A.short"), "welded"
    assert not circuit.channel_closed("A.short")
    assert circuit.channel_stands("A.short")


def test_breaking_too_much_current_welds() -> None:
    path = wired(series_ohm=100.0, supply=SupplyTruth(most_a=2.0))
    circuit = Circuit(path, {"A": made("film-pp", 1e-7, 630.0, fault="shorted")})
    close(circuit, *HV)
    circuit.set_supply(100.0, 2.0, True)
    wait(circuit, 0.1)
    open_(circuit, "A.connect")
    assert kinds(circuit) == ["hot switched", "welded"]
    assert circuit.contact_closed("A.connect")


def test_switching_within_the_rating_is_no_event() -> None:
    circuit = charged(10e-6, 400.0)
    close(circuit, "A.connect")
    circuit.relay("A.discharge", True)
    wait(circuit, 10.0)
    close(circuit, "A.short")
    assert circuit.events == []
    assert circuit.voltage("A") == pytest.approx(0.0, abs=1e-3)


def test_stuck_contacts_do_not_obey_and_may_be_freed() -> None:
    circuit = Circuit(wired(), {"A": ideal(1e-6)})
    circuit.stick("A.connect", "open")
    close(circuit, *HV)
    circuit.set_supply(100.0, 10e-3, True)
    wait(circuit, 1.0)
    assert circuit.voltage("A") == pytest.approx(0.0, abs=1e-3)
    circuit.stick("A.connect", "")
    wait(circuit, 1.0)
    assert circuit.voltage("A") == pytest.approx(100.0, rel=1e-3)
    circuit.stick("A.connect", "closed")
    open_(circuit, "A.connect")
    assert circuit.contact_closed("A.connect")


def test_the_meter_behind_two_contacts_is_struck_through_both() -> None:
    circuit = charged(1e-7, 100.0)
    close(circuit, "A.m1")
    assert circuit.events == [], "one contact alone isolates"
    assert circuit.voltage("A") > 99.0
    close(circuit, "A.m2")
    assert "impedance meter struck" in kinds(circuit)
    wait(circuit, 1.0)
    assert circuit.voltage("A") == pytest.approx(0.0, abs=1e-3), "it discharges into the meter"


def test_the_meters_own_bias_charges_a_part() -> None:
    circuit = Circuit(wired(), {"A": ideal(1e-6)})
    circuit.set_meter_bias(20.0)
    close(circuit, "A.m1", "A.m2")
    wait(circuit, 0.1)
    assert circuit.voltage("A") == pytest.approx(20.0, rel=1e-6)
    open_(circuit, "A.m1", "A.m2")
    wait(circuit, 60.0)
    assert circuit.voltage("A") == pytest.approx(20.0, rel=1e-4)
    assert circuit.events == []


# ---- broken wires, empty and hand-loaded positions


def test_a_lost_feed_draws_no_charge_and_leaves_the_part_alone() -> None:
    circuit = charged(1e-6, 400.0)
    circuit.break_wire("A", "feed")
    close(circuit, "A.connect", "A.discharge")
    wait(circuit, 60.0)
    assert circuit.voltage("A") > 399.0, "no way to discharge it"
    close(circuit, *SENSE)
    assert circuit.divider_voltage() > 399.0, "but it is seen"


def test_a_lost_high_clip_takes_part_and_sense_away_from_the_rest() -> None:
    circuit = Circuit(wired(), {"A": ideal(1e-6)})
    circuit.break_wire("A", "high")
    close(circuit, *HV, *SENSE)
    circuit.set_supply(400.0, 10e-3, True)
    wait(circuit, 1.0)
    assert abs(circuit.voltage("A")) < 1.0
    assert abs(circuit.divider_voltage()) < 1.0


def test_a_lost_lead_shows_the_applied_voltage_without_a_part() -> None:
    """The trap: the clips carry the voltage, the voltmeter sees it, and nothing is tested."""
    circuit = Circuit(wired(), {"A": ideal(1e-6)})
    circuit.break_wire("A", "part")
    close(circuit, *HV, *SENSE)
    circuit.set_supply(400.0, 10e-3, True)
    wait(circuit, 1.0)
    assert circuit.divider_voltage() == pytest.approx(400.0, rel=1e-3)
    assert circuit.voltage("A") == 0.0
    assert kinds(circuit) == ["wire broken"]


def test_a_broken_sense_wire_reads_nothing() -> None:
    circuit = charged(1e-6, 400.0)
    circuit.break_wire("A", "sense")
    close(circuit, *SENSE)
    assert circuit.divider_voltage() == pytest.approx(0.0, abs=1e-6)
    assert circuit.voltage("A") > 399.0


def test_parts_are_put_in_and_taken_out_with_their_charge() -> None:
    circuit = charged(1e-6, 400.0)
    circuit.set_supply(0.0, 1e-3, False)
    wait(circuit, 2.0)
    circuit.place("A", None)
    assert circuit.voltage("A") == 0.0
    part = ideal(2e-6, "C2")
    circuit.place("A", part)
    assert circuit.voltage("A") == 0.0
    close(circuit, *HV)
    circuit.set_supply(100.0, 10e-3, True)
    wait(circuit, 1.0)
    assert circuit.voltage("A") == pytest.approx(100.0, rel=1e-3)
    circuit.place("B", part)
    with pytest.raises(KeyError):
        circuit.place("Z", part)


def test_a_resistor_and_a_coil_are_seen_by_their_resistance() -> None:
    for part, ohm in (
        (made("resistor-film", 1e4, 500.0, part_id="R1"), 1e4),
        (made("choke-ferrite", 10.0, 0.0, part_id="L1"), 6e3),
    ):
        circuit = Circuit(wired(), {"A": part})
        close(circuit, *HV, *SENSE)
        open_(circuit, "bypass")
        circuit.set_supply(10.0, 10e-3, True)
        wait(circuit, 10.0)
        found = circuit.divider_voltage() / circuit.meter_current()
        assert found == pytest.approx(ohm, rel=0.1)
        assert circuit.voltage("A") == pytest.approx(circuit.divider_voltage(), rel=1e-4)


def test_breaking_a_coils_current_makes_it_kick() -> None:
    circuit = Circuit(wired(), {"A": made("choke-ferrite", 10.0, 0.0, part_id="L1")})
    close(circuit, *HV)
    circuit.set_supply(100.0, 10e-3, True)
    wait(circuit, 1.0)
    circuit.relay("A.connect", False)
    circuit.advance(circuit.now_s + RELEASE_S + 1e-9)
    assert abs(circuit.voltage("A")) > 1000.0
    wait(circuit, 1.0)
    assert abs(circuit.voltage("A")) < 1e-6


def test_short_current_is_what_voltage_and_resistance_allow() -> None:
    circuit = charged(100e-6, 20.0)
    circuit.relay("A.short", True)
    start_s = circuit.now_s
    circuit.advance(start_s + OPERATE_S)
    before_v = circuit.voltage("A")
    circuit.advance(start_s + OPERATE_S + 1e-4)
    tau_s = (SHORT_OHM + 0.1 + 5e-3 * 2 + 1e-3) * 100e-6
    assert circuit.voltage("A") == pytest.approx(before_v * math.exp(-1e-4 / tau_s), rel=1e-3)
