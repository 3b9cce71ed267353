"""Named limit rules against the tables that they are taken from."""

from math import pi

import pytest

from ohmward.sequence.rules import (
    RULES,
    NotStated,
    RuleLacks,
    class_1_q_limit,
    tan_delta_limit,
    widen,
)
from ohmward.terms.kind import Kind
from ohmward.terms.part import Part


def capacitor(nominal: float, **more: object) -> Part:
    return Part(part_id="C1", position="P1", kind=Kind.CAPACITOR, nominal=nominal, **more)  # type: ignore[arg-type]


# A general-purpose aluminium electrolytic series, a maker's table, 120 Hz, largest tan δ.
TAN_DELTA_AT_120_HZ = [
    (6.3, 0.23),
    (10, 0.20),
    (16, 0.16),
    (25, 0.14),
    (35, 0.12),
    (50, 0.10),
    (63, 0.09),
    (100, 0.08),
    (160, 0.12),
    (200, 0.14),
    (250, 0.17),
    (350, 0.20),
    (400, 0.25),
    (450, 0.25),
]


@pytest.mark.parametrize(("rated_v", "largest"), TAN_DELTA_AT_120_HZ)
def test_tan_delta_by_rating(rated_v: float, largest: float) -> None:
    part = capacitor(100e-6, rated_v=rated_v, dielectric="aluminium")
    rule = RULES["tan-delta-electrolytic"]
    assert rule.bounds(part, 120.0) == (None, largest)
    assert rule.frequencies(part)[0] == 120.0


# Same table's footnote: + .02 for each further 1000 µF. Worked by hand from the footnote.
@pytest.mark.parametrize(
    ("microfarads", "added"),
    [(1000, 0.0), (1999, 0.0), (2000, 0.02), (2200, 0.02), (3300, 0.04), (4700, 0.06), (1e4, 0.18)],
)
def test_each_further_1000_uf_adds_two_hundredths(microfarads: float, added: float) -> None:
    assert tan_delta_limit(16.0, microfarads * 1e-6) == pytest.approx(0.16 + added, abs=1e-12)


def test_a_rating_between_two_rows_takes_the_stricter_neighbour() -> None:
    assert tan_delta_limit(40.0, 1e-4) == 0.10  # 35 V .12, 50 V .10
    assert tan_delta_limit(300.0, 1e-4) == 0.17  # 250 V .17, 350 V .20
    assert tan_delta_limit(420.0, 1e-4) == 0.25  # 400-450 V .25


@pytest.mark.parametrize("rated_v", [4.0, 500.0])
def test_outside_the_table_nothing_is_stated(rated_v: float) -> None:
    with pytest.raises(NotStated):
        tan_delta_limit(rated_v, 1e-4)


def test_esr_is_tan_delta_over_the_reactance() -> None:
    # ESR = tan δ/(2πfC): 100 µF, 25 V: 0.14 × 13.2629 ohm at 120 Hz, by hand.
    part = capacitor(100e-6, rated_v=25.0, dielectric="aluminium electrolytic")
    minimum, maximum = RULES["esr-electrolytic"].bounds(part, 120.0)
    assert minimum is None
    assert maximum == pytest.approx(0.14 / (2 * pi * 120.0 * 100e-6), rel=1e-12)
    assert maximum == pytest.approx(1.8568, rel=1e-4)


# IEC 60384-21 as quoted by makers: Q ≥ 400 + 20·C(pF) below 30 pF, ≥ 1000 above.
@pytest.mark.parametrize(
    ("picofarads", "least"), [(1, 420), (10, 600), (29.9, 998), (30, 1000), (100, 1000)]
)
def test_class_1_q(picofarads: float, least: float) -> None:
    part = capacitor(picofarads * 1e-12, dielectric="NP0")
    minimum, maximum = RULES["class-1-q"].bounds(part, 1e6)
    assert maximum is None
    assert minimum == pytest.approx(least, rel=1e-12)
    assert RULES["class-1-d"].bounds(part, 1e6)[1] == pytest.approx(1 / least, rel=1e-12)


def test_class_1_q_has_no_jump_where_its_branches_meet() -> None:
    assert class_1_q_limit(29.999999e-12) == pytest.approx(class_1_q_limit(30e-12), rel=1e-6)


