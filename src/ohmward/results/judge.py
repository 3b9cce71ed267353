"""Rows of results.csv: every limit held against what was measured, and what is worth reporting.

One row for each limit of each part (at its worst point where it names no condition; limits that
meet at one value share its row), then the main quantities of the part's kind where no limit
judges them. Decisions are those of JCGM 106 with guard band w = r·U; what cannot be trusted is
invalid and never a rejection.
"""

from collections.abc import Collection, Iterable, Mapping, Sequence
from math import isnan, nan

import numpy as np
from numpy.typing import NDArray

from ohmward.results import reasons
from ohmward.results.cells import Cell, cells_of
from ohmward.results.closure import drift_of, split_closure
from ohmward.results.columns import RESULT_COLUMNS
from ohmward.results.corrections import asks, correct, uncorrected
from ohmward.results.derive import Columns
from ohmward.results.judged import Judged, Rule, Stage, expand, matches, why_not
from ohmward.results.merging import SEVERITY, Row, merged
from ohmward.results.quantities import CHANGES, evaluate, reference_cell
from ohmward.results.report import report_stage, report_value
from ohmward.results.self_check import step_in
from ohmward.results.whole_stage import judge_change_between, judge_whole
from ohmward.terms.accuracy import ImpedanceAccuracy
from ohmward.terms.decision import Decision
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part
from ohmward.terms.quantity import QUANTITIES


def judge(
    readings: Columns,
    impedance: Mapping[str, NDArray[np.generic]],
    parts: Sequence[Part],
    limits: Iterable[Limit],
    *,
    rule: Rule | None = None,
    closures: Collection[str] = (),
    accuracies: Mapping[str, ImpedanceAccuracy] | None = None,
    cable_m: Mapping[str, float] | None = None,
    run_id: str = "",
) -> list[Row]:
    """The rows of results.csv, by part, then limit, then what is reported.

    ``readings`` are the journal's columns, ``impedance`` what `derive_impedance` made of them;
    ``closures`` names the stages that end with a closure point. With ``accuracies`` (and
    ``cable_m``), as given to `derive_impedance`, intervals follow the distribution that the
    instrument states; without, it is taken to be normal. A number that does not apply is NaN.
    Units are those of the quantity.
    """
    rule = rule or Rule()
    stages: dict[str, dict[str, Stage]] = {part.part_id: {} for part in parts}
    for (part_id, name), cells in cells_of(readings, impedance, accuracies, cable_m).items():
        if part_id in stages:
            stages[part_id][name] = _stage(cells, closes=name in closures)
    by_part: dict[str, list[Limit]] = {}
    for limit in limits:
        by_part.setdefault(limit.part_id, []).append(limit)
    rows = []
    for part in parts:
        found, own = stages[part.part_id], by_part.get(part.part_id, [])
        mine = []
        for limit in own:
            stage = found.get(limit.stage, Stage(cells=[]))
            judged = judge_limit(part, limit, stage, rule)
            mine.append(_row(run_id, limit, judged))
            if asks(limit):
                mine += _as_measured(run_id, limit, judged, stage, rule)
        for name, stage in found.items():
            here = [limit for limit in own if limit.stage == name]
            for limit, judged in report_stage(part, name, stage, here, rule):
                mine.append(_row(run_id, limit, judged))
        rows += merged(mine)
    return rows


def _as_measured(run_id: str, limit: Limit, judged: Judged, stage: Stage, rule: Rule) -> list[Row]:
    """The value beside the one that was carried to a reference."""
    plain = uncorrected(limit)
    cells = [cell for cell in stage.cells if cell.point == judged.point]
    return [_row(run_id, plain, report_value(limit.quantity, cell, stage, rule)) for cell in cells]


def _stage(cells: list[Cell], *, closes: bool) -> Stage:
    rest, closure = split_closure(cells) if closes else (cells, None)
    drift = drift_of(rest[0], closure) if closure else ""
    return Stage(cells=rest, drift=drift or step_in(rest))


