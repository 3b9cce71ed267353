"""Unrolls a sequence for the parts on a bench into a brief, or notes every problem in one go."""

from collections.abc import Mapping
from collections.abc import Sequence as Listed
from pathlib import Path

from ohmward.errors import Problems
from ohmward.safety.hazard import LIVE_DC_V, peak_voltage_v
from ohmward.sequence.brief import Brief, CannotReach, PlannedSweep
from ohmward.sequence.canonical import brief_hash, input_hashes
from ohmward.sequence.cautions import cautions
from ohmward.sequence.compensated import Compensated, check_compensation
from ohmward.sequence.fits import fits
from ohmward.sequence.limits import resolve_limits
from ohmward.sequence.model import STAGE_TABLES, Sequence
from ohmward.sequence.notes import Notes
from ohmward.sequence.predict import MeterAccuracy, cannot_decide
from ohmward.sequence.rating import Allowance
from ohmward.sequence.reach import Reach, check_reach, reachable_frequencies
from ohmward.sequence.sweep import RELAYS_S, BiasOf, Given, plan_sweep
from ohmward.setup.bench import Bench
from ohmward.setup.driver import Driver
from ohmward.setup.toml import one_of
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
    given = _given(sequence, bench, drivers)
    planned, left_out = _plan(sequence, parts, given, notes)
    resolved = resolve_limits(sequence, planned, notes)
    corrected = ""
    if bench is not None:
        corrected = check_compensation(sequence, bench, planned, compensation, notes)
    if len(problems) or bench is None or given.reach.driver is None:
        return None
    file = compensation.file if compensation else None
    hashes = input_hashes(sequence, bench, drivers, tuple(parts), resolved.limits, file)
    meter = MeterAccuracy(
        accuracy=given.reach.driver.impedance_accuracy,
        cable_m=bench.instruments[given.reach.name].cable_m,
    )
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
        cannot_decide=cannot_decide(resolved.limits, planned, meter, sequence.decision),
        cautions=cautions(planned, parts, by_hand=bench.fixture.loading == "by hand"),
        warnings=tuple(notes.warnings),
        hash=brief_hash(hashes),
        hashes=hashes,
        compensation=corrected,
    )


def _check_bench(sequence: Sequence, bench: Bench, parts: Listed[Part], notes: Notes) -> None:
    """Roles that the stages need, and positions that the parts name."""
    needed = {role for stage in sequence.stage for role in stage.roles}
    for role in sorted(needed):
        if bench.of_role(role) is None:
            notes.bench(
                "role-missing",
                "instrument",
                expected=f"an instrument with the role '{role}'",
                found="none",
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
    sequence: Sequence, parts: Listed[Part], given: Given, notes: Notes
) -> tuple[tuple[PlannedSweep, ...], tuple[CannotReach, ...]]:
    """All stages in order of execution: part by part, each part's stages in their order."""
    planned: list[PlannedSweep] = []
    biases: dict[tuple[str, str], list[str]] = {}
    unmeasured: dict[str, list[str]] = {}
    for part in parts:
        if part.kind not in sequence.kinds:
            unmeasured.setdefault(f"this sequence is for no {part.kind}", []).append(part.part_id)
            continue
        mine = [stage for stage in sequence.stage if fits(stage.parts, part)]
        for stage in mine:
            sweep, left_out = plan_sweep(
                stage, part, number=len(planned) + 1, given=given, notes=notes
            )
            if sweep is not None:
                planned.append(sweep)
            for bias in left_out:
                biases.setdefault((stage.name, _bias_text(bias)), []).append(part.part_id)
        if not mine and all(stage.whole for stage in sequence.stage):
            unmeasured.setdefault("no stage is for them", []).append(part.part_id)
    for why, part_ids in unmeasured.items():
        notes.warn(f"not measured, because {why}: {', '.join(part_ids)}")
    for stage in sequence.stage:
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


def _warn_of_idle_stages(sequence: Sequence, planned: Listed[PlannedSweep], notes: Notes) -> None:
    used = {stage.stage for stage in planned}
    for stage in sequence.stage:
        if stage.name not in used:
            notes.warn(f"stage {stage.name} is for no part of this lot")


def _clipped(sequence: Sequence, planned: Listed[PlannedSweep], given: Given) -> list[CannotReach]:
    """Frequencies of a clipped range that the meter does not have."""
    found: list[CannotReach] = []
    for stage in sequence.stage:
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


def _energising(planned: Listed[PlannedSweep]) -> tuple[str, ...]:
    """Names of stages that put a hazardous voltage on a part.

    Stages of a kind that exists for it, and sweeps whose bias with its level passes the
    threshold for DC that is hazardous live.
    """
    names = [
        stage.stage
        for stage in planned
        if STAGE_TABLES[stage.kind].energises
        or any(
            point.bias_v
            and peak_voltage_v(bias_v=point.bias_v, level_v=point.level_v) > LIVE_DC_V.value
            for point in stage.points
        )
    ]
    return tuple(dict.fromkeys(names))
