"""The least leakage that a bench can see, and the limits that it therefore cannot decide."""

from collections.abc import Iterable, Sequence
from math import exp, inf, sqrt

from ohmward.sequence.brief import CannotDecide, LeakageFloor
from ohmward.sequence.high import High, capacitance_bounds
from ohmward.sequence.model import DecisionTable
from ohmward.sequence.planned import (
    FORMING_WITHIN_REL,
    PlannedDirect,
    PlannedLeakage,
    PlannedReform,
    PlannedResistance,
    PlannedStage,
)
from ohmward.terms.accuracy import RangeAccuracy
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part
from ohmward.terms.quantity import QUANTITIES
from ohmward.terms.role import Role
from ohmward.units.values import format_quantity

NOT_CHARGING = 0.01  # charging current up to this share of a limit needs no correction


def floors_of(
    planned: Iterable[PlannedStage], high: High, coverage_k: float
) -> tuple[LeakageFloor, ...]:
    """The floor of every stage that reads leakage, at each time that decides."""
    found = []
    for stage in planned:
        if isinstance(stage, PlannedLeakage):
            found += [
                floor_of(stage.part, stage.stage, stage.voltage_v, at_s, high, coverage_k)
                for at_s in stage.read_at_s
            ]
        elif isinstance(stage, PlannedReform):
            found.append(
                floor_of(stage.part, stage.stage, stage.voltage_v, stage.hold_s, high, coverage_k)
            )
    return tuple(found)


def floor_of(
    part: Part,
    stage: str,
    voltage_v: float,
    since_s: float,
    high: High,
    coverage_k: float,
    leakage_a: float = 0.0,
) -> LeakageFloor:
    """The floor for a part through which ``leakage_a`` flows besides.

    U = k·√(Σ h²/3) of the half-widths h of meter, divider, drift and fixture, plus the
    charging current, which is no scatter: all in ampere.
    """
    path, most_f = high.path, capacitance_bounds(part)[1]
    if path is None:
        raise ValueError("a bench without a path for high voltage sees no leakage")
    wired = high.wired(part)
    series_ohm = 0.0 if wired is None else wired.series_ohm
    charging_a = charging_left_a(voltage_v, series_ohm, most_f, since_s)
    divider_a = voltage_v / path.divider_ohm
    through_a = divider_a + leakage_a + charging_a
    chosen = _range_for(through_a, high)
    meter_a = 0.0 if chosen is None else chosen.reading_rel * through_a + chosen.offset
    drift_a = most_f * (path.supply_drift_v_per_s or 0.0)
    fixture_a = 0.0 if path.insulation_ohm is None else voltage_v / path.insulation_ohm
    divider_error_a = divider_a * (path.divider_rel or 0.0)
    u_a = sqrt(sum(h * h for h in (meter_a, divider_error_a, drift_a, fixture_a)) / 3.0)
    worst = max((one.offset / one.full_scale for one in high.ranges(Role.CURRENT_METER)), default=0)
    near_zero_a = 0.0 if chosen is None else worst * chosen.full_scale  # as the warden reckons
    return LeakageFloor(
        part_id=part.part_id,
        stage=stage,
        voltage_v=voltage_v,
        since_voltage_s=since_s,
        floor_a=coverage_k * u_a + charging_a,
        range_a=None if chosen is None else chosen.full_scale,
        meter_a=meter_a,
        divider_a=divider_error_a,
        drift_a=drift_a,
        fixture_a=fixture_a,
        charging_a=charging_a,
        not_stated=_not_stated(high),
        bypass_shown=chosen is not None and 0.5 * divider_a > 3.0 * near_zero_a,
    )


def charging_left_a(
    voltage_v: float, series_ohm: float, capacitance_f: float, since_s: float
) -> float:
    """0.01·(V/R)·e^(−t/RC): what still charges the part, t from within 1 % of V (A)."""
    if series_ohm <= 0.0 or capacitance_f <= 0.0:
        return 0.0
    left = exp(-since_s / (series_ohm * capacitance_f))
    return 0.01 * voltage_v / series_ohm * left


