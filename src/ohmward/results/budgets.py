"""The uncertainty budget behind a row of results.csv, from the same cells that were judged."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ohmward.metrology.budget import Budget, impedance_budget
from ohmward.metrology.compensation import Compensation, Known, compensate
from ohmward.metrology.errors import MetrologyError
from ohmward.metrology.uncertain import (
    Covariance,
    Interval,
    UncertainImpedance,
    interval,
    needs_monte_carlo,
)
from ohmward.results.cells import Cell, cells_of, without
from ohmward.results.derive import Columns, derive_impedance
from ohmward.results.quantities import CHANGES, view_of
from ohmward.terms.accuracy import ImpedanceAccuracy
from ohmward.terms.condition import Point
from ohmward.terms.quantity import QUANTITIES


class NoBudget(MetrologyError):
    """A quantity that is not a view of one point, or a part that has no good reading of it."""


@dataclass(frozen=True, kw_only=True, slots=True)
class PointBudget:
    """The budget of one point, and the interval that its decision was made with.

    ``view`` is the column that the quantity is there. The budget is of first order (shares are
    of the variance); where ``monte_carlo`` is true that would not do, and the interval is wider
    or lopsided, as the samples say.
    """

    stage: str
    point: Point
    view: str
    budget: Budget
    interval: Interval
    monte_carlo: bool


def budgets(
    readings: Columns,
    impedance: Mapping[str, NDArray[np.generic]],
    part_id: str,
    quantity: str,
    accuracies: Mapping[str, ImpedanceAccuracy],
    *,
    cable_m: Mapping[str, float] | None = None,
    compensations: Mapping[str, Compensation] | None = None,
    coverage_k: float = 2.0,
) -> list[PointBudget]:
    """The budget at each point of a part that gives this quantity, in their order.

    ``readings`` and ``impedance`` as for `judge`; with ``compensations``, as for
    `derive_impedance`, ``readings`` need every column of the journal, and each standard and
    contact is a cause of its own. Raises NoBudget.
    """
    known = QUANTITIES.get(quantity)
    if known is None or known.per != "point" or quantity in CHANGES:
        raise NoBudget(f"{quantity} is not a quantity of one point, and has no budget of its own")
    here = np.flatnonzero(readings["part_id"] == part_id)
    mine = {name: column[here] for name, column in readings.items()}
    table = {name: column[here] for name, column in impedance.items()}
    shown = _shown(mine, accuracies, cable_m, compensations)
    position = str(mine["position"][0]) if compensations and here.size else ""
    found = []
    for (_, stage), cells in cells_of(mine, table, accuracies, cable_m).items():
        for cell in cells:
            if not cell.good or np.isnan(cell.covariance()[0]):
                continue
            z = cell.uncertain()
            if compensations and position in compensations:
                z = _by_cause(cell, shown[stage, cell.index], compensations[position])
            name = view_of(quantity, cell, cells)
            found.append(
                PointBudget(
                    stage=stage,
                    point=cell.point,
                    view=name,
                    budget=impedance_budget(name, known.unit, z, coverage_k),
                    interval=interval(name, cell.uncertain(), coverage_k),
                    monte_carlo=needs_monte_carlo(name, cell.uncertain()),
                )
            )
    if not found:
        raise NoBudget(f"no good reading of {part_id!r} gives {quantity}")
    return found


def _shown(
    readings: Columns,
    accuracies: Mapping[str, ImpedanceAccuracy],
    cable_m: Mapping[str, float] | None,
    compensations: Mapping[str, Compensation] | None,
) -> dict[tuple[str, int], Cell]:
    """The cells as the meter showed them, before the fixture was taken out."""
    if not compensations:
        return {}
    table = derive_impedance(readings, (), accuracies, cable_m=cable_m)
    cells = cells_of(readings, table, accuracies, cable_m)
    return {(stage, cell.index): cell for (_, stage), listed in cells.items() for cell in listed}


def _by_cause(cell: Cell, shown: Cell, compensation: Compensation) -> UncertainImpedance:
    """The cell with each standard, contact and form of its compensation as a cause of its own."""
    f = np.array([cell.point.frequency_hz])
    seen = Known.of(np.array([shown.impedance]), *(np.array([u]) for u in shown.type_b))
    contributions = compensate(compensation, f, seen)
    whole = shown.uncertain()
    causes: dict[str, Covariance] = {"resolution": without(shown.type_b, whole.stated_covariance())}
    for name, known in contributions.items():
        if name not in ("part", "part as measured"):
            causes[f"compensation: {name}"] = (
                float(known.u_real[0]),
                float(known.u_imag[0]),
                float(known.correlation[0]),
            )
    plain = cell.uncertain()
    return UncertainImpedance(
        frequency_hz=plain.frequency_hz,
        r=plain.r,
        x=plain.x,
        stated=plain.stated,
        normal=causes,
        repeat=plain.repeat,
        degrees=plain.degrees,
    )
