"""A decision on one quantity, and the expanded uncertainty that it was made with."""

from dataclasses import dataclass
from math import isnan, nan

import numpy as np
from numpy.typing import NDArray

from ohmward.metrology.coverage import coverage_factor, effective_degrees
from ohmward.metrology.decide import decide, decide_by_probability
from ohmward.metrology.uncertain import interval
from ohmward.results import reasons
from ohmward.results.cells import Cell
from ohmward.results.quantities import Evaluated, is_active
from ohmward.terms.condition import Point
from ohmward.terms.decision import Decision
from ohmward.terms.limit import Limit


@dataclass(frozen=True, kw_only=True, slots=True)
class Rule:
    """How decisions are made: guard band as a share of U, and the coverage asked for.

    ``coverage_k`` is the factor for a normal distribution (2 means 95.45 %).
    """

    guard: float = 1.0
    coverage_k: float = 2.0


@dataclass(frozen=True, kw_only=True, slots=True)
class Stage:
    """What is known of one part in one stage: its cells, and why none of them counts, if so."""

    cells: list[Cell]
    drift: str = ""


@dataclass(frozen=True, kw_only=True, slots=True)
class Judged:
    """A decision with everything that its row needs; NaN where a number does not apply."""

    decision: Decision
    reason: str
    value: float = nan
    u_expanded: float = nan
    k: float = nan
    probability: float = nan
    point: Point | None = None


def matches(limit: Limit, point: Point) -> bool:
    """Whether a limit's condition covers a point; a condition that is None covers all."""
    return all(
        wanted is None or abs(wanted - had) <= 1e-6 * max(abs(wanted), abs(had))
        for wanted, had in (
            (limit.frequency_hz, point.frequency_hz),
            (limit.level_v, point.level_v),
            (limit.bias_v, point.bias_v),
            (limit.bias_a, point.bias_a),
        )
    )


def why_not(quantity: str, cell: Cell, stage: Stage) -> str:
    """Why nothing of this cell can be decided, or "" if it can."""
    if not cell.good:
        return reasons.unusable(quantity, cell)
    if isnan(cell.covariance()[0]) or isnan(cell.covariance()[1]):
        return reasons.no_uncertainty(quantity, cell)
    if stage.drift:
        return f"{quantity} at {reasons.condition(cell.point)}: {stage.drift}"
    return reasons.active(quantity, cell) if is_active(cell) else ""


@dataclass(frozen=True, kw_only=True, slots=True)
class Spread:
    """An expanded uncertainty, with the samples where the distribution is not normal."""

    value: float
    u: float
    u_expanded: float
    k: float
    samples: NDArray[np.float64] | None = None

    def decide(
        self, rule: Rule, minimum: float | None, maximum: float | None
    ) -> tuple[Decision, float]:
        """The decision and the probability of conformity."""
        if self.samples is None:
            return decide(self.value, self.u, self.k, minimum, maximum, rule.guard)
        inside = np.ones(self.samples.shape, dtype=np.bool_)
        if minimum is not None:
            inside &= self.samples >= minimum
        if maximum is not None:
            inside &= self.samples <= maximum
        probability = float(np.mean(inside))
        return decide_by_probability(probability, rule.coverage_k, rule.guard), probability


def expand(rule: Rule, found: Evaluated, cell: Cell) -> Spread:
    """U and k of a quantity: of a view by metrology's interval, of a change by first order."""
    if found.view:
        at = interval(found.view, cell.uncertain(), rule.coverage_k)
        return Spread(
            value=found.value, u=at.u, u_expanded=at.u_expanded, k=at.k, samples=at.samples
        )
    k = coverage_factor(effective_degrees(found.u, ((found.u_a, found.degrees),)), rule.coverage_k)
    return Spread(value=found.value, u=found.u, u_expanded=k * found.u, k=k)
