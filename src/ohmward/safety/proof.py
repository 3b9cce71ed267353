"""What counts as proof: that a part is connected, and that it is dead; pure.

The evidence is numbers with times; what was not resolved is said to be unresolved, never
taken for a pass.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from enum import StrEnum
from itertools import pairwise
from math import exp, inf, log

from ohmward.safety.permit import Laws


class Connection(StrEnum):
    """What the charge drawn on a ramp says."""

    AGREES = "agrees"  # the part took C·V
    ABSENT = "absent"  # it took too little: open, or its contact is lost
    EXCESS = "excess"  # it took too much: leaks, shorts, or something else is on the rail
    UNRESOLVED = "unresolved"  # the instruments cannot tell


class Decay(StrEnum):
    """What a discharge says."""

    MATCHES = "matches"  # τ agrees with R·C: the part was there and is going down
    INSTANT = "instant"  # faster than the part can fall: the contact is lost
    STAYS = "stays"  # it does not fall, or far too slowly
    UNRESOLVED = "unresolved"  # too fast for the voltmeter, or it never was at a voltage


class Injection(StrEnum):
    """What a voltage of at most 1 V, sent through the path, says."""

    SEEN = "seen"  # the voltmeter sees it across the part
    CONDUCTS = "conducts"  # it does not hold, but a steady current flows: nothing is stored
    NOT_SEEN = "not seen"  # path or sense is broken


@dataclass(frozen=True, kw_only=True, slots=True)
class Sample:
    """One reading of the part's voltage (V), ``time_s`` after the discharge began."""

    time_s: float
    voltage_v: float


def charge_drawn_c(samples: Sequence[tuple[float, float]]) -> float:
    """∫I dt by the trapezium rule, over (time in s, current in A) in order of time (C)."""
    total = 0.0
    for (t0, i0), (t1, i1) in pairwise(samples):
        total += 0.5 * (i0 + i1) * (t1 - t0)
    return total


def judge_charge(
    laws: Laws,
    *,
    drawn_c: float,
    uncertainty_c: float,
    change_v: float,
    capacitance_min_f: float,
    capacitance_max_f: float,
) -> Connection:
    """Whether the charge drawn on this ramp agrees with C·V.

    ``drawn_c`` is net of what the rail, the supply's output and the divider took;
    ``uncertainty_c`` is its half-width. Unresolved where the half-width is more than half of
    what the smallest agreeing charge is.
    """
    least_c = laws.charge_low * capacitance_min_f * abs(change_v)
    most_c = laws.charge_high * capacitance_max_f * abs(change_v)
    if least_c <= 0.0 or not uncertainty_c <= 0.5 * least_c:
        return Connection.UNRESOLVED
    if drawn_c < least_c:
        return Connection.ABSENT
    return Connection.AGREES if drawn_c <= most_c else Connection.EXCESS


def judge_droop(
    laws: Laws,
    samples: Sequence[Sample],
    *,
    drain_a: float,
    resolution_v: float,
    capacitance_min_f: float,
    capacitance_max_f: float,
) -> Connection:
    """Whether a part that nothing feeds droops as C·dV/dt = I says.

    ``samples`` are taken after OFF and before the discharge; ``drain_a`` is what drains the
    part meanwhile (its divider, the rail's leak, its own leakage) (A). The part took C·V on
    this ramp if it now gives it back at this rate. A voltage that is all but gone is ABSENT;
    a droop below ten digits of the voltmeter is unresolved.
    """
    if len(samples) < 2:
        return Connection.UNRESOLVED
    first, last = samples[0], samples[-1]
    fallen_v, spent_s = first.voltage_v - last.voltage_v, last.time_s - first.time_s
    if not abs(first.voltage_v) > laws.dead_v or spent_s <= 0.0:
        return Connection.UNRESOLVED
    if fallen_v < 10.0 * resolution_v:
        return Connection.UNRESOLVED
    found_f = drain_a * spent_s / fallen_v
    if found_f < laws.charge_low * capacitance_min_f:
        return Connection.ABSENT
    return (
        Connection.AGREES
        if found_f <= laws.charge_high * capacitance_max_f
        else (Connection.EXCESS)
    )


def holds_test_voltage(
    laws: Laws, samples: Sequence[Sample], *, drain_ohm: float, capacitance_min_f: float
) -> bool | None:
    """Whether a part holds the test voltage as its capacitance must; None if unresolved.

    With R the resistance that drains it, it falls as e^(−t/RC) at the fastest for C_min; a
    part that has lost half of what even that leaves is not there.
    """
    first, last = samples[0], samples[-1]
    time_constant = drain_ohm * laws.charge_low * capacitance_min_f
    spent_s = last.time_s - first.time_s
    if time_constant < 2.0 * spent_s or spent_s <= 0.0:
        return None
    return last.voltage_v >= 0.5 * first.voltage_v * exp(-spent_s / time_constant)


def floor_v(laws: Laws, *, from_v: float, resolution_v: float) -> float:
    """Below this a falling voltage is not part of a decay any more: noise and absorption (V)."""
    return max(0.02 * abs(from_v), 10.0 * resolution_v, 0.1 * laws.dead_v)


