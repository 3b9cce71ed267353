"""Unrolls a sequence for the parts on a bench into a brief, or notes every problem in one go."""

from collections.abc import Mapping
from collections.abc import Sequence as Listed
from pathlib import Path

from ohmward.errors import Problems
from ohmward.safety.hazard import LIVE_DC_V, peak_voltage_v
from ohmward.sequence.brief import (
    Brief,
    CannotDecide,
    CannotReach,
    PlannedDirect,
    PlannedStage,
    PlannedSweep,
    as_plain,
)
from ohmward.sequence.canonical import brief_hash, hash_of, input_hashes
from ohmward.sequence.cautions import cautions
from ohmward.sequence.compensated import Compensated, check_compensation
from ohmward.sequence.dangers import attendance_of, hazards_of, nodes_of, permit_of
from ohmward.sequence.direct import DirectStage
from ohmward.sequence.fits import fits
from ohmward.sequence.floor import cannot_decide_direct, charging_warnings, floors_of, stop_warnings
from ohmward.sequence.high import High, high_of
from ohmward.sequence.limits import resolve_limits
from ohmward.sequence.model import STAGE_TABLES, Sequence, SweepStage
from ohmward.sequence.notes import Notes
from ohmward.sequence.path_check import check_order, check_path
from ohmward.sequence.plan_direct import Task, plan_direct
from ohmward.sequence.predict import MeterAccuracy, cannot_decide
from ohmward.sequence.rating import Allowance
from ohmward.sequence.reach import Reach, check_reach, reachable_frequencies
from ohmward.sequence.sweep import RELAYS_S, BiasOf, Given, plan_sweep
from ohmward.sequence.tables import StageTable
from ohmward.setup.bench import Bench
from ohmward.setup.driver import Driver
from ohmward.setup.toml import one_of
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part
from ohmward.terms.role import Role
from ohmward.units.values import format_quantity


def unroll(
    sequence: Sequence,
    *,
    bench: Bench | None,
    drivers: Mapping[str, Driver],
    parts: Listed[Part],
    sequence_file: Path,
    parts_file: Path,
    problems: Problems,
    compensation: Compensated | None = None,
) -> Brief | None:
    """The brief, or None with everything noted that is wrong between the inputs.

    ``drivers`` are keyed by the bench's names of the instruments. A bench or driver that could
    not be read, or a sequence of which only something could be saved, is no hindrance to
    finding more; but with any problem at all, noted before or here, there is no brief.
    """
    notes = Notes(
        problems=problems,
        sequence_file=sequence_file,
        bench_file=Path() if bench is None else bench.path,
        parts_file=parts_file,
    )
    if bench is not None:
        _check_bench(sequence, bench, parts, notes)
    given, high = _given(sequence, bench, drivers), high_of(bench, drivers)
    planned, left_out = _plan(sequence, parts, given, high, notes)
    check_path(planned, high, notes)
    check_order(planned, notes)
    resolved = resolve_limits(sequence, planned, notes)
    corrected = ""
    if bench is not None:
        corrected = check_compensation(sequence, bench, planned, compensation, notes)
    sweeps = any(isinstance(stage, PlannedSweep) for stage in planned)
    if len(problems) or bench is None or (sweeps and given.reach.driver is None):
        return None
    file = compensation.file if compensation else None
    hashes = input_hashes(sequence, bench, drivers, tuple(parts), resolved.limits, file)
    hashes |= _stages_hash(planned)
    meter_ohm = _meter_ohm(given.reach)
    hazards = hazards_of(planned, high, meter_ohm=meter_ohm, notes=notes)
    by_hand = bench.fixture.loading == "by hand"
    nodes = nodes_of(planned, high)
    for warnings in (charging_warnings, stop_warnings):
        for text in warnings(resolved.limits, planned, high):
            notes.warn(text)
    digest = brief_hash(hashes)
    return Brief(
        name=sequence.name,
        purpose=sequence.purpose,
        follows=sequence.follows,
        bench=bench.name,
        parts=tuple({stage.part.part_id: stage.part for stage in planned}.values()),
        stages=planned,
        limits=resolved.limits,
        coverage_k=sequence.decision.coverage,
        guard=sequence.decision.guard,
        duration_s=sum(stage.duration_s for stage in planned),
        energising=_energising(planned),
        cannot_reach=(*left_out, *resolved.cannot_reach),
        cannot_decide=(
            *_cannot_decide(resolved.limits, planned, bench, given.reach, sequence),
            *cannot_decide_direct(resolved.limits, planned, high, sequence.decision),
        ),
        cautions=cautions(planned, parts, by_hand=by_hand),
        warnings=tuple(notes.warnings),
        hash=digest,
        hashes=hashes,
        compensation=corrected,
        hazards=hazards,
        nodes=nodes,
        floors=floors_of(planned, high, sequence.decision.coverage),
        attendance=attendance_of((*hazards, *nodes), high, by_hand=by_hand),
        permit=permit_of(planned, high, brief_hash=digest),
    )


