"""The tables of a sequence file; what they hold is checked here, how they fit in `check`."""

from math import floor, log10
from typing import Annotated, Any, ClassVar, Literal, Self

from pydantic import (
    Discriminator,
    Field,
    Tag,
    ValidationInfo,
    field_validator,
    model_validator,
)

from ohmward.sequence.direct import (
    AbsorptionStage,
    InsulationStage,
    LeakageStage,
    ProofStage,
    ReformStage,
    ResistanceStage,
)
from ohmward.sequence.rule_book import RULES
from ohmward.sequence.rules import same_frequency
from ohmward.sequence.tables import PartFilter, Share, StageTable, Table, Times
from ohmward.sequence.values import Bias, BiasSetting, Bound, VoltageSetting, read_bound
from ohmward.setup.quantities import (
    Celsius,
    Model,
    OneOrMany,
    PositiveHertz,
    PositiveOhms,
    PositiveSeconds,
    PositiveVolts,
    Seconds,
    quantity,
    wrong,
)
from ohmward.setup.schema import register
from ohmward.setup.toml import one_of
from ohmward.terms.kind import Kind
from ohmward.terms.quantity import QUANTITIES
from ohmward.terms.role import Role
from ohmward.units.values import format_quantity

Coverage = Annotated[float, quantity("1", above=0, maximum=10)]
Guard = Annotated[float, quantity("1", minimum=0, maximum=10)]
MOST_POINTS = 10_000  # of one range
SIGNIFICANT_DIGITS = 6  # of the frequencies of a range: more than any meter sets


class FrequencyRange(Model):
    """Frequencies evenly spaced on a logarithmic scale, both ends included."""

    start: PositiveHertz = Field(alias="from", description="first frequency")
    stop: PositiveHertz = Field(alias="to", description="last frequency")
    per_decade: int = Field(ge=1, le=1000, description="points per decade", examples=[10])
    clip: bool = Field(
        False, description="leave out what the meter cannot reach, instead of refusing"
    )

    @model_validator(mode="after")
    def _rising(self) -> Self:
        if self.start >= self.stop:
            ends = (format_quantity(self.start, "Hz"), format_quantity(self.stop, "Hz"))
            raise wrong("'from' below 'to'", f"from {ends[0]} to {ends[1]}", "range-backwards")
        if self._steps() > MOST_POINTS:
            expected = f"at most {MOST_POINTS} points"
            raise wrong(expected, f"about {self._steps():.0f}", "too-many-points")
        return self

    def _steps(self) -> float:
        return (log10(self.stop) - log10(self.start)) * self.per_decade

    def unroll(self) -> tuple[float, ...]:
        """``from`` · 10^(i/per_decade) to six digits as far as ``to``, which is always last."""
        count = floor(self._steps() + 1e-9)
        grid = [_rounded(self.start * 10 ** (i / self.per_decade)) for i in range(count + 1)]
        if not same_frequency(grid[-1], self.stop):
            grid.append(self.stop)
        return tuple(grid)


def _rounded(frequency_hz: float) -> float:
    return float(f"{frequency_hz:.{SIGNIFICANT_DIGITS - 1}e}")


def _shape(value: object) -> str:
    """A table is a range, anything else a list or one value; in brackets: not a key of the file."""
    return "[range]" if isinstance(value, dict | FrequencyRange) else "[list]"


Frequencies = Annotated[
    Annotated[FrequencyRange, Tag("[range]")] | Annotated[OneOrMany[PositiveHertz], Tag("[list]")],
    Discriminator(_shape),
]


class SettleRule(Model):
    """A point is read once its last few readings agree."""

    tolerance: Share = Field(description="share by which they may differ", examples=["0.1 %"])
    readings: int = Field(3, ge=2, le=100, description="how many must agree")
    at_most: Seconds = Field(description="then the point is unsettled", examples=["10 s"])


class SweepStage(StageTable):
    """Impedance over frequency × level × bias: bias changes least often, frequency most."""

    roles: ClassVar[frozenset[Role]] = frozenset({Role.IMPEDANCE_METER})
    measures: ClassVar[frozenset[str]] = frozenset(
        name for name, quantity in QUANTITIES.items() if quantity.per in {"point", "part"}
    )

    kind: Literal["sweep"]
    frequency: Frequencies = Field(description="a frequency, a list, or { from, to, per_decade }")
    level: OneOrMany[PositiveVolts] = Field(description="AC level, rms", examples=["1 V"])
    bias: OneOrMany[BiasSetting] = Field(
        default_factory=lambda: (Bias(0.0, "V"),),
        description="DC bias: voltages, currents or shares of the rating; none if left out",
    )
    repeats: int = Field(1, ge=1, le=10_000_000, description="readings kept at each point")
    interval: Seconds = Field(
        0.0, description="from one repeat to the next; 0 for as fast as the meter goes"
    )
    dwell: Seconds = Field(0.0, description="wait at each point before it is read")
    settle: SettleRule | None = Field(None, description="read only once readings agree")
    closure: bool = Field(False, description="back to the first point at the end: shows drift")
    integration: str = Field("medium", description="a word of the driver: short, medium, long")
    pair: str | None = Field(
        None, description="what the meter sends; the driver's choice if left out", examples=["R-X"]
    )
    range: PositiveOhms | None = Field(
        None, description="range to hold; left out, the meter ranges by itself", examples=["1 kohm"]
    )

    @property
    def frequencies_hz(self) -> tuple[float, ...]:
        """The frequencies as asked for, in order."""
        if isinstance(self.frequency, FrequencyRange):
            return self.frequency.unroll()
        return self.frequency


