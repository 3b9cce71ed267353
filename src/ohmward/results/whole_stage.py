"""What needs a whole stage: self-resonance, saturation current, a change between two biases."""

from dataclasses import replace
from math import isnan

from ohmward.metrology.bias import BeyondSweep, change_at, saturation_current
from ohmward.metrology.decide import decide
from ohmward.metrology.errors import TooFewPoints
from ohmward.metrology.resonance import Resonance, self_resonance
from ohmward.results import reasons
from ohmward.results.cells import Cell
from ohmward.results.judged import Judged, Rule, matches
from ohmward.results.quantities import evaluate, same_setting
from ohmward.terms.condition import Point
from ohmward.terms.decision import Decision
from ohmward.terms.kind import Kind
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part
from ohmward.units.values import format_quantity

_NAME = "self_resonance_hz"
# the sign of the reactance that a part has below its self-resonance; a resistor has either
_SIGN_BELOW = {Kind.CAPACITOR: -1, Kind.INDUCTOR: 1}


def judge_whole(part: Part, cells: list[Cell], limit: Limit, rule: Rule, drift: str) -> Judged:
    """A limit on a quantity that is one value for a part and stage."""
    if limit.quantity == _NAME:
        return judge_resonance(part, cells, limit, rule, drift)
    return judge_saturation(cells, limit, rule, drift)


def judge_saturation(cells: list[Cell], limit: Limit, rule: Rule, drift: str) -> Judged:
    """A limit on the current at which L has dropped by the percentage in the quantity's name.

    Where it has not within the sweep, the saturation current is above the highest bias.
    """
    name = limit.quantity
    good = [cell for cell in cells if cell.good and not isnan(cell.type_b[1])]
    alike = [cell for cell in good if same_setting(cell, good[0])]
    changes = [evaluate("inductance_change", cell, alike) for cell in alike]
    try:
        found = saturation_current(
            [cell.point.bias_a for cell in alike],
            [change.value for change in changes],
            [change.u for change in changes],
            int(name.split("_")[2].removesuffix("pct")) / 100,
        )
    except TooFewPoints:
        few = f"{name} needs two bias currents with good readings in stage {limit.stage!r}"
        return Judged(decision=Decision.INVALID, reason=few)
    if drift:
        return Judged(decision=Decision.INVALID, reason=f"{name}: {drift}")
    point = Point(frequency_hz=alike[0].point.frequency_hz, level_v=alike[0].point.level_v)
    if isnan(found.current_a):
        above = (
            f"{name} is above {format_quantity(found.highest_a, 'A')}, no such drop in the sweep"
        )
        return _bounded(above, found.highest_a, float("inf"), limit, point)
    return _decided(found.current_a, found.u_a, limit, rule, point)


def judge_change_between(cells: list[Cell], limit: Limit, rule: Rule, drift: str) -> Judged:
    """A limit on the change at a bias that lies between two that were measured.

    Linear between them, with what the curve may do there as an uncertainty (`change_at`). Looked
    at is the first frequency and level that the limit covers.
    """
    anywhere = replace(limit, bias_v=None, bias_a=None)
    good = [cell for cell in cells if cell.good and matches(anywhere, cell.point)]
    good = [cell for cell in good if not isnan(cell.type_b[1]) and same_setting(cell, good[0])]
    changes = [evaluate(limit.quantity, cell, good) for cell in good]
    by_current = bool(limit.bias_a)
    at = (limit.bias_a if by_current else limit.bias_v) or 0.0
    try:
        value, u = change_at(
            [cell.point.bias_a if by_current else cell.point.bias_v for cell in good],
            [change.value for change in changes],
            [change.u for change in changes],
            at,
        )
    except (TooFewPoints, BeyondSweep) as error:
        why = f"{reasons.no_reading(limit)}; nor between others: {error}"
        return Judged(decision=Decision.INVALID, reason=why)
    point = replace(good[0].point, bias_v=limit.bias_v or 0.0, bias_a=limit.bias_a or 0.0)
    if drift:
        return Judged(decision=Decision.INVALID, reason=f"{limit.quantity}: {drift}", point=point)
    note = f" at {reasons.condition(point)} (between biases that were measured)"
    return _decided(value, u, limit, rule, point, note)


