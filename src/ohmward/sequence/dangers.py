"""The brief's dangers: hazards of parts and nodes, the warden's permit, whether a person stays."""

from collections.abc import Iterable, Sequence
from math import inf, sqrt

from ohmward.safety.hazard import (
    Grade,
    Hazard,
    Path,
    Stored,
    assess_node,
    assess_part,
    peak_voltage_v,
)
from ohmward.safety.permit import Ceiling, Laws, Permit, short_target_v
from ohmward.sequence.brief import NOBODY_NEEDED, Attendance
from ohmward.sequence.high import High, capacitance_bounds
from ohmward.sequence.notes import Notes
from ohmward.sequence.planned import PlannedDirect, PlannedStage, PlannedSweep
from ohmward.terms.kind import Kind
from ohmward.terms.part import Part
from ohmward.units.values import format_quantity

LONG_DISCHARGE_S = 10.0
RAIL = "rail, with all its parts charged at once"


def hazards_of(
    planned: Sequence[PlannedStage], high: High, *, meter_ohm: float, notes: Notes
) -> tuple[Hazard, ...]:
    """What each part may do, at the most that the run puts on it; warns of long discharges."""
    found = tuple(
        assess_part(_most(part, stages), _path(part, high, meter_ohm))
        for part, stages in _by_part(planned)
    )
    slow = [one for one in found if one.discharge_s > LONG_DISCHARGE_S]
    if slow:
        told = ", ".join(
            f"{one.name} ({format_quantity(one.discharge_s, 's', 2)})"
            for one in sorted(slow, key=lambda one: -one.discharge_s)
        )
        notes.warn(
            f"these take more than {format_quantity(LONG_DISCHARGE_S, 's')} to discharge, also "
            f"after a trip: {told}"
        )
    return found


def nodes_of(planned: Sequence[PlannedStage], high: High) -> tuple[Hazard, ...]:
    """The rail with everything that the run charges on it, and the supply's own output."""
    direct = [stage for stage in planned if isinstance(stage, PlannedDirect)]
    if high.path is None or high.wiring is None or not direct:
        return ()
    parts = [_most(part, stages) for part, stages in _by_part(direct)]
    paths = [_path(part, high, 0.0) for part, _ in _by_part(direct)]
    weakest = Path(
        series_ohm=min(path.series_ohm for path in paths),
        discharge_ohm=max(path.discharge_ohm for path in paths),
        target_v=min(path.target_v for path in paths),
        supply_capacitance_f=high.node_f(),
    )
    return (assess_node(RAIL, parts, weakest),)


def attendance_of(hazards: Iterable[Hazard], high: High, *, by_hand: bool) -> Attendance:
    """Unattended above the threshold only where the bench declares all that it takes."""
    if not any(hazard.grade >= Grade.LIVE or hazard.burn for hazard in hazards):
        if by_hand:
            return Attendance(unattended=False, because=("a person loads each part",))
        return NOBODY_NEEDED
    lacking = ["a person loads each part"] if by_hand else []
    if high.path is None:
        lacking.append("the bench says nothing of how a part is freed of its voltage")
    else:
        lacking += [f"the bench lacks {what}" for what in high.path.lacks_for_unattended()]
    if lacking:
        return Attendance(unattended=False, because=tuple(lacking))
    return Attendance(
        unattended=True,
        because=(
            "the bench declares a watchdog, relays that fall to the safe side and an enclosure "
            "interlock; the start checks them",
        ),
    )


def permit_of(planned: Sequence[PlannedStage], high: High, *, brief_hash: str) -> Permit | None:
    """The ceilings for the warden; None on a bench without a path for high voltage.

    No part may get more than what is planned for it: its highest bias + √2·level, or its
    highest direct voltage. Current and power are the largest that any of its stages allows.
    """
    path = high.path
    if path is None:
        return None
    contacts = [contact for key, contact in path.contacts() if key != "bypass"]
    return Permit(
        brief_hash=brief_hash,
        ceilings=tuple(_ceiling(part, stages) for part, stages in _by_part(planned)),
        bench_v=path.ceiling_v,
        relay_v=min(path.relay_of(contact).stand_off_v for contact in contacts),
        divider_v=path.divider_ceiling_v,
        limit_a=high.limit_a,
        laws=high.laws,
    )


def _ceiling(part: Part, stages: Sequence[PlannedStage]) -> Ceiling:
    volts = max(_peak_v(stage) for stage in stages)
    direct = [stage for stage in stages if isinstance(stage, PlannedDirect)]
    low_f, high_f = capacitance_bounds(part)
    lowest_v = min(
        (
            point.bias_v - sqrt(2.0) * point.level_v
            for stage in stages
            if isinstance(stage, PlannedSweep)
            for point in stage.points
        ),
        default=0.0,
    )
    return Ceiling(
        part_id=part.part_id,
        position=part.position,
        kind=part.kind,
        voltage_v=volts,
        reverse_v=max(0.0, -lowest_v),
        capacitance_min_f=low_f,
        capacitance_max_f=high_f,
        current_a=_largest(stage.current_max_a for stage in direct),
        power_w=_largest(stage.power_max_w for stage in direct),
        assumed_v=max(part.rated_v or 0.0, volts) if part.kind is Kind.CAPACITOR else 0.0,
    )


def _largest(values: Iterable[float | None]) -> float:
    """The largest of the limits; infinite where one stage sets none."""
    return max((inf if value is None else value for value in values), default=inf)


def _by_part(planned: Iterable[PlannedStage]) -> list[tuple[Part, list[PlannedStage]]]:
    found: dict[str, tuple[Part, list[PlannedStage]]] = {}
    for stage in planned:
        found.setdefault(stage.part.part_id, (stage.part, []))[1].append(stage)
    return list(found.values())


def _peak_v(stage: PlannedStage) -> float:
    if isinstance(stage, PlannedDirect):
        return stage.source_v
    assert isinstance(stage, PlannedSweep)
    return max(peak_voltage_v(bias_v=p.bias_v, level_v=p.level_v) for p in stage.points)


def _most(part: Part, stages: Sequence[PlannedStage]) -> Stored:
    """A part at the highest peak that any of its stages puts on it.

    A winding that carries a current has no such voltage on it: what its supply would put on
    an open one counts.
    """
    worst = max(stages, key=_peak_v)
    most_f = capacitance_bounds(part)[1]
    if isinstance(worst, PlannedSweep):
        at = max(worst.points, key=lambda p: peak_voltage_v(bias_v=p.bias_v, level_v=p.level_v))
        return Stored(name=part.part_id, capacitance_f=most_f, bias_v=at.bias_v, level_v=at.level_v)
    return Stored(name=part.part_id, capacitance_f=most_f, bias_v=_peak_v(worst))


def _path(part: Part, high: High, meter_ohm: float) -> Path:
    """What the part's charge meets: the bench's resistors, or the meter's own."""
    wired = high.wired(part)
    if wired is None:
        return Path(series_ohm=meter_ohm, discharge_ohm=0.0, target_v=Laws().dead_v)
    return Path(
        series_ohm=wired.series_ohm,
        discharge_ohm=wired.discharge_ohm,
        target_v=short_target_v(high.laws, wired),
    )
