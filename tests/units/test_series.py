"""Preferred values: the nearest one, and whether a value is one (the tables: tests/reference)."""

import itertools

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.units.series import SERIES, is_preferred, nearest_preferred, series_values


@pytest.mark.parametrize("name", SERIES)
def test_a_series_has_as_many_values_as_its_name_says(name: str) -> None:
    values = series_values(name)
    assert len(values) == int(name[1:])
    assert list(values) == sorted(set(values))


@given(st.sampled_from(SERIES), st.integers(0, 191), st.integers(-12, 9))
def test_preferred_values_are_found_in_any_decade(name: str, index: int, decade: int) -> None:
    values = series_values(name)
    value = values[index % len(values)] * 10.0**decade
    assert is_preferred(value, name)
    assert nearest_preferred(value, name) == pytest.approx(value, rel=1e-12)


@given(st.sampled_from(SERIES), st.floats(1e-12, 1e12))
def test_no_preferred_value_is_nearer(name: str, value: float) -> None:
    near = nearest_preferred(value, name)
    ratio = max(near / value, value / near)
    # neighbours of a series are at most its widest gap apart; half of it (by ratio) is reached
    values = (*series_values(name), 10.0)
    widest = max(high / low for low, high in itertools.pairwise(values))
    assert ratio <= widest**0.5 * (1 + 1e-9)


@pytest.mark.parametrize("value", [0.0, -1.0, float("nan"), float("inf")])
def test_only_positive_values_have_a_nearest_one(value: float) -> None:
    with pytest.raises(ValueError, match="positive"):
        nearest_preferred(value, "E12")
