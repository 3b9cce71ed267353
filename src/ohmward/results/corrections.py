"""A value carried to the temperature and the age that its limit states, with what that costs.

Nothing is carried anywhere unless a limit asks for it, and the value as measured stays in the
table beside it. What the corrections themselves may be off by is added to the value's own
uncertainty, as a fraction: u² = (ratio·u)² + (ratio·y)²·(e_T² + e_age²).
"""

from dataclasses import dataclass, replace
from math import hypot, isnan, nan

import numpy as np

from ohmward.metrology.ageing import RATES, NotAgeing, at_reference_time
from ohmward.metrology.samples import normal_points
from ohmward.metrology.temperature import DIELECTRICS, at_reference_temperature
from ohmward.results.cells import Cell
from ohmward.results.judged import Rule, Spread
from ohmward.terms.dielectric import dielectric_key
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part
from ohmward.units.values import format_quantity

# Standard uncertainty of a part's temperature: it lies in a fixture, the thermometer beside it.
U_TEMPERATURE_K = 1.0


@dataclass(frozen=True, kw_only=True, slots=True)
class Corrected:
    """A value at its limit's reference and a note of what was done; ``doubt`` if it could not."""

    spread: Spread
    note: str = ""
    doubt: str = ""


def asks(limit: Limit) -> bool:
    """Whether a limit wants its value somewhere else than where it was measured."""
    return limit.reference_temperature_c is not None or limit.reference_age_s is not None


def uncorrected(limit: Limit) -> Limit:
    """A limit that bounds nothing, on the same quantity as it was measured."""
    return replace(
        limit,
        minimum=None,
        maximum=None,
        source="",
        reference_temperature_c=None,
        reference_age_s=None,
    )


def correct(limit: Limit, part: Part, cell: Cell, spread: Spread, rule: Rule) -> Corrected:
    """The value at the temperature and age of its limit, or why that is not known."""
    if not asks(limit):
        return Corrected(spread=spread)
    name = dielectric_key(part.dielectric)
    ratio, errors, notes = 1.0, [], []
    to_c = limit.reference_temperature_c
    if to_c is not None:
        if isnan(cell.temperature_c):
            return _lost(spread, "no temperature was read")
        if name not in DIELECTRICS:
            return _lost(spread, f"no temperature coefficient is known of {name or 'it'}")
        value, u = at_reference_temperature(
            1.0, 0.0, cell.temperature_c, U_TEMPERATURE_K, DIELECTRICS[name], to_c
        )
        ratio *= float(value)
        errors.append(float(u / value))
        at, wanted = (format_quantity(one, "degC", 3) for one in (cell.temperature_c, to_c))
        notes.append(f"from {at} to {wanted}")
    if limit.reference_age_s is not None:
        aged = _aged(part, name, cell, limit.reference_age_s)
        if isinstance(aged, str):
            return _lost(spread, aged)
        ratio *= aged[0]
        errors.append(aged[1])
        notes.append(f"to {limit.reference_age_s / 3600:g} h after its last heating")
    note = f"carried {' and '.join(notes)}, {100 * (ratio - 1):+.2g} %"
    return Corrected(spread=_moved(spread, ratio, hypot(*errors), rule), note=note)


def _aged(part: Part, name: str, cell: Cell, to_s: float) -> tuple[float, float] | str:
    """The ratio to the reference age with its relative u, or why there is none."""
    if part.last_heated is None:
        return "it is not known when it was last heated"
    if name not in RATES:
        return f"no ageing rate is known of {name or 'it'}"
    age_s = cell.time_s - part.last_heated.timestamp()
    try:
        value, u = at_reference_time(1.0, 0.0, age_s, RATES[name], to_s)
    except NotAgeing:
        return "it was measured before its last heating, as the parts list has it"
    return float(value), float(u / value)


def _lost(spread: Spread, why: str) -> Corrected:
    return Corrected(spread=spread, doubt=f"cannot be carried to the limit's reference: {why}")


def _moved(spread: Spread, ratio: float, error: float, rule: Rule) -> Spread:
    """The interval times the ratio, widened by the ratio's own relative uncertainty."""
    from scipy.special import ndtr

    value = spread.value * ratio
    u = hypot(ratio * spread.u, value * error)
    if spread.samples is None:
        return Spread(value=value, u=u, u_expanded=spread.k * u, k=spread.k)
    own = normal_points(spread.samples.size, 12)[11]  # a dimension that no other cause uses
    samples = spread.samples * ratio * (1 + error * own)
    tail = float(ndtr(-rule.coverage_k))
    low, high = np.quantile(samples, (tail, 1 - tail), method="inverted_cdf")
    half = float(high - low) / 2
    return Spread(value=value, u=u, u_expanded=half, k=half / u if u > 0 else nan, samples=samples)
