"""JCGM 106:2012 and ILAC-G8:09/2019: probabilities of conformity, guard bands, risks."""

from math import exp, gamma, nan

import numpy as np
import pytest
from scipy.optimize import brentq

from ohmward.metrology.decide import (
    EmptyLimits,
    Risks,
    conformity_probability,
    decide,
    decide_by_probability,
    global_risks,
)
from ohmward.metrology.errors import BadCovariance
from ohmward.terms.decision import Decision


# JCGM 106:2012 clause 7; the examples' inputs are from memory, not confirmed against the text
@pytest.mark.parametrize(
    ("value", "u", "minimum", "maximum", "probability"),
    [(-5.47, 0.05, None, -5.40, 0.9192), (509.7, 8.6, 490.0, None, 0.9890)],
)
def test_conformity_probability(
    value: float, u: float, minimum: float | None, maximum: float | None, probability: float
) -> None:
    found = conformity_probability(value, u, minimum, maximum)
    assert found == pytest.approx(probability, abs=5e-5)


# ILAC-G8:09/2019: with w = U a value on the acceptance limit is falsely accepted in 1 − Φ(2)
def test_a_guard_band_of_u_leaves_one_minus_phi_of_two() -> None:
    decision, probability = decide(10.0 - 2 * 0.5, 0.5, 2.0, None, 10.0)
    assert decision is Decision.ACCEPT
    assert 1 - probability == pytest.approx(0.02275, abs=1e-5)
    assert decide(10.0 - 1.999 * 0.5, 0.5, 2.0, None, 10.0)[0] is Decision.UNDECIDED
    assert decide(10.0 + 2.001 * 0.5, 0.5, 2.0, None, 10.0)[0] is Decision.REJECT


def _ball_bearings(acceptance_um: float) -> Risks:
    """JCGM 106:2012, 9.5.4: gamma prior (a = 4, scale 1/4), upper limit 2 µm, u 0.25 µm."""

    def prior(eta: np.ndarray) -> np.ndarray:
        return eta**3 * np.exp(-eta * 4) * 4**4 / gamma(4)

    return global_risks(
        prior, (0.0, 20.0), 0.25, minimum=None, maximum=2.0, acceptance=(None, acceptance_um)
    )


def test_ball_bearings_population_and_risks() -> None:
    found = _ball_bearings(2.0)
    assert found.nonconforming == pytest.approx(0.04238, abs=5e-6)
    # the same tail in closed form: e^−8·Σ 8^k/k!, k to 3
    assert found.nonconforming == pytest.approx(exp(-8) * (1 + 8 + 32 + 512 / 6), rel=1e-9)
    assert found.consumer == pytest.approx(0.008019, abs=5e-7)
    assert found.producer == pytest.approx(0.017445, abs=1e-6)


def test_ball_bearings_acceptance_limit_for_a_chosen_risk() -> None:
    limit = brentq(lambda a: _ball_bearings(a).consumer - 0.001, 1.5, 2.0, xtol=1e-9)
    assert limit == pytest.approx(1.67183, abs=5e-6)


@pytest.mark.parametrize("guard", [0.0, 0.5, 1.0])
@pytest.mark.parametrize("value", [9.4, 9.8, 10.0, 10.2, 10.6])
def test_zones_by_value_and_by_probability_agree_at_one_limit(value: float, guard: float) -> None:
    if guard == 0.0 and value == 10.0:
        return  # on the limit itself p is exactly a half, and both are right
    decision, probability = decide(value, 0.15, 2.0, None, 10.0, guard)
    assert decide_by_probability(probability, 2.0, guard) is decision


def test_what_is_not_known_is_invalid_and_never_rejected() -> None:
    for value, u in ((nan, 1.0), (99.0, nan)):
        decision, probability = decide(value, u, 2.0, None, 1.0)
        assert decision is Decision.INVALID
        assert np.isnan(probability)
    assert decide_by_probability(nan, 2.0) is Decision.INVALID
    assert decide(1.0, 0.1, 2.0, None, None)[0] is Decision.REPORTED
    assert decide(nan, 0.1, 2.0, None, None)[0] is Decision.INVALID


def test_limits_closer_than_two_guard_bands_accept_nothing() -> None:
    assert decide(1.0, 0.3, 2.0, 0.5, 1.5)[0] is Decision.UNDECIDED


def test_an_exact_value_is_decided_by_the_limit_itself() -> None:
    assert decide(1.0, 0.0, 2.0, None, 1.0) == (Decision.ACCEPT, 1.0)
    assert decide(1.1, 0.0, 2.0, None, 1.0) == (Decision.REJECT, 0.0)


def test_nonsense_is_refused_by_name() -> None:
    with pytest.raises(BadCovariance):
        decide(1.0, -0.1, 2.0, None, 1.0)
    with pytest.raises(EmptyLimits):
        decide(1.0, 0.1, 2.0, 2.0, 1.0)
