"""How a driver file states accuracy, and how that becomes the terms that metrology works with."""

from typing import Annotated, Any, Literal

from pydantic import Discriminator, Field, Tag, model_validator

from ohmward.setup.quantities import (
    Celsius,
    Hertz,
    Model,
    Ohms,
    Radians,
    Siemens,
    Volts,
    quantity,
    wrong,
)
from ohmward.terms.accuracy import (
    AccuracyBand,
    ImpedanceAccuracy,
    LevelFactor,
    RangeAccuracy,
    ScalarAccuracy,
)

Share = Annotated[float, quantity("1", minimum=0)]
Distribution = Literal["rectangular", "normal"]


class Band(Model):
    """Basic accuracy over a rectangle of frequency and |Z|."""

    frequency: tuple[Hertz, Hertz] = Field(description="from and to", examples=[["20 Hz", "1 kHz"]])
    impedance: tuple[Ohms, Ohms] = Field(description="|Z| from and to", examples=[["1 ohm", "1k"]])
    magnitude: Share = Field(description="half-width, share of |Z|")
    phase: Radians = Field(description="half-width of the angle", examples=["0.5 mrad"])

    @model_validator(mode="after")
    def _rising(self) -> "Band":
        if not 0 <= self.frequency[0] < self.frequency[1]:
            raise wrong("frequencies that rise", list(self.frequency))
        if not 0 <= self.impedance[0] < self.impedance[1]:
            raise wrong("impedances that rise", list(self.impedance))
        return self


class LevelShare(Model):
    """What the basic accuracy is multiplied by from a level upwards."""

    from_level: Volts
    factor: float = Field(gt=0)


class ImpedanceAccuracyTable(Model):
    """The accuracy of an impedance meter; see `terms.accuracy` for the formula."""

    distribution: Distribution = Field(
        "rectangular", description="rectangular: limits; normal: a k = 2 value"
    )
    band: tuple[Band, ...] = Field(min_length=1, description="basic accuracy; no gaps inside")
    short: Ohms = Field(0.0, description="what a short leaves; adds short/|Z|")
    open: Siemens = Field(0.0, description="what an open leaves; adds |Z|·open")
    level: tuple[LevelShare, ...] = Field((), description="factors by AC level")
    integration: dict[str, float] = Field(
        default_factory=dict, description="factors by the word of the integration setting"
    )
    cable_per_metre: Share = Field(0.0, description="share added per metre of cable")
    frequency_share: Share = Field(0.0, description="half-width of the frequency itself")
    temperature: tuple[Celsius, Celsius] = Field((18.0, 28.0), description="where all this holds")
    per_kelvin: Share = Field(0.0, description="share added for each kelvin outside")

    @model_validator(mode="after")
    def _rising(self) -> "ImpedanceAccuracyTable":
        if self.temperature[0] >= self.temperature[1]:
            raise wrong("temperatures that rise", list(self.temperature))
        return self

    def as_terms(self) -> ImpedanceAccuracy:
        """The table as metrology takes it."""
        return ImpedanceAccuracy(
            distribution=self.distribution,
            bands=tuple(
                AccuracyBand(
                    frequency_min_hz=band.frequency[0],
                    frequency_max_hz=band.frequency[1],
                    impedance_min_ohm=band.impedance[0],
                    impedance_max_ohm=band.impedance[1],
                    magnitude_rel=band.magnitude,
                    phase_rad=band.phase,
                )
                for band in self.band
            ),
            short_ohm=self.short,
            open_s=self.open,
            level_factors=tuple(
                LevelFactor(level_min_v=level.from_level, factor=level.factor)
                for level in sorted(self.level, key=lambda level: -level.from_level)
            ),
            integration_factors=tuple(self.integration.items()),
            cable_factor_per_m=self.cable_per_metre,
            frequency_rel=self.frequency_share,
            temperature_min_c=self.temperature[0],
            temperature_max_c=self.temperature[1],
            temperature_factor_per_k=self.per_kelvin,
        )


class ScalarRange(Model):
    """Accuracy in one range: ±(share of the reading + offset), in the SI unit of the quantity."""

    full_scale: float = Field(gt=0)
    reading: Share = Field(description="half-width, share of the reading")
    offset: float = Field(ge=0, description="half-width that is always there")


class ScalarAccuracyTable(Model):
    """The accuracy of an instrument that reads one number."""

    distribution: Distribution = "rectangular"
    range: tuple[ScalarRange, ...] = Field(min_length=1)

    def as_terms(self) -> ScalarAccuracy:
        """The table as metrology takes it, ranges rising."""
        return ScalarAccuracy(
            distribution=self.distribution,
            ranges=tuple(
                RangeAccuracy(full_scale=one.full_scale, reading_rel=one.reading, offset=one.offset)
                for one in sorted(self.range, key=lambda one: one.full_scale)
            ),
        )


def _shape(value: Any) -> str:
    """``[[accuracy.range]]`` makes it a table of one number's accuracy."""
    scalar = isinstance(value, ScalarAccuracyTable) or (
        isinstance(value, dict) and "range" in value
    )
    return "of one number" if scalar else "of impedance"


AnyAccuracy = Annotated[
    Annotated[ImpedanceAccuracyTable, Tag("of impedance")]
    | Annotated[ScalarAccuracyTable, Tag("of one number")],
    Discriminator(_shape),
]
