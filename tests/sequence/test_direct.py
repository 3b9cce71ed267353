"""Stages under direct voltage as they are planned: voltages, times, dangers, permit, floor."""

import json
from math import exp, inf, log, sqrt
from pathlib import Path
from tempfile import TemporaryDirectory

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.sequence.given import CAPACITORS, HEAD, HIGH, capacitor, inductor, make_high, resistor

from ohmward.safety.hazard import Grade
from ohmward.safety.permit import check_request
from ohmward.sequence.brief import (
    Brief,
    PlannedAbsorption,
    PlannedInsulation,
    PlannedLeakage,
    PlannedProof,
    PlannedReform,
    PlannedResistance,
)
from ohmward.setup.bench import Bench
from ohmward.terms.kind import Polarity
from ohmward.terms.part import Part

SERIES_OHM, DISCHARGE_OHM, DIVIDER_OHM, LIMIT_A = 10e3, 100e3, 1e9, 10e-3  # the bench's own file
NODE_F = 10.5e-9


def stage(kind: str, **keys: str) -> str:
    lines = {"kind": f'"{kind}"', "name": f'"{kind}"', **keys}
    return "[[stage]]\n" + "".join(f"{key} = {value}\n" for key, value in lines.items())


def leakage(**keys: str) -> str:
    return stage("leakage", **{"voltage": '"100 % of rating"', "soak": '"5 min"', **keys})


def limit(quantity: str, of: str = "leakage", **keys: str) -> str:
    lines = {"stage": f'"{of}"', "quantity": f'"{quantity}"', "source": '"test"', **keys}
    return "[[limit]]\n" + "".join(f"{key} = {value}\n" for key, value in lines.items())


def film(part_id: str = "C1", nominal: float = 100e-9, **more: object) -> Part:
    return capacitor(part_id, nominal, **{"position": "1", "rated_v": 400.0, **more})  # type: ignore[arg-type]


def stored(**more: object) -> Part:
    plain = {"position": "2", "rated_v": 450.0, "dielectric": "aluminium"}
    return capacitor("E1", 47e-6, **{**plain, "polarity": Polarity.POLAR, **more})  # type: ignore[arg-type]


def path_with(**changes: object) -> Bench:
    """The bench with other values in its path."""
    assert HIGH.high_voltage is not None
    return HIGH.model_copy(update={"high_voltage": HIGH.high_voltage.model_copy(update=changes)})


def brief_of(tmp_path: Path, text: str, *parts: Part, on: Bench | None = None) -> Brief:
    return make_high(tmp_path, text, *parts, on=on).good


def test_a_share_of_the_rating_and_the_times_that_decide(tmp_path: Path) -> None:
    text = CAPACITORS + leakage(voltage='"75 % of rating"', read_at='["2 min", "5 min"]')
    (planned,) = brief_of(tmp_path, text, film()).stages
    assert isinstance(planned, PlannedLeakage)
    assert planned.voltage_v == planned.source_v == 300.0
    assert planned.read_at_s == planned.times_s == (120.0, 300.0)
    assert planned.soak_s == 300.0
    assert planned.readings == 60  # every 5 s, and the times that decide are among them


def test_a_soak_without_times_is_read_at_its_end(tmp_path: Path) -> None:
    (planned,) = brief_of(tmp_path, CAPACITORS + leakage(), film()).stages
    assert isinstance(planned, PlannedLeakage)
    assert planned.read_at_s == (300.0,)


# IEC 60384-1, 4.5, from memory: 10 V up to 100 V, 100 V up to 500 V, 500 V from there; 60 s.
@pytest.mark.parametrize(("rated_v", "volts"), [(63.0, 10.0), (400.0, 100.0), (630.0, 500.0)])
def test_insulation_by_rating_after_60_s(rated_v: float, volts: float, tmp_path: Path) -> None:
    (planned,) = brief_of(tmp_path, CAPACITORS + stage("insulation"), film(rated_v=rated_v)).stages
    assert isinstance(planned, PlannedInsulation)
    assert (planned.voltage_v, planned.read_at_s, planned.soak_s) == (volts, (60.0,), 60.0)


