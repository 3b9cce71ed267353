"""Values that only a sequence has: a bias in volts, amperes or as a share of the rating; bounds."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Annotated, Any

from pydantic import GetCoreSchemaHandler, GetJsonSchemaHandler
from pydantic.json_schema import JsonSchemaValue
from pydantic_core import CoreSchema, core_schema

from ohmward.setup.quantities import wrong
from ohmward.terms.kind import Kind
from ohmward.units.values import UnitError, clean, format_quantity, parse_quantity

WORKING = "working voltage"


@dataclass(frozen=True, slots=True)
class Bias:
    """A DC bias as written; ``unit`` is ``V``, ``A``, or ``1`` for a share of the rating.

    ``working`` stands for the part's own working voltage.
    """

    value: float
    unit: str

    def __str__(self) -> str:
        if self.unit == "working":
            return WORKING
        if self.unit == "1":
            return f"{self.value * 100:g} % of rating"
        return format_quantity(self.value, self.unit)


@dataclass(frozen=True, slots=True)
class PartValue:
    """A nominal value in F, H or ohm, which says the kind that it is meant for."""

    value: float
    unit: str

    @property
    def kind(self) -> Kind:
        """The kind whose nominal value has this unit."""
        return next(kind for kind in Kind if kind.unit == self.unit)

    def __str__(self) -> str:
        return format_quantity(self.value, self.unit)


@dataclass(frozen=True, slots=True)
class Bound:
    """One end of a limit: in the quantity's SI unit, or where ``relative`` a share of nominal."""

    value: float
    relative: bool


def read_bias(value: object, *, written: bool) -> Bias:
    """``"5 V"``, ``"10 mA"``, ``"50 % of rating"``; raises PydanticCustomError."""
    expected = f"a bias such as '5 V', '10 mA', '50 % of rating' or '{WORKING}'"
    if isinstance(value, Bias):
        return value
    if isinstance(value, int | float) and not isinstance(value, bool):
        if written and value != 0:
            raise wrong(expected, f"{value}, which has no unit", "missing-unit")
        return Bias(float(value), "V")
    if not isinstance(value, str):
        raise wrong(expected, value)
    text = clean(value)
    if text == WORKING:
        return Bias(1.0, "working")
    share = text.removesuffix("of rating").strip()
    if share.endswith("%"):
        return Bias(_read_in(share, "1", expected), "1")
    for unit in ("V", "A"):
        try:
            return Bias(parse_quantity(text, unit), unit)
        except UnitError:
            continue
    raise wrong(expected, f"'{value}'", "wrong-unit-or-value")


def read_voltage(value: object, *, written: bool) -> Bias:
    """``"400 V"``, ``"100 % of rating"``: above zero; raises PydanticCustomError."""
    return _read_one(value, "V", "a voltage such as '400 V' or '100 % of rating'")


def read_current(value: object, *, written: bool) -> Bias:
    """``"10 mA"``, ``"10 % of rating"``: above zero; raises PydanticCustomError."""
    return _read_one(value, "A", "a current such as '10 mA' or '10 % of rating'")


def _read_one(value: object, unit: str, expected: str) -> Bias:
    if isinstance(value, Bias) and value.unit in {unit, "1"}:
        return value
    if isinstance(value, int | float) and not isinstance(value, bool):
        raise wrong(expected, f"{value}, which has no unit", "missing-unit")
    if not isinstance(value, str):
        raise wrong(expected, value)
    share = clean(value).removesuffix("of rating").strip()
    unit = "1" if share.endswith("%") else unit
    found = _read_in(share if unit == "1" else value, unit, expected)
    if found <= 0:
        raise wrong(f"{expected}, above zero", f"'{value}'", "out-of-range")
    return Bias(found, unit)


