"""Rows of results.csv for what was measured under voltage: judged only where the hold counts.

A hold counts when the part had its voltage, drew the charge that it must, and the current meter
was seen to be in the path. Everything else is invalid with its reason, and never accepted.
"""

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from math import hypot, inf, nan, sqrt

import numpy as np
from numpy.typing import NDArray

from ohmward.metrology.decide import decide
from ohmward.metrology.errors import MetrologyError
from ohmward.metrology.leakage import fit_leakage
from ohmward.results import reasons
from ohmward.results.columns import RESULT_COLUMNS
from ohmward.results.forming import FormingRule, Step, replayed
from ohmward.results.judged import Judged, Rule
from ohmward.results.leakage import Columns
from ohmward.terms.decision import Decision
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part
from ohmward.terms.quantity import QUANTITIES
from ohmward.units.values import format_quantity

Row = dict[str, object]

SAME_TIME_REL, SAME_TIME_S = 0.02, 0.5  # a reading so near to the standard's time is that reading
RATIOS = {"polarization_index": (60.0, 600.0), "absorption_ratio": (30.0, 60.0)}
DROOP_MOST_REL = 0.05
OVERDRAWN = ("it draws the current limit", "its current of", "its power of")
NOT_HERE = "this version measures no resistance by direct current"


@dataclass(frozen=True, kw_only=True, slots=True)
class PlannedHold:
    """What was planned of one stage of one part.

    ``times_s`` are when its readings decide, ``lasts_s`` how long a whole hold is, ``forming``
    the rule of a reform, ``droop_rel`` what the voltmeter takes of a recovered voltage.
    """

    part_id: str
    stage: str
    kind: str
    voltage_v: float
    times_s: tuple[float, ...] = ()
    lasts_s: float = 0.0
    forming: FormingRule | None = None
    droop_rel: float = 0.0


@dataclass(frozen=True, kw_only=True, slots=True)
class Outcome:
    """How one hold of a stage went, as the journal has it."""

    reached: bool
    connection: str
    bypass_shown: bool
    stopped: str

    @property
    def counts(self) -> bool:
        """Whether its readings may enter a decision."""
        return self.reached and self.bypass_shown and self.connection == "agrees"

    @property
    def why_not(self) -> str:
        """Why they may not, in words; '' where they may."""
        if self.stopped:
            return f"it was stopped: {self.stopped}"
        if not self.reached:
            return "it never had its voltage"
        if self.connection != "agrees":
            return (
                f"the charge that it drew does not show that it was connected ({self.connection})"
            )
        return "" if self.bypass_shown else "the current meter was not seen to be in the path"


@dataclass(frozen=True, kw_only=True, slots=True)
class Given:
    """One stage of one part: plan, outcomes in order, and the rows of leakage.csv of it.

    ``capacitance`` is (C, u_C) in farad, ``voltage_error_v`` the half-width of the voltmeter.
    """

    plan: PlannedHold
    outcomes: tuple[Outcome, ...]
    rows: Columns
    capacitance: tuple[float, float]
    voltage_error_v: Callable[[float], float]
    rule: Rule

    def column(self, name: str) -> NDArray[np.float64]:
        """One column of its rows."""
        return np.asarray(self.rows[name], dtype=np.float64)

    @property
    def why_not(self) -> str:
        """Why nothing of it can be decided; '' where it can."""
        if not self.outcomes:
            return "it was not carried out"
        return self.outcomes[-1].why_not

    @property
    def cut_short_s(self) -> float | None:
        """When the runner ended a soak before its time; None where it lasted as planned."""
        if self.plan.kind not in ("leakage", "insulation") or self.why_not:
            return None
        last_s = float(self.column("since_voltage_s").max(initial=0.0))
        return last_s if last_s < 0.98 * self.plan.lasts_s else None

    @property
    def gave_way(self) -> bool:
        """Whether the part, seen to be connected, drew so much that it was stopped for it."""
        last = self.outcomes[-1] if self.outcomes else None
        return (
            last is not None
            and last.reached  # so that the voltmeter has seen the voltage at its own terminals
            and last.connection not in ("absent", "excess")
            and last.stopped.startswith(OVERDRAWN)
        )


