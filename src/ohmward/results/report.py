"""Rows that judge nothing: the main quantities of a part's kind where no limit judges them."""

from math import nan

from ohmward.results import reasons
from ohmward.results.cells import Cell
from ohmward.results.judged import Judged, Rule, Stage, expand, matches, why_not
from ohmward.results.quantities import evaluate, reference_cell
from ohmward.results.whole_stage import report_resonance
from ohmward.terms.decision import Decision
from ohmward.terms.kind import Kind
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part

MAIN_QUANTITIES: dict[Kind, tuple[str, ...]] = {
    Kind.CAPACITOR: ("capacitance_f", "d", "rs_ohm"),
    Kind.INDUCTOR: ("inductance_h", "q", "rs_ohm"),
    Kind.RESISTOR: ("resistance_ohm", "reactance_ohm"),
}
_CHANGE = {Kind.CAPACITOR: "capacitance_change", Kind.INDUCTOR: "inductance_change"}
# a limit on any of these judges the main quantity of the same thing too
_SAME_THING = {
    "cs_f": "capacitance_f",
    "cp_f": "capacitance_f",
    "ls_h": "inductance_h",
    "lp_h": "inductance_h",
}


def report_stage(
    part: Part, name: str, stage: Stage, limits: list[Limit], rule: Rule
) -> list[tuple[Limit, Judged]]:
    """What is worth saying of a stage, each with a limit that bounds nothing.

    The main quantities at the first point and at each point that a limit names by frequency;
    the change at the greatest bias; the self-resonance if the sweep shows one. ``limits`` are
    those of this part and stage: what they judge is not said twice.
    """
    rows = []
    for cell in _worth_reporting(stage.cells, limits):
        here = [limit.quantity for limit in limits if matches(limit, cell.point)]
        covered = {*here, *(_SAME_THING.get(quantity, quantity) for quantity in here)}
        for quantity in MAIN_QUANTITIES[part.kind]:
            if quantity not in covered:
                rows.append((quantity, report_value(quantity, cell, stage, rule)))
    named = {limit.quantity for limit in limits}
    change = _CHANGE.get(part.kind)
    biased = [cell for cell in stage.cells if reference_cell(cell, stage.cells) is not cell]
    if change and biased and change not in named:
        most = max(biased, key=lambda cell: (abs(cell.point.bias_v), abs(cell.point.bias_a)))
        rows.append((change, report_value(change, most, stage, rule)))
    if "self_resonance_hz" not in named and not stage.drift:
        resonance = report_resonance(stage.cells, rule)
        if resonance is not None:
            rows.append(("self_resonance_hz", resonance))
    return [(_no_limit(part, name, quantity), judged) for quantity, judged in rows]


def _worth_reporting(cells: list[Cell], limits: list[Limit]) -> list[Cell]:
    named = [limit for limit in limits if limit.frequency_hz is not None]
    return [
        cell
        for number, cell in enumerate(cells)
        if number == 0 or any(matches(limit, cell.point) for limit in named)
    ]


def _no_limit(part: Part, stage: str, quantity: str) -> Limit:
    return Limit(
        part_id=part.part_id, stage=stage, quantity=quantity, minimum=None, maximum=None, source=""
    )


def report_value(quantity: str, cell: Cell, stage: Stage, rule: Rule) -> Judged:
    """A value without a limit; where it cannot be trusted there is no value, only the reason."""
    value = evaluate(quantity, cell, stage.cells) if cell.good else None
    doubt = why_not(quantity, cell, stage)
    if value is None or doubt:
        # a value without an uncertainty is still worth seeing; one that drifted is not
        kept = value.value if value and not stage.drift else nan
        return Judged(decision=Decision.REPORTED, reason=doubt, value=kept, point=cell.point)
    spread = expand(rule, value, cell)
    where = reasons.condition(cell.point)
    said = reasons.measured(quantity, value.value, spread.u_expanded, spread.k, where)
    note = f" ({value.note})" if value.note else ""
    return Judged(
        decision=Decision.REPORTED,
        reason=said + note + reasons.left_out(cell),
        value=value.value,
        u_expanded=spread.u_expanded,
        k=spread.k,
        point=cell.point,
    )
