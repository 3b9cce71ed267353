"""The standards file: what an open, a short and a load are, as their certificate or maker says."""

from pathlib import Path
from typing import Annotated, Literal

from pydantic import Field

from ohmward.errors import Problems
from ohmward.setup.quantities import Model, quantity
from ohmward.setup.toml import load

Spread = Annotated[float, quantity("1", minimum=0, maximum=1)]
OhmsOrMore = Annotated[float, quantity("ohm", minimum=0)]
AnyHenries = Annotated[float, quantity("H")]
HenriesOrMore = Annotated[float, quantity("H", minimum=0)]
FaradsOrMore = Annotated[float, quantity("F", minimum=0)]
LoadOhms = Annotated[float, quantity("ohm", above=0)]


class OpenStandard(Model):
    """An open: the capacitance that it has by itself. U are expanded uncertainties, k = 2."""

    capacitance_f: FaradsOrMore = Field(0.0, alias="capacitance", examples=["20 fF"])
    u_capacitance_f: FaradsOrMore = Field(
        0.0, alias="capacitance_uncertainty", description="U, k = 2", examples=["10 fF"]
    )


class ShortStandard(Model):
    """A short: the resistance and inductance that it has by itself."""

    resistance_ohm: OhmsOrMore = Field(0.0, alias="resistance", examples=["0.5 mohm"])
    u_resistance_ohm: OhmsOrMore = Field(
        0.0, alias="resistance_uncertainty", description="U, k = 2", examples=["0.5 mohm"]
    )
    inductance_h: HenriesOrMore = Field(0.0, alias="inductance", examples=["1 nH"])
    u_inductance_h: HenriesOrMore = Field(
        0.0, alias="inductance_uncertainty", description="U, k = 2", examples=["1 nH"]
    )


class LoadStandard(Model):
    """A load: a resistor with the inductance that its reactance makes, negative if capacitive."""

    resistance_ohm: LoadOhms = Field(alias="resistance", examples=["100 ohm"])
    u_resistance_ohm: OhmsOrMore = Field(
        alias="resistance_uncertainty", description="U, k = 2", examples=["20 mohm"]
    )
    inductance_h: AnyHenries = Field(0.0, alias="inductance", examples=["5 nH"])
    u_inductance_h: HenriesOrMore = Field(
        alias="inductance_uncertainty", description="U, k = 2", examples=["5 nH"]
    )


class Standards(Model):
    """A set of standards; without a load only the symmetric form of compensation is possible."""

    format: Literal[1]
    name: str = Field(min_length=1, description="what the set is called, with its certificate")
    open: OpenStandard = OpenStandard()
    short: ShortStandard = ShortStandard()
    load: LoadStandard | None = None


def load_standards(path: Path, problems: Problems) -> Standards | None:
    """Read a standards file, or note every problem and return None."""
    return load(Standards, path, problems)
