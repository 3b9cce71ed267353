"""Values with units: what people write is read exactly, and what reads in two ways is asked."""

import math

import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from ohmward.units.table import UNITS
from ohmward.units.values import UnitError, format_quantity, parse_quantity

# SI prefixes: SI brochure, 9th edition, table 7. Minute, hour, day: table 8.
READ = [
    ("4.7 uF", "F", 4.7e-6),
    ("4.7uF", "F", 4.7e-6),
    ("4.7 µF", "F", 4.7e-6),  # micro sign
    ("4.7 μF", "F", 4.7e-6),  # Greek mu
    ("4u7", "F", 4.7e-6),
    ("4u7F", "F", 4.7e-6),
    ("n47", "F", 470e-12),
    (".47 nF", "F", 470e-12),
    ("10 uuF", "F", 10e-12),  # micro-microfarad
    ("4700 microfarads", "F", 4.7e-3),
    ("1 mF", "F", 1e-3),
    ("4k7", "ohm", 4700.0),
    ("4K7", "ohm", 4700.0),
    ("47k", "ohm", 47e3),
    ("47 kΩ", "ohm", 47e3),
    ("47 kΩ", "ohm", 47e3),  # ohm sign
    ("470R", "ohm", 470.0),
    ("R47", "ohm", 0.47),
    ("2 Megohms", "ohm", 2e6),
    ("10 mohm", "ohm", 0.01),
    ("100 kHz", "Hz", 1e5),
    ("2MHz", "Hz", 2e6),
    ("1e3 Hz", "Hz", 1000.0),
    ("1 h", "s", 3600.0),
    ("15 min", "s", 900.0),
    ("1 h 30 min", "s", 5400.0),
    ("2 d", "s", 172800.0),
    ("250 ms", "s", 0.25),
    ("6V3", "V", 6.3),
    ("-40 V", "V", -40.0),
    ("−40 V", "V", -40.0),  # minus sign
    ("1 000 V", "V", 1000.0),
    ("1 000 V", "V", 1000.0),  # no-break space
    ("1'000 V", "V", 1000.0),
    ("1,000,000 Hz", "Hz", 1e6),
    ("1,234.5 V", "V", 1234.5),
    ("23 °C", "degC", 23.0),
    ("0 degC", "degC", 0.0),
    ("45 %", "pct", 45.0),
    ("0.5 %", "1", 0.005),
    ("100 ppm", "1", 1e-4),
    ("0.005", "1", 0.005),
    ("20 V/s", "V/s", 20.0),
    ("45 uC", "C", 45e-6),
    ("1 m", "m", 1.0),
    ("50 cm", "m", 0.5),
    ("10 nS", "S", 1e-8),
    ("180 deg", "rad", math.pi),
]

ASKED_BACK = [
    ("10 MF", "F", "does 'MF' mean uF"),
    ("10 MFD", "F", "does 'MFD' mean uF"),
    ("10mfd", "F", "does 'mfd' mean uF"),
    ("100 MMFD", "F", "does 'MMFD' mean pF"),
    ("100 mmf", "F", "does 'mmf' mean pF"),
    ("1 mhz", "Hz", "which one?"),
    ("15 m", "s", "which one?"),
    ("4,700 pF", "F", "4700 or 4.700"),
    ("1 MH", "H", "milli, micro or mega"),
    ("10 MA", "A", "milli, micro or mega"),
    ("4M7", "F", "'m' (milli) or 'u' (micro)"),
]

REFUSED = [
    ("", "F", "nothing"),
    ("  ", "F", "nothing"),
    ("5 V", "Hz", "'5 V', a voltage"),
    ("5 kohm", "F", "'5 kohm', a resistance"),
    ("5", "Hz", "no unit"),
    ("4,7 uF", "F", "4,7 uF"),
    ("1.2.3 V", "V", "1.2.3 V"),
    ("12 34 V", "V", "12 34 V"),
    ("0,100,000 V", "V", "0,100,000 V"),
    ("10²Hz", "Hz", "10²Hz"),
    ("nan V", "V", "nan V"),
    ("inf V", "V", "inf V"),
    ("1e999 V", "V", "1e999 V"),
    ("77 °F", "degC", "77 °F"),
    ("5 V DC", "V", "5 V DC"),
    ("1 min 1 h", "s", "1 min 1 h"),
    ("=1+1", "V", "=1+1"),
    ("#N/A", "V", "#N/A"),
]