def _range_for(through_a: float, high: High) -> RangeAccuracy | None:
    """The lowest range of which what flows is less than half; the bypass opens on no other."""
    share = high.laws.bypass_share
    ranges = high.ranges(Role.CURRENT_METER)
    return next((one for one in ranges if through_a < share * one.full_scale), None)


def _not_stated(high: High) -> tuple[str, ...]:
    path = high.path
    assert path is not None
    missing = [
        what
        for what, value in (
            ("the supply's drift", path.supply_drift_v_per_s),
            ("the fixture's insulation", path.insulation_ohm),
            ("the divider's tolerance", path.divider_rel),
        )
        if value is None
    ]
    if not high.ranges(Role.CURRENT_METER):
        missing.append("the current meter's accuracy")
    return tuple(missing)


# ---- what it cannot decide


def cannot_decide_direct(
    limits: Sequence[Limit], planned: Sequence[PlannedStage], high: High, decision: DecisionTable
) -> tuple[CannotDecide, ...]:
    """Every limit under direct voltage or current that no reading of a part could meet."""
    if high.path is None:
        return ()
    of_part = {(stage.part.part_id, stage.stage): stage for stage in planned}
    found = []
    for limit in limits:
        stage = of_part[limit.part_id, limit.stage]
        doubt = None
        if isinstance(stage, PlannedLeakage) and QUANTITIES[limit.quantity].per == "time":
            doubt = _leakage_doubt(limit, stage, high, decision)
        elif isinstance(stage, PlannedResistance):
            doubt = _resistance_doubt(limit, stage, high, decision)
        if doubt is not None:
            found.append(doubt)
    return tuple(found)


def _leakage_doubt(
    limit: Limit, stage: PlannedLeakage, high: High, decision: DecisionTable
) -> CannotDecide | None:
    largest_a = largest_leakage_a(limit, stage.part, stage.voltage_v)
    if largest_a is None:
        return None
    since_s = limit.since_voltage_s or stage.soak_s
    floor = floor_of(
        stage.part, stage.stage, stage.voltage_v, since_s, high, decision.coverage, 0.0
    )
    said = f"{limit.part_id}, {limit.stage}: {limit.quantity}, {_amperes(largest_a)} at most"
    if floor.range_a is None:
        return _doubt(limit, None, f"{said}: no range of the current meter takes what flows")
    if not floor.bypass_shown:
        why = "the divider's current is too small to show that the bypass is open"
        return _doubt(limit, None, f"{said}: {why}, so no reading counts")
    guarded = decision.guard * (floor.floor_a - floor.charging_a) + floor.charging_a
    if guarded < largest_a:
        return None
    return _doubt(
        limit,
        floor.floor_a,
        f"{said}: this bench sees no less than {_amperes(floor.floor_a)} at "
        f"{format_quantity(stage.voltage_v, 'V')}, so that no reading could accept the part",
    )


def largest_leakage_a(limit: Limit, part: Part, voltage_v: float) -> float | None:
    """The leakage that a limit allows, whichever quantity it is on: I = V/R = C·V/τ (A)."""
    match limit.quantity:
        case "leakage_a":
            return limit.maximum
        case "insulation_ohm":
            return voltage_v / limit.minimum if limit.minimum else None
        case "insulation_time_s":
            return part.nominal * voltage_v / limit.minimum if limit.minimum else None
    return None


def charging_warnings(
    limits: Sequence[Limit], planned: Sequence[PlannedStage], high: High
) -> list[str]:
    """Limits at times when more than 1 % of what they allow is still charging current."""
    if high.path is None:
        return []
    of_part = {(stage.part.part_id, stage.stage): stage for stage in planned}
    found = []
    for limit in limits:
        stage = of_part[limit.part_id, limit.stage]
        if not isinstance(stage, PlannedLeakage):
            continue
        largest_a = largest_leakage_a(limit, stage.part, stage.voltage_v)
        wired = high.wired(stage.part)
        if largest_a is None or wired is None:
            continue
        since_s = limit.since_voltage_s or stage.soak_s
        left_a = charging_left_a(
            stage.voltage_v, wired.series_ohm, capacitance_bounds(stage.part)[1], since_s
        )
        if left_a > NOT_CHARGING * largest_a:
            found.append(
                f"{limit.part_id}, {limit.stage}: {_amperes(left_a)} still charge the part after "
                f"{format_quantity(since_s, 's')}, above 1 % of its limit: they must be fitted"
            )
    return found