@dataclass(frozen=True, kw_only=True, slots=True)
class Current:
    """The part's current at one time, with its standard uncertainty, and the voltage on it."""

    value_a: float
    u_a: float
    voltage_v: float
    since_s: float
    fitted: bool


class _NoCurrentError(Exception):
    """There is no current at the time that is asked for; says why."""


def judge_under_voltage(
    limits: Iterable[Limit],
    parts: Sequence[Part],
    stages: Mapping[tuple[str, str], Given],
    *,
    run_id: str = "",
) -> list[Row]:
    """Rows for every limit on a quantity of time or hold, then leakages that no limit names."""
    by_part: dict[str, list[Row]] = {part.part_id: [] for part in parts}
    judged: set[tuple[str, str]] = set()
    for limit in limits:
        if QUANTITIES[limit.quantity].per not in {"time", "hold"} or limit.part_id not in by_part:
            continue
        judged.add((limit.part_id, limit.stage))
        found = judge_one(limit, stages.get((limit.part_id, limit.stage)))
        by_part[limit.part_id].append(_row(run_id, limit, found, stages))
    for (part_id, name), given in stages.items():
        if (part_id, name) in judged or part_id not in by_part or not given.plan.times_s:
            continue
        if given.plan.kind in ("leakage", "insulation"):
            by_part[part_id] += [
                _row(run_id, limit, _reported(limit, given), stages)
                for limit in _unlimited(part_id, name, given)
            ]
    return [row for rows in by_part.values() for row in rows]


def judge_one(limit: Limit, given: Given | None) -> Judged:
    """One limit against one stage of its part."""
    if given is None:
        return _invalid(reasons.no_reading(limit))
    if limit.quantity in ("winding_ohm", "direct_ohm"):
        return _invalid(f"{limit.quantity}: {NOT_HERE}")
    if limit.quantity == "withstood_v":
        return _withstood(limit, given)
    if given.gave_way and QUANTITIES[limit.quantity].per == "time":
        return Judged(
            decision=Decision.REJECT,
            reason=f"{limit.quantity}: it did not stand "
            f"{format_quantity(given.plan.voltage_v, 'V')}: {given.outcomes[-1].stopped}; "
            f"outside {reasons.bounds(limit)}",
        )
    if given.why_not and limit.quantity != "reformed_v":
        return _invalid(f"{limit.quantity}: {given.why_not}")
    if limit.quantity == "reformed_v":
        return _reformed(limit, given)
    if limit.quantity == "absorption_rel":
        return _absorbed(limit, given)
    if given.cut_short_s is not None and QUANTITIES[limit.quantity].per == "time":
        return _cut_short(limit, given, given.cut_short_s)
    try:
        if limit.quantity in RATIOS:
            return _ratio(limit, given)
        return _of_current(limit, given, current_at(given, _time_of(limit, given)))
    except _NoCurrentError as why:
        return _invalid(f"{limit.quantity}: {why}")


def _cut_short(limit: Limit, given: Given, after_s: float) -> Judged:
    """The runner stops a part whose leakage rises: rejected by its last reading, or not judged."""
    said = f"its leakage rose and it was stopped after {after_s:.0f} s"
    try:
        last = _of_current(limit, given, current_at(given, after_s))
    except _NoCurrentError as why:
        return _invalid(f"{limit.quantity}: {said}; {why}")
    if last.decision is Decision.REJECT:
        return replace(last, reason=f"{last.reason}; {said}")
    return _invalid(f"{limit.quantity}: {said}")


def _time_of(limit: Limit, given: Given) -> float:
    return limit.since_voltage_s or max(given.plan.times_s, default=given.plan.lasts_s)


# ---- the current at a time


