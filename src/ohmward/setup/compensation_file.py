"""The compensation file: what was measured of a fixture, written by ``compensate``, read by runs.

Plain numbers in SI units, the unit in each key; impedances over ``frequency_hz``, standard
uncertainties (not expanded). A person may read it, but has nothing to write in it.
"""

from datetime import datetime
from math import isfinite
from pathlib import Path
from typing import Annotated, Any, Literal, Self

from pydantic import AfterValidator, Field, model_validator

from ohmward.errors import Problems
from ohmward.setup.quantities import Model, wrong
from ohmward.setup.toml import load


def _finite(value: float) -> float:
    if not isfinite(value):
        raise wrong("a finite number", value)
    return value


def _not_negative(value: float) -> float:
    if value < 0:
        raise wrong("no negative number", value)
    return value


def _correlation(value: float) -> float:
    if abs(value) > 1:
        raise wrong("a number from -1 to 1", value)
    return value


def _aware(value: datetime) -> datetime:
    if value.tzinfo is None:
        raise wrong("an instant with its offset from UTC", value)
    return value


Number = Annotated[float, AfterValidator(_finite)]
Uncertainty = Annotated[float, AfterValidator(_finite), AfterValidator(_not_negative)]
Correlation = Annotated[float, AfterValidator(_finite), AfterValidator(_correlation)]
Instant = Annotated[datetime, AfterValidator(_aware)]


class Values(Model):
    """Impedances over the file's frequencies with u(R), u(X) and their correlation."""

    resistance_ohm: tuple[Number, ...]
    reactance_ohm: tuple[Number, ...]
    u_resistance_ohm: tuple[Uncertainty, ...]
    u_reactance_ohm: tuple[Uncertainty, ...]
    correlation: tuple[Correlation, ...]

    @property
    def lengths(self) -> set[int]:
        """How many numbers each list has."""
        return {len(getattr(self, name)) for name in type(self).model_fields}


class Admittances(Model):
    """The open standard's own admittance over the file's frequencies."""

    conductance_s: tuple[Number, ...]
    susceptance_s: tuple[Number, ...]
    u_conductance_s: tuple[Uncertainty, ...]
    u_susceptance_s: tuple[Uncertainty, ...]

    @property
    def lengths(self) -> set[int]:
        """How many numbers each list has."""
        return {len(getattr(self, name)) for name in type(self).model_fields}


class KnownStandards(Model):
    """What the standards are, over the file's frequencies, and who says so."""

    name: str
    open: Admittances
    short: Values
    load: Values | None = None


class CompensatedPosition(Model):
    """One position: what the meter showed with each standard in it.

    ``symmetric`` says, frequency by frequency, whether the load came out right within 2u by
    open and short alone; empty without a load.
    """

    name: str
    open: Values
    short: Values
    load: Values | None = None
    symmetric: tuple[bool, ...] = ()


class CompensationFile(Model):
    """A fixture's compensation with all that says where and when it holds."""

    format: Literal[1]
    taken: Instant
    bench: str
    fixture: str
    instrument: str
    identity: str
    driver: str
    driver_sha256: str
    cable_m: Number
    simulated: bool
    own_correction: Literal["off", "unknown"]
    level_v: Number
    integration: str
    insertions: int = Field(ge=1)
    contact_resistance_ohm: Uncertainty
    contact_reactance_ohm: Uncertainty
    frequency_hz: tuple[Number, ...] = Field(min_length=1)
    standards: KnownStandards
    positions: tuple[CompensatedPosition, ...] = Field(alias="position", min_length=1)

    @model_validator(mode="after")
    def _whole(self) -> Self:
        count = len(self.frequency_hz)
        rising = all(
            low < high for low, high in zip(self.frequency_hz, self.frequency_hz[1:], strict=False)
        )
        if self.frequency_hz[0] <= 0 or not rising:
            raise wrong("rising frequencies above 0 Hz", "others")
        tables = [self.standards.open, self.standards.short, self.standards.load]
        for place in self.positions:
            tables += [place.open, place.short, place.load]
            if (place.load is None) != (self.standards.load is None):
                raise wrong("a load at every position, or at none", f"other at {place.name}")
        if any(table is not None and table.lengths != {count} for table in tables):
            raise wrong(f"{count} numbers in every list, one for each frequency", "other lengths")
        return self

    def position(self, name: str) -> CompensatedPosition | None:
        """The position of that name, or None."""
        return next((place for place in self.positions if place.name == name), None)


def load_compensation(path: Path, problems: Problems) -> CompensationFile | None:
    """Read a compensation file, or note every problem and return None."""
    return load(CompensationFile, path, problems)


def as_toml(file: CompensationFile) -> str:
    """The file's text; numbers with the fewest digits that read back to the same number."""
    plain = file.model_dump(by_alias=True, exclude_none=True)
    positions = plain.pop("position")
    lines = ["# Written by ohmward compensate. Impedances in ohm; uncertainties are standard ones."]
    _table(lines, "", plain)
    for place in positions:
        lines += ["", "[[position]]"]
        _table(lines, "position", place)
    return "\n".join(lines) + "\n"


def _table(lines: list[str], name: str, table: dict[str, Any]) -> None:
    lines += [f"{key} = {_value(one)}" for key, one in table.items() if not isinstance(one, dict)]
    for key, one in table.items():
        if isinstance(one, dict):
            inner = f"{name}.{key}" if name else key
            lines += ["", f"[{inner}]"]
            _table(lines, inner, one)


def _value(value: object) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, datetime):
        return value.isoformat()
    if isinstance(value, str):
        return _text(value)
    if isinstance(value, tuple | list):
        return f"[{', '.join(_value(one) for one in value)}]"
    return repr(value)


def _text(value: str) -> str:
    """A TOML basic string."""
    escaped = "".join(
        f"\\u{ord(letter):04X}" if ord(letter) < 32 or ord(letter) == 127 else letter
        for letter in value.replace("\\", "\\\\").replace('"', '\\"')
    )
    return f'"{escaped}"'
