"""The stages under direct voltage or current: leakage, insulation, reform, proof and the like.

What holds of each alone is said by its types; how its keys fit each other is in `direct_check`.
"""

from typing import Annotated, ClassVar, Literal

from pydantic import Field

from ohmward.sequence.tables import Share, StageTable, Times
from ohmward.sequence.values import CurrentSetting, VoltageSetting
from ohmward.sequence.voltages import VOLTAGE_RULES
from ohmward.setup.quantities import (
    OneOrMany,
    PositiveAmperes,
    PositiveSeconds,
    Seconds,
    quantity,
)
from ohmward.terms.kind import Kind
from ohmward.terms.role import Role

PositiveVoltsPerSecond = Annotated[float, quantity("V/s", above=0)]
PositiveWatts = Annotated[float, quantity("W", above=0)]
RatingTimes = Annotated[float, quantity("1", above=0, maximum=4)]

DIRECT_ROLES = frozenset(
    {Role.HIGH_VOLTAGE_SUPPLY, Role.CURRENT_METER, Role.VOLTMETER, Role.SCANNER}
)
READ_AT_S = {"absorption_ratio": (30.0, 60.0), "polarization_index": (60.0, 600.0)}
"""Ratios of two readings, and the times at which those must be taken (s)."""

_OF_TIME = frozenset({"leakage_a", "insulation_ohm", "insulation_time_s"})


class DirectStage(StageTable):
    """What every stage has that drives parts through the bench's high-voltage path."""

    roles: ClassVar[frozenset[Role]] = DIRECT_ROLES
    energises: ClassVar[bool] = True
    for_kinds: ClassVar[frozenset[Kind]] = frozenset({Kind.CAPACITOR})
    default_rule: ClassVar[str] = ""  # what decides the voltage where the stage says nothing

    ramp: PositiveVoltsPerSecond = Field(
        100.0, description="how fast at most; slower where the supply's current asks for it"
    )
    ramp_time: PositiveSeconds | None = Field(
        None,
        description="how long the way up may take, instead of 'ramp': slower for a lower voltage",
        examples=["60 s"],
    )
    interval: PositiveSeconds = Field(5.0, description="from one reading to the next")
    current_limit: PositiveAmperes | None = Field(
        None, description="a part that draws more is stopped", examples=["5 mA"]
    )
    power_limit: PositiveWatts | None = Field(
        None, description="a part that takes more is stopped", examples=["1 W"]
    )

    def ramp_to(self, voltage_v: float) -> float:
        """How fast a part is asked to go up to a voltage (V/s)."""
        return self.ramp if self.ramp_time is None else voltage_v / self.ramp_time


class OneVoltageStage(DirectStage):
    """A stage at one voltage: as written, or by a named rule."""

    voltage: VoltageSetting | None = Field(None, description="voltage on the part")
    rule: str | None = Field(
        None,
        description="a named rule that knows the voltage, instead of 'voltage'",
        json_schema_extra={"enum": [*sorted(VOLTAGE_RULES)]},
    )

    @property
    def voltage_rule(self) -> str:
        """The rule that decides the voltage; '' where it is written."""
        return "" if self.voltage is not None else self.rule or self.default_rule


class LeakageStage(OneVoltageStage):
    """Leakage under voltage: charged, soaked, read at the standard's time."""

    measures: ClassVar[frozenset[str]] = _OF_TIME | {"absorption_ratio", "polarization_index"}

    kind: Literal["leakage"]
    soak: PositiveSeconds = Field(
        description="how long the part has its voltage, counted from within 1 % of it",
        examples=["5 min"],
    )
    read_at: OneOrMany[PositiveSeconds] = Field(
        default_factory=tuple,
        description="when readings decide, counted likewise; the end of the soak if left out",
        examples=["2 min"],
    )

    @property
    def read_at_s(self) -> tuple[float, ...]:
        """When readings decide."""
        return self.read_at or (self.soak,)


class InsulationStage(OneVoltageStage):
    """Insulation resistance at the standard's voltage by rating, after 60 s."""

    default_rule: ClassVar[str] = "insulation-by-rating"
    measures: ClassVar[frozenset[str]] = LeakageStage.measures

    kind: Literal["insulation"]
    read_at: OneOrMany[PositiveSeconds] = Field(
        (60.0,), description="when readings decide, counted from within 1 % of the voltage"
    )

    @property
    def read_at_s(self) -> tuple[float, ...]:
        """When readings decide."""
        return self.read_at


class ReformStage(DirectStage):
    """Forms an electrolytic anew: from voltage to voltage, as its leakage falls."""

    measures: ClassVar[frozenset[str]] = frozenset({"reformed_v"})

    kind: Literal["reform"]
    voltages: OneOrMany[VoltageSetting] = Field(
        description="one after another, rising", examples=[["50 % of rating", "100 % of rating"]]
    )
    hold: PositiveSeconds = Field(description="at each voltage at least", examples=["5 min"])
    leakage_rule: str = Field(
        "leakage-jan-c-62",
        description="the next voltage follows once the leakage is below this rule's limit",
        json_schema_extra={
            "enum": [
                "leakage-cv",
                "leakage-general-purpose",
                "leakage-iec-60384-4",
                "leakage-jan-c-62",
            ]
        },
    )
    times: Times = Field(1.0, description="multiplies what that rule allows")
    rise: Share = Field(
        0.2, description="it stops when the leakage is this share above the least at its voltage"
    )
    budget: PositiveSeconds = Field(
        description="for all voltages of one part; then it stops", examples=["1 h"]
    )
    rest: Seconds = Field(0.0, description="discharged and shorted afterwards", examples=["10 min"])


class ProofStage(OneVoltageStage):
    """Voltage proof: ramp, dwell; only a breakdown that stays decides."""

    measures: ClassVar[frozenset[str]] = frozenset({"withstood_v"})

    kind: Literal["proof"]
    dwell: PositiveSeconds = Field(description="how long it is held", examples=["1 min"])
    attempts: int = Field(
        2, ge=1, le=10, description="a metallised part may clear a weak spot: how often it may try"
    )
    rating_allowed: RatingTimes | None = Field(
        None,
        description="times its rating to which a part may go where 'voltage' is written",
        examples=[1.5],
    )


class AbsorptionStage(OneVoltageStage):
    """Dielectric absorption: charge, short, and read what comes back."""

    measures: ClassVar[frozenset[str]] = frozenset({"absorption_rel"})

    kind: Literal["absorption"]
    charge: PositiveSeconds = Field(900.0, description="time under voltage")
    short: PositiveSeconds = Field(10.0, description="how long the part is shorted")
    read_at: OneOrMany[PositiveSeconds] = Field(
        (900.0,), description="moments at which the voltmeter is connected, from the short's end"
    )

    @property
    def read_at_s(self) -> tuple[float, ...]:
        """When readings decide."""
        return self.read_at


class ResistanceStage(DirectStage):
    """Winding and low resistance: a direct current and the voltage that it makes."""

    for_kinds: ClassVar[frozenset[Kind]] = frozenset({Kind.INDUCTOR, Kind.RESISTOR})
    measures: ClassVar[frozenset[str]] = frozenset({"winding_ohm", "direct_ohm"})

    kind: Literal["resistance"]
    current: CurrentSetting = Field(description="current through the part", examples=["5 mA"])
    settle: Seconds = Field(1.0, description="wait before the first reading")
    repeats: int = Field(5, ge=1, le=1000, description="readings of voltage and current")
