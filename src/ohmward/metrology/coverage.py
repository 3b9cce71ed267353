"""From a standard uncertainty to an interval: coverage factors and effective degrees of freedom."""

from collections.abc import Iterable
from math import erfc, inf, isinf, isnan, nan, sqrt

from ohmward.metrology.errors import BadCovariance


def effective_degrees(u: float, contributions: Iterable[tuple[float, float]]) -> float:
    """ν_eff = u⁴ / Σ(u_i⁴/ν_i), Welch–Satterthwaite, JCGM 100:2008 eq. (G.2b).

    ``contributions`` are (u_i, ν_i) of those whose degrees of freedom are finite; type B from a
    manual counts as exactly known (G.4.3) and is left out. Infinite when none of them matters.
    Raises BadCovariance for a negative u_i or ν_i below 1 where u_i is not zero.
    """
    total = 0.0
    for u_i, degrees in contributions:
        if u_i == 0 or isinf(degrees):
            continue
        if u_i < 0 or degrees < 1:
            raise BadCovariance(f"u = {u_i:g} with {degrees:g} degrees of freedom is no estimate")
        total += u_i**4 / degrees
    return inf if total == 0 else u**4 / total


def coverage_factor(degrees: float, k_normal: float = 2.0) -> float:
    """k = t_p(ν) for the coverage that ``k_normal`` has with a normal distribution (G.6.4).

    k_normal 2 means 95.45 %. Fractional degrees of freedom are used as they are.
    """
    if isnan(degrees):
        return nan
    if isinf(degrees):
        return k_normal
    from scipy.special import stdtrit

    return float(stdtrit(degrees, 1 - 0.5 * erfc(k_normal / sqrt(2))))
