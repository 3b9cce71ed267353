"""What counts as proof, on decays and charges made from their closed forms."""

from math import exp, inf, nan

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.safety.permit import Laws
from ohmward.safety.proof import (
    Connection,
    Decay,
    Injection,
    Sample,
    charge_drawn_c,
    holds_test_voltage,
    is_dead,
    is_resolved,
    judge_charge,
    judge_decay,
    judge_droop,
    judge_injection,
    time_constant_s,
)

LAWS = Laws()
OHM = 110e3
FARAD = 4.7e-6  # τ = 0.517 s


def decay(farad: float, *, from_v: float = 400.0, every_s: float = 0.02, to_s: float = 3.0):
    """V = V0·e^(−t/RC), with the first sample before the discharge began."""
    times = [every_s * n for n in range(round(to_s / every_s))]
    return [Sample(time_s=t, voltage_v=from_v * exp(-t / (OHM * farad))) for t in times]


def judged(samples, *, recovered_c=None, interval_s=0.02, nominal_f=FARAD):
    return judge_decay(
        LAWS,
        samples,
        resistance_ohm=OHM,
        capacitance_min_f=0.8 * nominal_f,
        capacitance_max_f=1.2 * nominal_f,
        resolution_v=0.01,
        interval_s=interval_s,
        recovered_c=recovered_c,
    )


# ---- decays


@given(st.floats(1e-8, 1e-2), st.floats(3.0, 2000.0))
def test_the_time_constant_of_an_exponential_is_found_exactly(farad, from_v):
    tau_s = OHM * farad
    samples = decay(farad, from_v=from_v, every_s=tau_s / 10, to_s=3 * tau_s)
    assert time_constant_s(samples, least_v=0.01 * from_v) == pytest.approx(tau_s, rel=1e-6)


@pytest.mark.parametrize("share", [0.8, 1.0, 1.2])
def test_a_part_within_its_tolerance_matches(share):
    assert judged(decay(share * FARAD)) is Decay.MATCHES


@pytest.mark.parametrize("share", [0.4, 1.8])
def test_a_part_far_from_its_marking_is_there_all_the_same(share):
    assert judged(decay(share * FARAD, to_s=6.0)) is Decay.MATCHES


def test_an_instant_fall_is_a_lost_contact():
    fall = [Sample(time_s=0.0, voltage_v=400.0)] + [
        Sample(time_s=0.02 * n, voltage_v=0.0) for n in range(1, 50)
    ]
    assert judged(fall) is Decay.INSTANT
    assert judged(decay(0.05 * FARAD)) is Decay.INSTANT


def test_a_contact_lost_on_the_way_down_is_found_as_well():
    """It falls as it should, and then all at once, with most of the charge still there."""
    for lost_s in (0.1, 0.5, 2.0):  # at 330 V, 152 V and 8 V
        samples = [s for s in decay(FARAD) if s.time_s < lost_s]
        samples += [Sample(time_s=lost_s + 0.02 * n, voltage_v=0.0) for n in range(50)]
        assert judged(samples) is Decay.INSTANT


def test_what_does_not_fall_stays():
    assert judged([Sample(time_s=0.02 * n, voltage_v=400.0) for n in range(100)]) is Decay.STAYS
    assert judged(decay(10 * FARAD)) is Decay.STAYS


def test_a_fall_that_is_too_fast_for_the_voltmeter_is_unresolved():
    """100 nF: τ = 11 ms, and a reading every 20 ms."""
    assert judged(decay(100e-9), nominal_f=100e-9) is Decay.UNRESOLVED


def test_a_charge_that_came_back_stands_for_a_fall_that_was_too_fast():
    """100 nF at 400 V is 40 µC."""
    samples = decay(100e-9)
    assert judged(samples, nominal_f=100e-9, recovered_c=39e-6) is Decay.MATCHES
    assert judged(samples, nominal_f=100e-9, recovered_c=1e-6) is Decay.INSTANT


@pytest.mark.parametrize("from_v", [0.0, 0.5, 1.0])
def test_a_part_that_was_at_no_voltage_proves_nothing_by_falling(from_v):
    assert judged(decay(FARAD, from_v=from_v)) is Decay.UNRESOLVED
    assert judged([]) is Decay.UNRESOLVED


def test_a_reading_that_is_none_is_no_proof():
    samples = [Sample(time_s=s.time_s, voltage_v=nan) for s in decay(FARAD)]
    assert judged(samples) is not Decay.MATCHES
    assert not is_dead(LAWS, nan)


@given(st.lists(st.floats(-1000, 1000), min_size=1, max_size=30))
def test_nothing_but_an_exponential_of_the_right_speed_matches(volts):
    samples = [Sample(time_s=0.02 * n, voltage_v=v) for n, v in enumerate(volts)]
    if judged(samples) is Decay.MATCHES:
        found_s = time_constant_s(samples, least_v=max(0.02 * abs(volts[0]), 0.1))
        assert 0.25 * OHM * 0.8 * FARAD <= found_s <= 2.0 * OHM * 1.2 * FARAD