def part_decisions(rows: Iterable[Row], parts: Iterable[Part]) -> dict[str, Decision]:
    """Each part's decision from its judged rows; one of which nothing was judged is invalid."""
    judged: dict[str, list[Decision]] = {part.part_id: [] for part in parts}
    for row in rows:
        if row["decision"] != Decision.REPORTED and row["part_id"] in judged:
            judged[str(row["part_id"])].append(Decision(str(row["decision"])))
    return {part_id: Decision.of_part(decisions) for part_id, decisions in judged.items()}


def judge_limit(part: Part, limit: Limit, stage: Stage, rule: Rule) -> Judged:
    """One limit held against one stage of its part: its worst point where it covers several."""
    if QUANTITIES[limit.quantity].per == "part":
        return judge_whole(part, stage.cells, limit, rule, stage.drift)
    cells = [cell for cell in stage.cells if matches(limit, cell.point)]
    if limit.quantity in CHANGES and not cells:
        return judge_change_between(stage.cells, limit, rule, stage.drift)
    if limit.quantity in CHANGES:
        # the reference is 0 by definition: it proves nothing unless it is asked for
        asked = [cell for cell in cells if reference_cell(cell, stage.cells) is not cell]
        cells = asked or cells
    if not cells:
        return Judged(decision=Decision.INVALID, reason=reasons.no_reading(limit))
    return min((_judge_cell(part, rule, limit, cell, stage) for cell in cells), key=_badness)


def _badness(judged: Judged) -> tuple[int, float]:
    probability = 2.0 if isnan(judged.probability) else judged.probability
    return SEVERITY.index(judged.decision), probability


def _judge_cell(part: Part, rule: Rule, limit: Limit, cell: Cell, stage: Stage) -> Judged:
    quantity = limit.quantity
    found = evaluate(quantity, cell, stage.cells) if cell.good else None
    doubt = why_not(quantity, cell, stage)
    if found is None or doubt:
        return _invalid(doubt, cell, found.value if found else nan)
    carried = correct(limit, part, cell, expand(rule, found, cell), rule)
    if carried.doubt:
        where = reasons.condition(cell.point)
        return _invalid(f"{quantity} at {where} {carried.doubt}", cell)
    spread = carried.spread
    decision, probability = spread.decide(rule, limit.minimum, limit.maximum)
    said = reasons.measured(
        quantity, spread.value, spread.u_expanded, spread.k, reasons.condition(cell.point)
    )
    notes = "; ".join(note for note in (found.note, carried.note) if note)
    note = f" ({notes})" if notes else ""
    reason = reasons.judged(said + note, limit, decision, probability) + reasons.left_out(cell)
    return Judged(
        decision=decision,
        reason=reason,
        value=spread.value,
        u_expanded=spread.u_expanded,
        k=spread.k,
        probability=probability,
        point=cell.point,
    )


def _invalid(reason: str, cell: Cell, value: float = nan) -> Judged:
    return Judged(decision=Decision.INVALID, reason=reason, value=value, point=cell.point)


def _row(run_id: str, limit: Limit, judged: Judged) -> Row:
    point = judged.point
    cells: Row = {
        "run_id": run_id,
        "part_id": limit.part_id,
        "stage": limit.stage,
        "quantity": limit.quantity,
        "frequency_hz": point.frequency_hz if point else _number(limit.frequency_hz),
        "level_v": point.level_v if point else _number(limit.level_v),
        "bias_v": point.bias_v if point else _number(limit.bias_v),
        "bias_a": point.bias_a if point else _number(limit.bias_a),
        "voltage_v": nan,
        "since_voltage_s": nan,
        "reference_temperature_c": _number(limit.reference_temperature_c),
        "reference_age_s": _number(limit.reference_age_s),
        "value": judged.value,
        "u_expanded": judged.u_expanded,
        "coverage_k": judged.k,
        "unit": QUANTITIES[limit.quantity].unit,
        "limit_min": _number(limit.minimum),
        "limit_max": _number(limit.maximum),
        "limit_source": limit.source,
        "decision": judged.decision,
        "reason": judged.reason,
    }
    return {name: cells[name] for name in RESULT_COLUMNS}


def _number(value: float | None) -> float:
    return nan if value is None else value