def current_at(given: Given, since_s: float) -> Current:
    """The reading that falls on this time, else the fit of the others; raises with the reason."""
    times, current, spread = map(given.column, ("since_voltage_s", "current_a", "u_current_a"))
    good = np.isfinite(current) & np.isfinite(spread) & (given.column("voltage_set_v") > 0.0)
    if not good.any():
        raise _NoCurrentError("no reading can be trusted")
    times, current, spread = times[good], current[good], spread[good]
    volts = given.column("voltage_v")[good]
    nearest = int(np.argmin(np.abs(times - since_s)))
    apart_s = abs(float(times[nearest]) - since_s)
    if apart_s <= max(SAME_TIME_REL * since_s, SAME_TIME_S):
        value_a, u_a = float(current[nearest]), float(spread[nearest])
        fitted = False
    else:
        if not times.min() < since_s < times.max():
            raise _NoCurrentError(f"no reading at {since_s:g} s, and none on both sides of it")
        value_a, u_a = _interpolated(times, current, spread, since_s)
        fitted = True
    return Current(
        value_a=value_a,
        u_a=u_a,
        voltage_v=float(volts[nearest]),
        since_s=since_s if fitted else float(times[nearest]),
        fitted=fitted,
    )


def _interpolated(
    times: NDArray[np.float64],
    current: NDArray[np.float64],
    spread: NDArray[np.float64],
    since_s: float,
) -> tuple[float, float]:
    """I(t) of the fit, with what all readings have in common."""
    common_a = float(spread.min())
    try:
        value, u_fit = fit_leakage(times, current, spread).current_at(since_s)
    except MetrologyError as error:
        raise _NoCurrentError(f"no reading at {since_s:g} s, and no fit: {error}") from error
    return float(value), hypot(float(u_fit), common_a)


# ---- quantities of one time


def _of_current(limit: Limit, given: Given, at: Current) -> Judged:
    """Leakage as it is; insulation V/I and R·C are decided as the currents that they allow.

    Near zero current V/I has no useful spread, but the current it must not pass has.
    """
    if limit.quantity == "leakage_a":
        return _decided(limit, given, at, at.value_a, at.u_a)
    farad, u_farad = given.capacitance
    scale = at.voltage_v * (farad if limit.quantity == "insulation_time_s" else 1.0)
    scale_rel = given.voltage_error_v(at.voltage_v) / sqrt(3.0) / at.voltage_v
    if limit.quantity == "insulation_time_s":
        if not farad > 0.0:
            return _invalid(f"{limit.quantity}: the part's capacitance was not measured")
        scale_rel = hypot(scale_rel, u_farad / farad)
    k = given.rule.coverage_k
    most_a = None if limit.minimum is None else scale / limit.minimum
    least_a = None if limit.maximum is None else scale / limit.maximum
    u_a = hypot(at.u_a, scale_rel * max(most_a or 0.0, abs(at.value_a)))
    decision, probability = decide(at.value_a, u_a, k, least_a, most_a, given.rule.guard)
    said = _said_insulation(limit.quantity, at, scale, k * u_a)
    resolved = at.value_a > k * at.u_a
    value = scale / at.value_a if resolved else nan
    return Judged(
        decision=decision,
        reason=reasons.judged(said, limit, decision, probability),
        value=value,
        u_expanded=value * k * hypot(at.u_a / at.value_a, scale_rel) if resolved else nan,
        k=k if resolved else nan,
        probability=probability,
    )


def _said_insulation(quantity: str, at: Current, scale: float, expanded_a: float) -> str:
    unit = QUANTITIES[quantity].unit
    where = _where(at)
    if at.value_a > expanded_a:
        spread = scale / at.value_a * expanded_a / at.value_a
        shown = f"{reasons.shown(scale / at.value_a, unit)} ± {format_quantity(spread, unit, 2)}"
        return f"{quantity} {where} is {shown}"
    least = scale / max(at.value_a + expanded_a, 1e-30)
    return f"{quantity} {where} is above {format_quantity(least, unit, 3)}, no leakage is resolved"


def _decided(limit: Limit, given: Given, at: Current, value: float, u: float) -> Judged:
    k, guard = given.rule.coverage_k, given.rule.guard
    decision, probability = decide(value, u, k, limit.minimum, limit.maximum, guard)
    said = reasons.measured(limit.quantity, value, k * u, k, _where(at).removeprefix("at "))
    return Judged(
        decision=decision,
        reason=reasons.judged(said, limit, decision, probability),
        value=value,
        u_expanded=k * u,
        k=k,
        probability=probability,
    )