def judge_resonance(part: Part, cells: list[Cell], limit: Limit, rule: Rule, drift: str) -> Judged:
    """A limit on the self-resonance, also where the sweep ends before it or begins beyond it.

    Without a sign change it is known to be above the highest frequency whose sign is sure, or,
    where the part already behaves as its opposite there, below the lowest.
    """
    covered = _one_setting([cell for cell in cells if matches(limit, cell.point)])
    if len(covered) < 2:
        few = f"{_NAME} needs two frequencies with good readings in stage {limit.stage!r}"
        return Judged(decision=Decision.INVALID, reason=few)
    if drift:
        return Judged(decision=Decision.INVALID, reason=f"{_NAME}: {drift}")
    found = _resonance(covered)
    point = _point(covered)
    if isnan(found.lowest_hz):
        doubt = f"{_NAME}: the sign of the reactance is in doubt at every point"
        return Judged(decision=Decision.UNDECIDED, reason=f"{doubt}, {reasons.bounds(limit)}")
    if isnan(found.frequency_hz):
        return _without_change(part, found, limit, point)
    return _decided(found.frequency_hz, found.u_hz, limit, rule, point)


def _decided(
    value: float, u: float, limit: Limit, rule: Rule, point: Point, note: str = ""
) -> Judged:
    k = rule.coverage_k
    decision, probability = decide(value, u, k, limit.minimum, limit.maximum, rule.guard)
    said = reasons.measured(limit.quantity, value, k * u, k) + note
    return Judged(
        decision=decision,
        reason=reasons.judged(said, limit, decision, probability),
        value=value,
        u_expanded=k * u,
        k=k,
        probability=probability,
        point=point,
    )


def report_resonance(cells: list[Cell], rule: Rule) -> Judged | None:
    """The self-resonance if the sweep shows one; None if it does not."""
    covered = _one_setting(cells)
    if len(covered) < 2:
        return None
    found = _resonance(covered)
    if isnan(found.frequency_hz):
        return None
    expanded = rule.coverage_k * found.u_hz
    return Judged(
        decision=Decision.REPORTED,
        reason=reasons.measured(_NAME, found.frequency_hz, expanded, rule.coverage_k),
        value=found.frequency_hz,
        u_expanded=expanded,
        k=rule.coverage_k,
        point=_point(covered),
    )


def _one_setting(cells: list[Cell]) -> list[Cell]:
    """The good cells at the level and bias of the first: a resonance is of one setting."""
    good = [cell for cell in cells if cell.good and not isnan(cell.type_b[1])]
    if not good:
        return []
    first = good[0].point
    alike = [
        cell
        for cell in good
        if (cell.point.level_v, cell.point.bias_v, cell.point.bias_a)
        == (first.level_v, first.bias_v, first.bias_a)
    ]
    return alike if len({cell.point.frequency_hz for cell in alike}) > 1 else []


def _resonance(cells: list[Cell]) -> Resonance:
    once = {cell.point.frequency_hz: cell for cell in reversed(cells)}
    spread = [cell.covariance() for cell in once.values()]
    return self_resonance(
        list(once),
        [cell.r for cell in once.values()],
        [cell.x for cell in once.values()],
        [u_r for u_r, _, _ in spread],
        [u_x for _, u_x, _ in spread],
        [rho for _, _, rho in spread],
    )


def _point(cells: list[Cell]) -> Point:
    """The setting without a frequency: the value is a frequency itself."""
    first = cells[0].point
    return Point(
        frequency_hz=float("nan"),
        level_v=first.level_v,
        bias_v=first.bias_v,
        bias_a=first.bias_a,
    )


def _without_change(part: Part, found: Resonance, limit: Limit, point: Point) -> Judged:
    beyond = _SIGN_BELOW.get(part.kind, found.first_sign) != found.first_sign
    low, high = (0.0, found.lowest_hz) if beyond else (found.highest_hz, float("inf"))
    bound = (
        f"below {format_quantity(high, 'Hz')}" if beyond else f"above {format_quantity(low, 'Hz')}"
    )
    said = f"{_NAME} is {bound}, no sign change in the sweep"
    return _bounded(said, low, high, limit, point)


def _bounded(said: str, low: float, high: float, limit: Limit, point: Point) -> Judged:
    """A decision on what is only known to lie between two values."""
    minimum = float("-inf") if limit.minimum is None else limit.minimum
    maximum = float("inf") if limit.maximum is None else limit.maximum
    if minimum <= low and high <= maximum:
        decision, how = Decision.ACCEPT, "within"
    elif high < minimum or low > maximum:
        decision, how = Decision.REJECT, "outside"
    else:
        decision, how = Decision.UNDECIDED, "which leaves open"
    return Judged(decision=decision, reason=f"{said}: {how} {reasons.bounds(limit)}", point=point)
