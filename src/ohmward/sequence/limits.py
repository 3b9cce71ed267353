"""Resolves a sequence's limits for the parts and points that are planned."""

from collections.abc import Sequence as Listed
from dataclasses import dataclass, replace

from ohmward.errors import Problems
from ohmward.sequence.brief import (
    CannotReach,
    PlannedDirect,
    PlannedResistance,
    PlannedStage,
    PlannedSweep,
)
from ohmward.sequence.direct import READ_AT_S
from ohmward.sequence.fits import fits
from ohmward.sequence.model import STAGE_TABLES, LimitTable, Sequence
from ohmward.sequence.notes import Notes
from ohmward.sequence.rating import resolve_bias
from ohmward.sequence.references import can_refer
from ohmward.sequence.rule_book import RULES
from ohmward.sequence.rules import (
    Bounds,
    NotStated,
    Rule,
    RuleLacks,
    same_frequency,
    widen,
)
from ohmward.sequence.rules_direct import DirectRule
from ohmward.sequence.values import Bound
from ohmward.terms.condition import Point
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part
from ohmward.terms.quantity import QUANTITIES
from ohmward.units.values import format_quantity

STATED_WITHIN = 0.02  # a voltage this near to the one that a rule is stated at is that one


@dataclass(frozen=True, kw_only=True, slots=True)
class Resolved:
    """Every limit of every part, and those whose condition the bench cannot reach."""

    limits: tuple[Limit, ...]
    cannot_reach: tuple[CannotReach, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class Where:
    """A limit's condition for one part; None is any."""

    frequency_hz: float | None
    level_v: float | None
    bias_v: float | None
    bias_a: float | None

    def holds_at(self, point: Point) -> bool:
        """Whether the point is within the condition."""
        return (
            (self.frequency_hz is None or same_frequency(self.frequency_hz, point.frequency_hz))
            and (self.level_v is None or same_frequency(self.level_v, point.level_v))
            and (self.bias_v is None or same_frequency(self.bias_v, point.bias_v))
            and (self.bias_a is None or same_frequency(self.bias_a, point.bias_a))
        )

    def __str__(self) -> str:
        said = [
            format_quantity(value, unit, 6)
            for value, unit in ((self.frequency_hz, "Hz"), (self.level_v, "V"))
            if value is not None
        ]
        if self.bias_v is not None:
            bias = format_quantity(self.bias_a, "A") if self.bias_a else ""
            said.append(f"{bias or format_quantity(self.bias_v, 'V')} bias")
        return ", ".join(said)


def where_of(limit: Limit) -> Where:
    """The condition of a resolved limit."""
    return Where(
        frequency_hz=limit.frequency_hz,
        level_v=limit.level_v,
        bias_v=limit.bias_v,
        bias_a=limit.bias_a,
    )


def resolve_limits(sequence: Sequence, planned: Listed[PlannedStage], notes: Notes) -> Resolved:
    """Resolve all limits; warns of a limit that judges nothing, and a part that nothing judges."""
    limits: list[Limit] = []
    missed: list[CannotReach] = []
    for table in sequence.limit:
        before = len(limits) + len(missed)
        for stage in planned:
            if not _judges(table, stage):
                continue
            found = _resolve(table, stage, notes)
            if isinstance(found, Limit):
                limits.append(found)
            elif found is not None:
                missed.append(found)
        if len(limits) + len(missed) == before and table.whole:
            notes.warn(f"limit {table.place} ({table.quantity}) judges no part of this lot")
    judged = {limit.part_id for limit in limits}
    idle = [part_id for part_id in _measured(planned) if part_id not in judged]
    if idle and all(table.whole for table in sequence.limit):
        notes.warn(f"measured, but judged by no limit, so never accepted: {', '.join(idle)}")
    return Resolved(limits=tuple(limits), cannot_reach=tuple(missed))


def _measured(planned: Listed[PlannedStage]) -> tuple[str, ...]:
    return tuple(dict.fromkeys(stage.part.part_id for stage in planned))


def _judges(table: LimitTable, stage: PlannedStage) -> bool:
    """Whether the limit is for this part; a kind that lacks the quantity was noted before."""
    return (
        stage.stage in table.stage
        and table.quantity in STAGE_TABLES[stage.kind].measures
        and fits(table.parts, stage.part)
        and stage.part.kind in QUANTITIES[table.quantity].kinds
    )


def _resolve(table: LimitTable, stage: PlannedStage, notes: Notes) -> Limit | CannotReach | None:
    key = f"limit[{table.place}]"
    if isinstance(stage, PlannedDirect):
        return _resolve_direct(table, stage, key, notes)
    if not isinstance(stage, PlannedSweep):
        return None
    rule = None if table.rule is None else RULES.get(table.rule)
    where = _where(table, rule, stage, key, notes)
    if where is None:
        return None
    bounds = _bounds(table, rule, where.frequency_hz or 0.0, stage.part, key, notes)
    if bounds is None:
        return None
    if not can_refer(table, stage.part, key, notes):
        return None
    per_part = QUANTITIES[table.quantity].per == "part"
    held = any(where.holds_at(point) for point in stage.points) or _between(table, where, stage)
    if not per_part and not held:
        return CannotReach(
            part_ids=(stage.part.part_id,),
            stage=stage.stage,
            what=f"the limit on {table.quantity} at {where}",
            reason="the meter cannot set this condition, so the limit decides nothing",
        )
    return Limit(
        part_id=stage.part.part_id,
        stage=stage.stage,
        quantity=table.quantity,
        minimum=bounds[0],
        maximum=bounds[1],
        source=table.source,
        frequency_hz=where.frequency_hz,
        level_v=where.level_v,
        bias_v=where.bias_v,
        bias_a=where.bias_a,
        reference_temperature_c=table.at.reference_temperature,
        reference_age_s=table.at.reference_age,
    )


def _between(table: LimitTable, where: Where, stage: PlannedSweep) -> bool:
    """Whether a change is asked for at a bias between two that the stage measures."""
    if table.quantity != "capacitance_change" or where.bias_v is None:
        return False
    biases = [point.bias_v for point in stage.points if replace(where, bias_v=None).holds_at(point)]
    return bool(biases) and min(biases) < where.bias_v < max(biases)


def _resolve_direct(
    table: LimitTable, stage: PlannedDirect, key: str, notes: Notes
) -> Limit | None:
    """A limit on what a stage under direct voltage or current measures."""
    rule = None if table.rule is None else RULES.get(table.rule)
    volts = None if isinstance(stage, PlannedResistance) else stage.source_v
    if table.at.voltage is not None:
        unseen = replace(notes, problems=Problems())  # what is wrong was noted with the stage
        asked = resolve_bias(table.at.voltage, stage.part, f"{key}.at.voltage", unseen)
        if asked is None:
            return None
        if volts is None or not same_frequency(asked[0], volts):
            notes.sequence(
                "limit-not-measured",
                f"{key}.at.voltage",
                expected="no voltage" if volts is None else _volts_of(stage, volts),
                found=format_quantity(asked[0], "V", 6),
            )
            return None
    try:
        since_s = _since(table, rule, stage, key, notes)
        if isinstance(rule, DirectRule) and volts is not None:
            _warn_of_extrapolation(table, rule, stage, volts, notes)
    except (RuleLacks, NotStated):
        since_s = None  # what the rule lacks is told with its bounds
    bounds = _bounds(table, rule, volts or 0.0, stage.part, key, notes)
    if bounds is None:
        return None
    return Limit(
        part_id=stage.part.part_id,
        stage=stage.stage,
        quantity=table.quantity,
        minimum=bounds[0],
        maximum=bounds[1],
        source=table.source,
        voltage_v=volts,
        since_voltage_s=since_s,
    )


def _since(
    table: LimitTable, rule: Rule | None, stage: PlannedDirect, key: str, notes: Notes
) -> float | None:
    """The time that decides: as written, else the rule's, else the stage's last."""
    if not stage.times_s or table.quantity in READ_AT_S:
        return None
    asked = table.at.since_voltage
    stated = rule.times(stage.part) if isinstance(rule, DirectRule) else ()
    if asked is None:
        asked = next((one for one in stated if _among(one, stage.times_s)), None)
    if asked is None and stated:
        notes.sequence(
            "limit-not-measured",
            f"{key}.stage",
            expected=f"a stage that reads {stage.part.part_id} after {_seconds(stated)}, when "
            f"{table.rule} is stated, or the time in 'at.since_voltage'",
            found=f"{stage.stage}, which reads after {_seconds(stage.times_s)}",
        )
    elif asked is not None and stated and not _among(asked, stated):
        notes.warn(
            f"limit {table.place}: {table.rule} is stated after {_seconds(stated)}, and is held "
            f"here after {_seconds((asked,))}"
        )
    return asked if asked is not None else stage.times_s[-1]


def _warn_of_extrapolation(
    table: LimitTable, rule: DirectRule, stage: PlannedDirect, volts: float, notes: Notes
) -> None:
    """Insulation at rated voltage from a figure stated at 100 V is an extrapolation."""
    stated_v = rule.stated_v(stage.part)
    if stated_v is None or abs(volts - stated_v) <= STATED_WITHIN * stated_v:
        return
    notes.warn(
        f"limit {table.place}: {table.rule} is stated at other voltages than stage {stage.stage} "
        "has for some parts: held there, it is an extrapolation"
    )


def _volts_of(stage: PlannedDirect, volts: float) -> str:
    return f"{format_quantity(volts, 'V', 6)}, which stage {stage.stage} has"


def _seconds(values: Listed[float]) -> str:
    return " or ".join(format_quantity(value, "s", 6) for value in values)


def _where(
    table: LimitTable, rule: Rule | None, stage: PlannedSweep, key: str, notes: Notes
) -> Where | None:
    """The condition for this part: as written, at the rule's own frequency where it has one."""
    bias_v: float | None = None
    bias_a: float | None = None
    if table.at.bias is not None:
        unseen = replace(notes, problems=Problems())  # what is wrong was noted with the stage
        bias = resolve_bias(table.at.bias, stage.part, f"{key}.at.bias", unseen)
        if bias is None:
            return None
        bias_v, bias_a = bias
    frequency = table.at.frequency
    if rule is not None and rule.needs_frequency and frequency is None:
        return None  # noted when the sequence was read
    stated = () if rule is None else rule.frequencies(stage.part)
    if frequency is not None and stated and not _among(frequency, stated):
        notes.sequence(
            "rule-other-frequency",
            f"{key}.at.frequency",
            expected=f"{_hertz(stated)}, where {table.rule} is stated for {stage.part.part_id}",
            found=_hertz((frequency,)),
        )
        return None
    if frequency is None and stated:
        measured = [point.frequency_hz for point in stage.points]
        frequency = next((one for one in stated if _among(one, measured)), None)
        if frequency is None:
            notes.sequence(
                "limit-not-measured",
                f"{key}.stage",
                expected=f"a stage that measures {stage.part.part_id} at {_hertz(stated)}, "
                f"where {table.rule} is stated",
                found=stage.stage,
            )
            return None
    return Where(frequency_hz=frequency, level_v=table.at.level, bias_v=bias_v, bias_a=bias_a)


def _bounds(
    table: LimitTable,
    rule: Rule | None,
    condition: float,
    part: Part,
    key: str,
    notes: Notes,
) -> Bounds | None:
    """Minimum and maximum in SI units; None with the reason noted where there are none.

    ``condition`` is what a rule is asked with: a frequency (Hz), or a direct voltage (V).
    """
    if rule is None:
        if table.minimum is None and table.maximum is None:
            return None  # noted when the sequence was read
        low, high = _absolute(table.minimum, part), _absolute(table.maximum, part)
        if low is not None and high is not None and low > high:
            notes.sequence(
                "limit-crossed",
                key,
                expected=f"min below max for {part.part_id}",
                found=f"{low:g} to {high:g} {QUANTITIES[table.quantity].unit}",
            )
            return None
        return low, high
    try:
        found = rule.bounds(part, condition)
    except RuleLacks as lack:
        notes.cell(
            "rule-lacks-cell",
            part,
            lack.cell,
            expected=f"{lack.expected}, which the rule {rule.name} needs",
            found=lack.found,
        )
    except NotStated as reason:
        notes.warn(f"limit {table.place} does not judge {part.part_id}: {rule.name} is {reason}")
    else:
        return widen(found, part.nominal, table.times)
    return None


def _absolute(bound: Bound | None, part: Part) -> float | None:
    if bound is None:
        return None
    return part.nominal * (1.0 + bound.value) if bound.relative else bound.value


def _among(frequency_hz: float, listed: Listed[float]) -> bool:
    return any(same_frequency(frequency_hz, one) for one in listed)


def _hertz(values: Listed[float]) -> str:
    return " or ".join(format_quantity(value, "Hz", 6) for value in values)
