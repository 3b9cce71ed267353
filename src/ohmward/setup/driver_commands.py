"""What a driver file says can be sent: settings with read-back, readings, actions, waiting."""

from typing import Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    Field,
    ValidationInfo,
    WithJsonSchema,
    field_validator,
    model_validator,
)

from ohmward.setup.driver_replies import (
    FieldKind,
    NumberStyle,
    Reply,
    ReplyField,
)
from ohmward.setup.quantities import Fraction, Model, PositiveSeconds, Seconds, quantity, wrong
from ohmward.setup.template import TemplateError, read_template

# A value in the setting's own unit: what unit that is only the setting knows.
InItsUnit = Annotated[
    float, WithJsonSchema({"anyOf": [{"type": "number"}, {"type": "string", "pattern": "[0-9]"}]})
]
Unit = Literal["F", "H", "ohm", "V", "A", "Hz", "s", "V/s", "degC", "pct", "W", "J", "m", "1"]


def _well_formed(text: str) -> str:
    try:
        read_template(text)
    except TemplateError as error:
        raise wrong(error.expected, error.found, "driver-template") from None
    if not text.isascii():
        raise wrong("ASCII, which is what instruments read", text, "driver-template")
    return text


CommandText = Annotated[
    str,
    AfterValidator(_well_formed),
    Field(description="what is sent, with {placeholders}", examples=["FREQ {value}", "FREQ?"]),
]


def check_placeholders(text: str, allowed: frozenset[str]) -> None:
    """Raise, naming it, for a placeholder that nothing can fill in."""
    unknown = sorted(set(read_template(text).names) - allowed)
    if unknown:
        known = ", ".join(f"{{{name}}}" for name in sorted(allowed))
        raise wrong(
            f"no placeholder but {known}" if known else "no placeholder",
            f"{{{unknown[0]}}} in '{text}'",
            "driver-placeholder",
        )


class Wait(Model):
    """What to wait for after something was sent, before the instrument is asked for more."""

    time: Seconds | None = Field(None, description="a fixed time")
    ask: str = Field("", description="a query that answers when it is done", examples=["*OPC?"])
    until: str = Field("", description="the answer that means done: '1'")
    bit: int | None = Field(
        None, ge=0, le=31, description="the bit of the answer, a whole number, that means done"
    )
    bit_is: bool = Field(True, description="whether the bit must be set or clear")
    every: PositiveSeconds = Field(0.05, description="how long to wait between two polls")
    at_most: PositiveSeconds = Field(10.0, description="how long this may take altogether")
    discard: int = Field(
        0, ge=0, le=100, description="readings to take and throw away, as after a range change"
    )

    @model_validator(mode="after")
    def _consistent(self) -> "Wait":
        if not (self.ask or self.time is not None or self.discard):
            raise wrong("'time', 'ask' or 'discard'", "none of them")
        if self.ask and not self.until and self.bit is None:
            raise wrong("'until' or 'bit' beside 'ask'", "neither")
        if self.until and self.bit is not None:
            raise wrong("either 'until' or 'bit'", "both")
        return self


class Written(NumberStyle):
    """How a setting's number is written when it is sent."""

    digits: int = Field(0, ge=0, le=20, description="pads with zeros to so many characters")
    sign: bool = Field(False, description="writes the plus sign too")
    factor: float = Field(
        1.0, gt=0, description="the instrument's number is the SI value divided by this: 1e3 for kV"
    )


def _read(value: Any, info: ValidationInfo) -> float:
    """The value in the setting's own unit, which was read before it."""
    written = bool((info.context or {}).get("written"))
    return quantity(info.data.get("unit", "1")).read(value, written=written)