REFORM = stage(
    "reform",
    voltages='["50 % of rating", "400 V", "100 % of rating"]',
    hold='"1 min"',
    budget='"20 min"',
    current_limit='"5 mA"',
    rest='"30 s"',
)


def test_reform_goes_up_by_what_was_written(tmp_path: Path) -> None:
    """JAN-C-62: 47 µF at 450 V may leak 0.04·47 + 0.3 = 2.18 mA."""
    (planned,) = brief_of(tmp_path, CAPACITORS + REFORM, stored()).stages
    assert isinstance(planned, PlannedReform)
    assert planned.voltages_v == (225.0, 400.0, 450.0)
    assert planned.next_below_a == pytest.approx(2.18e-3)
    assert (planned.budget_s, planned.rest_s, planned.current_max_a) == (1200.0, 30.0, 5e-3)


def test_a_part_is_never_sent_on_with_more_than_stops_it(tmp_path: Path) -> None:
    text = CAPACITORS + REFORM.replace('"5 mA"', '"1 mA"')
    (planned,) = brief_of(tmp_path, text, stored()).stages
    assert isinstance(planned, PlannedReform)
    assert planned.next_below_a == 1e-3


def test_proof_above_the_rating_by_rule_or_by_leave(tmp_path: Path) -> None:
    """2.5 U up to 100 V (IEC 60384-22 as quoted by makers)."""
    ceramic = film(dielectric="X7R", rated_v=50.0)
    by_rule = CAPACITORS + stage("proof", rule='"proof-ceramic"', dwell='"1 min"')
    (planned,) = brief_of(tmp_path, by_rule, ceramic).stages
    assert isinstance(planned, PlannedProof)
    assert planned.voltage_v == 125.0
    written = stage("proof", voltage='"150 % of rating"', rating_allowed="1.5", dwell='"1 s"')
    (planned,) = brief_of(tmp_path, CAPACITORS + written, film()).stages
    assert isinstance(planned, PlannedProof)
    assert planned.voltage_v == pytest.approx(600.0)


def test_absorption_reckons_what_its_voltmeter_takes(tmp_path: Path) -> None:
    """1 − e^(−t/RC) with the least C of the part: 90 nF across the divider's 1 GΩ is 90 s."""
    text = CAPACITORS + stage("absorption", voltage='"200 V"', read_at='["1 min", "15 min"]')
    (planned,) = brief_of(tmp_path, text, film()).stages
    assert isinstance(planned, PlannedAbsorption)
    expected = 1 - exp(-2 * planned.moment_s / (DIVIDER_OHM * 90e-9))
    assert planned.droop_rel == pytest.approx(expected, rel=1e-12)
    assert (planned.charge_s, planned.short_s) == (900.0, 10.0)


def test_a_winding_gets_its_current_through_the_series_resistor(tmp_path: Path) -> None:
    text = HEAD + stage("resistance", current='"5 mA"', parts='{ kind = ["inductor", "resistor"] }')
    parts = (inductor(position="1"), resistor(nominal=100.0, position="2"))
    coil, ohms = brief_of(tmp_path, text, *parts).stages
    assert isinstance(coil, PlannedResistance)
    assert isinstance(ohms, PlannedResistance)
    assert coil.source_v == pytest.approx(5e-3 * SERIES_OHM)
    assert ohms.source_v == pytest.approx(5e-3 * (SERIES_OHM + 100.0))


