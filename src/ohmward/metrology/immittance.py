"""From the pair that a meter sent to complex impedance, and from there to every other view.

With w = 2πf, Z = R + jX and Y = 1/Z = G + jB. A series model gives R and X directly, a parallel
one gives G and B; signs: a capacitance has X = −1/(wCs) and B = wCp, an inductance has X = wLs
and B = −1/(wLp). D and Q are taken of magnitudes: D = 1/Q = R/|X| = G/|B|. Source: definitions;
series and parallel relations as in ASTM D150.

Uncertainties are standard uncertainties, propagated to first order with the full covariance of
R and X (JCGM 100:2008, 5.2.2 and H.2).
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from ohmward.metrology.arrays import (
    FloatArray,
    check_covariance,
    check_frequency,
    correlation_of,
    finite_or_nan,
    together,
)
from ohmward.metrology.errors import UnknownPair

# value and the two partial derivatives of each part: (p, q, dp/d1, dp/d2, dq/d1, dq/d2)
_Parts = tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]


@dataclass(frozen=True, kw_only=True, slots=True)
class Pair:
    """A pair of quantities that a meter can send: the tables' columns of both, and the model.

    ``parts`` turns (first, second, w) into R and X, or where ``parallel`` into G and B, with
    their partial derivatives.
    """

    first: str
    second: str
    parallel: bool
    parts: Callable[[FloatArray, FloatArray, FloatArray], _Parts]


def _plain(first: FloatArray, second: FloatArray, w: FloatArray) -> _Parts:
    one, zero = np.ones_like(first), np.zeros_like(first)
    return first, second, one, zero, zero, one


def _polar(z: FloatArray, theta: FloatArray, w: FloatArray) -> _Parts:
    cos, sin = np.cos(theta), np.sin(theta)
    return z * cos, z * sin, cos, -z * sin, sin, z * cos


def _reactive(
    imaginary: Callable[[FloatArray, FloatArray], tuple[FloatArray, FloatArray]],
    loss: str,
) -> Callable[[FloatArray, FloatArray, FloatArray], _Parts]:
    """Parts of a pair whose first is a C or an L: ``imaginary`` gives X or B and d(X or B)/dfirst.

    ``loss`` says what the second is: ``real`` (R or G itself), ``inverse`` (Rp where G is
    wanted), ``d`` or ``q`` (relative to the imaginary part's magnitude).
    """

    def parts(first: FloatArray, second: FloatArray, w: FloatArray) -> _Parts:
        q, dq = imaginary(first, w)
        zero = np.zeros_like(first)
        if loss == "real":
            return second, q, zero, np.ones_like(first), dq, zero
        if loss == "inverse":
            return 1 / second, q, zero, -1 / second**2, dq, zero
        size, sign = np.abs(q), np.sign(q)
        if loss == "d":
            return second * size, q, second * sign * dq, size, dq, zero
        return size / second, q, sign * dq / second, -size / second**2, dq, zero

    return parts


def _rising(first: FloatArray, w: FloatArray) -> tuple[FloatArray, FloatArray]:
    return w * first, w  # X of Ls, B of Cp


def _falling(first: FloatArray, w: FloatArray) -> tuple[FloatArray, FloatArray]:
    return -1 / (w * first), 1 / (w * first**2)  # X of Cs, B of Lp


def _pair(
    first: str,
    second: str,
    parts: Callable[[FloatArray, FloatArray, FloatArray], _Parts],
    parallel: bool = False,
) -> Pair:
    return Pair(first=first, second=second, parallel=parallel, parts=parts)


PAIRS: dict[str, Pair] = {
    "R-X": _pair("resistance_ohm", "reactance_ohm", _plain),
    "Z-theta": _pair("impedance_ohm", "phase_rad", _polar),
    "G-B": _pair("conductance_s", "susceptance_s", _plain, parallel=True),
    "Cs-D": _pair("cs_f", "d", _reactive(_falling, "d")),
    "Cs-Rs": _pair("cs_f", "rs_ohm", _reactive(_falling, "real")),
    "Cp-D": _pair("cp_f", "d", _reactive(_rising, "d"), parallel=True),
    "Cp-Rp": _pair("cp_f", "rp_ohm", _reactive(_rising, "inverse"), parallel=True),
    "Cp-G": _pair("cp_f", "conductance_s", _reactive(_rising, "real"), parallel=True),
    "Ls-D": _pair("ls_h", "d", _reactive(_rising, "d")),
    "Ls-Q": _pair("ls_h", "q", _reactive(_rising, "q")),
    "Ls-Rs": _pair("ls_h", "rs_ohm", _reactive(_rising, "real")),
    "Lp-D": _pair("lp_h", "d", _reactive(_falling, "d"), parallel=True),
    "Lp-Q": _pair("lp_h", "q", _reactive(_falling, "q"), parallel=True),
    "Lp-Rp": _pair("lp_h", "rp_ohm", _reactive(_falling, "inverse"), parallel=True),
    "Lp-G": _pair("lp_h", "conductance_s", _reactive(_falling, "real"), parallel=True),
}


def _pair_named(pair: str) -> Pair:
    try:
        return PAIRS[pair]
    except KeyError:
        raise UnknownPair(f"no pair is called {pair!r}; there are {', '.join(PAIRS)}") from None


def jacobian_of_pair(
    pair: str, first: ArrayLike, second: ArrayLike, frequency_hz: ArrayLike
) -> tuple[FloatArray, ...]:
    """R, X, ∂R/∂first, ∂R/∂second, ∂X/∂first, ∂X/∂second, in ohm and ohm per unit of the pair.

    All of the common shape of the inputs; NaN where the pair has no impedance (G = B = 0).
    Raises UnknownPair, ShapeMismatch, BadFrequency.
    """
    named = _pair_named(pair)
    one, two, f = together(first, second, frequency_hz)
    check_frequency(f)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        p, q, dp1, dp2, dq1, dq2 = named.parts(one, two, 2 * np.pi * f)
        if not named.parallel:
            return tuple(finite_or_nan(part) for part in (p, q, dp1, dp2, dq1, dq2))
        # Z = 1/Y: R = G/m, X = −B/m with m = G² + B²; the derivatives are those of −1/Y²
        m = p * p + q * q
        even, odd = (q * q - p * p) / m**2, 2 * p * q / m**2
        parts = (
            p / m,
            -q / m,
            even * dp1 - odd * dq1,
            even * dp2 - odd * dq2,
            odd * dp1 + even * dq1,
            odd * dp2 + even * dq2,
        )
    return tuple(finite_or_nan(part) for part in parts)


def impedance_of_pair(
    pair: str, first: ArrayLike, second: ArrayLike, frequency_hz: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """R and X in ohm, from the pair as the meter sent it; errors as `jacobian_of_pair`."""
    r, x, *_ = jacobian_of_pair(pair, first, second, frequency_hz)
    return r, x


def covariance_of_pair(
    pair: str,
    first: ArrayLike,
    second: ArrayLike,
    frequency_hz: ArrayLike,
    u_first: ArrayLike,
    u_second: ArrayLike,
    correlation: ArrayLike = 0.0,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """u(R), u(X) in ohm and r(R,X), from the uncertainties of what the meter sent.

    With J the Jacobian of the pair: V(R,X) = J·V(first,second)·Jᵀ. Raises BadCovariance too.
    """
    _, _, r1, r2, x1, x2 = jacobian_of_pair(pair, first, second, frequency_hz)
    u1, u2, rho, *_ = together(u_first, u_second, correlation, r1)
    check_covariance(u1, u2, rho)
    a1, a2, b1, b2 = r1 * u1, r2 * u2, x1 * u1, x2 * u2
    u_r = np.sqrt(np.maximum(a1 * a1 + a2 * a2 + 2 * rho * a1 * a2, 0.0))
    u_x = np.sqrt(np.maximum(b1 * b1 + b2 * b2 + 2 * rho * b1 * b2, 0.0))
    covariance = a1 * b1 + a2 * b2 + rho * (a1 * b2 + a2 * b1)
    return u_r, u_x, correlation_of(covariance, u_r, u_x)


@dataclass(frozen=True, kw_only=True, slots=True)
class View:
    """One view of an impedance: its value and its partial derivatives by R and X."""

    value: FloatArray
    by_r: FloatArray
    by_x: FloatArray


VIEWS = (
    "impedance_ohm",
    "phase_rad",
    "cs_f",
    "cp_f",
    "ls_h",
    "lp_h",
    "rs_ohm",
    "rp_ohm",
    "d",
    "q",
)


def gradients(
    frequency_hz: ArrayLike, r: ArrayLike, x: ArrayLike, names: tuple[str, ...] = VIEWS
) -> dict[str, View]:
    """The named views of Z = r + jx (ohm) at ``frequency_hz``, each with its derivatives.

    ``resistance_ohm``, ``reactance_ohm``, ``conductance_s``, ``susceptance_s`` and
    ``power_factor`` (R/|Z|) may be named too. Where a view does not exist
    (Cs at X = 0) it and its derivatives are not finite. Raises ShapeMismatch, BadFrequency.
    """
    f, r_, x_ = together(frequency_hz, r, x)
    check_frequency(f)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        return {name: _view(name, 2 * np.pi * f, r_, x_) for name in names}


def _view(name: str, w: FloatArray, r: FloatArray, x: FloatArray) -> View:
    """One view; m = |Z|². Formulas are the definitions in the module's docstring."""
    zero = np.zeros_like(r)
    m = r * r + x * x
    match name:
        case "resistance_ohm" | "rs_ohm":
            return View(value=r, by_r=zero + 1, by_x=zero)
        case "reactance_ohm":
            return View(value=x, by_r=zero, by_x=zero + 1)
        case "impedance_ohm":
            z = np.sqrt(m)
            return View(value=z, by_r=r / z, by_x=x / z)
        case "phase_rad":
            return View(value=np.arctan2(x, r), by_r=-x / m, by_x=r / m)
        case "cs_f":
            return View(value=-1 / (w * x), by_r=zero, by_x=1 / (w * x * x))
        case "cp_f":
            scale = w * m * m
            return View(value=-x / (w * m), by_r=2 * r * x / scale, by_x=(x * x - r * r) / scale)
        case "ls_h":
            return View(value=x / w, by_r=zero, by_x=1 / w)
        case "lp_h":
            return View(value=m / (w * x), by_r=2 * r / (w * x), by_x=(1 - (r / x) ** 2) / w)
        case "rp_ohm":
            return View(value=m / r, by_r=1 - (x / r) ** 2, by_x=2 * x / r)
        case "d":
            size = np.abs(x)
            return View(value=r / size, by_r=1 / size, by_x=-r * np.sign(x) / (x * x))
        case "q":
            size = np.abs(x)
            return View(value=size / r, by_r=-size / (r * r), by_x=np.sign(x) / r)
        case "conductance_s":
            square = m * m
            return View(value=r / m, by_r=(x * x - r * r) / square, by_x=-2 * r * x / square)
        case "susceptance_s":
            square = m * m
            return View(value=-x / m, by_r=2 * r * x / square, by_x=(x * x - r * r) / square)
        case "power_factor":
            z = np.sqrt(m)
            return View(value=r / z, by_r=x * x / (z * m), by_x=-r * x / (z * m))
    raise UnknownPair(f"no view of an impedance is called {name!r}")


def propagate(view: View, u_r: FloatArray, u_x: FloatArray, r_rx: FloatArray) -> FloatArray:
    """u of a view: √((a·u_r)² + (b·u_x)² + 2·r_rx·a·u_r·b·u_x), JCGM 100:2008 eq. (16)."""
    with np.errstate(invalid="ignore", over="ignore"):
        a, b = view.by_r * u_r, view.by_x * u_x
        # (a + r·b)² + (1 − r²)·b² is the same sum, and cannot round to below zero
        rest = np.maximum(1 - r_rx * r_rx, 0.0)
        return np.sqrt((a + r_rx * b) ** 2 + rest * b * b)


def views(
    frequency_hz: ArrayLike,
    r: ArrayLike,
    x: ArrayLike,
    u_r: ArrayLike,
    u_x: ArrayLike,
    r_rx: ArrayLike,
    names: tuple[str, ...] = VIEWS,
) -> dict[str, FloatArray]:
    """Every view of Z = r + jx with its standard uncertainty, by the tables' column names.

    ``{"impedance_ohm": …, "u_impedance_ohm": …, "phase_rad": …}``; SI units, all of the common
    shape. A view that does not exist is NaN with its uncertainty. NaN in is NaN out. A part's
    kind is not known here: whoever makes a table leaves out what the kind lacks.
    Raises ShapeMismatch, BadFrequency, BadCovariance.
    """
    f, r_, x_, ur, ux, rho = together(frequency_hz, r, x, u_r, u_x, r_rx)
    check_covariance(ur, ux, rho)
    table: dict[str, FloatArray] = {}
    for name, view in gradients(f, r_, x_, names).items():
        exists = np.isfinite(view.value)
        table[name] = np.where(exists, view.value, np.nan)
        table[f"u_{name}"] = np.where(exists, finite_or_nan(propagate(view, ur, ux, rho)), np.nan)
    return table


def pair_of_impedance(
    pair: str, frequency_hz: ArrayLike, r: ArrayLike, x: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """The pair that Z = r + jx shows, in SI units: the way back from `impedance_of_pair`."""
    named = _pair_named(pair)
    f, r_, x_ = together(frequency_hz, r, x)
    check_frequency(f)
    with np.errstate(divide="ignore", invalid="ignore"):
        m = r_ * r_ + x_ * x_
        admittance = {"conductance_s": r_ / m, "susceptance_s": -x_ / m}

        def shown(name: str) -> FloatArray:
            if name in admittance:
                return finite_or_nan(admittance[name])
            return finite_or_nan(_view(name, 2 * np.pi * f, r_, x_).value)

        return shown(named.first), shown(named.second)
