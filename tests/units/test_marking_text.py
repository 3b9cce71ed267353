"""Markings are read by the part's kind; what means two values there is asked back."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.units.markings import (
    MarkingAmbiguous,
    MarkingUnreadable,
    read_marking,
)
from ohmward.units.values import UnitError, format_quantity

KINDS = ("capacitor", "inductor", "resistor")


def test_one_marking_means_different_things_by_kind() -> None:
    assert read_marking("104", "capacitor").nominal == 100e-9
    assert read_marking("104", "inductor").nominal == 100e-3
    assert read_marking("104", "resistor").nominal == 100e3


@pytest.mark.parametrize(
    ("marking", "kind", "meanings"),
    [
        ("104K", "resistor", {100e3, 104e3}),
        ("472M", "resistor", {4.7e3, 472e6}),
        ("104G", "resistor", {100e3, 104e9}),
        ("470", "resistor", {47.0, 470.0}),
        ("4700", "resistor", {470.0, 4700.0}),
        ("5m", "resistor", {0.005, 5e6}),
        ("470", "capacitor", {47e-12, 470e-12}),
        ("470K", "capacitor", {47e-12, 470e-12}),
        ("47", "capacitor", {47e-12, 47e-6}),
        ("0.1", "capacitor", {0.1e-12, 0.1e-6}),
        ("4R7", "capacitor", {4.7e-12, 4.7e-6}),
        ("100F", "capacitor", {10e-12, 100e-12, 100.0}),
        ("4M7", "inductor", {4.7e-3, 4.7e-6}),
    ],
)
def test_what_means_several_values_is_asked_back_with_all(
    marking: str, kind: str, meanings: set[float]
) -> None:
    with pytest.raises(MarkingAmbiguous) as caught:
        read_marking(marking, kind)
    found = [reading.nominal for reading in caught.value.readings]
    assert found == pytest.approx(sorted(meanings))
    unit = {"capacitor": "F", "inductor": "H", "resistor": "ohm"}[kind]
    for meaning in meanings:
        assert format_quantity(meaning, unit) in caught.value.expected


@pytest.mark.parametrize("text", ["", "C0G", "000", "MKP 10", "4,7", "+5 %", "104Q5", "AB12"])
@pytest.mark.parametrize("kind", KINDS)
def test_what_is_no_value_is_said_to_be_none(text: str, kind: str) -> None:
    with pytest.raises(MarkingUnreadable):
        read_marking(text, kind)


@pytest.mark.parametrize("text", ["0.1 MFD", ".1MF", "100 MMFD"])
def test_old_farads_are_asked_back(text: str) -> None:
    with pytest.raises(UnitError, match=r"does 'M.*' mean"):
        read_marking(text, "capacitor")


@pytest.mark.parametrize(
    ("text", "nominal", "volts"),
    [
        ("2A104K", 100e-9, 100.0),
        ("1H105K", 1e-6, 50.0),
        ("100nJ63", 100e-9, 63.0),
        ("µ1K250", 0.1e-6, 250.0),
        ("470µF 63V", 470e-6, 63.0),
        ("10uF ±20% 25 V", 10e-6, 25.0),
        ("0.1 µF/400 V DC", 0.1e-6, 400.0),
    ],
)
def test_a_voltage_printed_with_the_value_is_read(text: str, nominal: float, volts: float) -> None:
    marking = read_marking(text, "capacitor")
    assert marking.nominal == pytest.approx(nominal)
    assert marking.voltage_v == volts


def test_an_ac_voltage_is_not_taken_for_a_dc_one() -> None:
    assert read_marking("0.1 µF", "capacitor").voltage_v is None
    with pytest.raises(MarkingUnreadable):
        read_marking("0.1 µF 275 V~", "capacitor")


def test_a_unit_letter_is_no_tolerance() -> None:
    assert read_marking("470uF", "capacitor").tolerance_low is None
    assert read_marking("10mH", "inductor").tolerance_low is None
    assert read_marking("4n7F", "capacitor").tolerance_high == 0.01


def test_decimal_commas_where_they_are_asked_for() -> None:
    assert read_marking("0,1 µF", "capacitor", decimal_comma=True).nominal == 1e-7


@given(st.text(max_size=16), st.sampled_from(KINDS), st.booleans())
def test_any_text_is_a_positive_value_or_refused(text: str, kind: str, comma: bool) -> None:
    try:
        marking = read_marking(text, kind, decimal_comma=comma)
    except UnitError:
        return
    assert marking.nominal > 0
    if marking.tolerance_low is not None and marking.tolerance_high is not None:
        assert marking.tolerance_low < 0 < marking.tolerance_high


@given(st.from_regex(r"\A[0-9]{1,3}[A-Zpnuµm]?[0-9]{0,3}[A-Z]?\Z"), st.sampled_from(KINDS))
def test_several_meanings_differ(text: str, kind: str) -> None:
    try:
        read_marking(text, kind)
    except MarkingAmbiguous as error:
        nominals = [reading.nominal for reading in error.readings]
        assert len(nominals) > 1
        assert nominals == sorted(set(nominals))
    except UnitError:
        pass
