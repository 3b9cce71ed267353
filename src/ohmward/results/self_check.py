"""A sweep's self-check: a step between two frequencies is a contact or a meter, not the part.

What two neighbouring points of one meter do not share of its stated accuracy
(quantities.SHARED_VARIANCE) and their own scatter count as repeatability; a step where the meter
changed its range is covered by its accuracy and is none.
"""

from math import hypot

import numpy as np

from ohmward.metrology.errors import TooFewPoints
from ohmward.metrology.kramers_kronig import check_sweep
from ohmward.results.cells import Cell
from ohmward.results.quantities import SHARED_VARIANCE
from ohmward.units.values import format_quantity


def step_in(cells: list[Cell]) -> str:
    """Why a stage's sweep cannot be trusted, or "" where it can or is too short to tell.

    Looked at are the points at the level and bias of the first.
    """
    sweep = {cell.point.frequency_hz: cell for cell in reversed(cells) if _belongs(cell, cells[0])}
    f = np.array(sorted(sweep))
    ordered = [sweep[frequency_hz] for frequency_hz in f.tolist()]
    if len(ordered) < 2:
        return ""
    z = np.array([cell.impedance for cell in ordered])
    u = np.array([_repeatability(cell) for cell in ordered])
    if not np.all(u > 0):
        return ""
    try:
        check = check_sweep(f, z, u)
    except TooFewPoints:
        return ""
    after = sweep[float(check.step_after_hz)]
    before = sweep[float(check.step_before_hz)]
    if not check.found or after.range != before.range:
        return ""
    return (
        f"the sweep has a step of {100 * abs(check.step):.2g} % between "
        f"{format_quantity(check.step_after_hz, 'Hz')} and "
        f"{format_quantity(check.step_before_hz, 'Hz')} that no part makes"
    )


def _belongs(cell: Cell, first: Cell) -> bool:
    at, start = cell.point, first.point
    return (
        cell.good > 0
        and not np.isnan(cell.type_b[0])
        and (at.level_v, at.bias_v, at.bias_a) == (start.level_v, start.bias_v, start.bias_a)
    )


def _repeatability(cell: Cell) -> float:
    """u of each of the real and the imaginary part of one point, as a fraction of |Z|."""
    own = (1 - SHARED_VARIANCE) ** 0.5
    u_r = hypot(cell.type_a[0], own * cell.type_b[0])
    u_x = hypot(cell.type_a[1], own * cell.type_b[1])
    return max(u_r, u_x) / abs(cell.impedance)
