"""Plans the stages under direct voltage or current for one part, and checks what it may get."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from itertools import pairwise
from math import exp

from ohmward.sequence.direct import (
    AbsorptionStage,
    DirectStage,
    InsulationStage,
    LeakageStage,
    OneVoltageStage,
    ProofStage,
    ReformStage,
    ResistanceStage,
)
from ohmward.sequence.high import High, capacitance_bounds
from ohmward.sequence.notes import Notes
from ohmward.sequence.planned import (
    PlannedAbsorption,
    PlannedDirect,
    PlannedInsulation,
    PlannedLeakage,
    PlannedProof,
    PlannedReform,
    PlannedResistance,
)
from ohmward.sequence.rating import SLACK, check_ratings_of_current, resolve_bias, resolve_current
from ohmward.sequence.rule_book import RULES
from ohmward.sequence.rules import NotStated, RuleLacks
from ohmward.sequence.values import Bias
from ohmward.sequence.voltages import VOLTAGE_RULES
from ohmward.terms.kind import Kind
from ohmward.terms.part import Part
from ohmward.units.values import format_quantity

DROOP_MOST_REL = 0.05


@dataclass(frozen=True, kw_only=True, slots=True)
class Task:
    """One stage for one part, and all that it is planned with."""

    part: Part
    number: int
    key: str
    high: High
    share: float
    notes: Notes


def plan_direct(stage: DirectStage, task: Task) -> PlannedDirect | None:
    """The stage for this part; None where no voltage or current can be worked out.

    Every problem is noted.
    """
    return _PLANS[type(stage)](stage, task)


def _leakage(stage: LeakageStage, task: Task) -> PlannedDirect | None:
    volts = _one_voltage(stage, task)
    if volts is None:
        return None
    ramp = task.high.ramp(stage.ramp_to(volts), task.part)
    return PlannedLeakage(
        number=task.number,
        stage=stage.name,
        part=task.part,
        duration_s=_duration_s(task, volts, ramp) + stage.soak,
        source_v=volts,
        ramp_v_per_s=ramp,
        interval_s=stage.interval,
        current_max_a=stage.current_limit,
        power_max_w=stage.power_limit,
        voltage_v=volts,
        soak_s=stage.soak,
        read_at_s=stage.read_at_s,
    )


def _insulation(stage: InsulationStage, task: Task) -> PlannedDirect | None:
    volts = _one_voltage(stage, task)
    if volts is None:
        return None
    ramp, soak_s = task.high.ramp(stage.ramp_to(volts), task.part), max(stage.read_at_s)
    return PlannedInsulation(
        number=task.number,
        stage=stage.name,
        part=task.part,
        duration_s=_duration_s(task, volts, ramp) + soak_s,
        source_v=volts,
        ramp_v_per_s=ramp,
        interval_s=stage.interval,
        current_max_a=stage.current_limit,
        power_max_w=stage.power_limit,
        voltage_v=volts,
        soak_s=soak_s,
        read_at_s=stage.read_at_s,
    )


def _reform(stage: ReformStage, task: Task) -> PlannedDirect | None:
    found = [_written_voltage(one, task, f"{task.key}.voltages") for one in stage.voltages]
    volts = tuple(one for one in found if one is not None)
    below_a = _next_below_a(stage, task)
    if len(volts) < len(found) or below_a is None:
        return None
    if any(after <= before for before, after in pairwise(volts)):
        task.notes.sequence(
            "voltages-not-rising",
            f"{task.key}.voltages",
            expected=f"voltages that rise for {task.part.part_id}",
            found=", ".join(_volts(one) for one in volts),
        )
        return None
    _check_voltage(volts[-1], task, f"{task.key}.voltages", task.share)
    ramp = task.high.ramp(stage.ramp_to(volts[-1]), task.part)
    return PlannedReform(
        number=task.number,
        stage=stage.name,
        part=task.part,
        duration_s=_duration_s(task, volts[-1], ramp) + stage.hold * len(volts) + stage.rest,
        source_v=volts[-1],
        ramp_v_per_s=ramp,
        interval_s=stage.interval,
        current_max_a=stage.current_limit,
        power_max_w=stage.power_limit,
        voltages_v=volts,
        hold_s=stage.hold,
        next_below_a=below_a,
        rise_rel=stage.rise,
        budget_s=stage.budget,
        rest_s=stage.rest,
    )


def _next_below_a(stage: ReformStage, task: Task) -> float | None:
    rule = RULES.get(stage.leakage_rule)
    if rule is None:
        return None  # noted when the sequence was read
    try:
        largest = rule.bounds(task.part, task.part.rated_v or 0.0)[1]
    except RuleLacks as lack:
        _lacks(lack, rule.name, task)
        return None
    except NotStated as reason:
        _not_stated(reason, rule.name, f"{task.key}.leakage_rule", task)
        return None
    if largest is None:
        return None
    below_a = largest * stage.times
    return below_a if stage.current_limit is None else min(below_a, stage.current_limit)


def _proof(stage: ProofStage, task: Task) -> PlannedDirect | None:
    rule = VOLTAGE_RULES.get(stage.voltage_rule)
    volts = _one_voltage(stage, task, share=stage.rating_allowed or task.share)
    if volts is None:
        return None
    if task.part.safety_class:
        task.notes.warn(
            f"{task.part.part_id}, {stage.name}: repeated voltage proofs can damage a safety "
            "capacitor (makers' notes)"
        )
    ramp = task.high.ramp(stage.ramp_to(volts), task.part)
    if rule is not None and not rule.confirmed:
        task.notes.warn(f"stage {stage.name}: {rule.name} is {rule.source}, from memory")
    return PlannedProof(
        number=task.number,
        stage=stage.name,
        part=task.part,
        duration_s=_duration_s(task, volts, ramp) + stage.dwell,
        source_v=volts,
        ramp_v_per_s=ramp,
        interval_s=stage.interval,
        current_max_a=stage.current_limit,
        power_max_w=stage.power_limit,
        voltage_v=volts,
        dwell_s=stage.dwell,
        attempts=stage.attempts,
    )


def _absorption(stage: AbsorptionStage, task: Task) -> PlannedDirect | None:
    volts = _one_voltage(stage, task)
    if volts is None:
        return None
    ramp, moment_s = task.high.ramp(stage.ramp_to(volts), task.part), task.high.moment_s()
    droop = _droop_rel(stage, task, moment_s)
    if droop > DROOP_MOST_REL:
        task.notes.sequence(
            "droop-too-large",
            f"{task.key}.read_at",
            expected=f"fewer readings, or a larger part than {task.part.part_id}: connecting the "
            f"voltmeter may take at most {100 * DROOP_MOST_REL:g} % of what comes back",
            found=f"{100 * droop:.2g} %",
        )
    return PlannedAbsorption(
        number=task.number,
        stage=stage.name,
        part=task.part,
        duration_s=_duration_s(task, volts, ramp)
        + stage.charge
        + stage.short
        + max(stage.read_at_s),
        source_v=volts,
        ramp_v_per_s=ramp,
        interval_s=stage.interval,
        current_max_a=stage.current_limit,
        power_max_w=stage.power_limit,
        voltage_v=volts,
        charge_s=stage.charge,
        short_s=stage.short,
        read_at_s=stage.read_at_s,
        moment_s=moment_s,
        droop_rel=droop,
    )


def _droop_rel(stage: AbsorptionStage, task: Task, moment_s: float) -> float:
    """Share lost to the divider in all moments together: 1 − e^(−n·t/(R·C_min))."""
    path, least_f = task.high.path, capacitance_bounds(task.part)[0]
    if path is None or least_f <= 0.0:
        return 0.0
    return 1.0 - exp(-len(stage.read_at_s) * moment_s / (path.divider_ohm * least_f))


def _resistance(stage: ResistanceStage, task: Task) -> PlannedDirect | None:
    part, key = task.part, f"{task.key}.current"
    amperes = resolve_current(stage.current, part, task.notes)
    if amperes is None:
        return None
    check_ratings_of_current(amperes, part, key, task.notes, task.share)
    wired = task.high.wired(part)
    own_ohm = part.nominal if part.kind is Kind.RESISTOR else 0.0
    source_v = amperes * ((0.0 if wired is None else wired.series_ohm) + own_ohm)
    if amperes > task.high.limit_a * (1 + SLACK):
        task.notes.sequence(
            "current-beyond-bench",
            key,
            expected=f"at most {format_quantity(task.high.limit_a, 'A')}, what the supply gives",
            found=format_quantity(amperes, "A"),
        )
    _check_bench(source_v, task, key)
    ramp = task.high.ramp(stage.ramp_to(source_v), part)
    reading_s = stage.repeats * stage.interval
    return PlannedResistance(
        number=task.number,
        stage=stage.name,
        part=part,
        duration_s=_duration_s(task, source_v, ramp) + stage.settle + reading_s,
        source_v=source_v,
        ramp_v_per_s=ramp,
        interval_s=stage.interval,
        current_max_a=stage.current_limit,
        power_max_w=stage.power_limit,
        current_a=amperes,
        settle_s=stage.settle,
        repeats=stage.repeats,
    )


_PLANS: Mapping[type[DirectStage], Callable[..., PlannedDirect | None]] = {
    LeakageStage: _leakage,
    InsulationStage: _insulation,
    ReformStage: _reform,
    ProofStage: _proof,
    AbsorptionStage: _absorption,
    ResistanceStage: _resistance,
}


# ---- the voltage


def _one_voltage(stage: OneVoltageStage, task: Task, share: float | None = None) -> float | None:
    """The stage's voltage for this part, checked; None with the reason noted."""
    allowed = task.share if share is None else share
    if stage.voltage is not None:
        key = f"{task.key}.voltage"
        volts = _written_voltage(stage.voltage, task, key)
        if volts is not None:
            _check_voltage(volts, task, key, allowed)
        return volts
    rule = VOLTAGE_RULES.get(stage.voltage_rule)
    if rule is None:
        return None  # noted when the sequence was read
    key = f"{task.key}.rule" if stage.rule else task.key
    try:
        volts = rule.of(task.part)
    except RuleLacks as lack:
        _lacks(lack, rule.name, task)
        return None
    except NotStated as reason:
        _not_stated(reason, rule.name, key, task)
        return None
    if isinstance(stage, ProofStage):
        _check_bench(volts, task, key)  # the rule itself says how far above its rating
    else:
        _check_voltage(volts, task, key, allowed)
    return volts