def read_part_value(value: object, *, written: bool) -> PartValue:
    """``"1 nF"``, ``"10 mH"``, ``"4.7 kohm"``: above zero; raises PydanticCustomError."""
    expected = "a value such as '1 nF', '10 mH' or '4.7 kohm'"
    if isinstance(value, PartValue):
        return value
    if not isinstance(value, str):
        raise wrong(expected, value)
    for kind in Kind:
        try:
            found = parse_quantity(value, kind.unit)
        except UnitError:
            continue
        if found > 0:
            return PartValue(found, kind.unit)
    raise wrong(expected, f"'{value}'", "wrong-unit-or-value")


def read_bound(value: object, unit: str) -> Bound:
    """One end of a limit on a quantity of this unit; raises PydanticCustomError.

    A percentage of a quantity that is itself a ratio (D, a change of C) is that ratio; of any
    other quantity it is a share of nominal, and must carry its sign: ``"95 %"`` would be read
    as 95 % of nominal by one person and as 95 % above it by the next.
    """
    if isinstance(value, Bound):
        return value
    if isinstance(value, int | float) and not isinstance(value, bool):
        if unit != "1" and value != 0:
            raise wrong(_bound_expected(unit), f"{value}, which has no unit", "missing-unit")
        return Bound(float(value), relative=False)
    if not isinstance(value, str):
        raise wrong(_bound_expected(unit), value)
    text = clean(value)
    if unit != "1" and text.endswith("%"):
        if not text.startswith(("+", "-")):
            raise wrong("a percentage with its sign, such as '-5 %' or '+5 %'", f"'{value}'")
        return Bound(_read_in(text, "1", _bound_expected(unit)), relative=True)
    return Bound(_read_in(text, unit, _bound_expected(unit)), relative=False)


def _bound_expected(unit: str) -> str:
    return {
        "1": "a ratio such as 0.005 or '0.5 %'",
        "F": "a bound such as '90 nF' or '-5 %'",
        "H": "a bound such as '9 mH' or '-5 %'",
        "ohm": "a bound such as '47 mohm' or '-5 %'",
        "Hz": "a bound such as '1 MHz'",
        "rad": "a bound such as '-1.55 rad' or '-89 deg'",
        "A": "a bound such as '15 nA'",
        "V": "a bound such as '400 V'",
        "s": "a bound such as '1000 s'",
    }.get(unit, f"a bound in {unit}")


def _read_in(text: str, unit: str, expected: str) -> float:
    try:
        return parse_quantity(text, unit)
    except UnitError as error:
        raise wrong(expected, error.found, "wrong-unit-or-value") from None


@dataclass(frozen=True, slots=True)
class ReadBy:
    """Annotation: the field is what ``read`` makes of the text; the schema shows examples."""

    read: Callable[..., Any]
    description: str
    examples: tuple[str, ...]

    def __get_pydantic_core_schema__(
        self, source: Any, handler: GetCoreSchemaHandler
    ) -> CoreSchema:
        def read(value: object, info: core_schema.ValidationInfo) -> Any:
            return self.read(value, written=bool((info.context or {}).get("written")))

        return core_schema.with_info_plain_validator_function(read)

    def __get_pydantic_json_schema__(
        self, schema: CoreSchema, handler: GetJsonSchemaHandler
    ) -> JsonSchemaValue:
        return {
            "type": "string",
            "pattern": "[0-9]",
            "description": self.description,
            "examples": list(self.examples),
        }


BiasSetting = Annotated[
    Bias,
    ReadBy(
        read_bias,
        "a DC bias: a voltage, a current, a share of the part's own rating, or its working voltage",
        ("0 V", "10 mA", "50 % of rating", WORKING),
    ),
]
NominalValue = Annotated[
    PartValue,
    ReadBy(read_part_value, "a nominal value in F, H or ohm", ("1 nF", "10 mH", "4.7 kohm")),
]
VoltageSetting = Annotated[
    Bias,
    ReadBy(
        read_voltage,
        "a direct voltage, or a share of the part's own rating",
        ("400 V", "100 % of rating"),
    ),
]
CurrentSetting = Annotated[
    Bias,
    ReadBy(
        read_current,
        "a direct current, or a share of the part's own rating",
        ("10 mA", "10 % of rating"),
    ),
]
