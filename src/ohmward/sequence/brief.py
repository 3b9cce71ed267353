"""The brief: a sequence unrolled for these parts on this bench, as data and nothing else."""

from collections.abc import Mapping
from dataclasses import dataclass, fields
from enum import Enum
from math import isfinite
from typing import Any

from ohmward.safety.hazard import Grade, Hazard
from ohmward.safety.permit import Permit
from ohmward.sequence.planned import (
    PlannedAbsorption,
    PlannedDirect,
    PlannedInsulation,
    PlannedLeakage,
    PlannedProof,
    PlannedReform,
    PlannedResistance,
    PlannedStage,
    PlannedSweep,
    Settle,
)
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part

__all__ = [
    "Attendance",
    "Brief",
    "CannotDecide",
    "CannotReach",
    "LeakageFloor",
    "PlannedAbsorption",
    "PlannedDirect",
    "PlannedInsulation",
    "PlannedLeakage",
    "PlannedProof",
    "PlannedReform",
    "PlannedResistance",
    "PlannedStage",
    "PlannedSweep",
    "Settle",
    "as_plain",
]


@dataclass(frozen=True, kw_only=True, slots=True)
class CannotReach:
    """Something that the sequence allows to be left out, and that this bench leaves out."""

    part_ids: tuple[str, ...]
    stage: str
    what: str
    reason: str

    @property
    def who(self) -> str:
        """The parts that it concerns, in few words."""
        first = ", ".join(self.part_ids[:3])
        more = len(self.part_ids) - 3
        return f"{first} and {more} more" if more > 0 else first


@dataclass(frozen=True, kw_only=True, slots=True)
class CannotDecide:
    """A limit so near to what the bench can resolve that no reading could accept the part.

    ``expanded_uncertainty`` is the predicted one at the worst condition of the limit, in the
    quantity's SI unit; None where the driver states no accuracy there. Frequency and level are
    None for what is measured under direct voltage.
    """

    limit: Limit
    frequency_hz: float | None
    level_v: float | None
    expanded_uncertainty: float | None
    reason: str


@dataclass(frozen=True, kw_only=True, slots=True)
class LeakageFloor:
    """The least leakage that this bench can tell from none, for one part, voltage and time.

    ``floor_a`` is the expanded uncertainty of a current near zero plus the charging current
    that is left. What it is made of, half-widths in ampere: ``meter_a`` of the current meter on
    ``range_a``, ``divider_a`` of the divider's current that is taken off, ``drift_a`` = C·dV/dt of
    the supply, ``fixture_a`` through the fixture's insulation, ``charging_a`` =
    0.01·(V/R)·e^(−t/RC) as counted from within 1 % of the voltage. ``not_stated`` names what
    bench or drivers do not say, and what is therefore not in it. ``range_a`` is None where no
    range takes what flows. ``bypass_shown`` says whether the divider's current is enough to
    show that the bypass is open; where it is not, no reading counts.
    """

    part_id: str
    stage: str
    voltage_v: float
    since_voltage_s: float
    floor_a: float
    range_a: float | None
    meter_a: float
    divider_a: float
    drift_a: float
    fixture_a: float
    charging_a: float
    not_stated: tuple[str, ...]
    bypass_shown: bool


@dataclass(frozen=True, kw_only=True, slots=True)
class Attendance:
    """Whether the run may be left alone, and why; where not, a person stays and says so."""

    unattended: bool
    because: tuple[str, ...]


NOBODY_NEEDED = Attendance(
    unattended=True, because=("nothing in this run passes a threshold of danger",)
)


@dataclass(frozen=True, kw_only=True, slots=True)
class Brief:
    """What will be done, how long it takes, and what it cannot tell.

    ``parts`` are those that are measured; ``warnings`` name the others. ``stages`` are in order
    of execution: part by part, each part's stages in their order.
    ``compensation`` says what corrects the fixture, "" where nothing does.
    ``energising`` names the stages that put a hazardous voltage on a part. ``hazards`` are those
    of each part, ``nodes`` those of what parts share; ``floors`` what leakage the bench can
    see; ``permit`` the ceilings for the warden, None on a bench without a path for high
    voltage. ``hash`` is the
    SHA-256 of everything that changes what is done; ``hashes`` are those of each input, so
    that a later difference can be named.
    """

    name: str
    purpose: str
    follows: str
    bench: str
    parts: tuple[Part, ...]
    stages: tuple[PlannedStage, ...]
    limits: tuple[Limit, ...]
    coverage_k: float
    guard: float
    duration_s: float
    energising: tuple[str, ...]
    cannot_reach: tuple[CannotReach, ...]
    cannot_decide: tuple[CannotDecide, ...]
    cautions: tuple[str, ...]
    warnings: tuple[str, ...]
    hash: str
    hashes: Mapping[str, str]
    compensation: str = ""
    hazards: tuple[Hazard, ...] = ()
    nodes: tuple[Hazard, ...] = ()
    floors: tuple[LeakageFloor, ...] = ()
    attendance: Attendance = NOBODY_NEEDED
    permit: Permit | None = None

    @property
    def sweeps(self) -> tuple[PlannedSweep, ...]:
        """The planned stages of the impedance meter."""
        return tuple(stage for stage in self.stages if isinstance(stage, PlannedSweep))

    @property
    def grade(self) -> Grade:
        """The highest shock grade of any part or node."""
        return max((one.grade for one in (*self.hazards, *self.nodes)), default=Grade.NONE)

    @property
    def needs_authorisation(self) -> bool:
        """Whether a person must put a name to this run."""
        return any(one.needs_authorisation for one in (*self.hazards, *self.nodes))

    @property
    def readings(self) -> int:
        """How many readings are kept of the whole run."""
        return sum(stage.readings for stage in self.stages)

    def as_dict(self) -> dict[str, Any]:
        """The brief in types that JSON has, for ``--json``; names are the fields' own."""
        plain = {field.name: as_plain(getattr(self, field.name)) for field in fields(self)}
        return {
            **plain,
            "readings": self.readings,
            "grade": self.grade.name.lower(),
            "needs_authorisation": self.needs_authorisation,
        }


def as_plain(value: Any) -> Any:
    """A model, a mapping or a sequence of them, in types that JSON has; missing is null."""
    if isinstance(value, Grade):
        return value.name.lower()
    if isinstance(value, PlannedStage):
        return {"kind": value.kind} | _fields_as_plain(value) | {"part": value.part.part_id}
    if hasattr(value, "__dataclass_fields__"):
        return _fields_as_plain(value)
    if isinstance(value, Mapping):
        return {str(key): as_plain(item) for key, item in value.items()}
    if isinstance(value, (tuple, list, set, frozenset)):
        return [as_plain(item) for item in value]
    if isinstance(value, Enum):
        return value.value
    if hasattr(value, "isoformat"):
        return value.isoformat()
    if isinstance(value, float) and not isfinite(value):
        return None  # no such limit: JSON has no infinity
    return value


def _fields_as_plain(value: Any) -> dict[str, Any]:
    return {field.name: as_plain(getattr(value, field.name)) for field in fields(value)}
