"""What a bench cannot decide: the uncertainty to be expected of it, held against the limits.

The part is taken at its nominal value; where the limit is on a loss (D, Q, ESR, Rp), with the
loss that the limit allows, because that is where a decision is hard.
"""

from dataclasses import dataclass, replace
from math import inf, isfinite, sqrt

import numpy as np

from ohmward.metrology.accuracy import impedance_uncertainty
from ohmward.metrology.arrays import FloatArray
from ohmward.metrology.immittance import views
from ohmward.results.quantities import SERIES_BELOW_OHM, SHARED_VARIANCE
from ohmward.sequence.brief import CannotDecide, PlannedStage, PlannedSweep
from ohmward.sequence.check import NOMINAL_QUANTITIES
from ohmward.sequence.limits import where_of
from ohmward.sequence.model import DecisionTable
from ohmward.terms.accuracy import ImpedanceAccuracy
from ohmward.terms.kind import Kind
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part
from ohmward.terms.quantity import QUANTITIES
from ohmward.units.values import format_quantity

_SIGNED = frozenset({"reactance_ohm", "phase_rad", "capacitance_change", "inductance_change"})
_CHANGE_OF = {"capacitance_change": "capacitance_f", "inductance_change": "inductance_h"}
_MODELS = {"capacitance_f": ("cs_f", "cp_f"), "inductance_h": ("ls_h", "lp_h")}


@dataclass(frozen=True, kw_only=True, slots=True)
class MeterAccuracy:
    """What is needed to predict: the driver's accuracy (None: it states none) and the cable."""

    accuracy: ImpedanceAccuracy | None
    cable_m: float


def cannot_decide(
    limits: tuple[Limit, ...],
    stages: tuple[PlannedStage, ...],
    meter: MeterAccuracy,
    decision: DecisionTable,
) -> tuple[CannotDecide, ...]:
    """Every limit that no reading of a part could meet with its guard band, worst point each."""
    of_part = {(stage.part.part_id, stage.stage): stage for stage in stages}
    found: list[CannotDecide] = []
    for limit in limits:
        stage = of_part[limit.part_id, limit.stage]
        doubt: CannotDecide | None = None
        if not isinstance(stage, PlannedSweep):
            continue
        if limit.quantity == "self_resonance_hz":
            doubt = _resonance_doubt(limit, stage)
        elif QUANTITIES[limit.quantity].per == "point":
            doubt = _point_doubt(limit, stage, meter, decision)
        if doubt is not None:
            found.append(doubt)
    return tuple(found)


def _resonance_doubt(limit: Limit, stage: PlannedSweep) -> CannotDecide | None:
    frequencies = sorted({point.frequency_hz for point in stage.points})
    why = ""
    if len(frequencies) < 2:
        why = "one frequency shows no change of sign"
    elif _ends_before(frequencies[-1], limit):
        why = f"the sweep ends at {format_quantity(frequencies[-1], 'Hz')}"
    if not why:
        return None
    return CannotDecide(
        limit=limit,
        frequency_hz=frequencies[-1],
        level_v=stage.points[0].level_v,
        expanded_uncertainty=None,
        reason=f"{_said(limit)}: {why}",
    )


def _ends_before(last_hz: float, limit: Limit) -> bool:
    """Whether a part without a change of sign up to here could still be on either side."""
    low, high = limit.minimum, limit.maximum
    return (low is not None and last_hz < low) or (high is not None and last_hz <= high)


def _point_doubt(
    limit: Limit, stage: PlannedSweep, meter: MeterAccuracy, decision: DecisionTable
) -> CannotDecide | None:
    where = where_of(limit)
    held = [point for point in stage.points if where.holds_at(point)]
    if not held:  # a bias between two that are measured
        anywhere = replace(where, bias_v=None, bias_a=None)
        held = [point for point in stage.points if anywhere.holds_at(point)]
    settings = sorted({(point.frequency_hz, point.level_v) for point in held})
    frequency, level = (np.array(column) for column in zip(*settings, strict=True))
    if meter.accuracy is None:
        return _no_accuracy(limit, frequency, level, "the driver states no accuracy")
    impedance = _impedance(limit, stage.part, frequency)
    uncertainty = impedance_uncertainty(
        meter.accuracy,
        frequency_hz=frequency,
        r=impedance[0],
        x=impedance[1],
        level_v=level,
        integration=stage.integration,
        cable_m=meter.cable_m,
        holes="nan",
    )
    hole = np.isnan(uncertainty[0])
    if np.any(hole):
        first = int(np.argmax(hole))
        why = "the driver states no accuracy there"
        return _no_accuracy(limit, frequency[first:], level[first:], why)
    value, u = _expected(limit, stage.part, frequency, impedance, uncertainty)
    return _worst(limit, decision, frequency, level, value, u)


def _no_accuracy(limit: Limit, frequency: FloatArray, level: FloatArray, why: str) -> CannotDecide:
    at = format_quantity(float(frequency[0]), "Hz")
    return CannotDecide(
        limit=limit,
        frequency_hz=float(frequency[0]),
        level_v=float(level[0]),
        expanded_uncertainty=None,
        reason=f"{_said(limit)} at {at}: {why}",
    )


