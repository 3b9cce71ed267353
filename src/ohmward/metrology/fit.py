"""Non-linear least squares with its covariance: one fitter for all that this room fits.

The minimum of Σ((y − f(b))/u)² by Levenberg–Marquardt (MINPACK through scipy) with the analytic
Jacobian; the covariance is (JᵀJ)⁻¹ of the weighted Jacobian at the minimum.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ohmward.metrology.arrays import FloatArray
from ohmward.metrology.errors import NotConverged, TooFewPoints


@dataclass(frozen=True, kw_only=True, slots=True)
class Fit:
    """Parameters at the minimum with their covariance.

    ``sum_of_squares`` is of the weighted residuals, ``degrees`` their number less that of the
    parameters. ``covariance`` takes the given uncertainties as true; multiply by
    ``sum_of_squares/degrees`` where they were only relative.
    """

    values: FloatArray
    covariance: FloatArray
    sum_of_squares: float
    degrees: int

    @property
    def scatter(self) -> float:
        """√(sum of squares / degrees of freedom); NaN without a degree of freedom."""
        return float(np.sqrt(self.sum_of_squares / self.degrees)) if self.degrees else float("nan")


def least_squares(
    residuals: Callable[[FloatArray], FloatArray],
    jacobian: Callable[[FloatArray], FloatArray],
    start: FloatArray,
    *,
    tolerance: float = 1e-12,
) -> Fit:
    """Fit by weighted ``residuals(b)``, shape (n,), and their ``jacobian(b)``, shape (n, p).

    Raises TooFewPoints for n < p, NotConverged where no minimum was found or where the data
    do not tell the parameters apart.
    """
    from scipy.optimize import leastsq

    start = np.asarray(start, dtype=np.float64)
    count = residuals(start).size
    if count < start.size:
        raise TooFewPoints(f"{start.size} parameters cannot be told from {count} points")
    with np.errstate(over="ignore", invalid="ignore"):
        values, _, found, message, code = leastsq(
            residuals,
            start,
            Dfun=jacobian,
            full_output=True,
            ftol=tolerance,
            xtol=tolerance,
            gtol=0.0,
            maxfev=2000,
        )
    # 5 is "out of evaluations"; 6 to 8 say that the tolerance is finer than the arithmetic
    if code not in (1, 2, 3, 4, 6, 7, 8) or not np.all(np.isfinite(values)):
        raise NotConverged(f"the fit found no minimum: {message}")
    at_minimum = found["fvec"]
    return Fit(
        values=values,
        covariance=covariance_of(jacobian(values)),
        sum_of_squares=float(at_minimum @ at_minimum),
        degrees=count - start.size,
    )


def covariance_of(jacobian: NDArray[np.float64]) -> FloatArray:
    """(JᵀJ)⁻¹ through the singular values of J with its columns scaled to 1.

    Raises NotConverged where a combination of parameters leaves the data as they are.
    """
    scale = np.sqrt(np.einsum("ij,ij->j", jacobian, jacobian))
    if not np.all(scale > 0):
        raise NotConverged("a parameter has no effect on any point")
    _, singular, right = np.linalg.svd(jacobian / scale, full_matrices=False)
    if singular[-1] < 1e-13 * singular[0]:
        raise NotConverged("the points do not tell the parameters apart")
    spread = right.T / singular
    return np.asarray(spread @ spread.T / np.outer(scale, scale), dtype=np.float64)
