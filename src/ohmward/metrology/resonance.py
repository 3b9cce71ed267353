"""Self-resonance: the lowest frequency at which the reactance changes sign, with uncertainty.

Near a series resonance w·X = w²L − 1/C is a straight line in f²; near a parallel one the same
holds for w·B = w²C − 1/L. A sign change from below (capacitive to inductive) is therefore
interpolated in f·X, one from above (inductive to capacitive) in f·B, both over f²: exact for one
L and one C, whatever the spacing of the points.
"""

from dataclasses import dataclass
from math import nan

import numpy as np
from numpy.typing import ArrayLike

from ohmward.metrology.arrays import FloatArray, check_covariance, check_frequency, together
from ohmward.metrology.errors import TooFewPoints


@dataclass(frozen=True, kw_only=True, slots=True)
class Resonance:
    """Where the sign changes, or what is known when it does not.

    ``frequency_hz`` and ``u_hz`` are NaN without a sign change. ``lowest_hz`` and
    ``highest_hz`` bound the points whose sign is beyond doubt (|X| > 2u); ``first_sign`` is
    the sign of the lowest of them (0 if there is none).
    """

    frequency_hz: float
    u_hz: float
    lowest_hz: float
    highest_hz: float
    first_sign: int


def self_resonance(
    frequency_hz: ArrayLike,
    r: ArrayLike,
    x: ArrayLike,
    u_r: ArrayLike,
    u_x: ArrayLike,
    r_rx: ArrayLike,
) -> Resonance:
    """The self-resonance of a sweep (any order; 1-D; NaN points are left out).

    A point has a sign when |X| > 2·u(X). With g1, g2 at f1 < f2 of opposite sign:
    f0² = (f1²·g2 − f2²·g1)/(g2 − g1), ∂f0²/∂g1 = (f0² − f2²)/(g2 − g1) and
    ∂f0²/∂g2 = (f1² − f0²)/(g2 − g1). The errors of neighbouring points of one meter are
    correlated in an unknown degree: their contributions are added in magnitude, which is the
    most they can make. What a straight line misses is judged from the points beside the bracket
    (`_bend`) and is a rectangular half-width.
    Raises TooFewPoints, ShapeMismatch, BadFrequency, BadCovariance.
    """
    arrays = together(frequency_hz, r, x, u_r, u_x, r_rx)
    f, r_, x_, ur, ux, rho = (np.atleast_1d(array) for array in arrays)
    check_frequency(f)
    check_covariance(ur, ux, rho)
    good = np.isfinite(f) & np.isfinite(r_) & np.isfinite(x_) & np.isfinite(ux) & np.isfinite(ur)
    if np.count_nonzero(good) < 2:
        raise TooFewPoints("a sign change needs two points at least")
    order = np.flatnonzero(good)[np.argsort(f[good], kind="stable")]
    f, r_, x_, ur, ux, rho = (array[order] for array in (f, r_, x_, ur, ux, rho))

    sure = np.flatnonzero(np.abs(x_) > 2 * ux)
    if sure.size == 0:
        return Resonance(frequency_hz=nan, u_hz=nan, lowest_hz=nan, highest_hz=nan, first_sign=0)
    signs = np.sign(x_[sure])
    lowest, highest, first_sign = float(f[sure[0]]), float(f[sure[-1]]), int(signs[0])
    changes = np.flatnonzero(signs[1:] != signs[:-1])
    value = u = nan
    if changes.size:
        g, ug = _line(f, r_, x_, ur, ux, rho, rising=first_sign < 0)
        value, u = _crossing(f, g, ug, int(sure[changes[0]]), int(sure[changes[0] + 1]))
    return Resonance(
        frequency_hz=value, u_hz=u, lowest_hz=lowest, highest_hz=highest, first_sign=first_sign
    )


def _line(
    f: FloatArray,
    r: FloatArray,
    x: FloatArray,
    u_r: FloatArray,
    u_x: FloatArray,
    rho: FloatArray,
    *,
    rising: bool,
) -> tuple[FloatArray, FloatArray]:
    """f·X for a series resonance, f·B for a parallel one, with their uncertainties."""
    if rising:
        return f * x, f * u_x
    m = r * r + x * x
    a, b = 2 * r * x / m**2 * u_r, (x * x - r * r) / m**2 * u_x
    u_b = np.sqrt(np.maximum(a * a + b * b + 2 * rho * a * b, 0.0))
    return -f * x / m, f * u_b


def _crossing(
    f: FloatArray, g: FloatArray, ug: FloatArray, left: int, right: int
) -> tuple[float, float]:
    """Zero of g between two points of sure sign, narrowed to the one change among those between."""
    inner = [i for i in range(left, right) if np.sign(g[i]) != np.sign(g[i + 1])]
    if len(inner) == 1:
        left, right = inner[0], inner[0] + 1
    s1, s2, g1, g2 = f[left] ** 2, f[right] ** 2, g[left], g[right]
    slope = g2 - g1
    s0 = (s1 * g2 - s2 * g1) / slope
    u_s = abs((s0 - s2) / slope) * ug[left] + abs((s1 - s0) / slope) * ug[right]
    bend = _bend(f, g, left, right, float(s0))
    f0 = float(np.sqrt(s0))
    # d(f0²) = 2·f0·df0
    return f0, float(np.hypot(u_s, bend / np.sqrt(3)) / (2 * f0))


def _bend(f: FloatArray, g: FloatArray, left: int, right: int, s0: float) -> float:
    """How far the zero, in f², may be moved by a C or an L that changes with frequency.

    Within g = A·f² − B the neighbour below the bracket shows how B (the capacitance's part)
    changes per log f, the one above how A (the inductance's) does; the zero is found once more
    with either going on like that through the bracket, and the shifts are added as squares.
    """
    s = f * f
    slope = (g[right] - g[left]) / (s[right] - s[left])
    offset = slope * s[left] - g[left]
    across, to_zero = np.log(f[right] / f[left]), 0.5 * np.log(s0 / s[left])
    shifts = []
    if left > 0 and s[left - 1] < s[left]:
        was = slope * s[left - 1] - g[left - 1]
        rate = (offset - was) / np.log(f[left] / f[left - 1])
        steeper = slope + rate * across / (s[right] - s[left])
        shifts.append((offset + rate * to_zero) / steeper - s0)
    if right + 1 < f.size and s[right + 1] > s[right]:
        will_be = (g[right + 1] + offset) / s[right + 1]
        rate = (will_be - slope) / np.log(f[right + 1] / f[right])
        lower = slope - rate * (across - to_zero)
        shifts.append(offset / lower - s0 if lower > 0 else s[right] - s0)
    if not shifts:
        # nothing says that one L and one C is all there is: anywhere in the bracket, then
        return float(s[right] - s[left]) / 2
    return float(np.hypot(*shifts) if len(shifts) == 2 else abs(shifts[0]))
