"""Decisions of conformity with an uncertainty in hand: JCGM 106:2012, ILAC-G8:09/2019.

With the interval that a limit allows, [T_L, T_U], a measured y with standard uncertainty u and
U = k·u, the guard band is w = r·U. Inside [T_L + w, T_U − w] the part is accepted, beyond
T_U + w or T_L − w rejected, between them undecided.
"""

from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise
from math import erfc, inf, isnan, nan, sqrt

import numpy as np

from ohmward.metrology.arrays import FloatArray
from ohmward.metrology.errors import BadCovariance, MetrologyError
from ohmward.terms.decision import Decision


class EmptyLimits(MetrologyError):
    """The lower limit is above the upper one: nothing could conform."""


def normal_cdf(z: float) -> float:
    """Φ(z), accurate in both tails."""
    return 0.5 * erfc(-z / sqrt(2))


def conformity_probability(
    value: float, u: float, minimum: float | None, maximum: float | None
) -> float:
    """p = Φ((T_U − y)/u) − Φ((T_L − y)/u), JCGM 106:2012, 7.4; an absent limit is infinite.

    With u = 0 it is 1 inside the limits (borders included) and 0 outside. NaN where value or u
    is NaN. Raises BadCovariance for a negative u, EmptyLimits for crossed limits.
    """
    low = -inf if minimum is None else minimum
    high = inf if maximum is None else maximum
    if u < 0:
        raise BadCovariance("a standard uncertainty cannot be negative")
    if low > high:
        raise EmptyLimits(f"the lower limit {low:g} is above the upper limit {high:g}")
    if isnan(value) or isnan(u):
        return nan
    if u == 0:
        return 1.0 if low <= value <= high else 0.0
    # the complement of the two tails keeps its digits where p is close to one
    return max(0.0, 1 - normal_cdf((value - high) / u) - normal_cdf((low - value) / u))


def decide(
    value: float,
    u: float,
    k: float,
    minimum: float | None,
    maximum: float | None,
    guard: float = 1.0,
) -> tuple[Decision, float]:
    """The decision by guard band w = guard·k·u, and the probability of conformity.

    ``guard`` 1 is ILAC-G8's binary rule for acceptance (false acceptance below 2.5 %), 0 is
    simple acceptance (never undecided). A value or u that is NaN is INVALID with probability
    NaN, never a rejection. Without any limit the value is REPORTED with probability NaN.
    """
    if minimum is None and maximum is None:
        return (Decision.INVALID if isnan(value) or isnan(u) else Decision.REPORTED), nan
    probability = conformity_probability(value, u, minimum, maximum)
    if isnan(probability):
        return Decision.INVALID, nan
    width = guard * k * u
    low = -inf if minimum is None else minimum
    high = inf if maximum is None else maximum
    if low + width <= value <= high - width:
        return Decision.ACCEPT, probability
    if value > high + width or value < low - width:
        return Decision.REJECT, probability
    return Decision.UNDECIDED, probability


def decide_by_probability(probability: float, k: float, guard: float = 1.0) -> Decision:
    """The same zones for a distribution that is not normal, by its probability of conformity.

    At a single limit and a normal distribution, y = T_U − r·k·u means p = Φ(r·k): that p is
    the bound here, 0.97725 for guard 1 and k = 2, and its complement rejects.
    """
    if isnan(probability):
        return Decision.INVALID
    bound = normal_cdf(guard * k)
    if probability >= bound:
        return Decision.ACCEPT
    if probability <= 1 - bound:
        return Decision.REJECT
    return Decision.UNDECIDED


@dataclass(frozen=True, kw_only=True, slots=True)
class Risks:
    """Global risks of a decision rule over a population, JCGM 106:2012, 9.5.

    ``consumer``: a part that does not conform is accepted; ``producer``: one that does is
    rejected; ``nonconforming``: the share of the population outside the limits.
    """

    consumer: float
    producer: float
    nonconforming: float


def global_risks(
    prior: Callable[[FloatArray], FloatArray],
    support: tuple[float, float],
    u: float,
    *,
    minimum: float | None,
    maximum: float | None,
    acceptance: tuple[float | None, float | None],
    nodes: int = 4000,
) -> Risks:
    """R_C = ∫_{outside} g0(η)·F(η) dη and R_P = ∫_{inside} g0(η)·(1 − F(η)) dη.

    ``prior`` is the density g0 of the population over ``support``, F(η) the probability that a
    measurement (normal, standard uncertainty u) of a part of true value η falls within the
    ``acceptance`` limits. JCGM 106:2012, eqs. (17) to (20). Gauss–Legendre over each piece that
    the limits cut the support into.
    """
    from numpy.polynomial.legendre import leggauss

    low, high = support
    edges = [low, *(t for t in (minimum, maximum) if t is not None and low < t < high), high]
    points, weights = leggauss(nodes // 10)
    consumer = producer = outside = 0.0
    for start, end in pairwise(edges):
        # ten panels each, so that a narrow u inside a wide support is resolved
        for panel in range(10):
            a, width = start + (end - start) * panel / 10, (end - start) / 10
            eta = a + width * (points + 1) / 2
            mass = prior(eta) * weights * width / 2
            accepted = _accepted(eta, u, acceptance)
            middle = (start + end) / 2
            inside = (minimum is None or middle >= minimum) and (
                maximum is None or middle <= maximum
            )
            if inside:
                producer += float(np.sum(mass * (1 - accepted)))
            else:
                consumer += float(np.sum(mass * accepted))
                outside += float(np.sum(mass))
    return Risks(consumer=consumer, producer=producer, nonconforming=outside)


def _accepted(
    eta: FloatArray, u: float, acceptance: tuple[float | None, float | None]
) -> FloatArray:
    from scipy.special import ndtr

    low, high = acceptance
    above = np.zeros_like(eta) if low is None else ndtr((low - eta) / u)
    below = np.ones_like(eta) if high is None else ndtr((high - eta) / u)
    return np.asarray(below - above, dtype=np.float64)