# IEC 60384-21 as quoted by makers: class 1 at 1 MHz up to 1 nF, else 1 kHz.
@pytest.mark.parametrize(
    ("picofarads", "frequency_hz"), [(10, 1e6), (1000, 1e6), (1001, 1e3), (1e4, 1e3)]
)
def test_class_1_frequency(picofarads: float, frequency_hz: float) -> None:
    part = capacitor(picofarads * 1e-12, dielectric="C0G")
    assert RULES["class-1-q"].frequencies(part) == (frequency_hz,)


# A film-capacitor maker's published table: D in % at 1, 10 and 100 kHz.
@pytest.mark.parametrize(
    ("dielectric", "percents"),
    [
        ("PP", (0.05, 0.08, 0.25)),
        ("PET", (0.8, 1.5, 3.0)),
        ("PPS", (0.2, 0.25, 0.5)),
        ("C0G", (0.1, 0.1, 0.1)),
    ],
)
def test_dissipation_by_dielectric(dielectric: str, percents: tuple[float, ...]) -> None:
    part = capacitor(100e-9, dielectric=dielectric)
    rule = RULES["dissipation-by-dielectric"]
    assert rule.frequencies(part) == (1e3, 1e4, 1e5)
    for frequency_hz, percent in zip((1e3, 1e4, 1e5), percents, strict=True):
        assert rule.bounds(part, frequency_hz) == (None, pytest.approx(percent / 100))


def test_dissipation_of_class_2_is_stated_at_1_khz_only() -> None:
    # Same table: X7R 2.5 %; class 2 is measured at 1 kHz (IEC 60384-22 as quoted by makers).
    part = capacitor(100e-9, dielectric="X7R")
    assert RULES["dissipation-by-dielectric"].bounds(part, 1e3) == (None, 0.025)
    with pytest.raises(NotStated):
        RULES["dissipation-by-dielectric"].bounds(part, 1e4)


def test_marked_tolerance_may_be_lopsided() -> None:
    part = capacitor(10e-6, tolerance_low=-0.2, tolerance_high=0.8)
    assert RULES["marked-tolerance"].bounds(part, 120.0) == pytest.approx((8e-6, 18e-6))


@pytest.mark.parametrize(
    ("rule", "part", "cell"),
    [
        ("marked-tolerance", capacitor(1e-6), "tolerance"),
        ("tan-delta-electrolytic", capacitor(1e-6, dielectric="aluminium"), "rated_voltage"),
        ("esr-electrolytic", capacitor(1e-6, rated_v=25.0), "dielectric"),
        ("class-1-q", capacitor(1e-11), "dielectric"),
        ("dissipation-by-dielectric", capacitor(1e-8), "dielectric"),
    ],
)
def test_a_rule_names_the_cell_that_it_lacks(rule: str, part: Part, cell: str) -> None:
    with pytest.raises(RuleLacks) as raised:
        RULES[rule].bounds(part, 1e3)
    assert raised.value.cell == cell


@pytest.mark.parametrize("rule", ["tan-delta-electrolytic", "class-1-q", "class-1-d"])
def test_a_rule_is_not_stretched_to_other_dielectrics(rule: str) -> None:
    with pytest.raises(NotStated):
        RULES[rule].bounds(capacitor(1e-8, dielectric="X7R", rated_v=50.0), 1e3)


def test_widening_multiplies_the_allowance() -> None:
    assert widen((90.0, 120.0), 100.0, 2.0) == (80.0, 140.0)
    assert widen((None, 0.1), 100.0, 2.0) == (None, 0.2)
    assert widen((1000.0, None), 100.0, 2.0) == (500.0, None)


def test_every_rule_says_where_it_comes_from() -> None:
    assert all(rule.source and rule.meaning and rule.quantities for rule in RULES.values())


# Arithmetic: a 100 nF capacitor is 1591.549 ohm at 1 kHz, 10 mH are 628.3185 ohm at 10 kHz.
@pytest.mark.parametrize(
    ("kind", "nominal", "frequency_hz", "ideal_ohm"),
    [
        (Kind.CAPACITOR, 100e-9, 1e3, 1591.5494309),
        (Kind.INDUCTOR, 10e-3, 1e4, 628.31853072),
        (Kind.RESISTOR, 470.0, 1e3, 470.0),
    ],
)
def test_nominal_impedance_is_a_factor_of_three_both_ways(
    kind: Kind, nominal: float, frequency_hz: float, ideal_ohm: float
) -> None:
    part = Part(part_id="X1", position="P1", kind=kind, nominal=nominal)
    assert RULES["nominal-impedance"].bounds(part, frequency_hz) == pytest.approx(
        (ideal_ohm / 3, ideal_ohm * 3), rel=1e-9
    )
