"""How a driver file describes a reply: its fields by position, by label or by place in a frame."""

from typing import Annotated, Any, Literal

from pydantic import BeforeValidator, Field, model_validator

from ohmward.setup.quantities import Model, wrong

FieldKind = Literal["number", "switch", "word", "text", "channels", "status", "flags", "ignored"]
NumberForm = Literal["any", "NR1", "NR2", "NR3"]
StatusWord = Literal["ok", "overload", "unbalanced", "unsettled", "refused", "malformed"]


class NumberStyle(Model):
    """How numbers are written; a key left out takes the driver's ``[numbers]``."""

    form: NumberForm | None = Field(
        None,
        description="NR1 whole, NR2 with a point, NR3 with point and exponent, any of them",
        examples=["NR3"],
    )
    width: int | None = Field(
        None, ge=1, le=40, description="exact count of characters, when it is always the same"
    )
    decimals: int | None = Field(
        None, ge=0, le=20, description="digits after the point in numbers that are sent"
    )
    plus: bool | None = Field(
        None, description="whether a number that is not negative always has its plus"
    )


class ReplyField(NumberStyle):
    """One field of a reply."""

    name: str = Field(
        pattern=r"^[a-z][a-z0-9_]*$", description="what it is", examples=["first", "status"]
    )
    kind: FieldKind = Field("number", description="what kind of thing is sent")
    label: str = Field("", description="text in front of the value in replies by label: 'C='")
    suffix: str = Field("", description="text behind the number that must be there: 'V'")
    suffixes: dict[str, float] = Field(
        default_factory=dict,
        description="texts of which one stands behind the number, each with its factor",
        examples=[{"nF": 1e-9, "uF": 1e-6}],
    )
    factor: float = Field(1.0, description="multiplies the number sent, to make it SI")
    minimum: float | None = Field(None, description="a smaller number cannot be (SI unit)")
    maximum: float | None = Field(None, description="a larger number cannot be (SI unit)")
    words: dict[str, str] = Field(
        default_factory=dict,
        description="our word = the instrument's word; capitals give its short form: 'SHORt'",
    )
    codes: dict[str, StatusWord] = Field(
        default_factory=dict,
        description="for a status: code as sent = what it means; instead of the driver's [status]",
    )
    flags: dict[str, int] = Field(
        default_factory=dict,
        description="name = bit, for a whole number whose set bits each mean something",
        examples=[{"current_limit": 0, "tripped": 1}],
    )
    repeats: bool = Field(
        False, description="this field takes all that is left of the reply; the last one only"
    )
    at: int | None = Field(None, ge=0, le=4096, description="offset in the frame, in bytes")
    length: int | None = Field(None, ge=1, le=32, description="length in the frame, in bytes")
    coding: Literal["unsigned", "signed", "float", "nibbles", "text"] = Field(
        "unsigned", description="how the bytes of a frame are a number; nibbles are digits"
    )
    endian: Literal["big", "little"] = Field("big", description="which byte comes first")
    bits: tuple[int, int] | None = Field(
        None, description="first and last bit that are meant, 0 is the lowest of the number"
    )
    numbers: dict[str, float] = Field(
        default_factory=dict, description="the number (SI unit) that each code stands for"
    )
    negative_by: str = Field(
        "", description="name of the switch field that says that this number is negative"
    )
    scaled_by: str = Field(
        "", description="name of the field whose 'factors' say what this one is multiplied by"
    )
    factors: dict[str, float] = Field(
        default_factory=dict, description="for a field that scales others: code = factor"
    )

    @model_validator(mode="after")
    def _consistent(self) -> "ReplyField":
        if self.kind == "word" and not self.words:
            raise wrong("'words' for a field of kind 'word'", "none")
        if (self.kind == "flags") != bool(self.flags):
            raise wrong("kind 'flags' and 'flags' together", "one of them")
        if self.suffix and self.suffixes:
            raise wrong("either 'suffix' or 'suffixes'", "both")
        if self.kind == "number" and self.factors:
            raise wrong("kind 'ignored' for a field that only scales others", self.kind)
        if self.bits is not None and not 0 <= self.bits[0] <= self.bits[1] <= 255:
            raise wrong("the lowest and the highest bit, in this order", list(self.bits))
        if self.minimum is not None and self.maximum is not None and self.minimum > self.maximum:
            raise wrong(f"a minimum of at most {self.maximum}", self.minimum)
        return self


def _field_from_name(value: Any) -> Any:
    return {"name": value} if isinstance(value, str) else value


AnyField = Annotated[
    ReplyField,
    BeforeValidator(_field_from_name, json_schema_input_type=str | ReplyField),
]


class Reply(Model):
    """What an instrument answers: fields, and how they are told apart."""

    fields: tuple[AnyField, ...] = Field(
        min_length=1, description="the fields in order; a bare name is a number field"
    )
    by: Literal["position", "label", "offset"] = Field(
        "position", description="how fields are found: in order, by their label, by their offset"
    )
    separator: str = Field(",", min_length=1, max_length=8, description="between two fields")
    starts_with: str = Field("", description="text that a reply always starts with")
    ends_with: str = Field("", description="text that a reply always ends with")

    @model_validator(mode="after")
    def _consistent(self) -> "Reply":
        names = [field.name for field in self.fields if field.kind != "ignored"]
        twice = sorted({name for name in names if names.count(name) > 1})
        if twice:
            raise wrong("a name of its own for each field", f"{', '.join(twice)} twice")
        if any(field.repeats for field in self.fields[:-1]):
            raise wrong("'repeats' on the last field only", "it on an earlier one")
        if self.by == "label" and sum(not field.label for field in self.fields) > 1:
            raise wrong("a 'label' for every field but one of a reply by label", "more without")
        if self.by == "offset":
            _check_offsets(self.fields)
        return self


def _check_offsets(fields: tuple[ReplyField, ...]) -> None:
    taken: dict[tuple[int, int], str] = {}
    by_name = {field.name: field for field in fields}
    for field in fields:
        if field.at is None or field.length is None:
            raise wrong("'at' and 'length' for every field of a frame", f"{field.name} without")
        scale = by_name.get(field.scaled_by)
        if field.scaled_by and (scale is None or not scale.factors):
            raise wrong(f"a field with 'factors' that scales {field.name}", field.scaled_by)
        if field.negative_by and field.negative_by not in by_name:
            raise wrong(f"a field that says whether {field.name} is negative", field.negative_by)
        if field.coding == "float" and field.length not in (2, 4, 8):
            raise wrong(f"2, 4 or 8 bytes for the float {field.name}", field.length)
        if field.coding in ("float", "text") and field.bits is not None:
            raise wrong(f"no 'bits' for the {field.coding} {field.name}", list(field.bits))
        first, last = field.bits or (0, 8 * field.length - 1)
        if last >= 8 * field.length:
            raise wrong(f"bits below {8 * field.length} for {field.name}", last)
        for bit in _places(field, first, last):
            if bit in taken:
                raise wrong(
                    "fields that do not overlap", f"{taken[bit]} and {field.name}", "driver-overlap"
                )
            taken[bit] = field.name


def _places(field: ReplyField, first: int, last: int) -> list[tuple[int, int]]:
    """The bits of the frame that a field takes, as (byte, bit) pairs."""
    at, length = field.at or 0, field.length or 1
    places = []
    for bit in range(first, last + 1):
        byte = bit // 8 if field.endian == "little" else length - 1 - bit // 8
        places.append((at + byte, bit % 8))
    return places
