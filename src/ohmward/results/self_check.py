"""A sweep's self-check: a step between two frequencies is a contact or a meter, not the part.

A meter's error wanders over frequency, in magnitude and phase apart, as no part can; over a
sweep it wanders within its stated accuracy. So the accuracy and the points' own scatter count as
repeatability here, and only what is far beyond both is called a step. A step where the meter
changed its range is covered by its accuracy and is none. Few points per decade can hide a step
in the chain that is fitted, and make one of a curve: below ``LEAST_PER_DECADE`` none is looked for.
"""

from math import hypot, log10

import numpy as np

from ohmward.metrology.errors import TooFewPoints
from ohmward.metrology.kramers_kronig import check_sweep
from ohmward.results.cells import Cell
from ohmward.units.values import format_quantity

LEAST_PER_DECADE = 5.0


def step_in(cells: list[Cell]) -> str:
    """Why a stage's sweep cannot be trusted, or "" where it can or is too short to tell.

    Looked at are the points at the level and bias of the first.
    """
    sweep = {cell.point.frequency_hz: cell for cell in reversed(cells) if _belongs(cell, cells[0])}
    f = np.array(sorted(sweep))
    ordered = [sweep[frequency_hz] for frequency_hz in f.tolist()]
    if len(ordered) < 2 or (len(ordered) - 1) / log10(f[-1] / f[0]) < LEAST_PER_DECADE - 0.01:
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
    u_r = hypot(cell.type_a[0], cell.type_b[0])
    u_x = hypot(cell.type_a[1], cell.type_b[1])
    return max(u_r, u_x) / abs(cell.impedance)
