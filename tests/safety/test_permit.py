"""The laws, each held at its edge; numbers worked by hand beside the check."""

from math import inf, nan, sqrt

import pytest
from hypothesis import given
from hypothesis import strategies as st
from tests.safety.rc_bench import wiring

from ohmward.safety.permit import (
    Ceiling,
    LawBroken,
    Laws,
    Permit,
    Proof,
    Surroundings,
    ceiling_v,
    charging_time_s,
    check_brief,
    check_bypass_opening,
    check_energise,
    check_join,
    check_lease,
    check_limit,
    check_meter_survives,
    check_relay_move,
    check_request,
    closing_current_a,
    discharge_wait_s,
    limit_is_fault,
    ramp_v_per_s,
    short_target_v,
    trips_current_first,
)
from ohmward.safety.wiring import Contact
from ohmward.terms.kind import Kind

LAWS = Laws()
POLAR = Ceiling(
    part_id="C1",
    position="1",
    kind=Kind.CAPACITOR,
    voltage_v=450.0,
    reverse_v=1.5,
    capacitance_min_f=37.6e-6,
    capacitance_max_f=56.4e-6,
)
PERMIT = Permit(brief_hash="c" * 64, ceilings=(POLAR,), bench_v=1000.0, limit_a=0.01)
RELAY = Contact(channel="7", switch_v=200.0, switch_a=0.5)
CLEAR = Surroundings(
    joined=frozenset(), live=frozenset(), leased=None, source_is_off=True, scanner_is_clean=True
)


# ---- ceilings


@pytest.mark.parametrize(
    ("bias_v", "level_v"),
    [(450.0, 0.0), (448.58, 1.0), (0.0, 1.06), (-1.5, 0.0), (0.0, 0.0)],
)
def test_what_a_part_may_get(bias_v, level_v):
    """448.58 V + √2·1 V = 449.99 V; −√2·1.06 V = −1.499 V."""
    assert check_request(PERMIT, "C1", "1", bias_v=bias_v, level_v=level_v) is POLAR


@pytest.mark.parametrize(
    ("bias_v", "level_v", "law"),
    [
        (450.1, 0.0, "ceiling"),
        (449.0, 1.0, "ceiling"),  # 450.41 V
        (-1.6, 0.0, "reverse"),
        (0.0, 1.1, "reverse"),  # −1.556 V
        (nan, 0.0, "ceiling"),
        (0.0, nan, "ceiling"),
        (inf, 0.0, "ceiling"),
        (1.0, -0.1, "ceiling"),
    ],
)
def test_what_a_part_may_not_get(bias_v, level_v, law):
    with pytest.raises(LawBroken) as broken:
        check_request(PERMIT, "C1", "1", bias_v=bias_v, level_v=level_v)
    assert broken.value.law == law


@pytest.mark.parametrize("limit", ["bench_v", "relay_v", "divider_v"])
def test_the_least_ceiling_holds(limit):
    permit = Permit(**{"brief_hash": "c", "ceilings": (POLAR,), "bench_v": 1000.0, limit: 400.0})
    with pytest.raises(LawBroken, match="allowed 400 V"):
        check_request(permit, "C1", "1", bias_v=401.0)


@pytest.mark.parametrize(("part", "position"), [("C2", "1"), ("C1", "2"), ("", "")])
def test_a_part_without_a_ceiling_gets_nothing(part, position):
    with pytest.raises(LawBroken, match="names no part"):
        check_request(PERMIT, part, position, bias_v=0.0)


@given(st.floats(-2000, 2000), st.floats(0, 1000))
def test_no_request_that_passes_is_beyond_the_part(bias_v, level_v):
    try:
        check_request(PERMIT, "C1", "1", bias_v=bias_v, level_v=level_v)
    except LawBroken:
        return
    assert bias_v + sqrt(2) * level_v <= 450.0 * (1 + 1e-8)
    assert bias_v - sqrt(2) * level_v >= -1.5 * (1 + 1e-8)