def _written_voltage(written: Bias, task: Task, key: str) -> float | None:
    found = resolve_bias(written, task.part, key, task.notes)
    return None if found is None else found[0]


def _check_voltage(volts: float, task: Task, key: str, allowed: float) -> None:
    """Against the part's rating × what is allowed, and against the bench."""
    part = task.part
    if part.rated_v is None:
        if part.rated_ac_v is not None:
            found = f"an AC rating of {_volts(part.rated_ac_v)}, which says nothing of DC"
            problem = "rating-ac-as-dc"
        else:
            problem, found = "rating-missing", "nothing"
        task.notes.cell(
            problem,
            part,
            "rated_voltage",
            expected=f"a DC rating, because the sequence asks for {_volts(volts)}",
            found=found,
        )
    elif volts > part.rated_v * allowed * (1 + SLACK):
        times = "" if allowed == 1 else f" ({100 * allowed:g} % of its rating)"
        task.notes.sequence(
            "voltage-beyond-rating",
            key,
            expected=f"at most {_volts(part.rated_v * allowed)} on {part.part_id}{times}",
            found=_volts(volts),
        )
    _check_bench(volts, task, key)


def _check_bench(volts: float, task: Task, key: str) -> None:
    """Against the bench's ceiling, the divider and the supply."""
    path = task.high.path
    if path is None:
        return
    for problem, ceiling, whose in (
        ("voltage-beyond-bench", path.ceiling_v, "the bench's own ceiling"),
        ("voltage-beyond-divider", path.divider_ceiling_v, "what the divider stands"),
        ("voltage-beyond-supply", task.high.most("voltage"), "what the supply gives"),
    ):
        if volts > ceiling * (1 + SLACK):
            task.notes.sequence(
                problem,
                key,
                expected=f"at most {_volts(ceiling)}, {whose}",
                found=f"{_volts(volts)} for {task.part.part_id}",
            )


def _lacks(lack: RuleLacks, name: str, task: Task) -> None:
    if lack.cell == "rated_voltage" and task.part.rated_ac_v is not None:
        task.notes.cell(
            "rating-ac-as-dc",
            task.part,
            lack.cell,
            expected=f"a DC rating, which {name} needs",
            found=f"an AC rating of {_volts(task.part.rated_ac_v)}, which says nothing of DC",
        )
        return
    task.notes.cell(
        "rating-missing" if lack.cell == "rated_voltage" else "rule-lacks-cell",
        task.part,
        lack.cell,
        expected=f"{lack.expected}, which {name} needs",
        found=lack.found,
    )


def _not_stated(reason: NotStated, name: str, key: str, task: Task) -> None:
    task.notes.sequence(
        "rule-not-stated",
        key,
        expected=f"a rule that covers {task.part.part_id}, or a stage that is not for it",
        found=f"{name}, which is {reason}",
    )


def _duration_s(task: Task, volts: float, ramp: float) -> float:
    return task.high.up_s(volts, ramp, task.part) + task.high.around_s(task.part, volts)


def _volts(value: float) -> str:
    return format_quantity(value, "V", 4)