@settings(max_examples=40, deadline=None)
@given(st.floats(1e-9, 1e-3), st.floats(1.0, 1000.0), st.floats(10.0, 400.0))
def test_no_ramp_takes_more_than_the_supply_gives(
    nominal: float, asked_v_per_s: float, volts: float
) -> None:
    """min(asked, 0.8·I/C_max): what charges the part and the rail never passes the limit."""
    text = CAPACITORS + leakage(voltage=f'"{volts!r} V"', ramp=f'"{asked_v_per_s!r} V/s"')
    with TemporaryDirectory() as folder:
        (planned,) = brief_of(Path(folder), text, film(nominal=nominal)).stages
    assert isinstance(planned, PlannedLeakage)
    assert planned.ramp_v_per_s <= asked_v_per_s
    charging_a = planned.ramp_v_per_s * (1.1 * nominal + NODE_F)
    assert charging_a <= 0.8 * LIMIT_A * (1 + 1e-9)
    assert planned.duration_s >= planned.soak_s + volts / planned.ramp_v_per_s


def test_a_ramp_may_be_said_by_its_time(tmp_path: Path) -> None:
    """MIL-C-62: the rated voltage is reached within 60 s, whatever it is."""
    text = CAPACITORS + leakage(ramp_time='"60 s"')
    for rated_v in (60.0, 400.0):
        (planned,) = brief_of(tmp_path, text, film(rated_v=rated_v)).stages
        assert isinstance(planned, PlannedLeakage)
        assert planned.ramp_v_per_s * 60.0 == pytest.approx(rated_v)


# ---- dangers and the permit


def test_what_a_part_may_do_is_said_with_its_thresholds(tmp_path: Path) -> None:
    """47 µF + 10 % at 450 V: ½CV² = 5.23 J, CV = 23.3 mC, 45 mA through 10 kΩ (calculated)."""
    brief = brief_of(tmp_path, CAPACITORS + REFORM, stored())
    (hazard,), (rail,) = brief.hazards, brief.nodes
    most_f = 1.1 * 47e-6
    assert hazard.peak_v == 450.0
    assert hazard.energy_j == pytest.approx(0.5 * most_f * 450.0**2)
    assert hazard.charge_c == pytest.approx(most_f * 450.0)
    assert hazard.prospective_a == pytest.approx(0.045)
    assert hazard.resistor_pulse_j == pytest.approx(hazard.energy_j * 100 / 110)
    assert hazard.grade is Grade.HAZARDOUS
    assert hazard.reflex
    assert rail.capacitance_f == pytest.approx(most_f + NODE_F)
    assert brief.needs_authorisation
    assert brief.grade is Grade.HAZARDOUS
    # t = R·C·ln(U0/U) down to 10 V, where the short's relay may close
    seconds = (SERIES_OHM + DISCHARGE_OHM) * most_f * log(450.0 / 10.0)
    assert hazard.discharge_s == pytest.approx(seconds)
    assert any("more than 10 s to discharge" in text for text in brief.warnings)


def test_several_parts_on_one_rail_add_up(tmp_path: Path) -> None:
    parts = (film("C1", 10e-6), film("C2", 20e-6, position="2"))
    (rail,) = brief_of(tmp_path, CAPACITORS + leakage(), *parts).nodes
    assert rail.capacitance_f == pytest.approx(33e-6 + NODE_F)


def test_a_brief_without_high_voltage_asks_nobody(tmp_path: Path) -> None:
    sweep = stage("sweep", frequency='"1 kHz"', level='"1 V"')
    brief = brief_of(tmp_path, CAPACITORS + sweep, film())
    assert not brief.needs_authorisation
    assert brief.attendance.unattended
    assert brief.floors == ()
    assert brief.grade is Grade.NONE


def test_the_permit_allows_what_is_planned_and_no_more(tmp_path: Path) -> None:
    sweep = stage("sweep", frequency='"1 kHz"', level='"1 V"')
    text = CAPACITORS + sweep + leakage(voltage='"300 V"', current_limit='"1 mA"')
    brief = brief_of(tmp_path, text, film())
    permit = brief.permit
    assert permit is not None
    assert permit.brief_hash == brief.hash
    ceiling = check_request(permit, "C1", "1", bias_v=300.0)
    assert ceiling.voltage_v == 300.0
    assert ceiling.reverse_v == pytest.approx(sqrt(2.0))
    assert (ceiling.capacitance_min_f, ceiling.capacitance_max_f) == pytest.approx((9e-8, 1.1e-7))
    assert ceiling.current_a == 1e-3
    assert ceiling.power_w == inf
    assert ceiling.assumed_v == 400.0  # from the tray it may come charged to its rating
    assert (permit.bench_v, permit.divider_v, permit.relay_v) == (800.0, 1000.0, 1000.0)
    assert permit.limit_a == LIMIT_A


