"""One field of a binary frame: whole numbers, bit fields, digits in nibbles, floats and text."""

from collections.abc import Callable
from math import isfinite, nan
from struct import pack, unpack

from ohmward.errors import ReplyMalformed
from ohmward.protocol.fields import Read, Value, reader_of
from ohmward.protocol.manner import Manner
from ohmward.protocol.numbers import LARGEST
from ohmward.setup.driver_replies import ReplyField
from ohmward.terms.status import Status

_FLOATS = {2: "e", 4: "f", 8: "d"}


def field_reader(field: ReplyField, manner: Manner) -> Callable[[bytes], Read]:
    """The reader of a field from a whole frame; it raises ReplyMalformed."""
    start = field.at or 0
    end = start + (field.length or 1)
    if field.coding == "text":
        read_text = reader_of(field, manner)
        return lambda frame: read_text(frame[start:end])
    raw = _raw_reader(field)
    if field.factors or field.kind == "ignored":
        return lambda frame: (_code(raw(frame[start:end])), 0.0, Status.OK)
    if field.kind == "number":
        finish = _number_finisher(field, manner)
        return lambda frame: finish(raw(frame[start:end]))
    # a status, word or switch: the whole number is its code
    read_code = reader_of(field, manner)
    return lambda frame: read_code(_code(raw(frame[start:end])).encode("ascii"))


def _code(number: float) -> str:
    return str(int(number)) if number == int(number) else str(number)


def _raw_reader(field: ReplyField) -> Callable[[bytes], float]:
    endian = field.endian
    if field.coding == "nibbles":
        return lambda data: _digits(data if endian == "big" else data[::-1])
    if field.coding == "float":
        form = (">" if endian == "big" else "<") + _FLOATS[field.length or 4]
        return lambda data: _finite(float(unpack(form, data)[0]))
    signed = field.coding == "signed"
    if field.bits is None:
        return lambda data: int.from_bytes(data, endian, signed=signed)
    low, high = field.bits
    width = high - low + 1

    def bits(data: bytes) -> float:
        value = int.from_bytes(data, endian) >> low & ((1 << width) - 1)
        return value - (1 << width) if signed and value >> (width - 1) else value

    return bits


def _finite(value: float) -> float:
    if not isfinite(value):
        raise ReplyMalformed(f"{value} is not a number that was measured")
    return value


def _digits(data: bytes) -> int:
    text = data.hex()
    if not text.isdigit():
        raise ReplyMalformed(f"{text} holds nibbles that are no digits")
    return int(text)


def _number_finisher(field: ReplyField, manner: Manner) -> Callable[[float], Read]:
    """What turns a raw number into a value: a table, overflow values, factor and bounds."""
    step = 0.0 if field.coding == "float" else abs(field.factor)
    # the places of scaled fields are checked before they are scaled: their bounds are not
    low = None if field.scaled_by else field.minimum
    high = None if field.scaled_by else field.maximum

    def finish(raw: float) -> Read:
        if field.numbers:
            found = field.numbers.get(_code(raw))
            if found is None:
                raise ReplyMalformed(f"{field.name} is {raw}, for which the driver has no number")
            return found, 0.0, Status.OK
        worth = manner.overflow.get(float(raw))
        if worth is not None:
            return nan, 0.0, worth
        value = float(raw) * field.factor
        if (
            abs(value) >= LARGEST
            or (low is not None and value < low)
            or (high is not None and value > high)
        ):
            raise ReplyMalformed(f"{field.name} is {value}, which cannot be")
        return value, step, Status.OK

    return finish


def put_field(frame: bytearray, field: ReplyField, value: Value) -> None:
    """Put a value where its field is, the inverse of the reader; raises ValueError if too big."""
    start, length = field.at or 0, field.length or 1
    if field.coding == "text":
        frame[start : start + length] = str(value).encode("ascii").rjust(length)
        return
    if field.coding == "float":
        form = (">" if field.endian == "big" else "<") + _FLOATS[length]
        frame[start : start + length] = pack(form, float(value) / field.factor)  # type: ignore[arg-type]
        return
    number = _raw_of(field, value)
    if field.coding == "nibbles":
        data = bytes.fromhex(f"{number:0{2 * length}d}")
        frame[start : start + length] = data if field.endian == "big" else data[::-1]
        return
    low, high = field.bits or (0, 8 * length - 1)
    mask = (1 << (high - low + 1)) - 1
    least = -(mask + 1 >> 1) if field.coding == "signed" else 0
    if not least <= number <= (mask >> 1 if field.coding == "signed" else mask):
        raise ValueError(f"{number} does not fit into {field.name}")
    old = int.from_bytes(frame[start : start + length], field.endian)
    new = old & ~(mask << low) | (number & mask) << low
    frame[start : start + length] = new.to_bytes(length, field.endian)


def _raw_of(field: ReplyField, value: Value) -> int:
    if field.numbers:
        return int(next(code for code, number in field.numbers.items() if number == value))
    if field.words:
        word = ("on" if value else "off") if field.kind == "switch" else str(value)
        return int(field.words[word])
    if field.kind == "number":
        return round(float(value) / field.factor)  # type: ignore[arg-type]
    return int(value)  # type: ignore[arg-type]
