"""The closure point: back to the first point at the end of a stage, which shows drift.

Compared is the difference of the two readings, not their values: what the meter does wrong at
both is the same (quantities.SHARED_VARIANCE) and cannot look like a change of the part.
"""

from math import hypot, sqrt

import numpy as np

from ohmward.results.cells import Cell
from ohmward.results.quantities import same_setting, shared_variance
from ohmward.units.values import format_quantity

DRIFT_AT_U = 3.0


def split_closure(cells: list[Cell]) -> tuple[list[Cell], Cell | None]:
    """The cells without the closure point, and that one: the last, at the first one's setting."""
    if len(cells) < 2:
        return cells, None
    first, last = cells[0], cells[-1]
    back = (
        same_setting(first, last)
        and first.point.bias_v == last.point.bias_v
        and first.point.bias_a == last.point.bias_a
    )
    return (cells[:-1], last) if back else (cells, None)


def drift_of(first: Cell, closure: Cell) -> str:
    """Why the stage cannot be trusted, or "" if the part came back to where it was.

    Each of R and X is held against 3·u of its difference, u² = a1² + a2² + b1² + b2² − 2ρ·b1·b2
    with a of type A, b of type B. A closure point without a good reading proves nothing.
    """
    if not first.good:
        return ""  # there is nothing to come back to, and the first point says so itself
    if not closure.good:
        causes = ", ".join(f"{count} {status}" for status, count in closure.left_out)
        return f"the closure point could not be read ({causes}): drift is unknown"
    rho = shared_variance(closure, first)
    worst = 0.0
    for name, change, which in (
        ("resistance", closure.r - first.r, 0),
        ("reactance", closure.x - first.x, 1),
    ):
        b1, b2 = first.type_b[which], closure.type_b[which]
        a1, a2 = first.type_a[which], closure.type_a[which]
        u = hypot(a1, a2, sqrt(max(b1 * b1 + b2 * b2 - 2 * rho * b1 * b2, 0.0)))
        if np.isfinite(u) and u > 0 and abs(change) / u > max(worst, DRIFT_AT_U):
            worst, moved, by = abs(change) / u, name, change
    if not worst:
        return ""
    return (
        f"the part or the meter drifted: back at the first point, {moved} had changed by "
        f"{format_quantity(by, 'ohm', 3)}, {worst:.1f} times its standard uncertainty"
    )
