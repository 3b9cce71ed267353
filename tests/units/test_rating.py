"""Voltage ratings: DC and AC are kept apart."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.units.rating import Rating, parse_rating
from ohmward.units.values import UnitError


@pytest.mark.parametrize(
    "text",
    ["450 V DC", "450VDC", "450 Vdc", "450V=", "450 V-", "450-", "450WV", "450 WVDC", "450VDCW"],
)
def test_ways_to_write_a_dc_rating(text: str) -> None:
    assert parse_rating(text) == Rating(dc_v=450.0)


@pytest.mark.parametrize("text", ["275 V AC", "275VAC", "275 V~", "275~", "275 V a.c.", "275 Vrms"])
def test_an_ac_rating_is_no_dc_rating(text: str) -> None:
    assert parse_rating(text) == Rating(ac_v=275.0)


def test_both_may_stand_together() -> None:
    assert parse_rating("630 V DC / 250 V AC") == Rating(dc_v=630.0, ac_v=250.0)
    assert parse_rating("250~ / 630-") == Rating(dc_v=630.0, ac_v=250.0)


@pytest.mark.parametrize(("text", "volts"), [("63 V", 63.0), ("6V3", 6.3), ("1 kV", 1000.0)])
def test_a_plain_rating_is_dc_and_says_that_it_did_not_say(text: str, volts: float) -> None:
    assert parse_rating(text) == Rating(dc_v=volts, stated=False)


@pytest.mark.parametrize(
    "text",
    [
        "",
        "450",
        "-5 V",
        "0 V",
        "50 A",
        "50 Vpp",
        "450 V DC / 300 V DC",
        "63 V / 40 V AC",
        "1,000 V",
    ],
)
def test_what_is_no_rating_is_refused(text: str) -> None:
    with pytest.raises(UnitError):
        parse_rating(text)


@given(st.text(max_size=20), st.booleans())
def test_any_text_is_a_positive_rating_or_refused(text: str, decimal_comma: bool) -> None:
    try:
        rating = parse_rating(text, decimal_comma=decimal_comma)
    except UnitError:
        return
    assert all(volts is None or volts > 0 for volts in (rating.dc_v, rating.ac_v))
    assert rating.dc_v is not None or rating.ac_v is not None
