"""Type B uncertainty: the formula of the accuracy statement, worked by hand."""

from math import atan2, cos, hypot, radians, sin, sqrt

import numpy as np
import pytest

from ohmward.metrology.accuracy import add_independent, add_resolution, impedance_uncertainty
from ohmward.metrology.errors import AccuracyHole
from ohmward.terms.accuracy import AccuracyBand, ImpedanceAccuracy, LevelFactor

BAND = AccuracyBand(
    frequency_min_hz=100,
    frequency_max_hz=1e5,
    impedance_min_ohm=1,
    impedance_max_ohm=1e6,
    magnitude_rel=1e-3,
    phase_rad=2e-3,
)
WIDE = AccuracyBand(
    frequency_min_hz=20,
    frequency_max_hz=1e6,
    impedance_min_ohm=0,
    impedance_max_ohm=1e8,
    magnitude_rel=5e-3,
    phase_rad=5e-3,
)
ACCURACY = ImpedanceAccuracy(
    distribution="rectangular",
    bands=(BAND, WIDE),
    short_ohm=0.01,
    open_s=1e-8,
    level_factors=(
        LevelFactor(level_min_v=0.5, factor=1.0),
        LevelFactor(level_min_v=0.1, factor=2.0),
    ),
    integration_factors=(("long", 1.0), ("short", 3.0)),
    cable_factor_per_m=0.5,
    frequency_rel=1e-4,
    temperature_factor_per_k=0.1,
)


def _u(r: float, x: float, **more: object) -> tuple[float, float, float]:
    setting = {"frequency_hz": 1e3, "level_v": 1.0, "integration": "long", **more}
    u_r, u_x, rho = impedance_uncertainty(ACCURACY, r=r, x=x, **setting)
    return float(u_r), float(u_x), float(rho)


def test_a_pure_resistance_takes_magnitude_and_a_pure_reactance_takes_phase() -> None:
    residual = 0.01 / 100 + 1e-8 * 100
    u_r, u_x, rho = _u(100.0, 0.0)
    assert u_r == pytest.approx(100 * (1e-3 + residual) / sqrt(3), rel=1e-12)
    assert u_x == pytest.approx(100 * (2e-3 + residual) / sqrt(3), rel=1e-12)
    assert rho == 0.0
    u_r, u_x, _ = _u(0.0, -100.0)
    assert u_r == pytest.approx(100 * (2e-3 + residual) / sqrt(3), rel=1e-12)
    # the frequency's own half-width reaches the reactance only
    assert u_x == pytest.approx(hypot(100 * (1e-3 + residual), 100 * 1e-4) / sqrt(3), rel=1e-12)


def test_between_the_axes_r_and_x_are_correlated() -> None:
    r, x = 100 * cos(radians(-45)), 100 * sin(radians(-45))
    u_r, u_x, rho = _u(r, x)
    residual = 0.01 / 100 + 1e-8 * 100
    u_m, u_t = 100 * (1e-3 + residual) / sqrt(3), 100 * (2e-3 + residual) / sqrt(3)
    theta = atan2(x, r)
    assert rho * u_r * u_x == pytest.approx(cos(theta) * sin(theta) * (u_m**2 - u_t**2), rel=1e-12)


@pytest.mark.parametrize(
    ("setting", "factor"),
    [
        ({"level_v": 0.2}, 2.0),
        ({"level_v": 0.4999}, 1.0),  # regulated a hair below the 0.5 V that was asked for
        ({"integration": "short"}, 3.0),
        ({"cable_m": 2.0}, 2.0),
        ({"temperature_c": 33.0}, 1.5),
        ({"temperature_c": 16.0}, 1.2),
        ({"temperature_c": 23.0}, 1.0),
        ({"temperature_c": float("nan")}, 1.0),
    ],
)
def test_factors_multiply(setting: dict[str, object], factor: float) -> None:
    assert _u(100.0, 0.0, **setting)[0] == pytest.approx(factor * _u(100.0, 0.0)[0], rel=1e-9)


def test_the_first_band_that_contains_the_point_counts() -> None:
    assert _u(0.5, 0.0)[0] == pytest.approx((0.5 * 5e-3 + 0.01) / sqrt(3), rel=1e-6)
    at_zero = _u(0.0, 0.0)
    assert at_zero[0] == pytest.approx(0.01 / sqrt(3), rel=1e-9)


@pytest.mark.parametrize(
    "setting",
    [{"frequency_hz": 10.0}, {"level_v": 0.05}, {"integration": "medium"}],
)
def test_a_hole_is_named_or_left_as_nan(setting: dict[str, object]) -> None:
    with pytest.raises(AccuracyHole):
        _u(100.0, 0.0, **setting)
    assert all(np.isnan(part) for part in _u(100.0, 0.0, **setting, holes="nan")[:2])


def test_an_unknown_distribution_is_refused() -> None:
    odd = ImpedanceAccuracy(distribution="triangular", bands=(WIDE,))
    with pytest.raises(AccuracyHole):
        impedance_uncertainty(odd, frequency_hz=1e3, r=1.0, x=0.0, level_v=1.0, integration="long")


def test_resolution_belongs_to_the_pair_that_was_sent() -> None:
    """δ(D)/√12 of a Cs–D pair moves R by |X|·δ/√12, and C's last digit moves X."""
    x = 1 / (2 * np.pi * 1e3 * 1e-7)
    zero = (np.zeros(()), np.zeros(()), np.zeros(()))
    u_r, u_x, _ = add_resolution(
        zero,
        pair="Cs-D",
        first=1e-7,
        second=0.0,
        first_resolution=1e-12,
        second_resolution=1e-4,
        frequency_hz=1e3,
    )
    assert float(u_r) == pytest.approx(x * 1e-4 / sqrt(12), rel=1e-9)
    assert float(u_x) == pytest.approx(x * 1e-5 / sqrt(12), rel=1e-9)


def test_independent_parts_add_as_matrices() -> None:
    parts = [(3.0, 1.0, 0.5), (4.0, 2.0, -1.0)]
    total = sum(np.array([[a * a, c * a * b], [c * a * b, b * b]]) for a, b, c in parts)
    found = add_independent(*[tuple(np.asarray(value) for value in part) for part in parts])
    u_r, u_x, rho = (float(value) for value in found)
    assert [[u_r**2, rho * u_r * u_x], [rho * u_r * u_x, u_x**2]] == pytest.approx(total)
