"""Values with units as pydantic types: ``frequency_hz: Hertz = Field(alias="frequency")``.

A file says ``frequency = "1 kHz"``, the model holds 1000.0. Bounds are given to ``quantity``
and reported in the unit: ``Annotated[float, quantity("V", above=0)]``. Python code may make a
model from bare numbers in SI base units; what comes from a file (``WRITTEN``) carries units.
"""

from dataclasses import dataclass
from typing import Annotated, Any, TypeVar

from pydantic import (
    BaseModel,
    ConfigDict,
    Field,
    GetCoreSchemaHandler,
    GetJsonSchemaHandler,
)
from pydantic.json_schema import JsonSchemaValue
from pydantic_core import CoreSchema, PydanticCustomError, core_schema

from ohmward.units.table import UNITS
from ohmward.units.values import UnitError, format_quantity, parse_quantity

WRITTEN = {"written": True}  # the validation context of what a person wrote
BARE_UNITS = frozenset({"1"})  # a number without a unit is whole only here
NUMBER_PATTERN = "[0-9]"


def wrong(expected: str, found: object, id: str = "wrong-value") -> PydanticCustomError:  # noqa: A002
    """The error that a validator raises; ``toml.validate`` makes it a Problem word by word."""
    context = {"id": id, "expected": expected, "found": found}
    return PydanticCustomError("ohmward", "expected {expected}, found {found}", context)


class Model(BaseModel):
    """Base of every model here: frozen, by its names or TOML keys, unknown keys refused."""

    model_config = ConfigDict(
        extra="forbid", frozen=True, validate_by_name=True, validate_by_alias=True
    )


@dataclass(frozen=True, slots=True)
class Quantity:
    """Annotation that turns ``"1 kHz"`` into a float of SI base units, within bounds."""

    unit: str
    minimum: float | None = None
    above: float | None = None
    maximum: float | None = None

    def read(self, value: object, *, written: bool = True) -> float:
        """The value in SI base units; raises PydanticCustomError with expected and found."""
        if isinstance(value, bool) or not isinstance(value, str | float | int):
            raise wrong(self._expected(), value)
        if written and not isinstance(value, str) and not self._may_be_bare(value):
            raise wrong(self._expected(), f"{value}, which has no unit", "missing-unit")
        try:
            number = parse_quantity(value, self.unit)
        except UnitError as error:
            raise wrong(error.expected, error.found, "wrong-unit-or-value") from None
        except OverflowError:
            raise wrong(self._expected(), value) from None
        if not self._within(number):
            raise wrong(self._expected(), value, "out-of-range")
        return number

    def _may_be_bare(self, value: float) -> bool:
        return self.unit in BARE_UNITS or (value == 0 and self.unit != "degC")

    def _within(self, number: float) -> bool:
        return (
            (self.minimum is None or number >= self.minimum)
            and (self.above is None or number > self.above)
            and (self.maximum is None or number <= self.maximum)
        )

    def _expected(self) -> str:
        kind = UNITS[self.unit]
        bounds = [
            f"{word} {format_quantity(bound, self.unit)}"
            for word, bound in (
                ("at least", self.minimum),
                ("above", self.above),
                ("at most", self.maximum),
            )
            if bound is not None
        ]
        return " ".join([f"{kind.thing} such as '{kind.example}'", " and ".join(bounds)]).strip()

    def __get_pydantic_core_schema__(
        self, source: Any, handler: GetCoreSchemaHandler
    ) -> CoreSchema:
        def read(value: object, info: core_schema.ValidationInfo) -> float:
            return self.read(value, written=bool((info.context or {}).get("written")))

        return core_schema.with_info_plain_validator_function(read)

    def __get_pydantic_json_schema__(
        self, schema: CoreSchema, handler: GetJsonSchemaHandler
    ) -> JsonSchemaValue:
        kind = UNITS[self.unit]
        text = {
            "type": "string",
            "pattern": NUMBER_PATTERN,
            "description": f"{kind.thing} with its unit",
            "examples": [kind.example],
        }
        if self.unit in BARE_UNITS:
            return {"anyOf": [{"type": "number"}, text]}
        if self.unit == "degC":
            return text
        return {"anyOf": [text, {"const": 0}]}


def quantity(
    unit: str,
    *,
    minimum: float | None = None,
    above: float | None = None,
    maximum: float | None = None,
) -> Quantity:
    """The annotation for a value in ``unit``: ``Annotated[float, quantity("V", above=0)]``."""
    return Quantity(unit, minimum, above, maximum)


T = TypeVar("T")


class _Listed:
    """Annotation that takes one value for a list of one."""

    def __get_pydantic_core_schema__(
        self, source: Any, handler: GetCoreSchemaHandler
    ) -> CoreSchema:
        return core_schema.no_info_before_validator_function(
            lambda value: value if isinstance(value, list | tuple) else [value], handler(source)
        )

    def __get_pydantic_json_schema__(
        self, schema: CoreSchema, handler: GetJsonSchemaHandler
    ) -> JsonSchemaValue:
        many = handler(schema)
        return {"anyOf": [many["items"], many]}


# OneOrMany[Hertz] is a list, or one value for a list of one; held as a tuple.
OneOrMany = Annotated[tuple[T, ...], Field(min_length=1), _Listed()]

Volts = Annotated[float, quantity("V")]
Amperes = Annotated[float, quantity("A")]
Ohms = Annotated[float, quantity("ohm")]
Farads = Annotated[float, quantity("F")]
Henries = Annotated[float, quantity("H")]
Hertz = Annotated[float, quantity("Hz")]
Seconds = Annotated[float, quantity("s", minimum=0)]
Celsius = Annotated[float, quantity("degC")]
Kelvins = Annotated[float, quantity("K")]
Percent = Annotated[float, quantity("pct")]
Fraction = Annotated[float, quantity("1")]
Watts = Annotated[float, quantity("W")]
Joules = Annotated[float, quantity("J")]
Coulombs = Annotated[float, quantity("C")]
Metres = Annotated[float, quantity("m", minimum=0)]
Siemens = Annotated[float, quantity("S")]
Radians = Annotated[float, quantity("rad")]
VoltsPerSecond = Annotated[float, quantity("V/s")]
PositiveVolts = Annotated[float, quantity("V", above=0)]
PositiveAmperes = Annotated[float, quantity("A", above=0)]
PositiveOhms = Annotated[float, quantity("ohm", above=0)]
PositiveFarads = Annotated[float, quantity("F", above=0)]
PositiveHertz = Annotated[float, quantity("Hz", above=0)]
PositiveSeconds = Annotated[float, quantity("s", above=0)]
PositiveFraction = Annotated[float, quantity("1", above=0)]
