"""Quantities that need more than one view of one point: the fitting model, and changes over bias.

The fitting model of a C or an L is the series one where |Z| is below 1 kohm and the parallel one
from there on (common practice: low impedances are spoilt by series resistance, high ones by
leakage). It is chosen once for each frequency and level, at the least bias, so that a part whose
|Z| crosses 1 kohm under bias does not jump from one model to the other.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from math import hypot, nan, sqrt

import numpy as np

from ohmward.metrology.immittance import gradients
from ohmward.metrology.uncertain import spread
from ohmward.results.cells import Cell

SERIES_BELOW_OHM = 1000.0

# Of the variance of the stated accuracy, the part that two readings of one meter share when
# only the bias differs: same frequency, level, range and integration. What is left is the
# non-linearity within a range, that no manual states; a tenth is our assumption, written here.
SHARED_VARIANCE = 0.9

_FITTING = {"capacitance_f": ("cs_f", "cp_f"), "inductance_h": ("ls_h", "lp_h")}
CHANGES = {"capacitance_change": "capacitance_f", "inductance_change": "inductance_h"}


@dataclass(frozen=True, kw_only=True, slots=True)
class Evaluated:
    """A quantity of one cell: value, standard uncertainties of type B and A, and the view used.

    ``view`` names the column that was evaluated (the fitting model's), "" for a change.
    ``note`` is for the reason, "" if there is nothing to say.
    """

    value: float
    u_b: float
    u_a: float
    degrees: float
    view: str = ""
    note: str = ""

    @property
    def u(self) -> float:
        """The combined standard uncertainty."""
        return hypot(self.u_b, self.u_a)


def same_setting(cell: Cell, other: Cell) -> bool:
    """Whether two cells differ in nothing but their bias."""
    return _close(cell.point.frequency_hz, other.point.frequency_hz) and _close(
        cell.point.level_v, other.point.level_v
    )


def _close(one: float, two: float) -> bool:
    return abs(one - two) <= 1e-6 * max(abs(one), abs(two))


def reference_cell(cell: Cell, cells: Iterable[Cell]) -> Cell:
    """The cell at the same frequency and level with the least bias, itself if there is no other."""
    alike = [other for other in cells if other.good and same_setting(cell, other)]
    return min(
        alike,
        key=lambda other: (abs(other.point.bias_v), abs(other.point.bias_a), other.index),
        default=cell,
    )


def fitting_view(quantity: str, reference: Cell) -> str:
    """The column of the model that fits: ``cs_f`` or ``cp_f``, ``ls_h`` or ``lp_h``."""
    series, parallel = _FITTING[quantity]
    return series if abs(reference.impedance) < SERIES_BELOW_OHM else parallel


def view_of(quantity: str, cell: Cell, cells: Iterable[Cell]) -> str:
    """The column that a point quantity is, at this cell."""
    if quantity in _FITTING:
        return fitting_view(quantity, reference_cell(cell, cells))
    return quantity


def evaluate(quantity: str, cell: Cell, cells: Iterable[Cell]) -> Evaluated:
    """A quantity that has one value per point, from the cells of its part and stage."""
    if quantity in CHANGES:
        return _change(CHANGES[quantity], cell, reference_cell(cell, cells))
    name = view_of(quantity, cell, cells)
    value, u_b, u_a = _view(name, cell)
    note = "" if name == quantity else _model_note(name)
    return Evaluated(value=value, u_b=u_b, u_a=u_a, degrees=cell.good - 1, view=name, note=note)


def _model_note(view: str) -> str:
    if view in ("cs_f", "ls_h"):
        return "series model, |Z| is below 1 kohm"
    return "parallel model, |Z| is 1 kohm or more"


def _view(name: str, cell: Cell) -> tuple[float, float, float]:
    """Value, u of type B, u of type A; NaN where the view does not exist."""
    view = gradients(cell.point.frequency_hz, cell.r, cell.x, (name,))[name]
    value = float(view.value)
    if not np.isfinite(value):
        return nan, nan, nan
    return value, spread(view, cell.type_b), spread(view, cell.type_a)


def _change(quantity: str, cell: Cell, reference: Cell) -> Evaluated:
    """y = C2/C1 − 1 with u²(y) = (C2/C1)²·(e2² + e1² − 2ρ·e1·e2 + a2² + a1²).

    e are relative standard uncertainties of type B, a of type A. ρ is SHARED_VARIANCE for two
    readings of one meter on one range, 0 when the range changed between them.
    """
    name = fitting_view(quantity, reference)
    if cell is reference:
        return Evaluated(value=0.0, u_b=0.0, u_a=0.0, degrees=nan, note="the reference itself")
    (c2, b2, a2), (c1, b1, a1) = _view(name, cell), _view(name, reference)
    if not (np.isfinite(c1) and np.isfinite(c2)) or c1 == 0:
        return Evaluated(value=nan, u_b=nan, u_a=nan, degrees=nan)
    ratio = c2 / c1
    shared = shared_variance(cell, reference)
    e2, e1 = b2 / abs(c2) if c2 else 0.0, b1 / abs(c1)
    u_b = abs(ratio) * sqrt(max(e2**2 + e1**2 - 2 * shared * e1 * e2, 0.0))
    u_a = hypot(a2 / c1, ratio * a1 / c1)
    note = f"against {reference.point.bias_v or reference.point.bias_a:g} bias, {_model_note(name)}"
    degrees = min(cell.good, reference.good) - 1
    return Evaluated(value=ratio - 1, u_b=u_b, u_a=u_a, degrees=degrees, note=note)


def shared_variance(cell: Cell, other: Cell) -> float:
    """The share of type B variance that two cells of one setting have in common."""
    same = (cell.instrument, cell.range, cell.integration) == (
        other.instrument,
        other.range,
        other.integration,
    )
    return SHARED_VARIANCE if same else 0.0


def is_active(cell: Cell) -> bool:
    """Whether R is below zero by more than 3u, which no passive part can be."""
    return cell.r < -3 * cell.covariance()[0]
