"""The uncertainty budget behind a row of results.csv, from the same cells that were judged."""

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from ohmward.metrology.budget import Budget, impedance_budget
from ohmward.metrology.errors import MetrologyError
from ohmward.results.cells import cells_of
from ohmward.results.derive import Columns
from ohmward.results.quantities import CHANGES, view_of
from ohmward.terms.accuracy import ImpedanceAccuracy
from ohmward.terms.condition import Point
from ohmward.terms.quantity import QUANTITIES


class NoBudget(MetrologyError):
    """A quantity that is not a view of one point, or a part that has no good reading of it."""


def budgets(
    readings: Columns,
    impedance: Mapping[str, NDArray[np.generic]],
    part_id: str,
    quantity: str,
    accuracies: Mapping[str, ImpedanceAccuracy],
    *,
    cable_m: Mapping[str, float] | None = None,
    coverage_k: float = 2.0,
) -> list[tuple[str, Point, Budget]]:
    """Stage, condition and budget at each point of a part that gives this quantity.

    ``readings`` and ``impedance`` as for `judge`. First order throughout: shares are of the
    variance, which Monte Carlo does not divide. Raises NoBudget.
    """
    known = QUANTITIES.get(quantity)
    if known is None or known.per != "point" or quantity in CHANGES:
        raise NoBudget(f"{quantity} is not a quantity of one point, and has no budget of its own")
    found = []
    for (part, stage), cells in cells_of(readings, impedance, accuracies, cable_m).items():
        for cell in cells if part == part_id else ():
            if cell.good and not np.isnan(cell.covariance()[0]):
                name = view_of(quantity, cell, cells)
                budget = impedance_budget(name, known.unit, cell.uncertain(), coverage_k)
                found.append((stage, cell.point, budget))
    if not found:
        raise NoBudget(f"no good reading of {part_id!r} gives {quantity}")
    return found
