"""A limit, resolved for one part: what must hold, at which condition, and who says so."""

from dataclasses import dataclass


@dataclass(frozen=True, kw_only=True, slots=True)
class Limit:
    """Bounds on one quantity of one part at one condition, in the quantity's SI unit.

    A condition that is None is not a condition: the limit then holds at every point of its
    stage. ``since_voltage_s`` counts from the part's voltage within 1 % of ``voltage_v``, or for
    what comes back after a short, from the end of the short. At least one
    of ``minimum`` and ``maximum`` is set.
    """

    part_id: str
    stage: str
    quantity: str
    minimum: float | None
    maximum: float | None
    source: str
    frequency_hz: float | None = None
    level_v: float | None = None
    bias_v: float | None = None
    bias_a: float | None = None
    reference_temperature_c: float | None = None
    reference_age_s: float | None = None
    voltage_v: float | None = None
    since_voltage_s: float | None = None