def _where(at: Current) -> str:
    how = ", by a fit of the readings" if at.fitted else ""
    return f"at {format_quantity(at.voltage_v, 'V')}, {at.since_s:.0f} s{how}"


# ---- quantities of a whole hold


def _ratio(limit: Limit, given: Given) -> Judged:
    early, late = (current_at(given, since_s) for since_s in RATIOS[limit.quantity])
    k = given.rule.coverage_k
    if late.value_a <= k * late.u_a or early.value_a <= k * early.u_a:
        return _invalid(f"{limit.quantity}: the leakage is too small to be divided by")
    value = early.value_a / late.value_a
    u = value * hypot(early.u_a / early.value_a, late.u_a / late.value_a)
    return _decided(limit, given, late, value, u)


def _reformed(limit: Limit, given: Given) -> Judged:
    """The last voltage that it passed, from the readings again; a voltage that was set is exact."""
    rule = given.plan.forming
    if rule is None or not given.outcomes:
        return _invalid(f"{limit.quantity}: it was not carried out")
    outcome = given.outcomes[-1]
    if outcome.connection != "agrees" or not (outcome.bypass_shown or outcome.stopped):
        return _invalid(f"{limit.quantity}: {outcome.why_not}")
    if not given.column("since_voltage_s").size:
        return _invalid(f"{limit.quantity}: {outcome.why_not or 'nothing was read'}")
    names = ("elapsed_s", "since_voltage_s", "voltage_set_v", "current_a")
    rows = zip(*(given.column(name).tolist() for name in names), strict=True)
    passed_v, step = replayed(rule, rows)
    why = {Step.RISES: "then its leakage rose", Step.SPENT: "then its time was over"}.get(step, "")
    if outcome.stopped:
        why = f"then {outcome.stopped}"
    shown = "no voltage" if passed_v is None else format_quantity(passed_v, "V")
    said = f"{limit.quantity}: it formed up to {shown}" + (f", {why}" if why else "")
    least_v = limit.minimum or 0.0
    if passed_v is None or passed_v < least_v * (1.0 - 1e-9):
        return Judged(
            decision=Decision.REJECT,
            reason=f"{said}: outside {reasons.bounds(limit)}",
            value=nan if passed_v is None else passed_v,
        )
    if outcome.why_not:
        return _invalid(f"{said}; {outcome.why_not}")
    return Judged(
        decision=Decision.ACCEPT,
        reason=f"{said}: within {reasons.bounds(limit)}",
        value=passed_v,
    )


def _withstood(limit: Limit, given: Given) -> Judged:
    """A whole dwell went by, or it broke down each time it was tried, or nobody can say."""
    if not given.outcomes:
        return _invalid(f"{limit.quantity}: it was not carried out")
    last, tries = given.outcomes[-1], len(given.outcomes)
    volts = format_quantity(given.plan.voltage_v, "V")
    times = f" at attempt {tries}" if tries > 1 else ""
    if not last.stopped:
        if last.why_not:
            return _invalid(f"{limit.quantity}: {last.why_not}")
        if given.column("since_voltage_s").max(initial=0.0) < 0.98 * given.plan.lasts_s:
            return _invalid(f"{limit.quantity}: it was not held to its end")
        return Judged(
            decision=Decision.ACCEPT,
            reason=f"{limit.quantity}: it held {volts} for {given.plan.lasts_s:.0f} s{times}: "
            f"within {reasons.bounds(limit)}",
            value=given.plan.voltage_v,
        )
    shown = any(one.connection == "agrees" for one in given.outcomes)
    if not shown and "conducts" not in last.stopped:
        return _invalid(f"{limit.quantity}: {last.why_not}")
    return Judged(
        decision=Decision.REJECT,
        reason=f"{limit.quantity}: it did not hold {volts} in {tries} attempts, at last because "
        f"{last.stopped}: outside {reasons.bounds(limit)}",
    )


