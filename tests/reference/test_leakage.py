"""Leakage over time against the laws of absorption and charging (Curie–von Schweidler, RC)."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from ohmward.metrology.errors import BadCovariance, TooFewPoints
from ohmward.metrology.leakage import (
    BadTime,
    LeakageFit,
    absorption_current,
    charging_current,
    charging_is_negligible,
    drift_current,
    early_end,
    fit_leakage,
    trend,
)

T = np.geomspace(10.0, 900.0, 60)
NOISE = 1e-13


def _fit(leak_a: float, exponent: float = 0.8, **more: object) -> LeakageFit:
    return fit_leakage(T, absorption_current(T, 1e-8, exponent) + leak_a, NOISE, **more)


def test_absorption_alone_has_an_index_of_ten_to_the_n() -> None:
    """R(10 min)/R(1 min) = 10^n; ratio 60/30 s = 2^n (calculated)."""
    fit = _fit(0.0)
    assert fit.polarization_index()[0] == pytest.approx(6.3096, abs=1e-4)
    assert fit.polarization_index(30.0, 60.0)[0] == pytest.approx(1.7411, abs=5e-5)


# A 1e-8, n 0.8 with leakage 0 / 0.1 / 1 nA (calculated)
@pytest.mark.parametrize(("leak_a", "index"), [(0.0, 6.310), (1e-10, 2.989), (1e-9, 1.300)])
def test_leakage_lowers_the_polarization_index(leak_a: float, index: float) -> None:
    assert _fit(leak_a).polarization_index()[0] == pytest.approx(index, abs=1e-3)


def test_a_drifting_supply_is_false_leakage() -> None:
    """1 mV/s on 1 µF is 1 nA (calculated); taken off, nothing of it is left in the fit."""
    assert drift_current(1e-6, 1e-3) == pytest.approx(1e-9)
    drift = drift_current(1e-6, 1e-3 * np.sin(T / 50))
    clean = absorption_current(T, 1e-8, 0.9) + 2e-10
    fit = fit_leakage(T, clean + drift, NOISE, drift_a=drift)
    assert fit.leak_a == pytest.approx(2e-10, abs=3 * fit.u()[2])


def test_charging_is_not_absorption() -> None:
    """10 µF at 400 V through 1 MΩ still takes 0.99 µA after 60 s (calculated)."""
    assert charging_current(60.0, 400.0, 1e6, 10e-6) == pytest.approx(0.99e-6, abs=0.005e-6)
    setting = {"voltage_v": 400.0, "resistance_ohm": 1e6, "capacitance_f": 10e-6}
    assert not charging_is_negligible(60.0, limit_a=10e-6, **setting)
    assert charging_is_negligible(60.0, limit_a=100e-6, **setting)
    total = charging_current(T, 400.0, 1e6, 10e-6) + absorption_current(T, 1e-6, 0.9) + 5e-9
    fit = fit_leakage(T, total, 1e-11, charge_tau_s=10.0)
    assert fit.charge_a == pytest.approx(400e-6, rel=1e-4)
    assert fit.leak_a == pytest.approx(5e-9, abs=3 * fit.u()[2])


@pytest.mark.parametrize("exponent", [0.8, 0.95, 1.1])
def test_the_parameters_come_back(exponent: float) -> None:
    fit = _fit(3e-10, exponent)
    assert fit.amplitude_a == pytest.approx(1e-8, rel=1e-3)
    assert fit.exponent == pytest.approx(exponent, abs=1e-3)
    assert fit.leak_a == pytest.approx(3e-10, rel=1e-2)


@pytest.mark.slow
def test_the_stated_uncertainties_are_those_of_repeated_experiments() -> None:
    rng = np.random.default_rng(7)
    noise, clean = 2e-12, absorption_current(T, 1e-8, 0.9) + 3e-10
    leak, at_60, index, pulls = [], [], [], []
    for _ in range(400):
        fit = fit_leakage(T, clean + noise * rng.normal(size=T.size), noise)
        value, u = fit.current_at(60.0)
        ratio, u_ratio = fit.polarization_index()
        truth = clean_at(60.0), clean_at(600.0)
        leak.append((fit.leak_a - 3e-10) / fit.u()[2])
        at_60.append((value - truth[0]) / u)
        index.append((ratio - truth[0] / truth[1]) / u_ratio)
    for pulls in (leak, at_60, index):
        assert 0.85 < np.sqrt(np.mean(np.square(pulls))) < 1.15


def clean_at(t_s: float) -> float:
    return float(absorption_current(t_s, 1e-8, 0.9) + 3e-10)


def test_pure_leakage_without_absorption_is_found_too() -> None:
    rng = np.random.default_rng(2)
    fit = fit_leakage(T, 1e-9 + 1e-12 * rng.normal(size=T.size), 1e-12)
    value, u = fit.current_at(60.0)
    assert value == pytest.approx(1e-9, abs=4 * u)
    assert fit.polarization_index()[0] == pytest.approx(1.0, abs=0.01)


def test_missing_readings_are_left_out() -> None:
    current = absorption_current(T, 1e-8, 0.9) + 3e-10
    holes = current.copy()
    holes[::7] = np.nan
    assert fit_leakage(T, holes, NOISE).leak_a == pytest.approx(3e-10, rel=1e-2)


@pytest.mark.slow
def test_a_rising_current_is_told_from_a_falling_one() -> None:
    rng = np.random.default_rng(4)
    t = np.arange(60.0, 70.0)
    assert trend(t, 1e-9 + 1e-11 * (t - 60), 1e-12).rising
    assert not trend(t, 1e-9 - 1e-11 * (t - 60), 1e-12).rising
    alarms = sum(trend(t, 1e-9 + 1e-12 * rng.normal(size=10), 1e-12).rising for _ in range(2000))
    assert alarms <= 20


@pytest.mark.slow
def test_an_early_end_keeps_the_risk_that_was_stated() -> None:
    """Parts whose current at 300 s lies about the limit: ended early, few are above it."""
    rng = np.random.default_rng(9)
    t = np.linspace(20.0, 100.0, 41)
    wrong = ended = 0
    for _ in range(600):
        leak = rng.uniform(0.2e-9, 1.2e-9)
        clean = absorption_current(t, 2e-8, 0.9) + leak
        readings = clean + 2e-11 * rng.normal(size=t.size)
        fit = fit_leakage(t, readings, 2e-11)
        found = early_end(
            fit,
            trend(t, readings, 2e-11),
            at_s=300.0,
            limit_a=0.8e-9,
            u_common_a=0.0,
            risk=0.025,
        )
        truth = float(absorption_current(300.0, 2e-8, 0.9)) + leak
        ended += found.may_end
        wrong += found.may_end and truth > 0.8e-9
    assert ended > 100
    assert wrong <= 0.025 * 600


def test_an_early_end_is_refused_where_it_proves_nothing() -> None:
    fit = _fit(1e-10)
    flat = trend(T, absorption_current(T, 1e-8, 0.8), NOISE)
    rising = trend(T, 1e-9 + 1e-12 * T, NOISE)
    setting = {"limit_a": 1e-6, "u_common_a": 0.0, "risk": 0.01}
    assert early_end(fit, flat, at_s=1000.0, **setting).may_end
    assert "rising" in early_end(fit, rising, at_s=1000.0, **setting).reason
    assert "ahead" in early_end(fit, flat, at_s=1e5, **setting).reason
    assert "risk" in early_end(fit, flat, at_s=1000.0, **{**setting, "limit_a": 1e-11}).reason
    bent = fit_leakage(T, absorption_current(T, 1e-8, 0.8) * (1 + 0.1 * np.sin(T)), NOISE)
    assert "curve" in early_end(bent, flat, at_s=1000.0, **setting).reason


def test_nonsense_is_refused_by_name() -> None:
    with pytest.raises(TooFewPoints):
        fit_leakage(T[:3], T[:3], 1.0)
    with pytest.raises(BadTime):
        fit_leakage(T - 10.0, T, 1.0)
    with pytest.raises(BadCovariance):
        fit_leakage(T, T, 0.0)
    with pytest.raises(TooFewPoints):
        trend(T[:3], T[:3], 1.0)


def test_the_gradient_is_the_slope() -> None:
    fit = fit_leakage(
        T,
        charging_current(T, 1e-3, 1e3, 1e-2) + absorption_current(T, 1e-8, 0.9),
        NOISE,
        charge_tau_s=10.0,
    )
    t = np.array([15.0, 100.0])
    slope = fit.gradient(t)
    by_n = absorption_current(t, fit.amplitude_a, fit.exponent + 1e-6)
    by_n = (by_n - absorption_current(t, fit.amplitude_a, fit.exponent - 1e-6)) / 2e-6
    assert_allclose(slope[:, 1], by_n, rtol=1e-6)
    assert_allclose(slope[:, 0], absorption_current(t, 1.0, fit.exponent))
    assert_allclose(slope[:, 3], np.exp(-t / 10.0))
