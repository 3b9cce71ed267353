"""The sentence that says why: quantity, value, uncertainty and limit, as a person would say it."""

from math import isnan

from ohmward.results.cells import Cell
from ohmward.terms.condition import Point
from ohmward.terms.decision import Decision
from ohmward.terms.limit import Limit
from ohmward.terms.quantity import QUANTITIES
from ohmward.units.values import format_quantity


def shown(value: float, unit: str) -> str:
    """A value for a sentence."""
    return format_quantity(value, unit, 5)


def condition(point: Point) -> str:
    """``1 kHz, 1 V, bias 10 V``."""
    words = [format_quantity(point.frequency_hz, "Hz"), format_quantity(point.level_v, "V")]
    if point.bias_v:
        words.append(f"bias {format_quantity(point.bias_v, 'V')}")
    if point.bias_a:
        words.append(f"bias {format_quantity(point.bias_a, 'A')}")
    return ", ".join(words)


def bounds(limit: Limit) -> str:
    """``minimum 95 nF and maximum 105 nF (±5 % of nominal)``."""
    unit = QUANTITIES[limit.quantity].unit
    words = []
    if limit.minimum is not None:
        words.append(f"minimum {shown(limit.minimum, unit)}")
    if limit.maximum is not None:
        words.append(f"maximum {shown(limit.maximum, unit)}")
    source = f" ({limit.source})" if limit.source else ""
    return " and ".join(words) + source


def measured(quantity: str, value: float, u_expanded: float, k: float, where: str = "") -> str:
    """``cs_f at 1 kHz, 1 V is 98.2 nF ± 0.3 nF (k = 2)``."""
    unit = QUANTITIES[quantity].unit
    at = f" at {where}" if where else ""
    if isnan(value):
        return f"{quantity}{at} has no finite value"
    if isnan(u_expanded):
        return f"{quantity}{at} is {shown(value, unit)}, uncertain without bound"
    spread = format_quantity(u_expanded, unit, 2)
    how = "95 % interval" if isnan(k) else f"k = {k:.3g}"
    return f"{quantity}{at} is {shown(value, unit)} ± {spread} ({how})"


def judged(said: str, limit: Limit, decision: Decision, probability: float) -> str:
    """What was measured, and how it lies to the limit."""
    if decision is Decision.ACCEPT:
        return f"{said}: within {bounds(limit)}"
    if decision is Decision.REJECT:
        return f"{said}: outside {bounds(limit)}"
    return (
        f"{said}: too near to {bounds(limit)} for its uncertainty, "
        f"{100 * probability:.0f} % likely to conform"
    )


def left_out(cell: Cell) -> str:
    """`` (1 of 3 readings left out: overload)``, empty if all entered."""
    if cell.good == cell.taken:
        return ""
    causes = ", ".join(f"{count} {status}" for status, count in cell.left_out)
    return f" ({cell.taken - cell.good} of {cell.taken} readings left out: {causes})"


def no_reading(limit: Limit) -> str:
    """Why a limit has nothing to be held against."""
    words = [
        f"{name} {format_quantity(value, unit)}"
        for name, value, unit in (
            ("frequency", limit.frequency_hz, "Hz"),
            ("level", limit.level_v, "V"),
            ("bias", limit.bias_v, "V"),
            ("bias", limit.bias_a, "A"),
        )
        if value is not None
    ]
    at = f" at {', '.join(words)}" if words else ""
    return f"{limit.quantity} was not measured in stage {limit.stage!r}{at}"


def unusable(quantity: str, cell: Cell) -> str:
    """Why a point that was read gives no number."""
    causes = ", ".join(f"{count} {status}" for status, count in cell.left_out) or "none taken"
    return f"{quantity} at {condition(cell.point)}: no reading can be trusted ({causes})"


def no_uncertainty(quantity: str, cell: Cell) -> str:
    """Why a value that has no uncertainty decides nothing."""
    size = format_quantity(abs(cell.impedance), "ohm")
    meter = cell.instrument or "the meter"
    return f"{quantity} at {condition(cell.point)}: {meter} states no accuracy for {size} there"


def active(quantity: str, cell: Cell) -> str:
    """Why a negative resistance is not believed."""
    return (
        f"{quantity} at {condition(cell.point)}: the resistance came out as "
        f"{format_quantity(cell.r, 'ohm')}, which no passive part has; "
        "look at compensation and wiring"
    )