def _worst(
    limit: Limit,
    decision: DecisionTable,
    frequency: FloatArray,
    level: FloatArray,
    value: FloatArray,
    u: FloatArray,
) -> CannotDecide | None:
    """The point at which the guard band exceeds the room by most, or None where it fits."""
    guard = decision.guard * decision.coverage * u
    excess = guard - np.array([_room(limit, float(v)) for v in value])
    excess = np.nan_to_num(excess, nan=-inf)  # what cannot be predicted is not claimed
    worst = int(np.argmax(excess))
    if excess[worst] < 0:
        return None
    unit = QUANTITIES[limit.quantity].unit
    expanded = float(decision.coverage * u[worst])
    at = format_quantity(float(frequency[worst]), "Hz")
    return CannotDecide(
        limit=limit,
        frequency_hz=float(frequency[worst]),
        level_v=float(level[worst]),
        expanded_uncertainty=expanded,
        reason=f"{_said(limit)} at {at}: the uncertainty is about "
        f"{_shown(expanded, unit)}, so that no reading could accept the part",
    )


def _room(limit: Limit, expected: float) -> float:
    """The largest guard band at which something could still be accepted.

    Between two bounds it is half their distance; under a maximum of what cannot be negative,
    the maximum itself; above a minimum of such a quantity, the minimum (u is relative then).
    Where a nominal value is expected, no more than its distance from the nearer bound.
    """
    low, high = limit.minimum, limit.maximum
    room = inf
    if low is not None and high is not None:
        room = (high - low) / 2
    elif limit.quantity not in _SIGNED:
        room = high if high is not None else (low if low is not None else inf)
    if isfinite(expected):
        if high is not None:
            room = min(room, high - expected)
        if low is not None:
            room = min(room, expected - low)
    return room


def _expected(
    limit: Limit,
    part: Part,
    frequency: FloatArray,
    impedance: tuple[FloatArray, FloatArray],
    uncertainty: tuple[FloatArray, FloatArray, FloatArray],
) -> tuple[FloatArray, FloatArray]:
    """Expected value (NaN where the nominal value does not say) and standard uncertainty."""
    base = _CHANGE_OF.get(limit.quantity, limit.quantity)
    table = views(frequency, *impedance, *uncertainty, _MODELS.get(base, (base,)))
    value, u = _pick(base, table, np.hypot(*impedance))
    if base != limit.quantity:
        # a ratio of two readings of one meter: what they share falls out of it
        return np.zeros_like(value), u / np.abs(value) * sqrt(2 * (1 - SHARED_VARIANCE))
    has_nominal = part.kind in NOMINAL_QUANTITIES.get(limit.quantity, frozenset())
    nominal = part.nominal if has_nominal else np.nan
    return np.full_like(value, nominal), u


def _pick(
    quantity: str, table: dict[str, FloatArray], magnitude: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """The quantity's column and its uncertainty; C and L in the model that fits |Z|."""
    if quantity not in _MODELS:
        return table[quantity], table[f"u_{quantity}"]
    series, parallel = _MODELS[quantity]
    low = magnitude < SERIES_BELOW_OHM
    return (
        np.where(low, table[series], table[parallel]),
        np.where(low, table[f"u_{series}"], table[f"u_{parallel}"]),
    )


def _impedance(limit: Limit, part: Part, frequency: FloatArray) -> tuple[FloatArray, FloatArray]:
    """R and X in ohm of the ideal part, with the loss that the limit allows if it is on a loss."""
    w = 2 * np.pi * frequency
    if part.kind is Kind.RESISTOR:
        r = np.full_like(frequency, part.nominal)
        return r, np.zeros_like(r)
    x = -1 / (w * part.nominal) if part.kind is Kind.CAPACITOR else w * part.nominal
    bound = limit.maximum if limit.maximum is not None else limit.minimum
    if bound is None or bound <= 0:
        return np.zeros_like(x), x
    match limit.quantity:
        case "d":
            return bound * np.abs(x), x
        case "q":
            return np.abs(x) / bound, x
        case "rs_ohm" | "resistance_ohm":
            return np.full_like(x, bound), x
        case "rp_ohm":
            return x * x / bound, x
    return np.zeros_like(x), x


def _shown(value: float, unit: str) -> str:
    return f"{value:.3g}" if unit == "1" else format_quantity(value, unit, 3)


def _said(limit: Limit) -> str:
    unit = QUANTITIES[limit.quantity].unit
    low, high = limit.minimum, limit.maximum
    if low is not None and high is not None:
        bounds = f"{_shown(low, unit)} to {_shown(high, unit)}"
    elif high is not None:
        bounds = f"at most {_shown(high, unit)}"
    else:
        bounds = f"at least {_shown(low or 0.0, unit)}"
    return f"{limit.part_id}, {limit.stage}: {limit.quantity} {bounds}"
