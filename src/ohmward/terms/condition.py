"""The condition under which a reading is taken."""

from dataclasses import dataclass


@dataclass(frozen=True, kw_only=True, slots=True)
class Point:
    """One point of a sweep: frequency, AC level (rms) and DC bias (a voltage or a current)."""

    frequency_hz: float
    level_v: float
    bias_v: float = 0.0
    bias_a: float = 0.0
