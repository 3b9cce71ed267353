"""The planned stages of a brief: one stage for one part, with every value worked out."""

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import ClassVar

from ohmward.terms.condition import Point
from ohmward.terms.part import Part

FORMING_WITHIN_REL = 0.1  # how far below its voltage an oxide that forms may be held


@dataclass(frozen=True, kw_only=True, slots=True)
class Settle:
    """A point is settled when its last ``readings`` readings agree within ``tolerance_rel``.

    The tolerance is a fraction of their mean; after ``at_most_s`` the point is unsettled.
    """

    tolerance_rel: float
    readings: int
    at_most_s: float


@dataclass(frozen=True, kw_only=True, slots=True)
class PlannedStage(ABC):
    """One stage for one part; ``number`` counts all planned stages of the run from 1."""

    kind: ClassVar[str]

    number: int
    stage: str
    part: Part
    duration_s: float

    @property
    @abstractmethod
    def readings(self) -> int:
        """How many readings are kept of this stage."""


@dataclass(frozen=True, kw_only=True, slots=True)
class PlannedSweep(PlannedStage):
    """A sweep of an impedance meter: every point in order, each read ``repeats`` times.

    With ``closure`` the last point is the first one again, which shows drift. ``interval_s``
    is from the beginning of one repeat to that of the next, 0 for as fast as it goes.
    ``pair`` and ``range_ohm`` of None leave the choice to the driver and to the meter.
    """

    kind: ClassVar[str] = "sweep"

    points: tuple[Point, ...]
    closure: bool
    repeats: int
    dwell_s: float
    interval_s: float
    settle: Settle | None
    integration: str
    pair: str | None
    range_ohm: float | None

    @property
    def readings(self) -> int:
        """How many readings are kept of this stage."""
        return len(self.points) * self.repeats


@dataclass(frozen=True, kw_only=True, slots=True)
class PlannedDirect(PlannedStage):
    """What every stage on the high-voltage path has.

    ``source_v`` is the highest voltage that the supply is set to, ``ramp_v_per_s`` what the
    supply's current leaves of the rate that was asked for. A part whose net current passes
    ``current_max_a``, or whose power ``power_max_w``, is stopped; None for no such limit.
    """

    source_v: float
    ramp_v_per_s: float
    interval_s: float
    current_max_a: float | None
    power_max_w: float | None

    @property
    def times_s(self) -> tuple[float, ...]:
        """When readings decide: times since the voltage (or the short), empty for none."""
        return ()


@dataclass(frozen=True, kw_only=True, slots=True)
class PlannedLeakage(PlannedDirect):
    """Charge to ``voltage_v``, keep it for ``soak_s``, read every ``interval_s``.

    Also read at ``read_at_s``, which decide; all times count from when the part's own voltage
    is within 1 % of ``voltage_v``.
    """

    kind: ClassVar[str] = "leakage"

    voltage_v: float
    soak_s: float
    read_at_s: tuple[float, ...]

    @property
    def readings(self) -> int:
        """How many readings are kept, each time once."""
        every = {n * self.interval_s for n in range(1, int(self.soak_s / self.interval_s) + 1)}
        return len(every | set(self.read_at_s))

    @property
    def times_s(self) -> tuple[float, ...]:
        """When readings decide."""
        return self.read_at_s


@dataclass(frozen=True, kw_only=True, slots=True)
class PlannedInsulation(PlannedLeakage):
    """Leakage at the voltage of the standard for insulation; the soak ends with its reading."""

    kind: ClassVar[str] = "insulation"


@dataclass(frozen=True, kw_only=True, slots=True)
class PlannedReform(PlannedDirect):
    """Rising voltages, each for ``hold_s`` at least.

    The next voltage follows once ``hold_s`` has passed, the leakage is falling and is below
    ``next_below_a``. The part stops when its leakage rises ``rise_rel`` above the least at its
    voltage, or when ``budget_s`` since the first voltage has passed; then ``reformed_v`` is the
    last voltage at which it was falling and below. ``duration_s`` is the least time;
    ``rest_s`` is spent discharged and shorted.
    """

    kind: ClassVar[str] = "reform"

    voltages_v: tuple[float, ...]
    hold_s: float
    next_below_a: float
    rise_rel: float
    budget_s: float
    rest_s: float

    @property
    def voltage_v(self) -> float:
        """The last voltage."""
        return self.voltages_v[-1]

    @property
    def readings(self) -> int:
        """The least number of readings that are kept."""
        return len(self.voltages_v) * max(1, int(self.hold_s / self.interval_s))


@dataclass(frozen=True, kw_only=True, slots=True)
class PlannedProof(PlannedDirect):
    """Ramp to ``voltage_v`` and keep it for ``dwell_s``.

    A part that breaks down is brought down and tried again, ``attempts`` times in all: only a
    breakdown that stays fails it. ``withstood_v`` is ``voltage_v`` once a whole dwell went by.
    """

    kind: ClassVar[str] = "proof"

    voltage_v: float
    dwell_s: float
    attempts: int

    @property
    def readings(self) -> int:
        """How many readings are kept of one attempt."""
        return max(1, int(self.dwell_s / self.interval_s))


@dataclass(frozen=True, kw_only=True, slots=True)
class PlannedAbsorption(PlannedDirect):
    """Charge for ``charge_s`` at ``voltage_v``, short for ``short_s``, then leave open.

    The voltmeter is connected at ``read_at_s`` only, counted from the end of the short, each
    time for about ``moment_s``; ``droop_rel`` is the share of the voltage that it is expected
    to take away until the last reading, which is corrected and refused above 5 %.
    """

    kind: ClassVar[str] = "absorption"

    voltage_v: float
    charge_s: float
    short_s: float
    read_at_s: tuple[float, ...]
    moment_s: float
    droop_rel: float

    @property
    def readings(self) -> int:
        """Readings while it charges, and the moments afterwards."""
        return max(1, int(self.charge_s / self.interval_s)) + len(self.read_at_s)

    @property
    def times_s(self) -> tuple[float, ...]:
        """When readings decide, from the end of the short."""
        return self.read_at_s


@dataclass(frozen=True, kw_only=True, slots=True)
class PlannedResistance(PlannedDirect):
    """A direct current of ``current_a`` through the part, and the voltage that it makes.

    ``source_v`` drives it through the position's series resistor. After ``settle_s`` voltage
    and current are read ``repeats`` times; the current is at zero before any contact opens.
    """

    kind: ClassVar[str] = "resistance"

    current_a: float
    settle_s: float
    repeats: int

    @property
    def readings(self) -> int:
        """How many readings are kept of this stage."""
        return self.repeats