class Setting(NumberStyle):
    """Something that is set and, where the instrument can, read back."""

    kind: FieldKind = Field("number", description="number, switch (on or off), word or text")
    unit: Unit = Field("1", description="SI unit of the value")
    set: CommandText = Field("", description="the command; {value} is what is set")
    ask: str = Field("", description="the query that reads it back; without it nothing is compared")
    set_and_ask: CommandText = Field(
        "", description="one message that sets and asks, where the instrument answers it"
    )
    minimum: InItsUnit | None = Field(None, description="least value", examples=["20 Hz"])
    maximum: InItsUnit | None = Field(None, description="greatest value", examples=["2 MHz"])
    allowed: tuple[InItsUnit, ...] = Field(
        (), description="the only values that there are", examples=[["100 Hz", "1 kHz"]]
    )
    between: Literal["refused", "up", "down", "nearest"] = Field(
        "refused", description="what is set for a value between two allowed ones"
    )
    tolerance: Fraction = Field(
        1e-6,
        description="share of the value by which the read-back may differ",
        examples=["0.01 %"],
    )
    tolerance_absolute: InItsUnit = Field(
        0.0,
        description="amount by which the read-back may differ besides",
        examples=["0.1 mV"],
    )
    words: dict[str, str] = Field(
        default_factory=dict,
        description="our word = the instrument's word; capitals give its short form: 'SHORt'",
    )
    written: Written = Field(Written(), description="how the number is written")
    factor: float = Field(1.0, description="multiplies the number read back, to make it SI")
    reply: Reply | None = Field(
        None, description="the read-back's layout, when it is more than the value alone"
    )
    wait: Wait | None = Field(None, description="what to wait for after setting")

    @field_validator("minimum", "maximum", "tolerance_absolute", mode="before")
    @classmethod
    def _in_unit(cls, value: Any, info: ValidationInfo) -> Any:
        return value if value is None else _read(value, info)

    @field_validator("allowed", mode="before")
    @classmethod
    def _each_in_unit(cls, value: Any, info: ValidationInfo) -> Any:
        if not isinstance(value, list | tuple):
            raise wrong("a list of values", value)
        return tuple(_read(one, info) for one in value)

    @model_validator(mode="after")
    def _consistent(self) -> "Setting":
        if not self.set and not self.set_and_ask:
            raise wrong("'set' or 'set_and_ask'", "neither")
        value = frozenset({"value"})
        for text in (self.set, self.set_and_ask):
            if text:
                check_placeholders(text, value)
                if "value" not in read_template(text).names:
                    raise wrong("{value} in the command", f"'{text}'", "driver-placeholder")
        check_placeholders(self.ask, frozenset())
        if self.kind == "word" and not self.words:
            raise wrong("'words' for a setting of kind 'word'", "none")
        if self.kind not in ("number", "switch", "word", "text"):
            raise wrong("a kind of number, switch, word or text", self.kind)
        if self.minimum is not None and self.maximum is not None and self.minimum > self.maximum:
            raise wrong(f"a minimum of at most {self.maximum}", self.minimum)
        if self.tolerance < 0 or self.tolerance_absolute < 0:
            raise wrong("tolerances of 0 or more", "a negative one")
        if self.reply is not None and not any(f.name == "value" for f in self.reply.fields):
            raise wrong("a field named 'value' in the reply", "none")
        return self

    def settable(self, value: float) -> float | None:
        """The number that is sent for this one; None where the limits do not let it be set.

        A value that an allowed one stands for within the tolerance is that one.
        """
        room = self.tolerance * abs(value) + self.tolerance_absolute
        if self.minimum is not None and value < self.minimum - room:
            return None
        if self.maximum is not None and value > self.maximum + room:
            return None
        if not self.allowed:
            return value
        near = min(self.allowed, key=lambda one: abs(one - value))
        if abs(near - value) <= room:
            return near
        above = min((one for one in self.allowed if one > value), default=None)
        below = max((one for one in self.allowed if one < value), default=None)
        return {"refused": None, "up": above, "down": below, "nearest": near}[self.between]

    @property
    def layout(self) -> Reply:
        """The read-back's layout: the one given, or the value alone."""
        if self.reply is not None:
            return self.reply
        field = ReplyField(
            name="value",
            kind=self.kind,
            form=self.form,
            width=self.width,
            words=self.words,
            factor=self.factor,
        )
        return Reply(fields=(field,), separator="\n" if self.kind == "text" else ",")


class Reading(Reply):
    """Something that the instrument is asked for."""

    ask: CommandText = Field("", description="the query; empty where the instrument sends unasked")
    timeout: PositiveSeconds | None = Field(None, description="instead of the link's timeout")

    @model_validator(mode="after")
    def _query(self) -> "Reading":
        check_placeholders(self.ask, frozenset({"channels", "channel"}))
        return self


class Action(Model):
    """Something that the instrument does, without a value to read back."""

    send: CommandText = Field(description="what is sent", examples=["*RST", "ROUT:OPEN:ALL"])
    reply: Reply | None = Field(None, description="what it answers, where it answers")
    wait: Wait | None = Field(None, description="what to wait for afterwards")

    @model_validator(mode="after")
    def _placeholders(self) -> "Action":
        check_placeholders(self.send, frozenset({"channels", "channel", "seconds"}))
        return self
