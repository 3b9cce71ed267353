"""Propagation against two general-purpose libraries, and laws that any impedance obeys."""

from math import isnan

import GTC
import hypothesis.strategies as st
import numpy as np
import pytest
import uncertainties
import uncertainties.umath
from hypothesis import given
from numpy.testing import assert_allclose

from ohmward.metrology.errors import BadCovariance, BadFrequency, ShapeMismatch, UnknownPair
from ohmward.metrology.immittance import (
    PAIRS,
    VIEWS,
    covariance_of_pair,
    impedance_of_pair,
    jacobian_of_pair,
    pair_of_impedance,
    views,
)

FREQUENCIES = st.floats(20, 2e6)
OHMS = st.floats(1e-3, 1e7)
SIGNS = st.sampled_from([-1.0, 1.0])
RELATIVE = st.floats(1e-6, 0.1)
CORRELATIONS = st.floats(-0.95, 0.95)


def _formulas(w: float, r: object, x: object, absolute: object, atan2: object) -> dict[str, object]:
    """The definitions once more, in whatever kind of number another library works with."""
    m = r * r + x * x
    return {
        "impedance_ohm": m**0.5,
        "phase_rad": atan2(x, r),
        "cs_f": -1 / (w * x),
        "cp_f": -x / (w * m),
        "ls_h": x / w,
        "lp_h": m / (w * x),
        "rs_ohm": r * 1,
        "rp_ohm": m / r,
        "d": r / absolute(x),
        "q": absolute(x) / r,
    }


@pytest.mark.slow
@given(FREQUENCIES, OHMS, OHMS, SIGNS, RELATIVE, RELATIVE, CORRELATIONS)
def test_every_view_agrees_with_both_libraries(
    f: float, r: float, size: float, sign: float, rel_r: float, rel_x: float, rho: float
) -> None:
    x = sign * size
    u_r, u_x = rel_r * r, rel_x * size
    found = views(f, r, x, u_r, u_x, rho)
    w = 2 * np.pi * f

    covariance = [[u_r**2, rho * u_r * u_x], [rho * u_r * u_x, u_x**2]]
    r_, x_ = uncertainties.correlated_values([r, x], covariance)
    first = _formulas(w, r_, x_, lambda v: sign * v, uncertainties.umath.atan2)

    g_r, g_x = GTC.ureal(r, u_r, independent=False), GTC.ureal(x, u_x, independent=False)
    GTC.set_correlation(rho, g_r, g_x)
    second = _formulas(w, g_r, g_x, lambda v: sign * v, GTC.atan2)

    for name in VIEWS:
        value, u = float(found[name]), float(found[f"u_{name}"])
        assert value == pytest.approx(first[name].nominal_value, rel=1e-12), name
        assert value == pytest.approx(GTC.value(second[name]), rel=1e-12), name
        # where the two contributions all but cancel, only so many digits are left to compare
        floor = 1e-12 * _largest_contribution(name, second[name], g_r, g_x)
        assert u == pytest.approx(GTC.uncertainty(second[name]), rel=1e-12, abs=floor), name
        # the other library diagonalises the covariance, which costs it digits of its own
        assert u == pytest.approx(first[name].std_dev, rel=1e-9, abs=1e3 * floor), name


def _largest_contribution(name: str, result: object, *inputs: object) -> float:
    return 1e3 * max(abs(GTC.rp.u_component(result, one)) for one in inputs)


@given(FREQUENCIES, OHMS, OHMS, SIGNS, st.sampled_from(sorted(PAIRS)))
def test_a_pair_and_its_impedance_go_both_ways(
    f: float, r: float, size: float, sign: float, pair: str
) -> None:
    x = sign * size
    first, second = pair_of_impedance(pair, f, r, x)
    back = impedance_of_pair(pair, first, second, f)
    # 1e-9: a series value of a part whose loss is 1e10 times smaller has that many digits less
    scale = np.hypot(r, x) * max(1.0, r / size, size / r)
    assert_allclose(back, (r, x), rtol=1e-12, atol=1e-13 * scale)