def _stages_hash(planned: Listed[PlannedStage]) -> dict[str, str]:
    """A hash of what is planned under direct voltage: its voltages may come from built-in rules."""
    direct = [as_plain(stage) for stage in planned if isinstance(stage, PlannedDirect)]
    return {"stages": hash_of(direct)} if direct else {}


def _meter_ohm(reach: Reach) -> float:
    """What lies between the impedance meter's bias and a part (ohm); 0 where nobody says."""
    meter = None if reach.driver is None else reach.driver.meter
    return 0.0 if meter is None else meter.source_resistance


def _cannot_decide(
    limits: tuple[Limit, ...],
    planned: tuple[PlannedStage, ...],
    bench: Bench,
    reach: Reach,
    sequence: Sequence,
) -> tuple[CannotDecide, ...]:
    if reach.driver is None:
        return ()
    meter = MeterAccuracy(
        accuracy=reach.driver.impedance_accuracy,
        cable_m=bench.instruments[reach.name].cable_m,
    )
    return cannot_decide(limits, planned, meter, sequence.decision)


_WHY = {
    Role.VOLTMETER: ", that sees the part's own terminals",
    Role.CURRENT_METER: ", that reads the leakage",
}


def _check_bench(sequence: Sequence, bench: Bench, parts: Listed[Part], notes: Notes) -> None:
    """Roles that the stages need, and positions that the parts name."""
    needed = {role for stage in sequence.stage for role in stage.roles}
    for role in sorted(needed):
        if bench.of_role(role) is None:
            notes.bench(
                "role-missing",
                "instrument",
                expected=f"an instrument with the role '{role}'{_WHY.get(role, '')}",
                found="none",
            )
    if bench.high_voltage is None and any(stage.energises for stage in sequence.stage):
        notes.bench(
            "path-missing",
            "high_voltage",
            expected="how high voltage reaches the parts and how they are freed of it",
            found="nothing",
        )
    names = [place.name for place in bench.positions]
    for part in parts:
        if bench.position(part.position) is None:
            notes.cell(
                "unknown-position",
                part,
                "position",
                expected=one_of(part.position, names),
                found=part.position,
            )


def _given(sequence: Sequence, bench: Bench | None, drivers: Mapping[str, Driver]) -> Given:
    """What the bench gives a sweep; a bench or driver that is not there limits nothing."""
    if bench is None:
        return Given(
            reach=Reach(name="", driver=None),
            allowance=Allowance(share=sequence.rating_allowed),
            relays_s=0.0,
        )
    meter = bench.name_of_role(Role.IMPEDANCE_METER)
    scanner = drivers.get(bench.name_of_role(Role.SCANNER))
    return Given(
        reach=Reach(name=meter, driver=drivers.get(meter)),
        allowance=Allowance(
            share=sequence.rating_allowed,
            ceiling_v=bench.bias_ceiling_v,
            ceiling_a=bench.bias_current_ceiling_a,
            ceiling_level_v=bench.level_ceiling_v,
        ),
        relays_s=0.0 if scanner is None else scanner.timing.settling or RELAYS_S,
    )


