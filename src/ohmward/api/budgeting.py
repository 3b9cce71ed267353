"""The uncertainty budget behind a value of a run."""

from dataclasses import dataclass
from math import isfinite
from pathlib import Path

from ohmward.api.past_run import PastRun, past_run
from ohmward.errors import BadInput, Problem, Problems
from ohmward.results.budgets import NoBudget, PointBudget, budgets
from ohmward.results.quantities import CHANGES
from ohmward.setup.toml import one_of
from ohmward.terms.part import Part
from ohmward.terms.quantity import QUANTITIES
from ohmward.units.values import UnitError, format_quantity, parse_quantity


@dataclass(frozen=True, kw_only=True, slots=True)
class BudgetOf:
    """The budgets of one quantity of one part, point by point."""

    part_id: str
    quantity: str
    unit: str
    points: tuple[PointBudget, ...]

    def as_dict(self) -> dict[str, object]:
        """In types that JSON has; what is infinite or unknown is null."""
        return {
            "part_id": self.part_id,
            "quantity": self.quantity,
            "unit": self.unit,
            "points": [_as_dict(point) for point in self.points],
        }


def budget(run: Path, part: str, quantity: str, *, at: str | None = None) -> BudgetOf:
    """The budgets of a quantity of a part, at one frequency or at all that were measured.

    Raises BadInput with what the run has instead.
    """
    past = past_run(run)
    found = _checked(past, part, quantity)
    try:
        points = budgets(
            past.readings,
            past.impedance,
            part,
            quantity,
            past.accuracies,
            cable_m=past.cable_m,
            compensations=past.compensations,
            coverage_k=past.rule.coverage_k,
        )
    except NoBudget as error:
        raise _refused(run, "QUANTITY", "a good reading, with a stated accuracy", str(error)) from (
            error
        )
    return BudgetOf(
        part_id=found.part_id,
        quantity=quantity,
        unit=QUANTITIES[quantity].unit,
        points=tuple(points if at is None else _at(points, at, run)),
    )


def _checked(past: PastRun, part_id: str, quantity: str) -> Part:
    """The part, if it is in the run and may have such a budget."""
    problems = Problems()
    parts = {part.part_id: part for part in past.parts}
    part = parts.get(part_id)
    if part is None:
        expected = one_of(part_id, list(parts))
        problems.add(
            id="unknown-part", file=past.folder, key="PART", expected=expected, found=part_id
        )
    having = [
        name
        for name, one in QUANTITIES.items()
        if one.per == "point" and name not in CHANGES and (part is None or part.kind in one.kinds)
    ]
    if quantity not in having:
        problems.add(
            id="unknown-quantity",
            file=past.folder,
            key="QUANTITY",
            expected=f"a quantity of one point: {one_of(quantity, having)}",
            found=quantity,
        )
    problems.raise_if_any()
    return parts[part_id]


def _at(points: list[PointBudget], at: str, run: Path) -> list[PointBudget]:
    try:
        wanted_hz = parse_quantity(at, "Hz")
    except UnitError as error:
        raise _refused(run, "--at", error.expected, error.found) from error
    chosen = [
        point
        for point in points
        if abs(point.point.frequency_hz - wanted_hz) <= 1e-3 * point.point.frequency_hz
    ]
    if not chosen:
        known = dict.fromkeys(format_quantity(one.point.frequency_hz, "Hz", 6) for one in points)
        raise _refused(run, "--at", f"one of {', '.join(known)}", at)
    return chosen


def _refused(run: Path, key: str, expected: str, found: str) -> BadInput:
    problem = Problem(id="no-budget", file=str(run), key=key, expected=expected, found=found)
    return BadInput((problem,))


def _as_dict(point: PointBudget) -> dict[str, object]:
    whole = point.budget
    return {
        "stage": point.stage,
        "frequency_hz": point.point.frequency_hz,
        "level_v": point.point.level_v,
        "bias_v": point.point.bias_v,
        "bias_a": point.point.bias_a,
        "view": point.view,
        "value": _number(whole.value),
        "u": whole.u,
        "degrees": _number(whole.degrees),
        "coverage_k": _number(whole.k),
        "u_expanded": _number(whole.u_expanded),
        "contributions": [
            {
                "cause": part.source.name,
                "distribution": part.source.distribution,
                "u": part.source.u,
                "unit": part.source.unit,
                "sensitivity": part.source.sensitivity,
                "contribution": part.source.contribution,
                "share": part.share,
                "degrees": _number(part.source.degrees),
            }
            for part in whole.contributions
        ],
        "decided_by": "Monte Carlo" if point.monte_carlo else "first order",
        "decided_u_expanded": _number(point.interval.u_expanded),
        "decided_coverage_k": _number(point.interval.k),
    }


def _number(value: float) -> float | None:
    return value if isfinite(value) else None
