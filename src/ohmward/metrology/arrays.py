"""The checks that every array function of this room makes before it computes."""

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ohmward.metrology.errors import BadCovariance, BadFrequency, ShapeMismatch

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


def together(*values: ArrayLike) -> list[FloatArray]:
    """The values as float arrays of one common shape; raises ShapeMismatch."""
    arrays = [np.asarray(value, dtype=np.float64) for value in values]
    try:
        return list(np.broadcast_arrays(*arrays))
    except ValueError as error:
        shapes = ", ".join(str(array.shape) for array in arrays)
        raise ShapeMismatch(f"arrays of shapes {shapes} do not belong together") from error


def check_frequency(frequency_hz: FloatArray) -> None:
    """Raise BadFrequency where one is not above zero or is infinite; NaN passes as NaN."""
    if np.any((frequency_hz <= 0) | np.isinf(frequency_hz)):
        bad = frequency_hz[(frequency_hz <= 0) | np.isinf(frequency_hz)].flat[0]
        raise BadFrequency(f"a frequency must be above 0 Hz, found {bad:g} Hz")


def check_covariance(u_first: FloatArray, u_second: FloatArray, correlation: FloatArray) -> None:
    """Raise BadCovariance unless the three make a covariance matrix; NaN passes as NaN."""
    if np.any(u_first < 0) or np.any(u_second < 0):
        raise BadCovariance("a standard uncertainty cannot be negative")
    # a hair above one is rounding, more is an error of whoever computed it
    if np.any(np.abs(correlation) > 1 + 1e-9):
        raise BadCovariance("a correlation coefficient lies between -1 and 1")


def correlation_of(covariance: FloatArray, u_first: FloatArray, u_second: FloatArray) -> FloatArray:
    """cov/(u1·u2), within −1…1; 0 where one of the two is exactly known."""
    product = u_first * u_second
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.where(product == 0, 0.0, covariance / product)
    return np.clip(ratio, -1.0, 1.0)


def finite_or_nan(values: FloatArray) -> FloatArray:
    """The values, with NaN where they are infinite: missing is missing, never a huge number."""
    return np.where(np.isfinite(values), values, np.nan)
