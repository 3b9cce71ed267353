"""The part of a brief that is about danger: what is charged, how far, and how it is freed."""

from collections.abc import Iterable, Sequence

from rich.console import Console
from rich.table import Table

from ohmward.output.wording import duration
from ohmward.safety.hazard import Grade, Hazard, Threshold
from ohmward.sequence.brief import (
    Brief,
    LeakageFloor,
    PlannedAbsorption,
    PlannedDirect,
    PlannedLeakage,
    PlannedProof,
    PlannedReform,
    PlannedResistance,
)
from ohmward.units.values import format_quantity

GRADES = {
    Grade.NONE: "none",
    Grade.LIVE: "live",
    Grade.HAZARDOUS: "hazardous",
    Grade.SEVERE: "severe",
}


def show(console: Console, brief: Brief) -> None:
    """Dangers, what is done under voltage, and the leakage that the bench can see."""
    direct = [stage for stage in brief.stages if isinstance(stage, PlannedDirect)]
    dangerous = [one for one in (*brief.hazards, *brief.nodes) if one.needs_authorisation]
    if dangerous:
        console.print()
        console.print(_hazard_table(dangerous))
        console.print()
        for line in _thresholds(dangerous):
            console.print(line, markup=False, highlight=False, soft_wrap=True)
    if dangerous or direct:
        console.print(attendance(brief), markup=False, highlight=False, soft_wrap=True)
    if direct:
        console.print()
        console.print(_direct_table(direct))
    if brief.floors:
        console.print()
        console.print(_floor_table(brief.floors))
        missing = sorted({what for floor in brief.floors for what in floor.not_stated})
        if missing:
            text = f"Not in it, because nobody states it: {', '.join(missing)}."
            console.print(text, markup=False, highlight=False, soft_wrap=True)


def attendance(brief: Brief) -> str:
    """Whether somebody must stay, in a sentence."""
    said = "May be left alone" if brief.attendance.unattended else "A person stays"
    told = f"{said}: {'; '.join(brief.attendance.because)}."
    if brief.needs_authorisation:
        told += " Needs --authorised-by NAME."
    return told


def _table(*headings: str) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    for heading in headings:
        table.add_column(heading)
    return table


def _hazard_table(hazards: Sequence[Hazard]) -> Table:
    table = _table(
        "what", "peak", "energy", "charge", "short", "discharge", "into resistor", "danger"
    )
    for one in hazards:
        grade = GRADES[one.grade] + (", reflex" if one.reflex else "")
        table.add_row(
            one.name,
            _said(one.peak_v, "V"),
            _said(one.energy_j, "J"),
            _said(one.charge_c, "C"),
            _said(one.prospective_a, "A"),
            duration(one.discharge_s) if one.discharge_s >= 10 else _said(one.discharge_s, "s"),
            _said(one.resistor_pulse_j, "J"),
            grade + (", burns" if one.burn else ""),
        )
    return table


def _thresholds(hazards: Iterable[Hazard]) -> list[str]:
    """The thresholds that are passed, each once, with who says so."""
    passed: dict[str, Threshold] = {
        reason.name: reason for one in hazards for reason in one.reasons
    }
    return [
        f"{one.name}: above {format_quantity(one.value, one.unit)}, {one.source}"
        + ("" if one.confirmed else ", from memory")
        for one in passed.values()
    ]


def _direct_table(stages: Sequence[PlannedDirect]) -> Table:
    table = _table("part", "position", "stage", "voltage", "ramp", "what", "time")
    for stage in stages:
        table.add_row(
            stage.part.part_id,
            stage.part.position,
            stage.stage,
            _voltage(stage),
            _said(stage.ramp_v_per_s, "V/s"),
            what_is_done(stage),
            duration(stage.duration_s),
        )
    return table


def _voltage(stage: PlannedDirect) -> str:
    if isinstance(stage, PlannedReform) and len(stage.voltages_v) > 1:
        return f"{_said(stage.voltages_v[0], 'V')} to {_said(stage.voltages_v[-1], 'V')}"
    return _said(stage.source_v, "V")


def what_is_done(stage: PlannedDirect) -> str:
    """One planned stage under voltage or current, in a few words."""
    if isinstance(stage, PlannedLeakage):
        return f"soak {duration(stage.soak_s)}, read at {_times(stage.read_at_s)}"
    if isinstance(stage, PlannedReform):
        return (
            f"{len(stage.voltages_v)} voltages, {duration(stage.hold_s)} each at least, on below "
            f"{_said(stage.next_below_a, 'A')}, {duration(stage.budget_s)} at most"
        )
    if isinstance(stage, PlannedProof):
        return f"dwell {duration(stage.dwell_s)}, {stage.attempts} attempts"
    if isinstance(stage, PlannedAbsorption):
        return (
            f"charge {duration(stage.charge_s)}, short {duration(stage.short_s)}, read at "
            f"{_times(stage.read_at_s)}"
        )
    if isinstance(stage, PlannedResistance):
        return f"{_said(stage.current_a, 'A')}, {stage.repeats} readings"
    return ""


def _floor_table(floors: Sequence[LeakageFloor]) -> Table:
    table = _table("part", "stage", "voltage", "after", "leakage seen from", "range")
    worst: dict[tuple[str, str], LeakageFloor] = {}
    for floor in floors:
        known = worst.setdefault((floor.part_id, floor.stage), floor)
        if floor.floor_a > known.floor_a:
            worst[floor.part_id, floor.stage] = floor
    for one in worst.values():
        seen = _said(one.floor_a, "A")
        if one.range_a is None:
            seen = "none: no range takes what flows"
        elif not one.bypass_shown:
            seen = "none: the bypass cannot be shown open"
        table.add_row(
            one.part_id,
            one.stage,
            _said(one.voltage_v, "V"),
            duration(one.since_voltage_s),
            seen,
            "-" if one.range_a is None else _said(one.range_a, "A"),
        )
    return table


def _times(times_s: Iterable[float]) -> str:
    return ", ".join(duration(time_s) for time_s in times_s)


def _said(value: float, unit: str) -> str:
    return format_quantity(value, unit, 3)
