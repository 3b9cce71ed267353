"""Self-resonance: what is claimed where there is no sign change, noise, or a coarse grid."""

import numpy as np
import pytest

from ohmward.metrology.errors import BadFrequency, TooFewPoints
from ohmward.metrology.resonance import self_resonance


def _series(f: np.ndarray, r: float, l_h: float, c_f: float) -> np.ndarray:
    w = 2 * np.pi * f
    return r + 1j * (w * l_h - 1 / (w * c_f))


def test_without_a_sign_change_the_swept_range_is_told() -> None:
    f = np.geomspace(1e3, 1e6, 7)
    z = _series(f, 1.0, 1e-9, 1e-9)
    found = self_resonance(f, z.real, z.imag, 1e-3, 1e-3, 0.0)
    assert np.isnan(found.frequency_hz)
    assert (found.lowest_hz, found.highest_hz, found.first_sign) == (1e3, pytest.approx(1e6), -1)


def test_noise_about_zero_is_no_resonance() -> None:
    """A resistor's reactance is nothing but noise at low frequencies, and has any sign there."""
    rng = np.random.default_rng(5)
    f = np.geomspace(1e3, 1e6, 25)
    x = 2 * np.pi * f * 1e-9 + rng.normal(size=f.size) * 1e-3
    found = self_resonance(f, np.full_like(f, 50.0), x, 1e-3, 1.2e-3, 0.0)
    assert np.isnan(found.frequency_hz)


@pytest.mark.parametrize("points_per_decade", [1, 3, 10])
def test_the_uncertainty_covers_a_frequency_dependent_loss(points_per_decade: int) -> None:
    """A lossy dielectric bends f·X over f²; the stated uncertainty must own up to it."""
    l_h, c_f, tan = 10e-9, 1e-7, 0.02
    f = np.geomspace(1e5, 1e8, 3 * points_per_decade + 1) * 1.13
    w = 2 * np.pi * f
    z = 1j * w * l_h + 1 / (1j * w * c_f * (1j * w / 1e6) ** (-2 * tan / np.pi))
    fine = np.geomspace(1e6, 1e7, 400_001)
    w = 2 * np.pi * fine
    exact = 1j * w * l_h + 1 / (1j * w * c_f * (1j * w / 1e6) ** (-2 * tan / np.pi))
    truth = fine[np.argmin(np.abs(exact.imag))]
    u = 1e-5 * np.abs(z)
    found = self_resonance(f, z.real, z.imag, u, u, 0.0)
    assert abs(found.frequency_hz - truth) < 2 * found.u_hz + 1e-5 * truth


def test_order_does_not_matter_and_bad_points_are_left_out() -> None:
    f = np.geomspace(1e5, 1e8, 13)
    z = _series(f, 0.1, 10e-9, 1e-7)
    u = 1e-4 * np.abs(z)
    plain = self_resonance(f, z.real, z.imag, u, u, 0.0)
    order = np.random.default_rng(1).permutation(13)
    f2, z2, u2 = (np.append(array[order], np.nan) for array in (f, z, u))
    mixed = self_resonance(f2, z2.real, z2.imag, u2, u2, 0.0)
    assert mixed.frequency_hz == pytest.approx(plain.frequency_hz, rel=1e-12)


def test_two_points_claim_no_more_than_their_bracket() -> None:
    z = _series(np.array([1e6, 1e7]), 0.1, 10e-9, 1e-7)
    found = self_resonance([1e6, 1e7], z.real, z.imag, 0.0, 0.0, 0.0)
    assert found.u_hz > 1e6


def test_nonsense_is_refused_by_name() -> None:
    with pytest.raises(TooFewPoints):
        self_resonance([1e3], [1.0], [1.0], [0.1], [0.1], [0.0])
    with pytest.raises(BadFrequency):
        self_resonance([-1e3, 1e3], 1.0, 1.0, 0.1, 0.1, 0.0)