# Every kind of stage, by its word in the file.
STAGE_TABLES: dict[str, type[StageTable]] = {
    "sweep": SweepStage,
    "leakage": LeakageStage,
    "insulation": InsulationStage,
    "reform": ReformStage,
    "proof": ProofStage,
    "absorption": AbsorptionStage,
    "resistance": ResistanceStage,
}
AnyStage = Annotated[
    SweepStage
    | LeakageStage
    | InsulationStage
    | ReformStage
    | ProofStage
    | AbsorptionStage
    | ResistanceStage,
    Field(discriminator="kind"),
]


class Condition(Model):
    """Where a limit holds; what is left out holds at every value that the stage measures."""

    frequency: PositiveHertz | None = Field(None, examples=["1 kHz"])
    level: PositiveVolts | None = Field(None, examples=["1 V"])
    bias: BiasSetting | None = Field(None, examples=["0 V"])
    reference_temperature: Celsius | None = Field(
        None,
        description="temperature that the value is carried to by its dielectric's coefficient",
        examples=["20 degC"],
    )
    reference_age: PositiveSeconds | None = Field(
        None,
        description="time since the last heating that a class 2 value is carried to",
        examples=["1000 h"],
    )
    voltage: VoltageSetting | None = Field(
        None, description="direct voltage under which it is measured", examples=["100 % of rating"]
    )
    since_voltage: PositiveSeconds | None = Field(
        None, description="time since the part had it", examples=["60 s"]
    )


class LimitTable(Table):
    """One limit: bounds on a quantity, or a named rule that knows them."""

    stage: OneOrMany[str] = Field(description="names of the stages that measure it")
    quantity: str = Field(
        description="a column of the tables", json_schema_extra={"enum": [*sorted(QUANTITIES)]}
    )
    at: Condition = Field(default_factory=Condition, description="where it holds")
    minimum: Bound | None = Field(
        None,
        alias="min",
        description="least: a value with unit, or a share of nominal with its sign",
        examples=["90 nF", "-5 %"],
    )
    maximum: Bound | None = Field(
        None,
        alias="max",
        description="greatest: a value with unit, or a share of nominal with its sign",
        examples=["47 mohm", "+5 %"],
    )
    rule: str | None = Field(
        None,
        description="a named rule instead of min and max",
        json_schema_extra={"enum": [*sorted(RULES)]},
    )
    times: Times = Field(1.0, description="multiplies what the rule allows", examples=[1.5])
    source: str = Field(min_length=1, description="which standard or practice says so")
    parts: PartFilter = Field(default_factory=PartFilter, description="which parts it judges")

    @field_validator("quantity")
    @classmethod
    def _known(cls, value: str) -> str:
        if value not in QUANTITIES:
            raise wrong(one_of(value, list(QUANTITIES)), value, "limit-unknown-quantity")
        return value

    @field_validator("minimum", "maximum", mode="before", json_schema_input_type=str | float)
    @classmethod
    def _in_unit(cls, value: Any, info: ValidationInfo) -> Any:
        name = info.data.get("quantity")
        return None if name is None else read_bound(value, QUANTITIES[name].unit)


class DecisionTable(Model):
    """How sure a decision must be: JCGM 106 with a guard band of guard × U, U = coverage × u."""

    coverage: Coverage = Field(2.0, description="coverage factor k")
    guard: Guard = Field(1.0, description="guard band as a multiple of U; 1 as in ILAC-G8")


class CompensationTable(Model):
    """What must be known of the fixture before this sequence may be run."""

    standards: OneOrMany[Literal["open", "short", "load"]] = Field(
        description="open and short, which suffice for a symmetric fixture, or load as well",
        examples=[["open", "short", "load"]],
    )
    at_most: PositiveSeconds | None = Field(
        None, description="how old it may be; any age if left out", examples=["24 h"]
    )

    @field_validator("standards")
    @classmethod
    def _both(cls, value: tuple[str, ...]) -> tuple[str, ...]:
        if not {"open", "short"} <= set(value):
            raise wrong("open and short at least", ", ".join(value))
        return value


class SequenceHead(Model):
    """A sequence file without its stages and limits."""

    format: Literal[1]
    name: str = Field(min_length=1, max_length=80, description="what this sequence is called")
    purpose: str = Field(min_length=1, description="what it is for, in a sentence")
    follows: str = Field(
        min_length=1, description="whose conditions it follows, and what is from memory"
    )
    kinds: OneOrMany[Kind] = Field(description="kinds of part that it is for")
    rating_allowed: Share = Field(
        1.0, description="share of its rating to which a part may be stressed", examples=["80 %"]
    )
    decision: DecisionTable = Field(default_factory=DecisionTable)
    compensation: CompensationTable | None = Field(
        None, description="compensation of the fixture that a run must have"
    )


class Sequence(SequenceHead):
    """A sequence file."""

    stage: Annotated[tuple[AnyStage, ...], Field(min_length=1)]
    limit: tuple[LimitTable, ...] = Field(default_factory=tuple)


register("sequence", lambda: Sequence)