def test_resolution_needs_three_readings_in_the_fastest_decay():
    """0.25·110 kΩ·C·ln(50) ≥ 3·20 ms needs C ≥ 0.558 µF."""

    def resolved(farad: float) -> bool:
        return is_resolved(
            LAWS,
            from_v=400.0,
            resistance_ohm=OHM,
            capacitance_min_f=farad,
            interval_s=0.02,
            resolution_v=0.01,
        )

    assert resolved(0.56e-6)
    assert not resolved(0.55e-6)


# ---- charge


def charge(drawn_c: float, uncertainty_c: float = 0.0) -> Connection:
    return judge_charge(
        LAWS,
        drawn_c=drawn_c,
        uncertainty_c=uncertainty_c,
        change_v=400.0,
        capacitance_min_f=0.8e-6,
        capacitance_max_f=1.2e-6,
    )


@pytest.mark.parametrize(
    ("drawn_c", "expected"),
    [
        (0.0, Connection.ABSENT),
        (159e-6, Connection.ABSENT),
        (161e-6, Connection.AGREES),
        (400e-6, Connection.AGREES),
        (959e-6, Connection.AGREES),
        (961e-6, Connection.EXCESS),
    ],
)
def test_the_charge_drawn_agrees_with_capacitance_times_voltage(drawn_c, expected):
    """1 µF ± 20 % at 400 V: 400 µC; from half of 320 µC to twice 480 µC it is this part."""
    assert charge(drawn_c) is expected


def test_a_charge_that_cannot_be_told_from_nothing_is_unresolved():
    assert charge(400e-6, uncertainty_c=81e-6) is Connection.UNRESOLVED
    assert charge(400e-6, uncertainty_c=nan) is Connection.UNRESOLVED
    assert charge(nan) is not Connection.AGREES


def test_the_integral_of_a_charging_current_is_its_charge():
    """∫(V/R)·e^(−t/RC) dt from 0 to 10·RC is C·V·(1 − e^−10)."""
    tau_s = 10e3 * 1e-6
    steps = [tau_s * n / 200 for n in range(2001)]
    drawn_c = charge_drawn_c([(t, 400.0 / 10e3 * exp(-t / tau_s)) for t in steps])
    assert drawn_c == pytest.approx(400e-6 * (1 - exp(-10)), rel=1e-5)


# ---- droop


def droop(farad: float, *, drain_a: float = 0.8e-6, spent_s: float = 1.0) -> Connection:
    """400 V through 500 MΩ is 0.8 µA: ΔV = I·t/C."""
    samples = [
        Sample(time_s=0.0, voltage_v=400.0),
        Sample(time_s=spent_s, voltage_v=400.0 - drain_a * spent_s / farad),
    ]
    return judge_droop(
        LAWS,
        samples,
        drain_a=drain_a,
        resolution_v=0.01,
        capacitance_min_f=80e-9,
        capacitance_max_f=120e-9,
    )


@pytest.mark.parametrize(
    ("farad", "expected"),
    [
        (100e-9, Connection.AGREES),  # 8 V in a second
        (45e-9, Connection.AGREES),
        (30e-9, Connection.ABSENT),
        (2.1e-9, Connection.ABSENT),
        (300e-9, Connection.EXCESS),
        (10e-6, Connection.UNRESOLVED),  # 0.08 V: eight digits
    ],
)
def test_a_part_droops_as_its_capacitance_says(farad, expected):
    assert droop(farad) is expected


def test_a_droop_of_nothing_says_nothing():
    assert judge_droop(
        LAWS, [], drain_a=1e-6, resolution_v=0.01, capacitance_min_f=1e-7, capacitance_max_f=1e-7
    ) is Connection.UNRESOLVED  # fmt: skip
    assert droop(100e-9, spent_s=0.0) is Connection.UNRESOLVED


def test_the_test_voltage_is_held_by_a_part_and_lost_without_one():
    """500 MΩ and 4.7 µF hold for 2350 s; 5 pF of stray capacitance falls in 2.5 ms."""

    def held(volts: float, farad: float = FARAD) -> bool | None:
        samples = [Sample(time_s=0.0, voltage_v=0.8), Sample(time_s=0.05, voltage_v=volts)]
        return holds_test_voltage(LAWS, samples, drain_ohm=500e6, capacitance_min_f=farad)

    assert held(0.8) is True
    assert held(0.8 * exp(-0.05 / 2.5e-3)) is False
    assert held(0.79, farad=100e-12) is None  # 50 ms of 25 ms: nobody can tell


# ---- injection


@pytest.mark.parametrize(
    ("volts", "amperes", "expected"),
    [
        (0.8, 0.0, Injection.SEEN),
        (0.61, 0.0, Injection.SEEN),
        (0.99, 0.0, Injection.SEEN),
        (0.1, 1e-5, Injection.CONDUCTS),
        (0.0, 0.0, Injection.NOT_SEEN),
        (0.0, 1e-6, Injection.NOT_SEEN),
        (5.0, 1e-3, Injection.NOT_SEEN),
        (nan, 0.0, Injection.NOT_SEEN),
        (nan, inf, Injection.NOT_SEEN),
    ],
)
def test_an_injected_voltage_is_seen_or_conducted_or_neither(volts, amperes, expected):
    found = judge_injection(
        LAWS, voltage_v=volts, current_a=amperes, current_floor_a=2e-6, injected_v=0.8
    )
    assert found is expected
