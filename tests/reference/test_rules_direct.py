"""Named voltages and limits on leakage, insulation and absorption, against what they quote."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.errors import Problems
from ohmward.sequence.floor import charging_left_a
from ohmward.sequence.load import load_sequence
from ohmward.sequence.rule_book import RULES
from ohmward.sequence.rules import NotStated, RuleLacks
from ohmward.sequence.rules_direct import DIRECT_RULES, DirectRule
from ohmward.sequence.voltages import VOLTAGE_RULES
from ohmward.setup.resources import shipped
from ohmward.terms.kind import Kind
from ohmward.terms.part import Part

AL = "aluminium electrolytic"


def part(nominal: float, rated_v: float | None = None, dielectric: str = AL) -> Part:
    return Part(
        part_id="C1",
        position="1",
        kind=Kind.CAPACITOR,
        nominal=nominal,
        rated_v=rated_v,
        dielectric=dielectric,
    )


def direct(name: str) -> DirectRule:
    rule = RULES[name]
    assert isinstance(rule, DirectRule)
    return rule


# JAN-C-62, military reform practice: I(mA) = k·C(µF) + 0.3; the two worked examples quoted with it.
@pytest.mark.parametrize(("rated_v", "milliamperes"), [(450.0, 1.1), (250.0, 0.7)])
def test_jan_c_62_examples(rated_v: float, milliamperes: float) -> None:
    rule = direct("leakage-jan-c-62")
    low, top = rule.bounds(part(20e-6, rated_v), rated_v)
    assert low is None
    assert top == pytest.approx(milliamperes * 1e-3, rel=1e-12)
    assert rule.times(part(20e-6, rated_v)) == (300.0,)  # MIL-C-62: read at 5 min


# k = .01 up to 100 V, .02 from 101 to 250, .025 from 251 to 350, .04 from 351 to 450 V: 100 µF.
@pytest.mark.parametrize(
    ("rated_v", "milliamperes"),
    [(100, 1.3), (101, 2.3), (250, 2.3), (251, 2.8), (350, 2.8), (351, 4.3), (450, 4.3)],
)
def test_jan_c_62_rows(rated_v: float, milliamperes: float) -> None:
    found = direct("leakage-jan-c-62").bounds(part(100e-6, rated_v), rated_v)[1]
    assert found == pytest.approx(milliamperes * 1e-3, rel=1e-12)


def test_jan_c_62_says_nothing_above_450_v() -> None:
    with pytest.raises(NotStated):
        direct("leakage-jan-c-62").bounds(part(10e-6, 500.0), 500.0)


def test_a_makers_published_limit() -> None:
    """0.01·C·V: 35 V and 2200 µF allow 770 µA after 2 min (a maker's sheet)."""
    rule = direct("leakage-cv")
    assert rule.bounds(part(2200e-6, 35.0), 35.0)[1] == pytest.approx(770e-6, rel=1e-12)
    assert rule.times(part(2200e-6, 35.0)) == (120.0,)


# A maker's general-purpose series, worked by hand: (µF, V, µA, after s).
@pytest.mark.parametrize(
    ("microfarads", "rated_v", "microamperes", "after_s"),
    [
        (1.0, 50.0, 3.0, 120.0),  # 0.5 is below the least of 3
        (100.0, 63.0, 63.0, 120.0),
        (10.0, 100.0, 10.0, 120.0),
        (2.2, 450.0, 0.03 * 990 + 15, 300.0),  # CV = 990
        (10.0, 450.0, 0.02 * 4500 + 25, 300.0),
    ],
)
def test_a_general_purpose_series(
    microfarads: float, rated_v: float, microamperes: float, after_s: float
) -> None:
    rule, one = direct("leakage-general-purpose"), part(microfarads * 1e-6, rated_v)
    assert rule.bounds(one, rated_v)[1] == pytest.approx(microamperes * 1e-6, rel=1e-9)
    assert rule.times(one) == (after_s,)


def test_a_leakage_limit_of_electrolytics_is_not_stretched_to_film() -> None:
    for rule in DIRECT_RULES:
        if rule.quantities == {"leakage_a"} and rule.name != "leakage-by-dielectric":
            with pytest.raises(NotStated):
                rule.bounds(part(1e-6, 400.0, "PP"), 400.0)


# IEC 60384-21/-22 as quoted by makers, proof for 1 min: rated → proof voltage.
@pytest.mark.parametrize(
    ("rated_v", "proof_v"), [(50, 125), (100, 250), (200, 400), (250, 425), (500, 750), (630, 819)]
)
def test_ceramic_proof_voltages(rated_v: float, proof_v: float) -> None:
    rule = VOLTAGE_RULES["proof-ceramic"]
    assert rule.of(part(1e-9, rated_v, "X7R")) == pytest.approx(proof_v, rel=1e-12)
    with pytest.raises(NotStated):
        rule.of(part(1e-9, rated_v, "PP"))


# IEC 60384-1, 4.5, from memory: below 10 V the rating; 10-100: 10; 100-500: 100; from 500: 500.
@pytest.mark.parametrize(
    ("rated_v", "volts"),
    [(6.3, 6.3), (10, 10), (63, 10), (99, 10), (100, 100), (400, 100), (499, 100), (500, 500)],
)
def test_insulation_voltage_by_rating(rated_v: float, volts: float) -> None:
    rule = VOLTAGE_RULES["insulation-by-rating"]
    assert rule.of(part(1e-6, rated_v, "PET")) == volts
    assert not rule.confirmed


# IEC 60384-4, from memory: surge 1.15 U_R to 315 V, 1.10 above.
@pytest.mark.parametrize(("rated_v", "volts"), [(100, 115), (315, 362.25), (350, 385), (450, 495)])
def test_surge_voltage(rated_v: float, volts: float) -> None:
    assert VOLTAGE_RULES["surge-electrolytic"].of(part(1e-5, rated_v)) == pytest.approx(volts)


# A film-capacitor maker's table, τ at 25 °C: leakage = C·V/τ of 100 nF at 400 V (calculated).
@pytest.mark.parametrize(("dielectric", "nanoamperes"), [("PP", 0.4), ("PET", 4.0), ("X7R", 40.0)])
def test_leakage_by_dielectric(dielectric: str, nanoamperes: float) -> None:
    rule, one = direct("leakage-by-dielectric"), part(100e-9, 400.0, dielectric)
    assert rule.bounds(one, 400.0)[1] == pytest.approx(nanoamperes * 1e-9, rel=1e-9)
    assert rule.stated_v(one) == 100.0  # at 400 V it is an extrapolation


def test_insulation_of_x7r_is_the_lesser_of_two() -> None:
    """Makers' tables: the lesser of 100 GΩ and 1000 MΩ·µF; they meet at 10 nF."""
    rule = direct("insulation-x7r")
    assert rule.bounds(part(1e-9, 50.0, "X7R"), 50.0)[0] == 100e9
    assert rule.bounds(part(10e-9, 50.0, "X7R"), 50.0)[0] == pytest.approx(100e9)
    assert rule.bounds(part(1e-6, 50.0, "X7R"), 50.0)[0] == pytest.approx(1e9)


@given(st.floats(1e-11, 1e-4), st.sampled_from(["PP", "PET", "PPS", "C0G", "X7R"]))
def test_insulation_and_its_time_agree_above_a_third_of_a_microfarad(
    nominal: float, dielectric: str
) -> None:
    """IEC 60384-1: above 0.33 µF insulation is stated as R·C, up to it as R."""
    one = part(nominal, 100.0, dielectric)
    least_ohm = direct("insulation-by-dielectric").bounds(one, 100.0)[0]
    least_s = direct("insulation-time-by-dielectric").bounds(one, 100.0)[0]
    assert least_ohm is not None
    assert least_s is not None
    assert least_ohm * max(nominal, 0.33e-6) == pytest.approx(least_s, rel=1e-12)


# The same table: dielectric absorption in %, the larger value of each range.
@pytest.mark.parametrize(
    ("dielectric", "percent"), [("PP", 0.1), ("PET", 0.25), ("PPS", 0.05), ("C0G", 0.6)]
)
def test_absorption_by_dielectric(dielectric: str, percent: float) -> None:
    rule = direct("absorption-by-dielectric")
    found = rule.bounds(part(1e-7, 400.0, dielectric), 200.0)
    assert found == (None, pytest.approx(percent / 100))


def test_the_coupling_limit_is_the_circuits_arithmetic() -> None:
    """1 % of 1.5 V in 1 MΩ allows 15 nA, which at 300 V is 20 GΩ (calculated)."""
    sequence = load_sequence(shipped("sequences") / "coupling-retest.toml", Problems())
    assert sequence is not None
    (limit,) = [one for one in sequence.limit if one.quantity == "leakage_a"]
    assert limit.maximum is not None
    assert limit.maximum.value == pytest.approx(0.01 * 1.5 / 1e6, rel=1e-12)
    assert 300.0 / limit.maximum.value == pytest.approx(20e9, rel=1e-12)


def test_what_still_charges_a_part_is_a_hundredth_of_what_its_resistor_alone_would_say() -> None:
    """10 µF at 400 V through 1 MΩ takes 0.99 µA after 60 s from 0 V (calculated).

    Time under voltage begins within 1 % of it: there only 1 % of V/R flows still.
    """
    assert charging_left_a(400.0, 1e6, 10e-6, 60.0) == pytest.approx(0.99e-8, abs=0.005e-8)
    assert charging_left_a(400.0, 0.0, 10e-6, 60.0) == 0.0


@pytest.mark.parametrize("rule", DIRECT_RULES, ids=lambda rule: rule.name)
def test_every_rule_says_where_it_comes_from(rule: DirectRule) -> None:
    assert rule.source
    assert rule.meaning
    assert rule.kinds == {Kind.CAPACITOR}


@pytest.mark.parametrize("rule", VOLTAGE_RULES.values(), ids=lambda rule: rule.name)
def test_a_voltage_rule_names_the_cell_that_it_lacks(rule: object) -> None:
    name = getattr(rule, "name", "")
    of = VOLTAGE_RULES[name]
    assert of.source
    dielectric = next(iter(of.dielectrics), "PP")
    with pytest.raises(RuleLacks) as raised:
        of.of(part(1e-6, None, dielectric))
    assert raised.value.cell == "rated_voltage"