@pytest.mark.parametrize(("text", "unit", "value"), READ)
def test_what_people_write_is_read(text: str, unit: str, value: float) -> None:
    assert parse_quantity(text, unit) == pytest.approx(value, rel=1e-15)


@pytest.mark.parametrize(("text", "unit", "question"), ASKED_BACK)
def test_what_reads_in_two_ways_is_asked_back(text: str, unit: str, question: str) -> None:
    with pytest.raises(UnitError) as caught:
        parse_quantity(text, unit)
    assert question in caught.value.expected


@pytest.mark.parametrize(("text", "unit", "found"), REFUSED)
def test_what_is_no_value_is_refused_and_named(text: str, unit: str, found: str) -> None:
    with pytest.raises(UnitError) as caught:
        parse_quantity(text, unit)
    assert found in caught.value.found
    assert UNITS[unit].example in caught.value.expected


@pytest.mark.parametrize(
    ("text", "value"),
    [("4,7 uF", 4.7e-6), ("4.7 uF", 4.7e-6), ("1.000,5 uF", 1000.5e-6), ("0.100 uF", 1e-7)],
)
def test_decimal_commas_where_they_are_asked_for(text: str, value: float) -> None:
    assert parse_quantity(text, "F", decimal_comma=True) == pytest.approx(value, rel=1e-15)


def test_grouped_or_decimal_is_asked_in_either_dialect() -> None:
    with pytest.raises(UnitError, match=r"4700 or 4\.700"):
        parse_quantity("4.700 pF", "F", decimal_comma=True)


def test_a_number_that_is_no_text_is_taken_as_it_is() -> None:
    assert parse_quantity(1000.0, "Hz") == 1000.0
    with pytest.raises(UnitError):
        parse_quantity(math.nan, "Hz")


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (4.7e-6, "F", "4.7 µF"),
        (1e5, "Hz", "100 kHz"),
        (0.0, "V", "0 V"),
        (-40.0, "V", "-40 V"),
        (999.96e-9, "F", "1 µF"),
        (4700.0, "ohm", "4.7 kΩ"),
        (90.0, "s", "1 min 30 s"),
        (5400.0, "s", "1 h 30 min"),
        (0.25, "s", "250 ms"),
        (23.0, "degC", "23 °C"),
        (0.05, "1", "0.05"),
    ],
)
def test_values_are_written_as_the_trade_writes_them(value: float, unit: str, text: str) -> None:
    assert format_quantity(value, unit) == text


def test_what_is_missing_is_no_number() -> None:
    assert format_quantity(None, "F") == "–"
    assert format_quantity(math.nan, "F") == "–"


@given(
    unit=st.sampled_from(sorted(UNITS)),
    value=st.floats(1e-17, 1e13) | st.floats(-1e13, -1e-17),
    digits=st.integers(1, 15),
)
def test_what_is_written_reads_back_to_its_digits(unit: str, value: float, digits: int) -> None:
    # durations are written in days, hours and minutes, and only forwards
    assume(unit != "s" or value > 0)
    back = parse_quantity(format_quantity(value, unit, digits), unit)
    assert back == pytest.approx(value, rel=0.5 * 10.0 ** (1 - digits) * (1 + 1e-9))


@given(st.text(max_size=30), st.sampled_from(sorted(UNITS)), st.booleans())
def test_any_text_is_a_finite_value_or_refused(text: str, unit: str, decimal_comma: bool) -> None:
    try:
        value = parse_quantity(text, unit, decimal_comma=decimal_comma)
    except UnitError:
        return
    assert math.isfinite(value)


@given(
    st.integers(1, 9999), st.integers(0, 99), st.sampled_from(["p", "n", "u", "m"]), st.booleans()
)
def test_a_letter_at_the_decimal_point_is_the_point(
    whole: int, part: int, prefix: str, spelled: bool
) -> None:
    plain = parse_quantity(f"{whole}.{part:02d} {prefix}F", "F")
    assert parse_quantity(f"{whole}{prefix}{part:02d}{'F' if spelled else ''}", "F") == plain
