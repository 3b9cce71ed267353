"""What bias does: capacitance left at the working voltage, current that saturates an inductor."""

from dataclasses import dataclass
from math import nan

import numpy as np
from numpy.typing import ArrayLike

from ohmward.metrology.arrays import FloatArray, together
from ohmward.metrology.errors import BadCovariance, MetrologyError, TooFewPoints


class BeyondSweep(MetrologyError):
    """The bias asked for lies outside of what was measured: nothing is extrapolated."""


def change_at(
    bias: ArrayLike, change: ArrayLike, u_change: ArrayLike, at: float
) -> tuple[float, float]:
    """The relative change of C or L at a bias between two that were measured, and its u.

    Linear between neighbours, ±t(1 − t)·|step| rectangular added for the curve between them.
    Raises TooFewPoints, BeyondSweep, BadCovariance.
    """
    b, y, u = _sorted(bias, change, u_change)
    if not b[0] <= at <= b[-1]:
        raise BeyondSweep(f"measured from {b[0]:g} to {b[-1]:g}, asked for at {at:g}")
    right = min(int(np.searchsorted(b, at)), b.size - 1)
    left = max(right - 1, 0)
    t = (at - b[left]) / (b[right] - b[left])
    value = (1 - t) * y[left] + t * y[right]
    bend = t * (1 - t) * abs(y[right] - y[left]) / np.sqrt(3)
    # both ends share the reference that they are compared with: taken as fully correlated
    return float(value), float(np.hypot((1 - t) * u[left] + t * u[right], bend))


@dataclass(frozen=True, kw_only=True, slots=True)
class Saturation:
    """The current at which L has dropped by a stated fraction; NaN if not by ``highest_a``."""

    current_a: float
    u_a: float
    highest_a: float


def saturation_current(
    bias_a: ArrayLike, change: ArrayLike, u_change: ArrayLike, drop: float
) -> Saturation:
    """The least current at which the relative change of L reaches −``drop`` (0.2 for 20 %).

    Between the last point above and the first below: I = I1 + (I2 − I1)·(drop + y1)/(y1 − y2);
    u(I) = u(y)/|slope|, and ±t(1 − t)·(I2 − I1) rectangular for the knee between them.
    Raises TooFewPoints, BadCovariance.
    """
    current, y, u = _sorted(bias_a, change, u_change)
    beyond = np.flatnonzero(y <= -drop)
    if beyond.size == 0 or beyond[0] == 0:
        return Saturation(current_a=nan, u_a=nan, highest_a=float(current[-1]))
    right = int(beyond[0])
    left = right - 1
    step, width = y[left] - y[right], current[right] - current[left]
    t = (y[left] + drop) / step
    u_y = (1 - t) * u[left] + t * u[right]
    bend = t * (1 - t) * width / np.sqrt(3)
    return Saturation(
        current_a=float(current[left] + t * width),
        u_a=float(np.hypot(u_y * width / step, bend)),
        highest_a=float(current[-1]),
    )


def _sorted(
    bias: ArrayLike, change: ArrayLike, u_change: ArrayLike
) -> tuple[FloatArray, FloatArray, FloatArray]:
    b, y, u = together(bias, change, u_change)
    if np.any(u < 0):
        raise BadCovariance("a standard uncertainty cannot be negative")
    good = np.isfinite(b) & np.isfinite(y) & np.isfinite(u)
    if np.unique(b[good]).size < 2:
        raise TooFewPoints("a change over bias needs two bias points")
    _, first = np.unique(b[good], return_index=True)
    return b[good][first], y[good][first], u[good][first]
