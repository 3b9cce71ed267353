"""The pairs that the simulated meter can answer, each from complex impedance by its definition.

With Z = R + jX, Y = 1/Z = G + jB and ω = 2πf: Cs = −1/(ωX), Cp = B/ω, Ls = X/ω, Lp = −1/(ωB),
Rp = 1/G, D = R/|X| = G/|B| and Q = 1/D, as bridge handbooks and ASTM D150 define them. These are
the simulator's own formulas: what derives the same quantities from readings never shares them.
"""

import cmath
import math
from collections.abc import Callable

OVERFLOW = 9.9e37
NOT_A_NUMBER = 9.91e37

Pair = Callable[[complex, float], tuple[float, float]]


def _over(numerator: float, denominator: float) -> float:
    """A quotient, infinite (9.9E37) where the instrument would show overflow."""
    if denominator == 0.0:
        return math.copysign(OVERFLOW, numerator) if numerator else 0.0
    return numerator / denominator


def _admittance(z: complex) -> complex:
    return 1.0 / z if z else complex(OVERFLOW, 0.0)


def _dissipation(z: complex) -> float:
    return _over(z.real, abs(z.imag))


def _quality(z: complex) -> float:
    return _over(abs(z.imag), z.real)


def _series_c(z: complex, w: float) -> float:
    return _over(-1.0, w * z.imag)


def _series_l(z: complex, w: float) -> float:
    return z.imag / w


def _parallel_c(z: complex, w: float) -> float:
    return _admittance(z).imag / w


def _parallel_l(z: complex, w: float) -> float:
    return _over(-1.0, w * _admittance(z).imag)


def _conductance(z: complex) -> float:
    return _admittance(z).real


def _parallel_r(z: complex) -> float:
    return _over(1.0, _conductance(z))


def _parts(z: complex, w: float) -> tuple[float, float]:
    y = _admittance(z)
    return y.real, y.imag


PAIRS: dict[str, Pair] = {
    "RX": lambda z, w: (z.real, z.imag),
    "ZTR": lambda z, w: (abs(z), cmath.phase(z)),
    "GB": _parts,
    "CSD": lambda z, w: (_series_c(z, w), _dissipation(z)),
    "CPD": lambda z, w: (_parallel_c(z, w), _dissipation(z)),
    "CSRS": lambda z, w: (_series_c(z, w), z.real),
    "CPRP": lambda z, w: (_parallel_c(z, w), _parallel_r(z)),
    "CPG": lambda z, w: (_parallel_c(z, w), _conductance(z)),
    "LSD": lambda z, w: (_series_l(z, w), _dissipation(z)),
    "LSQ": lambda z, w: (_series_l(z, w), _quality(z)),
    "LSRS": lambda z, w: (_series_l(z, w), z.real),
    "LPD": lambda z, w: (_parallel_l(z, w), _dissipation(z)),
    "LPQ": lambda z, w: (_parallel_l(z, w), _quality(z)),
    "LPRP": lambda z, w: (_parallel_l(z, w), _parallel_r(z)),
    "LPG": lambda z, w: (_parallel_l(z, w), _conductance(z)),
}