def test_the_ceiling_of_a_part_is_its_rating_times_the_share():
    assert ceiling_v(rated_v=450.0, share=0.8, others_v=(1000.0,)) == pytest.approx(360.0)
    assert ceiling_v(rated_v=450.0, share=1.0, others_v=(1000.0, 400.0)) == 400.0


def test_a_permit_is_for_one_brief():
    check_brief(PERMIT, "c" * 64)
    for other in ("", "d" * 64):
        with pytest.raises(LawBroken, match="another brief"):
            check_brief(PERMIT, other)


@pytest.mark.parametrize("limit_a", [0.0, -1.0, 0.011, nan, inf])
def test_a_current_limit_is_within_the_permit(limit_a):
    check_limit(PERMIT, 0.01)
    with pytest.raises(LawBroken):
        check_limit(PERMIT, limit_a)


# ---- ramp and current limit


def test_the_ramp_is_the_lesser_of_asked_and_what_the_limit_allows():
    """0.8 · 10 mA / 56.4 µF = 141.8 V/s."""

    def ramp(asked: float) -> float:
        return ramp_v_per_s(LAWS, asked_v_per_s=asked, limit_a=0.01, capacitance_max_f=56.4e-6)

    assert ramp(100.0) == 100.0
    assert ramp(500.0) == pytest.approx(141.84, abs=0.01)
    assert ramp_v_per_s(LAWS, asked_v_per_s=9.0, limit_a=1.0, capacitance_max_f=0.0) == 9.0
    for asked in (0.0, -1.0, nan):
        with pytest.raises(LawBroken):
            ramp(asked)


def test_a_current_limit_is_a_fault_only_after_one_and_a_half_charging_times():
    """450 V at 100 V/s through 1 kΩ into 47 µF: 4.5 s + 5 · 47 ms = 4.735 s."""
    expected_s = charging_time_s(
        LAWS, change_v=450.0, ramp_v_per_s=100.0, series_ohm=1e3, capacitance_f=47e-6
    )
    assert expected_s == pytest.approx(4.735)
    assert not limit_is_fault(LAWS, elapsed_s=7.10, expected_s=expected_s)
    assert limit_is_fault(LAWS, elapsed_s=7.11, expected_s=expected_s)


def test_a_discharge_is_given_the_time_of_the_largest_capacitance():
    assert discharge_wait_s(
        resistance_ohm=1e5, capacitance_max_f=47e-6, from_v=450.0, target_v=60.0
    ) == pytest.approx(9.4700, abs=5e-5)  # the reference value, computed: 47 µF, 100 kΩ
    assert (
        discharge_wait_s(resistance_ohm=1e5, capacitance_max_f=1e-6, from_v=5.0, target_v=10.0)
        == 0.0
    )


# ---- relays and bypass


def test_no_relay_moves_above_its_rating():
    check_relay_move(RELAY, voltage_v=200.0, current_a=0.5)
    check_relay_move(RELAY, voltage_v=-200.0, current_a=-0.5)
    for volts, amperes in ((200.1, 0.0), (-200.1, 0.0), (0.0, 0.51), (nan, 0.0), (0.0, inf)):
        with pytest.raises(LawBroken, match="contact 7"):
            check_relay_move(RELAY, voltage_v=volts, current_a=amperes)


def test_a_contact_closes_dry_up_to_the_test_voltage():
    assert closing_current_a(LAWS, voltage_v=1.0, resistance_ohm=0.0) == 0.0
    assert closing_current_a(LAWS, voltage_v=10.0, resistance_ohm=5.0) == 2.0
    assert closing_current_a(LAWS, voltage_v=10.0, resistance_ohm=0.0) == pytest.approx(200.0)


