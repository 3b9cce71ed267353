"""A value carried to the standard's temperature (20 or 25 °C), with the correction's uncertainty.

y(T_ref) = y(T)·(1 + α·(T_ref − T_0))/(1 + α·(T − T_0)), α the coefficient at T_0. Where a
dielectric has no straight line, as class 2 ceramics have none, nothing is corrected: what its
code allows over its whole range is carried as an uncertainty, in proportion to the distance.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from ohmward.metrology.arrays import FloatArray, together
from ohmward.metrology.errors import BadCovariance


@dataclass(frozen=True, kw_only=True, slots=True)
class Coefficient:
    """Relative change per kelvin at ``at_c``, with the half-width of a rectangular distribution."""

    per_k: float
    half_width_per_k: float
    at_c: float
    source: str


def _within(fraction: float, low_c: float, high_c: float, source: str) -> Coefficient:
    """No line, but a bound: ±fraction at the nearer end of the range, seen from 25 °C."""
    distance = min(25.0 - low_c, high_c - 25.0)
    return Coefficient(per_k=0.0, half_width_per_k=fraction / distance, at_c=25.0, source=source)


# by the lower-case name that a parts list's dielectric is compared under
DIELECTRICS: dict[str, Coefficient] = {
    "c0g": Coefficient(
        per_k=0.0, half_width_per_k=30e-6, at_c=25.0, source="EIA-198 code C0G: 0 ± 30 ppm/K"
    ),
    "x7r": _within(0.15, -55.0, 125.0, "EIA-198 code X7R: ±15 % from -55 to 125 degC"),
    "x5r": _within(0.15, -55.0, 85.0, "EIA-198 code X5R: ±15 % from -55 to 85 degC"),
    "y5v": _within(0.82, -30.0, 85.0, "EIA-198 code Y5V: +22/-82 % from -30 to 85 degC"),
    "pp": Coefficient(
        per_k=-250e-6, half_width_per_k=150e-6, at_c=20.0, source="common practice for film"
    ),
    "pet": Coefficient(
        per_k=400e-6, half_width_per_k=300e-6, at_c=20.0, source="common practice for film"
    ),
    "pps": Coefficient(
        per_k=0.0, half_width_per_k=150e-6, at_c=20.0, source="common practice for film"
    ),
}
COPPER = Coefficient(
    per_k=3.93e-3,
    half_width_per_k=0.03e-3,
    at_c=20.0,
    source="IEC 60028, annealed copper (from memory)",
)


def at_reference_temperature(
    value: ArrayLike,
    u: ArrayLike,
    temperature_c: ArrayLike,
    u_temperature_k: ArrayLike,
    coefficient: Coefficient,
    reference_c: float,
) -> tuple[FloatArray, FloatArray]:
    """The value at ``reference_c`` and its standard uncertainty, in the value's unit.

    Contributions: that of the value, of the coefficient over the distance (δ·|T − T_ref|/√3)
    and of the temperature (α·u(T)); a coefficient that may be δ counts its δ there too.
    Raises BadCovariance, ShapeMismatch; NaN temperatures give NaN.
    """
    y, u_y, t, u_t = together(value, u, temperature_c, u_temperature_k)
    if np.any(u_y < 0) or np.any(u_t < 0):
        raise BadCovariance("a standard uncertainty cannot be negative")
    alpha, half = coefficient.per_k, coefficient.half_width_per_k / np.sqrt(3)
    here = 1 + alpha * (t - coefficient.at_c)
    there = 1 + alpha * (reference_c - coefficient.at_c)
    corrected: FloatArray = y * there / here
    # d ln(there/here)/dα = (T_ref − T_0)/there − (T − T_0)/here
    by_alpha = (reference_c - coefficient.at_c) / there - (t - coefficient.at_c) / here
    by_t = np.hypot(alpha / here, half)
    u_all: FloatArray = np.sqrt(
        (there / here * u_y) ** 2
        + (corrected * by_alpha * half) ** 2
        + (corrected * by_t * u_t) ** 2
    )
    return corrected, u_all
