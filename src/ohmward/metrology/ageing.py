"""Ageing of class 2 ceramics: a capacitance carried to a reference time, and what that costs.

EIA-198: C(t) = C(1 h)·(1 − k·log10(t/1 h)), k per decade-hour, from the last heating above the
Curie point (150 °C for an hour). High voltage de-ages too: after it the clock is unknown.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from ohmward.metrology.arrays import FloatArray, together
from ohmward.metrology.errors import BadCovariance, MetrologyError

HOUR_S = 3600.0
# C is stated at 1000 h after the last heating (EIA-198)
REFERENCE_S = 1000 * HOUR_S


class NotAgeing(MetrologyError):
    """A time at or before zero, or a rate that takes all of the capacitance away."""


@dataclass(frozen=True, kw_only=True, slots=True)
class AgeingRate:
    """Loss per decade of time as a fraction, with the half-width of a rectangular distribution."""

    per_decade: float
    half_width: float


# By the lower-case name of the dielectric. Makers' ranges in percent per decade-hour: C0G below
# 0.1, X7R and X5R 1.5 to 4, Y5V about 7; the half-width of the last is ours: nobody states one.
RATES: dict[str, AgeingRate] = {
    "c0g": AgeingRate(per_decade=0.0005, half_width=0.0005),
    "x7r": AgeingRate(per_decade=0.0275, half_width=0.0125),
    "x5r": AgeingRate(per_decade=0.0275, half_width=0.0125),
    "y5v": AgeingRate(per_decade=0.07, half_width=0.02),
}


def aged_fraction(t_s: ArrayLike, per_decade: ArrayLike) -> FloatArray:
    """C(t)/C(1 h). Raises NotAgeing for a time that is not after zero or a fraction below zero."""
    t, rate = together(t_s, per_decade)
    if np.any(t <= 0):
        raise NotAgeing("ageing is counted from a moment after the last heating")
    fraction: FloatArray = 1 - rate * np.log10(t / HOUR_S)
    if np.any(fraction <= 0):
        raise NotAgeing("at this rate nothing of the capacitance would be left")
    return fraction


def at_reference_time(
    capacitance_f: ArrayLike,
    u_f: ArrayLike,
    t_s: ArrayLike,
    rate: AgeingRate,
    reference_s: float = REFERENCE_S,
) -> tuple[FloatArray, FloatArray]:
    """C at ``reference_s`` and its standard uncertainty, from C measured at ``t_s``.

    C_ref = C·(1 − k·log10 t_ref)/(1 − k·log10 t); with k ± δ rectangular,
    u²(C_ref) = (C_ref/C·u)² + (∂C_ref/∂k·δ/√3)². Raises NotAgeing, BadCovariance.
    """
    c, u, t = together(capacitance_f, u_f, t_s)
    if np.any(u < 0):
        raise BadCovariance("a standard uncertainty cannot be negative")
    now, then = aged_fraction(t, rate.per_decade), aged_fraction(reference_s, rate.per_decade)
    value: FloatArray = c * then / now
    # d ln(then/now)/dk
    slope = np.log10(t / HOUR_S) / now - np.log10(reference_s / HOUR_S) / then
    spread: FloatArray = np.hypot(then / now * u, value * slope * rate.half_width / np.sqrt(3))
    return value, spread
