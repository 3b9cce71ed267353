"""What an instrument's manual says of its accuracy, as a driver file carries it."""

from dataclasses import dataclass


@dataclass(frozen=True, kw_only=True, slots=True)
class AccuracyBand:
    """Basic accuracy over a rectangle of frequency and |Z|, half-widths.

    ``magnitude_rel`` is a fraction of |Z|; ``phase_rad`` is in radians.
    """

    frequency_min_hz: float
    frequency_max_hz: float
    impedance_min_ohm: float
    impedance_max_ohm: float
    magnitude_rel: float
    phase_rad: float


@dataclass(frozen=True, kw_only=True, slots=True)
class LevelFactor:
    """Multiplies the accuracy while the level that is set is at or above ``level_min_v``."""

    level_min_v: float
    factor: float


@dataclass(frozen=True, kw_only=True, slots=True)
class ImpedanceAccuracy:
    """An impedance meter's accuracy: |Z| and phase half-widths.

    At (f, |Z|), with the band's basic values a and p, level factor k_l, integration factor
    k_i and cable factor k_c::

        δ|Z|/|Z| = (a + short_ohm/|Z| + open_s·|Z|) · k_l · k_i · k_c
        δθ       = (p + short_ohm/|Z| + open_s·|Z|) · k_l · k_i · k_c

    ``distribution`` is ``rectangular`` (u = δ/√3) or ``normal`` (δ is a k = 2 value).
    ``level_factors`` are sorted by falling ``level_min_v``; ``integration_factors`` are keyed
    by the name of the integration setting; ``cable_factor_per_m`` adds to 1 per metre.
    ``frequency_rel`` is the half-width of the frequency itself. ``temperature_*`` give the
    range in which all this holds and what each kelvin outside adds, as a fraction.
    """

    distribution: str
    bands: tuple[AccuracyBand, ...]
    short_ohm: float = 0.0
    open_s: float = 0.0
    level_factors: tuple[LevelFactor, ...] = ()
    integration_factors: tuple[tuple[str, float], ...] = ()
    cable_factor_per_m: float = 0.0
    frequency_rel: float = 0.0
    temperature_min_c: float = 18.0
    temperature_max_c: float = 28.0
    temperature_factor_per_k: float = 0.0


@dataclass(frozen=True, kw_only=True, slots=True)
class RangeAccuracy:
    """Accuracy of one range of a current meter, voltmeter or supply: ±(rel·reading + absolute)."""

    full_scale: float
    reading_rel: float
    offset: float


@dataclass(frozen=True, kw_only=True, slots=True)
class ScalarAccuracy:
    """Accuracy of an instrument that reads one number, range by range, half-widths."""

    distribution: str
    ranges: tuple[RangeAccuracy, ...]