def test_left_alone_only_where_the_bench_declares_all_it_takes(tmp_path: Path) -> None:
    text = CAPACITORS + leakage()
    without = brief_of(tmp_path, text, film(), on=path_with(watchdog=None)).attendance
    assert not without.unattended
    assert any("watchdog" in why for why in without.because)
    shut = brief_of(tmp_path, text, film(), on=path_with(enclosure_interlock=True)).attendance
    assert shut.unattended


# ---- the floor, and what it leaves undecided


def test_the_floor_grows_by_what_the_bench_states(tmp_path: Path) -> None:
    """C·dV/dt: 1 mV/s on 1 µF is 1 nA (calculated); 400 V over 1 TΩ is 0.4 nA."""
    text, one = CAPACITORS + leakage(), film(nominal=1e-6, tolerance_high=0.0)
    silent = path_with(supply_drift_v_per_s=None, insulation_ohm=None, divider_rel=None)
    (plain,) = brief_of(tmp_path, text, one, on=silent).floors
    stated = path_with(supply_drift_v_per_s=1e-3, insulation_ohm=1e12, divider_rel=0.01)
    (floor,) = brief_of(tmp_path, text, one, on=stated).floors
    assert plain.not_stated
    assert floor.not_stated == ()
    assert floor.drift_a == pytest.approx(1e-9)
    assert floor.fixture_a == pytest.approx(0.4e-9)
    assert floor.divider_a == pytest.approx(0.01 * 400.0 / DIVIDER_OHM)
    assert floor.floor_a > plain.floor_a
    halves = (floor.meter_a, floor.divider_a, floor.drift_a, floor.fixture_a)
    expected = 2.0 * sqrt(sum(half * half for half in halves) / 3.0) + floor.charging_a
    assert floor.floor_a == pytest.approx(expected)


def test_the_range_keeps_half_of_itself_free(tmp_path: Path) -> None:
    """At 400 V the divider alone takes 400 nA: the lowest range above twice that is 2 µA."""
    (floor,) = brief_of(tmp_path, CAPACITORS + leakage(), film()).floors
    assert floor.range_a == 2e-6
    assert floor.bypass_shown


def test_a_limit_below_the_floor_cannot_be_decided(tmp_path: Path) -> None:
    for value, many in (("0.4 nA", 1), ("40 nA", 0)):
        text = CAPACITORS + leakage() + limit("leakage_a", max=f'"{value}"')
        brief = brief_of(tmp_path, text, film())
        assert len(brief.cannot_decide) == many
        for doubt in brief.cannot_decide:
            assert doubt.frequency_hz is None
            assert "sees no less than" in doubt.reason


def test_the_same_limit_in_three_quantities_is_decided_alike(tmp_path: Path) -> None:
    """I = V/R = C·V/τ: 100 nF at 400 V, 1 nA, 400 GΩ and 40000 s say the same."""
    stage_text = CAPACITORS + leakage()
    for bounds in (
        limit("leakage_a", max='"1 nA"'),
        limit("insulation_ohm", min='"400 Gohm"'),
        limit("insulation_time_s", min='"40000 s"'),
    ):
        (doubt,) = brief_of(tmp_path, stage_text + bounds, film()).cannot_decide
        assert "1 nA at most" in doubt.reason


def test_charging_current_above_a_hundredth_of_the_limit_is_told(tmp_path: Path) -> None:
    """100 µF through 10 kΩ: RC 1.1 s at most; after 1 s much still flows, after 5 min nothing."""
    one = film(nominal=100e-6)
    for read_at, told in (("1 s", True), ("5 min", False)):
        text = CAPACITORS + leakage(read_at=f'"{read_at}"') + limit("leakage_a", max='"100 uA"')
        warnings = brief_of(tmp_path, text, one).warnings
        assert any("still charge the part" in text for text in warnings) == told