def _absorbed(limit: Limit, given: Given) -> Judged:
    """V(t)/V0, what the voltmeter took away put back; refused where that was above 5 %."""
    droop = given.plan.droop_rel
    if droop > DROOP_MOST_REL:
        return _invalid(
            f"{limit.quantity}: the voltmeter takes {100 * droop:.0f} % of what came back"
        )
    set_v, volts = given.column("voltage_set_v"), given.column("voltage_v")
    times = given.column("since_voltage_s")
    charged, back = set_v > 0.0, (set_v == 0.0) & np.isfinite(volts)
    wanted_s = _time_of(limit, given)
    near = back & (np.abs(times - wanted_s) <= max(SAME_TIME_REL * wanted_s, SAME_TIME_S))
    if not near.any() or not charged.any():
        return _invalid(f"{limit.quantity}: it was not read {wanted_s:g} s after the short")
    last_a = float(given.column("current_a")[charged][-1])
    keeps_s = float(volts[charged][-1]) * given.capacitance[0] / last_a if last_a > 0.0 else inf
    if not keeps_s > wanted_s:
        kept = format_quantity(keeps_s, "s", 2)
        return _invalid(f"{limit.quantity}: it leaks too much to keep what comes back ({kept})")
    row = int(np.flatnonzero(near)[0])
    first_v, back_v = float(volts[charged][-1]), float(volts[row])
    value = back_v / first_v / (1.0 - droop)
    error_v = given.voltage_error_v(back_v) / sqrt(3.0)
    u = hypot(error_v / first_v, value * droop / sqrt(3.0), value * 1e-3)
    at = Current(value_a=nan, u_a=nan, voltage_v=first_v, since_s=float(times[row]), fitted=False)
    return _decided(limit, given, at, value, u)


# ---- rows


def _invalid(reason: str) -> Judged:
    return Judged(decision=Decision.INVALID, reason=reason)


def _unlimited(part_id: str, stage: str, given: Given) -> list[Limit]:
    return [
        Limit(
            part_id=part_id,
            stage=stage,
            quantity="leakage_a",
            minimum=None,
            maximum=None,
            source="",
            voltage_v=given.plan.voltage_v,
            since_voltage_s=since_s,
        )
        for since_s in given.plan.times_s
    ]


def _reported(limit: Limit, given: Given) -> Judged:
    """A leakage that no limit judges; where it cannot be trusted there is no value."""
    if given.why_not:
        reason = f"{limit.quantity}: {given.why_not}"
        return Judged(decision=Decision.REPORTED, reason=reason)
    try:
        at = current_at(given, _time_of(limit, given))
    except _NoCurrentError as why:
        return Judged(decision=Decision.REPORTED, reason=f"{limit.quantity}: {why}")
    k = given.rule.coverage_k
    where = _where(at).removeprefix("at ")
    return Judged(
        decision=Decision.REPORTED,
        reason=reasons.measured(limit.quantity, at.value_a, k * at.u_a, k, where),
        value=at.value_a,
        u_expanded=k * at.u_a,
        k=k,
    )


def _row(run_id: str, limit: Limit, judged: Judged, stages: Mapping[tuple[str, str], Given]) -> Row:
    given = stages.get((limit.part_id, limit.stage))
    voltage_v, since_s = limit.voltage_v, limit.since_voltage_s
    if given is not None:
        voltage_v = given.plan.voltage_v if voltage_v is None else voltage_v
        timed = QUANTITIES[limit.quantity].per == "time" or limit.quantity == "absorption_rel"
        since_s = _time_of(limit, given) if since_s is None and timed else since_s
    cells: Row = dict.fromkeys(RESULT_COLUMNS, nan)
    cells.update(
        run_id=run_id,
        part_id=limit.part_id,
        stage=limit.stage,
        quantity=limit.quantity,
        voltage_v=nan if voltage_v is None else voltage_v,
        since_voltage_s=nan if since_s is None else since_s,
        value=judged.value,
        u_expanded=judged.u_expanded,
        coverage_k=judged.k,
        unit=QUANTITIES[limit.quantity].unit,
        limit_min=nan if limit.minimum is None else limit.minimum,
        limit_max=nan if limit.maximum is None else limit.maximum,
        limit_source=limit.source,
        decision=judged.decision,
        reason=judged.reason,
    )
    return cells
