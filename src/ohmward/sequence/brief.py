"""The brief: a sequence unrolled for these parts on this bench, as data and nothing else."""

from collections.abc import Mapping
from dataclasses import dataclass, fields
from enum import Enum
from typing import Any, ClassVar

from ohmward.terms.condition import Point
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part


@dataclass(frozen=True, kw_only=True, slots=True)
class Settle:
    """A point is settled when its last ``readings`` readings agree within ``tolerance_rel``.

    The tolerance is a fraction of their mean; after ``at_most_s`` the point is unsettled.
    """

    tolerance_rel: float
    readings: int
    at_most_s: float


@dataclass(frozen=True, kw_only=True, slots=True)
class PlannedStage:
    """One stage for one part; ``number`` counts all planned stages of the run from 1."""

    kind: ClassVar[str]

    number: int
    stage: str
    part: Part
    duration_s: float


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
    quantity's SI unit; None where the driver states no accuracy there.
    """

    limit: Limit
    frequency_hz: float
    level_v: float
    expanded_uncertainty: float | None
    reason: str


@dataclass(frozen=True, kw_only=True, slots=True)
class Brief:
    """What will be done, how long it takes, and what it cannot tell.

    ``parts`` are those that are measured; ``warnings`` name the others. ``stages`` are in order
    of execution: part by part, each part's stages in their order.
    ``compensation`` says what corrects the fixture, "" where nothing does.
    ``energising`` names the stages that put a hazardous voltage on a part. ``hash`` is the
    SHA-256 of everything that changes what is done; ``hashes`` are those of each input, so
    that a later difference can be named.
    """

    name: str
    purpose: str
    follows: str
    bench: str
    parts: tuple[Part, ...]
    stages: tuple[PlannedSweep, ...]
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

    @property
    def readings(self) -> int:
        """How many readings are kept of the whole run."""
        return sum(stage.readings for stage in self.stages)

    def as_dict(self) -> dict[str, Any]:
        """The brief in types that JSON has, for ``--json``; names are the fields' own."""
        plain = {field.name: as_plain(getattr(self, field.name)) for field in fields(self)}
        return {**plain, "readings": self.readings}


def as_plain(value: Any) -> Any:
    """A model, a mapping or a sequence of them, in types that JSON has; missing is null."""
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
    return value


def _fields_as_plain(value: Any) -> dict[str, Any]:
    return {field.name: as_plain(getattr(value, field.name)) for field in fields(value)}