def _plan(
    sequence: Sequence, parts: Listed[Part], given: Given, high: High, notes: Notes
) -> tuple[tuple[PlannedStage, ...], tuple[CannotReach, ...]]:
    """All stages in order of execution: part by part, each part's stages in their order."""
    planned: list[PlannedStage] = []
    biases: dict[tuple[str, str], list[str]] = {}
    unmeasured: dict[str, list[str]] = {}
    for part in parts:
        if part.kind not in sequence.kinds:
            unmeasured.setdefault(f"this sequence is for no {part.kind}", []).append(part.part_id)
            continue
        mine = [stage for stage in sequence.stage if fits(stage.parts, part)]
        for stage in mine:
            number = len(planned) + 1
            one, left_out = _plan_one(stage, part, number, sequence, given, high, notes)
            planned += [one] if one is not None else []
            for bias in left_out:
                biases.setdefault((stage.name, _bias_text(bias)), []).append(part.part_id)
        if not mine and all(stage.whole for stage in sequence.stage):
            unmeasured.setdefault("no stage is for them", []).append(part.part_id)
    for why, part_ids in unmeasured.items():
        notes.warn(f"not measured, because {why}: {', '.join(part_ids)}")
    for stage in _sweeps(sequence):
        check_reach(stage, given.reach, notes)
    if parts and not planned and not len(notes.problems):
        notes.sequence(
            "sequence-fits-no-part",
            "stage",
            expected="a stage for at least one of the parts",
            found=f"none for any of {len(parts)}",
        )
    _warn_of_idle_stages(sequence, planned, notes)
    return tuple(planned), (*_clipped(sequence, planned, given), *_left_out(biases, given))


def _plan_one(
    stage: StageTable,
    part: Part,
    number: int,
    sequence: Sequence,
    given: Given,
    high: High,
    notes: Notes,
) -> tuple[PlannedStage | None, tuple[BiasOf, ...]]:
    """One stage for one part, by its kind; a kind that it is not for was noted before."""
    if isinstance(stage, SweepStage):
        return plan_sweep(stage, part, number=number, given=given, notes=notes)
    if not isinstance(stage, DirectStage) or part.kind not in stage.for_kinds:
        return None, ()
    task = Task(
        part=part,
        number=number,
        key=f"stage[{stage.place}]",
        high=high,
        share=sequence.rating_allowed,
        notes=notes,
    )
    return plan_direct(stage, task), ()


def _sweeps(sequence: Sequence) -> list[SweepStage]:
    return [stage for stage in sequence.stage if isinstance(stage, SweepStage)]


def _warn_of_idle_stages(sequence: Sequence, planned: Listed[PlannedStage], notes: Notes) -> None:
    used = {stage.stage for stage in planned}
    for stage in sequence.stage:
        if stage.name not in used:
            notes.warn(f"stage {stage.name} is for no part of this lot")


def _clipped(sequence: Sequence, planned: Listed[PlannedStage], given: Given) -> list[CannotReach]:
    """Frequencies of a clipped range that the meter does not have."""
    found: list[CannotReach] = []
    for stage in _sweeps(sequence):
        reached = reachable_frequencies(stage, given.reach)
        lost = [f for f in stage.frequencies_hz if f not in reached]
        parts = tuple(one.part.part_id for one in planned if one.stage == stage.name)
        if lost and parts:
            found.append(
                CannotReach(
                    part_ids=parts,
                    stage=stage.name,
                    what=_frequencies_text(lost),
                    reason=f"the meter has {given.reach.span('frequency', 'Hz')}",
                )
            )
    return found


def _left_out(biases: Mapping[tuple[str, str], list[str]], given: Given) -> list[CannotReach]:
    return [
        CannotReach(
            part_ids=tuple(part_ids),
            stage=stage,
            what=f"a bias of {bias}",
            reason=f"the meter has {given.reach.span('bias_voltage', 'V')}"
            if bias.endswith("V")
            else f"the meter has {given.reach.span('bias_current', 'A')}",
        )
        for (stage, bias), part_ids in biases.items()
    ]


def _bias_text(bias: BiasOf) -> str:
    resolved = (
        format_quantity(bias.amperes, "A") if bias.amperes else format_quantity(bias.volts, "V")
    )
    return f"{bias.written}, {resolved}"


def _frequencies_text(lost: Listed[float]) -> str:
    if len(lost) == 1:
        return format_quantity(lost[0], "Hz")
    return (
        f"{len(lost)} frequencies from {format_quantity(min(lost), 'Hz')} "
        f"to {format_quantity(max(lost), 'Hz')}"
    )


def _energising(planned: Listed[PlannedStage]) -> tuple[str, ...]:
    """Names of stages that put a hazardous voltage on a part.

    Stages of a kind that exists for it, and sweeps whose bias with its level passes the
    threshold for DC that is hazardous live.
    """
    names = [
        stage.stage
        for stage in planned
        if STAGE_TABLES[stage.kind].energises
        or (
            isinstance(stage, PlannedSweep)
            and any(
                point.bias_v
                and peak_voltage_v(bias_v=point.bias_v, level_v=point.level_v) > LIVE_DC_V.value
                for point in stage.points
            )
        )
    ]
    return tuple(dict.fromkeys(names))