@pytest.mark.parametrize(
    ("switch_v", "switch_a", "expected_v"),
    [(30.0, 2.0, 10.0), (5.0, 2.0, 5.0), (30.0, 0.5, 5.0), (30.0, 0.01, 1.0)],
)
def test_a_part_is_discharged_to_what_its_short_may_switch(switch_v, switch_a, expected_v):
    """10 V in general; 0.5 A through 10 Ω is 5 V; never below 1 V, where it closes dry."""
    place = wiring().positions[0]
    short = Contact(channel="3", switch_v=switch_v, switch_a=switch_a)
    changed = type(place)(
        **{
            name: getattr(place, name)
            for name in ("position", "connect", "series_ohm", "discharge", "discharge_ohm",
                         "short_ohm", "sense", "meter")
        },
        short=short,
    )  # fmt: skip
    assert short_target_v(LAWS, changed) == expected_v


def test_the_bypass_opens_below_half_of_the_range():
    check_bypass_opening(LAWS, predicted_a=0.99e-6, range_a=2e-6)
    for predicted_a in (1e-6, -1e-6, nan, inf):
        with pytest.raises(LawBroken, match="range"):
            check_bypass_opening(LAWS, predicted_a=predicted_a, range_a=2e-6)


def test_a_part_that_shorts_must_not_destroy_the_current_meter():
    """450 V through 1 kΩ is 450 mA."""
    check_meter_survives(voltage_v=450.0, series_ohm=1e3, meter_survives_a=0.45)
    with pytest.raises(LawBroken, match="shorts"):
        check_meter_survives(voltage_v=450.0, series_ohm=1e3, meter_survives_a=0.4)
    with pytest.raises(LawBroken):
        check_meter_survives(voltage_v=1.0, series_ohm=0.0, meter_survives_a=100.0)


# ---- leases


def test_a_proof_expires():
    proof = Proof(position="1", proven_s=100.0, valid_s=300.0)
    assert proof.holds(100.0)
    assert proof.holds(400.0)
    assert not proof.holds(400.1)
    assert not proof.holds(99.0)  # nor is it a promise


def test_a_lease_needs_a_proof_and_nothing_energised_beside_it():
    proof = Proof(position="1", proven_s=0.0, valid_s=300.0)
    check_lease("1", proof, CLEAR, now_s=10.0)
    refused = [
        (None, CLEAR, 10.0),
        (proof, CLEAR, 301.0),
        (Proof(position="2", proven_s=0.0, valid_s=300.0), CLEAR, 10.0),
        (proof, _but(leased="2"), 10.0),
        (proof, _but(live=frozenset({"2"})), 10.0),
        (proof, _but(source_is_off=False), 10.0),
        (proof, _but(scanner_is_clean=False), 10.0),
    ]
    for each, around, now_s in refused:
        with pytest.raises(LawBroken):
            check_lease("1", each, around, now_s=now_s)


def test_nothing_is_energised_beside_a_lease_or_a_dirty_scanner():
    check_energise(CLEAR)
    for around in (
        _but(leased="2"),
        _but(joined=frozenset({"2"})),
        _but(scanner_is_clean=False),
    ):
        with pytest.raises(LawBroken):
            check_energise(around)


def test_positions_join_when_dead_or_through_their_own_resistors():
    both = wiring().positions  # 10 kΩ each
    check_join(both, frozenset({"1", "2"}), least_series_ohm=1e6)
    check_join(both, frozenset({"1"}), least_series_ohm=10e3)
    check_join(both[:1], frozenset(), least_series_ohm=1e6)
    with pytest.raises(LawBroken, match="joins others"):
        check_join(both, frozenset({"1"}), least_series_ohm=11e3)


def test_only_an_inductor_trips_with_its_current_first():
    assert {kind for kind in Kind if trips_current_first(kind)} == {Kind.INDUCTOR}


@pytest.mark.parametrize(
    "numbers",
    [
        {"injection_v": 1.1, "test_ceiling_v": 1.1},
        {"injection_v": 0.0},
        {"limit_share": 1.0},
        {"limit_patience": 0.9},
    ],
)
def test_laws_that_are_none_are_refused(numbers):
    with pytest.raises(ValueError, match=r"voltage|limit"):
        Laws(**numbers)


def _but(**changes: object) -> Surroundings:
    known = {name: getattr(CLEAR, name) for name in Surroundings.__slots__}
    return Surroundings(**{**known, **changes})