def is_resolved(
    laws: Laws,
    *,
    from_v: float,
    resistance_ohm: float,
    capacitance_min_f: float,
    interval_s: float,
    resolution_v: float,
) -> bool:
    """Whether enough readings, ``interval_s`` apart, fall into the fastest decay to be seen."""
    floor = floor_v(laws, from_v=from_v, resolution_v=resolution_v)
    fastest_s = laws.decay_low * resistance_ohm * capacitance_min_f
    if abs(from_v) <= floor:
        return False
    return fastest_s * log(abs(from_v) / floor) >= laws.decay_readings * interval_s


def time_constant_s(samples: Sequence[Sample], *, least_v: float) -> float:
    """τ of an exponential decay: least squares of ln|V| against time, while |V| > least_v (s).

    0 where fewer than two samples are left, inf where it does not fall.
    """
    falling: list[tuple[float, float]] = []
    for sample in samples:
        if abs(sample.voltage_v) <= least_v:
            break
        falling.append((sample.time_s, log(abs(sample.voltage_v))))
    if len(falling) < 2:
        return 0.0
    mean_t = sum(t for t, _ in falling) / len(falling)
    mean_y = sum(y for _, y in falling) / len(falling)
    spread = sum((t - mean_t) ** 2 for t, _ in falling)
    if spread <= 0.0:
        return 0.0
    slope = sum((t - mean_t) * (y - mean_y) for t, y in falling) / spread
    return -1.0 / slope if slope < 0.0 else inf


def judge_decay(
    laws: Laws,
    samples: Sequence[Sample],
    *,
    resistance_ohm: float,
    capacitance_min_f: float,
    capacitance_max_f: float,
    resolution_v: float,
    interval_s: float,
    recovered_c: float | None = None,
) -> Decay:
    """Whether a discharge through a known resistor was the part's.

    The first sample is the voltage before the discharge contact closed. ``interval_s`` is
    how far apart the voltmeter can read. ``recovered_c`` is the charge that came back, where
    something measured it: it then stands for a decay that is too fast to be seen. An instant
    fall, where a part must take time, means that the contact was lost.
    """
    if not samples:
        return Decay.UNRESOLVED
    from_v = samples[0].voltage_v
    floor = floor_v(laws, from_v=from_v, resolution_v=resolution_v)
    if abs(from_v) <= max(floor, laws.dead_v):
        return Decay.UNRESOLVED
    if recovered_c is not None:
        least_c = laws.charge_low * capacitance_min_f * abs(from_v)
        most_c = laws.charge_high * capacitance_max_f * abs(from_v)
        return Decay.MATCHES if least_c <= recovered_c <= most_c else Decay.INSTANT
    slowest_s = laws.decay_high * resistance_ohm * capacitance_max_f
    if abs(samples[-1].voltage_v) > floor and _too_slow(samples, slowest_s, floor):
        return Decay.STAYS
    if not is_resolved(
        laws,
        from_v=from_v,
        resistance_ohm=resistance_ohm,
        capacitance_min_f=capacitance_min_f,
        interval_s=interval_s,
        resolution_v=resolution_v,
    ):
        return Decay.UNRESOLVED
    fastest_s = laws.decay_low * resistance_ohm * capacitance_min_f
    if _jumps(samples, fastest_s, least_v=max(laws.dead_v, 10.0 * resolution_v)):
        return Decay.INSTANT
    found_s = time_constant_s(samples, least_v=floor)
    if found_s > slowest_s:
        return Decay.STAYS
    return Decay.MATCHES if found_s >= fastest_s else Decay.INSTANT


def _jumps(samples: Sequence[Sample], fastest_s: float, *, least_v: float) -> bool:
    """Whether anywhere on the way down the voltage falls faster than the part can: lost there."""
    return any(
        abs(before.voltage_v) > least_v
        and not abs(after.voltage_v)
        >= 0.9 * abs(before.voltage_v) * exp(-(after.time_s - before.time_s) / fastest_s)
        for before, after in pairwise(samples)
    )


def _too_slow(samples: Sequence[Sample], slowest_s: float, floor: float) -> bool:
    """Whether the last sample lies above the slowest decay that still would match."""
    if slowest_s <= 0.0:
        return True
    first, last = samples[0], samples[-1]
    allowed_v = abs(first.voltage_v) * exp(-(last.time_s - first.time_s) / slowest_s)
    return abs(last.voltage_v) > max(allowed_v, floor)


def judge_injection(
    laws: Laws,
    *,
    voltage_v: float,
    current_a: float,
    current_floor_a: float,
    injected_v: float,
) -> Injection:
    """What an injected voltage says, once everything in the path has had time to settle.

    ``current_floor_a`` is the least current that is certainly more than the part's charging,
    the divider and the instrument's own error.
    """
    if abs(voltage_v - injected_v) <= laws.injection_rel * injected_v:
        return Injection.SEEN
    if abs(voltage_v) < injected_v and abs(current_a) > current_floor_a:
        return Injection.CONDUCTS
    return Injection.NOT_SEEN


def is_dead(laws: Laws, voltage_v: float) -> bool:
    """Whether a reading, by a voltmeter that is known to see the part, says dead."""
    return abs(voltage_v) <= laws.dead_v
