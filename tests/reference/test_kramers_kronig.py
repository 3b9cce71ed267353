"""Linear Kramers–Kronig test: the authors' μ, known networks, steps and false alarms.

M. Schönleber, P. Klotz, E. Ivers-Tiffée 2014, doi 10.1016/j.electacta.2014.01.034.
"""

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray

from ohmward.metrology.errors import BadCovariance, BadFrequency, ShapeMismatch, TooFewPoints
from ohmward.metrology.kramers_kronig import (
    BRANCHES_PER_DECADE,
    check_sweep,
    mu,
    time_constants,
)

Array = NDArray[np.float64]
F = np.geomspace(20.0, 2e6, 51)
REPEATABILITY = 1e-4


# μ = 1 − Σ|R<0|/ΣR≥0, by hand
@pytest.mark.parametrize(
    ("coefficients", "value"), [([1, 2, 3, -3, -2, -1], 0.0), ([-1, 2, 4, -3, 4, -1], 0.5)]
)
def test_mu(coefficients: list[float], value: float) -> None:
    assert mu(coefficients) == pytest.approx(value, abs=1e-12)


def test_time_constants_reach_half_a_decade_beyond_the_sweep() -> None:
    """The paper's grid, 1/w_max to 1/w_min log spaced, widened by half a decade to each side."""
    tau = time_constants(F)
    w = 2 * np.pi * F
    assert tau[0] == pytest.approx(10**-0.5 / w.max(), rel=1e-12)
    assert tau[-1] == pytest.approx(10**0.5 / w.min(), rel=1e-12)
    per_decade = 1 / np.diff(np.log10(tau))
    assert np.all(per_decade >= BRANCHES_PER_DECADE - 1e-9)
    assert np.ptp(per_decade) < 1e-9


# closed forms of networks that obey the relations by construction
PARTS: dict[str, Callable[[Array], NDArray[np.complex128]]] = {
    "film": lambda jw: 0.02 + jw * 10e-9 + 1 / (jw * 1e-7 * (jw / 1e3) ** (-0.001 / np.pi)),
    "lossy ceramic": lambda jw: 0.01 + jw * 1e-9 + 1 / (jw * 1e-7 * (jw / 1e3) ** (-0.04 / np.pi)),
    "leaky": lambda jw: 0.1 + 1 / (jw * 1e-7 + 1e-5),
    "absorbing": lambda jw: 0.1 + jw * 1e-8 + 1 / (jw * (1e-7 + 2e-9 / (1 + jw * 1e-4))),
    "inductor": lambda jw: 1 / (jw * 30e-12 + 1e-6 + 1 / (2 + jw * 1e-3)),
    "iron core": lambda jw: 1 / (jw * 30e-12 + 1 / (2 + jw * 1e-3 * (1 + 0.2 / (1 + jw * 1e-6)))),
    "resistor": lambda jw: 100.0 + jw * 20e-9,
    "high resistor": lambda jw: 1 / (1e-5 + jw * 0.3e-12),
}


def _noisy(name: str, rng: np.random.Generator, f: Array = F) -> NDArray[np.complex128]:
    noise = rng.normal(size=f.size) + 1j * rng.normal(size=f.size)
    return PARTS[name](2j * np.pi * f) * (1 + REPEATABILITY * noise)


@pytest.mark.slow
@pytest.mark.parametrize("name", PARTS)
def test_a_sound_part_is_followed_to_within_its_repeatability(name: str) -> None:
    rng = np.random.default_rng(1)
    checks = [check_sweep(F, _noisy(name, rng), REPEATABILITY) for _ in range(40)]
    ratios = [check.chi_square / check.degrees for check in checks]
    # the part's own branches are chosen from the data and take a little more than their share
    assert 0.85 < np.mean(ratios) < 1.1
    assert sum(not check.consistent for check in checks) <= 3


@pytest.mark.slow
def test_at_most_one_false_alarm_in_a_hundred_sound_sweeps() -> None:
    rng = np.random.default_rng(2)
    count = 150
    alarms = sum(
        check_sweep(F, _noisy(name, rng), REPEATABILITY).found
        for name in PARTS
        for _ in range(count)
    )
    assert alarms <= 0.01 * count * len(PARTS)


@pytest.mark.slow
@pytest.mark.parametrize("name", PARTS)
def test_a_step_of_five_times_the_repeatability_is_found_where_it_is(name: str) -> None:
    """Anywhere but in the first and last decade, where the chain's ends can follow it."""
    rng = np.random.default_rng(3)
    count, found, near = 60, 0, 0
    for _ in range(count):
        place = int(rng.integers(11, F.size - 11))
        z = _noisy(name, rng)
        z[place:] *= 1 + 5 * REPEATABILITY
        check = check_sweep(F, z, REPEATABILITY)
        found += check.found
        near += abs(int(np.searchsorted(F, check.step_before_hz * 0.999)) - place) <= 2
    assert found >= 0.95 * count
    assert near >= 0.9 * count


def test_the_size_and_place_of_a_step_are_told() -> None:
    rng = np.random.default_rng(4)
    z = _noisy("film", rng)
    z[25:] *= 1 + 2e-3 - 1e-3j
    check = check_sweep(F, z, REPEATABILITY)
    assert check.found
    assert (check.step_after_hz, check.step_before_hz) == (F[24], F[25])
    assert check.step == pytest.approx(2e-3 - 1e-3j, abs=4e-4)


def test_what_is_not_causal_is_inconsistent() -> None:
    """A constant phase offset has no real part that belongs to it."""
    z = PARTS["film"](2j * np.pi * F) * np.exp(2e-3j)
    assert not check_sweep(F, z, REPEATABILITY).consistent


def test_order_and_missing_points_do_not_matter() -> None:
    rng = np.random.default_rng(5)
    z = _noisy("inductor", rng)
    plain = check_sweep(F, z, REPEATABILITY)
    order = rng.permutation(F.size)
    mixed = check_sweep(
        np.append(F[order], 5e3), np.append(z[order], np.nan), np.full(F.size + 1, REPEATABILITY)
    )
    assert mixed.chi_square == pytest.approx(plain.chi_square, rel=1e-6)
    assert np.isnan(mixed.residual_real[-1])
    np.testing.assert_allclose(mixed.residual_imag[:-1], plain.residual_imag[order], atol=1e-5)


def test_nonsense_is_refused_by_name() -> None:
    z = PARTS["film"](2j * np.pi * F)
    with pytest.raises(TooFewPoints):
        check_sweep(F[::5], z[::5], 1e-4)
    with pytest.raises(ShapeMismatch):
        check_sweep(F, z[:-1], 1e-4)
    with pytest.raises(ShapeMismatch):
        check_sweep(F, z, np.ones(3))
    with pytest.raises(BadFrequency):
        check_sweep(-F, z, 1e-4)
    with pytest.raises(BadCovariance):
        check_sweep(F, z, 0.0)
