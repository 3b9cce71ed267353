"""What instruments said, as it was said: the stored truth that everything else derives from."""

from dataclasses import dataclass
from math import nan

from ohmward.terms.status import Status


@dataclass(frozen=True, kw_only=True, slots=True)
class ImpedanceReading:
    """One reading of an impedance meter.

    ``pair`` names what the meter sent, first and second, in SI units: ``R-X`` (ohm, ohm),
    ``Z-theta`` (ohm, rad), ``G-B`` (S, S), ``Cs-D``, ``Cp-D``, ``Cs-Rs``, ``Cp-Rp``, ``Cp-G``
    (F), ``Ls-D``, ``Ls-Q``, ``Ls-Rs``, ``Lp-D``, ``Lp-Q``, ``Lp-Rp``, ``Lp-G`` (H).
    The resolutions are the weight of the last digit sent, in the unit of the number.
    Read-backs that the driver does not have are NaN. ``reply`` is the bytes as received.
    """

    pair: str
    first: float
    second: float
    first_resolution: float = 0.0
    second_resolution: float = 0.0
    status: Status = Status.OK
    level_v: float = nan
    bias_v: float = nan
    bias_a: float = nan
    range: str = ""
    reply: bytes = b""


@dataclass(frozen=True, kw_only=True, slots=True)
class Environment:
    """Room readings of a thermometer; NaN where it has none."""

    temperature_c: float = nan
    humidity_pct: float = nan


@dataclass(frozen=True, kw_only=True, slots=True)
class VoltageReading:
    """One reading of a voltmeter, referred to what it measures (a divider is accounted for)."""

    voltage_v: float
    status: Status = Status.OK
    range: str = ""
    reply: bytes = b""


@dataclass(frozen=True, kw_only=True, slots=True)
class CurrentReading:
    """One reading of a current meter; ``range_a`` is the full scale it was taken on."""

    current_a: float
    range_a: float
    status: Status = Status.OK
    reply: bytes = b""


@dataclass(frozen=True, kw_only=True, slots=True)
class SupplyReading:
    """What a supply says of itself: what it was told, and what it measures at its terminals.

    ``limiting`` is true while its current limit holds the voltage down; ``tripped`` when its
    own protection has switched it off.
    """

    voltage_set_v: float
    limit_set_a: float
    voltage_v: float
    current_a: float
    output_on: bool
    limiting: bool = False
    tripped: bool = False
    reply: bytes = b""