def test_a_part_that_would_be_stopped_within_its_limit_is_told(tmp_path: Path) -> None:
    """10 % of 12.5 V over 10 kΩ, 125 µA: a forming part that draws more has not its voltage."""
    one = stored(rated_v=25.0, last_energised=None)
    text = CAPACITORS + REFORM.replace('"400 V", ', "")
    assert any("E1 (125 µA of" in text for text in brief_of(tmp_path, text, one).warnings)


# ---- limits


def test_a_rule_decides_at_its_own_time(tmp_path: Path) -> None:
    text = CAPACITORS + REFORM + leakage(read_at='["2 min", "5 min"]')
    text += limit("leakage_a", rule='"leakage-jan-c-62"') + limit("leakage_a", rule='"leakage-cv"')
    found = brief_of(tmp_path, text, stored()).limits
    assert [one.since_voltage_s for one in found] == [300.0, 120.0]
    assert {one.voltage_v for one in found} == {450.0}


def test_another_voltage_than_the_source_has_is_called_an_extrapolation(tmp_path: Path) -> None:
    bounds = limit(
        "leakage_a", rule='"leakage-by-dielectric"', times="10", at='{ since_voltage = "60 s" }'
    )
    for volts, told in (("400 V", True), ("100 V", False)):
        text = CAPACITORS + leakage(voltage=f'"{volts}"', read_at='"60 s"') + bounds
        warnings = brief_of(tmp_path, text, film()).warnings
        assert any("extrapolation" in warning for warning in warnings) == told


def test_the_whole_voltage_of_a_proof_is_its_limit(tmp_path: Path) -> None:
    text = CAPACITORS + stage("proof", voltage='"100 % of rating"', dwell='"1 min"')
    (one,) = brief_of(
        tmp_path, text + limit("withstood_v", "proof", rule='"whole-voltage"'), film()
    ).limits
    assert (one.minimum, one.maximum) == (400.0, None)


# ---- order


def test_high_voltage_after_the_sweep_on_class_2_is_allowed_and_told(tmp_path: Path) -> None:
    sweep = stage("sweep", frequency='"1 kHz"', level='"1 V"')
    again = sweep.replace('name = "sweep"', 'name = "again"')
    text = CAPACITORS + sweep + leakage() + again
    brief = brief_of(tmp_path, text, film(dielectric="X7R", rated_v=50.0))
    assert any("de-ages class 2" in warning for warning in brief.warnings)


def test_safety_parts_are_measured_and_never_accepted(tmp_path: Path) -> None:
    brief = brief_of(tmp_path, CAPACITORS + leakage(), film(safety_class="X2"))
    assert any("never accepted" in caution for caution in brief.cautions)


# ---- the whole


def test_what_is_planned_under_voltage_is_in_the_hash(tmp_path: Path) -> None:
    first = brief_of(tmp_path, CAPACITORS + leakage(), film())
    other = brief_of(tmp_path, CAPACITORS + leakage(ramp='"20 V/s"'), film())
    assert first.hashes["stages"] != other.hashes["stages"]
    assert first.hash != other.hash


def test_the_brief_is_json_without_infinities(tmp_path: Path) -> None:
    text = CAPACITORS + REFORM + leakage() + limit("leakage_a", rule='"leakage-jan-c-62"')
    plain = brief_of(tmp_path, text, stored()).as_dict()
    again = json.loads(json.dumps(plain, allow_nan=False))
    assert [one["kind"] for one in again["stages"]] == ["reform", "leakage"]
    assert again["hazards"][0]["grade"] == "hazardous"
    assert again["hazards"][0]["reasons"][0]["source"].startswith("IEC 61010-1")
    assert again["permit"]["ceilings"][0]["power_w"] is None
    assert again["needs_authorisation"] is True