def stop_warnings(
    limits: Sequence[Limit], planned: Sequence[PlannedStage], high: High
) -> list[str]:
    """Stages in which a part is stopped before its leakage can be what its limit allows.

    A part has its voltage once it is within 1 % of the set one, within 10 % while it forms; the
    series resistor takes as much at I = 0.01·V/R, and a part that draws more never gets there.
    The stage's own limits of current and power stop it too.
    """
    allowed_a = {
        (limit.part_id, limit.stage): found
        for limit in limits
        for stage in planned
        if isinstance(stage, PlannedLeakage)
        and (limit.part_id, limit.stage) == (stage.part.part_id, stage.stage)
        and (found := largest_leakage_a(limit, stage.part, stage.voltage_v)) is not None
    }
    early: dict[str, list[str]] = {}
    for stage in planned:
        if isinstance(stage, PlannedReform):
            needed_a, volts = stage.next_below_a, stage.voltages_v[0]
        elif isinstance(stage, PlannedLeakage):
            needed_a = allowed_a.get((stage.part.part_id, stage.stage), 0.0)
            volts = stage.voltage_v
        else:
            continue
        stops_a = stopped_from_a(stage, volts, high)
        if stops_a < needed_a:
            told = f"{stage.part.part_id} ({_amperes(stops_a)} of {_amperes(needed_a)})"
            early.setdefault(stage.stage, []).append(told)
    return [
        f"in stage {stage} these are stopped before their leakage is what it may be, by the "
        f"series resistor's share of the voltage or by the stage's own limits: {', '.join(told)}"
        for stage, told in early.items()
    ]


def stopped_from_a(stage: PlannedDirect, voltage_v: float, high: High) -> float:
    """The current from which on a part is stopped, or never has its voltage (A)."""
    wired = high.wired(stage.part)
    series_ohm = 0.0 if wired is None else wired.series_ohm
    within = FORMING_WITHIN_REL if isinstance(stage, PlannedReform) else high.laws.within
    drop_a = within * voltage_v / series_ohm if series_ohm > 0.0 else inf
    by_power_a = inf if stage.power_max_w is None else stage.power_max_w / voltage_v
    by_current_a = inf if stage.current_max_a is None else stage.current_max_a
    return min(drop_a, by_power_a, by_current_a)


def _resistance_doubt(
    limit: Limit, stage: PlannedResistance, high: High, decision: DecisionTable
) -> CannotDecide | None:
    """R = U/I: the voltmeter's offset over the current, and what both meters share of R."""
    low, top = limit.minimum, limit.maximum
    bound = top if top is not None else low
    if bound is None:
        return None
    volts = next(
        (one for one in high.ranges(Role.VOLTMETER) if bound * stage.current_a < one.full_scale),
        None,
    )
    amperes = _range_for(stage.current_a, high)
    if volts is None or amperes is None:
        return None
    rel = volts.reading_rel + amperes.reading_rel + amperes.offset / stage.current_a
    half_ohm = sqrt((volts.offset / stage.current_a) ** 2 + (bound * rel) ** 2)
    expanded = decision.coverage * half_ohm / sqrt(3.0)
    room = (top - low) / 2 if top is not None and low is not None else bound
    if decision.guard * expanded < (room if room > 0 else inf):
        return None
    return _doubt(
        limit,
        expanded,
        f"{limit.part_id}, {limit.stage}: {limit.quantity}: the uncertainty at "
        f"{format_quantity(stage.current_a, 'A')} is about {format_quantity(expanded, 'ohm', 3)}, "
        "so that no reading could accept the part",
    )


def _doubt(limit: Limit, expanded: float | None, reason: str) -> CannotDecide:
    return CannotDecide(
        limit=limit,
        frequency_hz=None,
        level_v=None,
        expanded_uncertainty=expanded,
        reason=reason,
    )


def _amperes(value: float) -> str:
    return format_quantity(value, "A", 3)
