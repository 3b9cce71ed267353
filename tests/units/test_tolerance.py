"""Tolerances: both sides, in percent, in the part's unit or by IEC 60062 letter."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.units.tolerance import parse_tolerance
from ohmward.units.values import UnitError


@pytest.mark.parametrize(
    "text", ["±5 %", "5%", "5 %", "+-5%", "+/-5 %", "+/- 5 %", "-/+5 %", "J", "-5/+5 %"]
)
def test_the_ways_to_write_five_percent(text: str) -> None:
    assert parse_tolerance(text, 1e-6, "F") == pytest.approx((-0.05, 0.05))


@pytest.mark.parametrize(
    "text",
    ["-20/+80 %", "+80/-20 %", "-20 % / +80 %", "-20%+80%", "-20% +80%", "-20 to +80 %", "Z"],
)
def test_a_lopsided_tolerance_keeps_its_sides(text: str) -> None:
    assert parse_tolerance(text, 1e-6, "F") == pytest.approx((-0.2, 0.8))


@pytest.mark.parametrize(("text", "sides"), [("-0/+50 %", (0.0, 0.5)), ("0/+100 %", (0.0, 1.0))])
def test_one_side_may_be_zero(text: str, sides: tuple[float, float]) -> None:
    assert parse_tolerance(text, 1e-6, "F") == pytest.approx(sides)


@pytest.mark.parametrize("text", ["±0.25 pF", "+-0.25pF", "0.25 pF", "C"])
def test_picofarads_are_a_share_of_the_nominal_value(text: str) -> None:
    # IEC 60062: below 10 pF the letter C is ± 0.25 pF, not ± 0.25 %
    assert parse_tolerance(text, 5e-12, "F") == pytest.approx((-0.05, 0.05))
    assert parse_tolerance("C", 10e-12, "F") == pytest.approx((-0.0025, 0.0025))


def test_decimal_commas_where_they_are_asked_for() -> None:
    assert parse_tolerance("±0,5 %", 1.0, "ohm", decimal_comma=True) == (-0.005, 0.005)
    with pytest.raises(UnitError):
        parse_tolerance("±0,5 %", 1.0, "ohm")


@pytest.mark.parametrize(
    "text", ["", "5", "+80 %", "-10", "-20/80 %", "-150/+50 %", "0 %", "+5/+10 %", "±5 V", "X", "%"]
)
def test_what_is_no_tolerance_is_refused(text: str) -> None:
    with pytest.raises(UnitError):
        parse_tolerance(text, 1e-6, "F")


@given(st.integers(0, 99), st.integers(1, 300))
def test_sides_come_out_in_order(low: int, high: int) -> None:
    for text in (f"-{low}/+{high} %", f"+{high}/-{low} %", f"-{low}%+{high}%"):
        assert parse_tolerance(text, 2.2e-9, "F") == pytest.approx((-low / 100, high / 100))


@given(st.text(max_size=20))
def test_any_text_is_two_sides_around_zero_or_refused(text: str) -> None:
    try:
        low, high = parse_tolerance(text, 1e-6, "F")
    except UnitError:
        return
    assert -1 < low <= 0 <= high
    assert low < high