@given(FREQUENCIES, OHMS, OHMS, SIGNS, st.sampled_from(sorted(PAIRS)))
def test_the_jacobian_is_the_slope(
    f: float, r: float, ratio: float, sign: float, pair: str
) -> None:
    x = sign * r * min(max(ratio, 0.02), 50.0)
    first, second = (float(value) for value in pair_of_impedance(pair, f, r, x))
    _, _, r1, r2, x1, x2 = jacobian_of_pair(pair, first, second, f)
    for which, (by_r, by_x) in enumerate(((r1, x1), (r2, x2))):
        step = 1e-5 * (first, second)[which]
        up, down = [first, second], [first, second]
        up[which] += step
        down[which] -= step
        (ru, xu), (rd, xd) = impedance_of_pair(pair, *up, f), impedance_of_pair(pair, *down, f)
        scale = np.hypot(r, x) / abs(step) * 1e-8
        assert_allclose((ru - rd) / (2 * step), by_r, rtol=1e-6, atol=scale)
        assert_allclose((xu - xd) / (2 * step), by_x, rtol=1e-6, atol=scale)


@given(FREQUENCIES, OHMS, OHMS, SIGNS, RELATIVE, RELATIVE, CORRELATIONS)
def test_covariance_survives_the_way_through_a_pair_and_back(
    f: float, r: float, size: float, sign: float, rel_r: float, rel_x: float, rho: float
) -> None:
    """Through |Z| and θ and back, a covariance of R and X is the one it was."""
    ratio = min(max(size / r, 0.01), 100.0)
    x = sign * r * ratio
    u_r, u_x = rel_r * r, rel_x * abs(x)
    z, theta = pair_of_impedance("Z-theta", f, r, x)
    found = views(f, r, x, u_r, u_x, rho, ("impedance_ohm", "phase_rad"))
    # cov(|Z|, θ) by the same chain of derivatives, written out
    shared = rho * u_r * u_x
    cov = (-r * x * u_r**2 + (r * r - x * x) * shared + r * x * u_x**2) / float(z) ** 3
    u_z, u_t = float(found["u_impedance_ohm"]), float(found["u_phase_rad"])
    back = covariance_of_pair("Z-theta", z, theta, f, u_z, u_t, np.clip(cov / (u_z * u_t), -1, 1))
    assert_allclose(back[0], u_r, rtol=1e-5, atol=1e-6 * u_x)
    assert_allclose(back[1], u_x, rtol=1e-5, atol=1e-6 * u_r)


def test_nan_in_is_nan_out_for_that_point_only() -> None:
    found = views([1e3, 1e3], [np.nan, 1.0], [-1.0, -1.0], 0.1, 0.1, 0.0)
    assert all(isnan(found[name][0]) and isnan(found[f"u_{name}"][0]) for name in ("rp_ohm", "d"))
    assert not any(isnan(found[name][1]) for name in VIEWS)


def test_a_view_that_does_not_exist_is_missing_and_not_infinite() -> None:
    found = views(1e3, 1.0, 0.0, 0.1, 0.1, 0.0)
    assert isnan(found["cs_f"])
    assert isnan(found["u_cs_f"])
    assert found["ls_h"] == 0.0


def test_nonsense_is_refused_by_name() -> None:
    with pytest.raises(BadFrequency):
        views(-1e3, 1.0, 1.0, 0.1, 0.1, 0.0)
    with pytest.raises(ShapeMismatch):
        views([1e3, 1e3], [1.0, 1.0, 1.0], 1.0, 0.1, 0.1, 0.0)
    with pytest.raises(BadCovariance):
        views(1e3, 1.0, 1.0, 0.1, 0.1, 1.1)
    with pytest.raises(BadCovariance):
        views(1e3, 1.0, 1.0, -0.1, 0.1, 0.0)
    with pytest.raises(UnknownPair):
        impedance_of_pair("C-tan", 1.0, 1.0, 1e3)
