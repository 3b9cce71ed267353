"""Ageing by EIA-198, temperature codes, and what bias does to C and L."""

import numpy as np
import pytest

from ohmward.metrology.ageing import (
    HOUR_S,
    RATES,
    AgeingRate,
    NotAgeing,
    aged_fraction,
    at_reference_time,
)
from ohmward.metrology.bias import BeyondSweep, change_at, saturation_current
from ohmward.metrology.errors import BadCovariance, TooFewPoints
from ohmward.metrology.temperature import COPPER, DIELECTRICS, at_reference_temperature


# EIA-198: C(t) = C(1 h)(1 − k·log10 t), at k = 2.5 %
@pytest.mark.parametrize(("hours", "fraction"), [(1, 1.0), (10, 0.975), (1000, 0.925)])
def test_ageing_at_two_and_a_half_percent(hours: float, fraction: float) -> None:
    assert float(aged_fraction(hours * HOUR_S, 0.025)) == pytest.approx(fraction, abs=1e-12)


# makers' ranges, percent per decade-hour
@pytest.mark.parametrize(
    ("dielectric", "low", "high"),
    [("c0g", 0.0, 0.1), ("x7r", 1.5, 4.0), ("x5r", 1.5, 4.0), ("y5v", 5.0, 9.0)],
)
def test_rates_cover_the_published_ranges(dielectric: str, low: float, high: float) -> None:
    rate = RATES[dielectric]
    assert 100 * (rate.per_decade - rate.half_width) == pytest.approx(low, abs=1e-9)
    assert 100 * (rate.per_decade + rate.half_width) == pytest.approx(high, abs=1e-9)


def test_a_part_measured_early_is_carried_to_a_thousand_hours() -> None:
    value, u = at_reference_time(
        100e-9, 0.1e-9, 10 * HOUR_S, AgeingRate(per_decade=0.025, half_width=0.0)
    )
    assert float(value) == pytest.approx(100e-9 * 0.925 / 0.975, rel=1e-12)
    assert float(u) == pytest.approx(0.1e-9 * 0.925 / 0.975, rel=1e-9)


def test_the_correction_owns_up_to_what_is_not_known_of_the_rate() -> None:
    """Rates drawn over the published range: the stated u is their scatter; none at 1000 h."""
    rng = np.random.default_rng(1)
    rate = RATES["x7r"]
    value, u = at_reference_time(100e-9, 0.0, 10 * HOUR_S, rate)
    drawn = rate.per_decade + rate.half_width * rng.uniform(-1, 1, 20000)
    truth = 100e-9 * aged_fraction(1000 * HOUR_S, drawn) / aged_fraction(10 * HOUR_S, drawn)
    assert float(u) == pytest.approx(truth.std(), rel=0.02)
    assert float(value) == pytest.approx(truth.mean(), rel=1e-3)
    assert float(at_reference_time(100e-9, 0.0, 1000 * HOUR_S, rate)[1]) == 0.0


def test_a_resistance_of_copper() -> None:
    """IEC 60028 (from memory): 3.93e-3 per kelvin at 20 degC, so 10 ohm at 30 degC is 9.6219."""
    value, u = at_reference_temperature(10.0, 0.0, 30.0, 0.5, COPPER, 20.0)
    assert float(value) == pytest.approx(10.0 / 1.0393, rel=1e-12)
    assert float(u) == pytest.approx(9.6219 * 3.93e-3 / 1.0393 * 0.5, rel=0.02)


def test_c0g_is_not_corrected_but_its_30_ppm_per_kelvin_is_carried() -> None:
    value, u = at_reference_temperature(1e-9, 0.0, 35.0, 0.0, DIELECTRICS["c0g"], 25.0)
    assert float(value) == 1e-9
    assert float(u) == pytest.approx(1e-9 * 10 * 30e-6 / np.sqrt(3), rel=1e-9)


def test_a_class_2_code_bounds_the_change_and_corrects_nothing() -> None:
    """X7R: within ±15 % from −55 to 125 degC; at the nearer end the bound is that 15 %."""
    value, u = at_reference_temperature(1e-7, 0.0, -55.0, 0.0, DIELECTRICS["x7r"], 25.0)
    assert float(value) == 1e-7
    assert float(u) * np.sqrt(3) == pytest.approx(0.15e-7, rel=1e-9)


def test_there_and_back_is_where_it_was() -> None:
    film = DIELECTRICS["pp"]
    away, _ = at_reference_temperature(1e-7, 0.0, 35.0, 0.0, film, 20.0)
    back, _ = at_reference_temperature(away, 0.0, 20.0, 0.0, film, 35.0)
    assert float(back) == pytest.approx(1e-7, rel=1e-12)
    assert np.isnan(at_reference_temperature(1.0, 0.0, np.nan, 0.0, film, 20.0)[0])


def test_saturation_of_a_known_core() -> None:
    """L = L0/(1 + (I/Is)²): down by 20 % at I = Is/2."""
    current = np.linspace(0.0, 1.0, 21)
    change = 1 / (1 + (current / 0.8) ** 2) - 1
    found = saturation_current(current, change, 1e-3, 0.2)
    assert abs(found.current_a - 0.4) < 2 * found.u_a
    assert found.u_a < 0.01
    exact = saturation_current(
        np.linspace(0.0, 1.0, 2001),
        1 / (1 + (np.linspace(0.0, 1.0, 2001) / 0.8) ** 2) - 1,
        0.0,
        0.2,
    )
    assert exact.current_a == pytest.approx(0.4, abs=1e-5)
    short = saturation_current(current[:5], change[:5], 1e-3, 0.2)
    assert np.isnan(short.current_a)
    assert short.highest_a == current[4]


def test_loss_at_the_working_voltage() -> None:
    bias = [0.0, 10.0, 20.0, 40.0]
    change = [0.0, -0.1, -0.3, -0.5]
    value, u = change_at(bias, change, 0.002, 15.0)
    assert value == pytest.approx(-0.2)
    assert u == pytest.approx(np.hypot(0.002, 0.25 * 0.2 / np.sqrt(3)))
    assert change_at(bias, change, 0.002, 20.0) == pytest.approx((-0.3, 0.002))
    with pytest.raises(BeyondSweep):
        change_at(bias, change, 0.002, 50.0)


def test_nonsense_is_refused_by_name() -> None:
    with pytest.raises(NotAgeing):
        aged_fraction(0.0, 0.025)
    with pytest.raises(NotAgeing):
        aged_fraction(1e12 * HOUR_S, 0.1)
    with pytest.raises(BadCovariance):
        at_reference_time(1e-7, -1.0, HOUR_S, RATES["x7r"])
    with pytest.raises(BadCovariance):
        at_reference_temperature(1.0, 0.1, 20.0, -1.0, COPPER, 20.0)
    with pytest.raises(BadCovariance):
        saturation_current([0.0, 1.0], [0.0, -0.5], -1.0, 0.2)
    with pytest.raises(TooFewPoints):
        saturation_current([0.0], [0.0], 0.1, 0.2)
