"""The fitter against NIST's certified values, from both of their starting points."""

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose
from numpy.typing import NDArray

from ohmward.metrology.errors import NotConverged, TooFewPoints
from ohmward.metrology.fit import least_squares

Array = NDArray[np.float64]
DATA = Path(__file__).parent / "data" / "strd"


@dataclass(frozen=True, kw_only=True)
class Set:
    """One data set: model, Jacobian, starts, certified values and standard deviations."""

    name: str
    model: Callable[[Array, Array], Array]
    jacobian: Callable[[Array, Array], Array]
    starts: tuple[tuple[float, ...], ...]
    values: tuple[float, ...]
    deviations: tuple[float, ...]
    sum_of_squares: float


SETS = [
    Set(
        name="Misra1a",
        model=lambda x, b: b[0] * (1 - np.exp(-b[1] * x)),
        jacobian=lambda x, b: np.column_stack(
            [1 - np.exp(-b[1] * x), b[0] * x * np.exp(-b[1] * x)]
        ),
        starts=((500, 0.0001), (250, 0.0005)),
        values=(238.94212918, 5.5015643181e-4),
        deviations=(2.7070075241, 7.2668688436e-6),
        sum_of_squares=1.2455138894e-1,
    ),
    Set(
        name="DanWood",
        model=lambda x, b: b[0] * x ** b[1],
        jacobian=lambda x, b: np.column_stack([x ** b[1], b[0] * x ** b[1] * np.log(x)]),
        starts=((1, 5), (0.7, 4)),
        values=(0.76886226176, 3.8604055871),
        deviations=(1.8281973860e-2, 5.1726610913e-2),
        sum_of_squares=4.3173084083e-3,
    ),
    Set(
        name="MGH17",
        model=lambda x, b: b[0] + b[1] * np.exp(-x * b[3]) + b[2] * np.exp(-x * b[4]),
        jacobian=lambda x, b: np.column_stack(
            [
                np.ones_like(x),
                np.exp(-x * b[3]),
                np.exp(-x * b[4]),
                -b[1] * x * np.exp(-x * b[3]),
                -b[2] * x * np.exp(-x * b[4]),
            ]
        ),
        starts=((50, 150, -100, 1, 2), (0.5, 1.5, -1, 0.01, 0.02)),
        values=(0.37541005211, 1.9358469127, -1.4646871366, 0.01286753464, 0.022122699662),
        deviations=(
            2.0723153551e-3,
            0.22031669222,
            0.22175707739,
            4.4861358114e-4,
            8.9471996575e-4,
        ),
        sum_of_squares=5.4648946975e-5,
    ),
]


@pytest.mark.parametrize("start", [0, 1])
@pytest.mark.parametrize("data", SETS, ids=lambda data: data.name)
def test_certified_values(data: Set, start: int) -> None:
    x, y = np.loadtxt(DATA / f"{data.name}.csv", delimiter=",", skiprows=1, unpack=True)
    fit = least_squares(
        lambda b: data.model(x, b) - y,
        lambda b: data.jacobian(x, b),
        np.array(data.starts[start], dtype=float),
    )
    assert_allclose(fit.values, data.values, rtol=1e-7)
    assert fit.sum_of_squares == pytest.approx(data.sum_of_squares, rel=1e-9)
    deviations = np.sqrt(np.diag(fit.covariance)) * fit.scatter
    assert_allclose(deviations, data.deviations, rtol=1e-5)


def test_what_cannot_be_fitted_is_refused_by_name() -> None:
    x = np.array([1.0, 2.0])
    with pytest.raises(TooFewPoints):
        least_squares(lambda b: x * b[0] - x, lambda b: np.zeros((2, 3)), np.zeros(3))
    with pytest.raises(NotConverged):
        # b0 and b1 do the same
        least_squares(
            lambda b: x * (b[0] + b[1]) - 1,
            lambda b: np.column_stack([x, x]),
            np.array([1.0, 1.0]),
        )
