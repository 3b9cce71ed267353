"""Readers and writers of one field of a reply, each compiled from what the driver says of it."""

import re
from collections.abc import Callable, Mapping
from math import nan

from ohmward.errors import ReplyMalformed
from ohmward.protocol.manner import Manner
from ohmward.protocol.numbers import LARGEST, Form, number_reader, write_number
from ohmward.protocol.scpi import read_channels, read_string, write_channels
from ohmward.setup.driver_replies import ReplyField
from ohmward.terms.status import Status

Value = (
    float | str | bool | tuple[int, ...] | tuple[bool, ...] | tuple[float, ...] | tuple[str, ...]
)
Read = tuple[Value, float, Status]
FieldReader = Callable[[bytes], Read]
FieldWriter = Callable[[Value], str]

_OK = Status.OK
_SHORT_FORM = re.compile(r"([A-Z][A-Z0-9:]*)[a-z]+([0-9]*)")


def reader_of(field: ReplyField, manner: Manner) -> FieldReader:
    """The reader of a field: bytes to (value, resolution, status); raises ReplyMalformed."""
    return _MAKERS[field.kind](field, manner)


def writer_of(field: ReplyField, manner: Manner) -> FieldWriter:
    """The writer of a field, as the instrument would send it: the inverse of its reader."""
    if field.kind == "number":
        return _number_writer(field, manner)
    if field.kind == "switch":
        words = field.words or {"on": "1", "off": "0"}
        return lambda value: sent_word(words["on" if value else "off"], manner.short_forms)
    if field.kind == "word":
        return lambda value: sent_word(field.words[str(value)], manner.short_forms)
    if field.kind == "text":
        return lambda value: '"{}"'.format(str(value).replace('"', '""'))
    if field.kind == "channels":
        return _write_channel_list
    if field.kind == "flags":
        return lambda value: _write_flags(field, value)
    return str


def sent_word(word: str, short_forms: bool) -> str:
    """What is sent for a driver's word: its short form, where it has one (``SHORt`` → SHOR)."""
    found = _SHORT_FORM.fullmatch(word) if short_forms else None
    return word if found is None else found[1] + found[2]


def word_table(words: Mapping[str, str], manner: Manner) -> dict[str, str]:
    """What an instrument may send for each of our words, as it is looked up."""
    table: dict[str, str] = {}
    for ours, theirs in words.items():
        for spelling in {theirs, sent_word(theirs, manner.short_forms)}:
            table[spelling.upper() if manner.any_case else spelling] = ours
    return table


def _text(data: bytes) -> str:
    try:
        return data.decode("ascii")
    except UnicodeDecodeError:
        raise ReplyMalformed(f"{data!r} is not ASCII") from None


def _number_reader(field: ReplyField, manner: Manner) -> FieldReader:
    form = Form(field.form) if field.form else manner.form
    width = field.width if field.width is not None else manner.width
    plus = manner.plus if field.plus is None else field.plus
    read_bare = number_reader(form, width, plus=plus)
    overflow = dict(manner.overflow)
    largest = min([LARGEST, *(abs(value) for value in overflow)])
    low, high = field.minimum, field.maximum
    bounded = low is not None or high is not None
    factor = field.factor
    cut = _suffix_cutter(field)

    def scaled(data: bytes) -> Read:
        text, scale = cut(data)
        value, resolution = read_bare(text)
        if abs(value) >= largest and value in overflow:
            return nan, 0.0, overflow[value]
        scale *= factor
        return checked(value * scale, resolution * abs(scale))

    def checked(value: float, resolution: float) -> Read:
        if abs(value) >= LARGEST:
            raise ReplyMalformed(f"{value} is a special value that the driver does not name")
        if bounded and ((low is not None and value < low) or (high is not None and value > high)):
            raise ReplyMalformed(f"{value} is outside {low} to {high}")
        return value, resolution, _OK

    def plain(data: bytes) -> Read:
        value, resolution = read_bare(data)
        if value >= largest or value <= -largest:
            worth = overflow.get(value)
            if worth is not None:
                return nan, 0.0, worth
            return checked(value, resolution)
        return checked(value, resolution) if bounded else (value, resolution, _OK)

    if factor != 1.0 or field.suffix or field.suffixes:
        return scaled
    return plain


def _suffix_cutter(field: ReplyField) -> Callable[[bytes], tuple[bytes, float]]:
    """Takes the unit text off a number: the number's bytes and what it is multiplied by."""
    if not field.suffix and not field.suffixes:
        return lambda data: (data, 1.0)
    factors = field.suffixes or {field.suffix: 1.0}
    known = sorted(
        ((text.encode("utf-8"), factor) for text, factor in factors.items()),
        key=lambda pair: -len(pair[0]),
    )

    def cut(data: bytes) -> tuple[bytes, float]:
        text = data.strip(b" ")
        for suffix, factor in known:
            if text.endswith(suffix):
                number = text[: len(text) - len(suffix)].rstrip(b" ")
                # 'm' of 'mm': what is left must be the number alone
                if number and (number[-1:].isdigit() or number.endswith(b".")):
                    return number, factor
        raise ReplyMalformed(f"{data!r} has no unit that the driver names")

    return cut


def _number_writer(field: ReplyField, manner: Manner) -> FieldWriter:
    form = Form(field.form) if field.form else manner.form
    width = field.width if field.width is not None else manner.width
    plus = manner.plus if field.plus is None else field.plus
    decimals = field.decimals
    if decimals is None and width is not None and form is Form.NR3:
        decimals = width - 7  # sign, digit, point, decimals, E, sign, two digits
    suffix, scale = next(iter(field.suffixes.items()), (field.suffix, 1.0))
    zeros = (width or 0) if form in (Form.NR1, Form.NR2) else 0

    def write(value: Value) -> str:
        number = float(value) / field.factor / scale  # type: ignore[arg-type]
        text = write_number(number, form, decimals=decimals, width=zeros, sign=plus)
        return text.rjust(width or 0) + suffix

    return write


def _switch_reader(field: ReplyField, manner: Manner) -> FieldReader:
    table = {b"1": True, b"0": False, b"ON": True, b"OFF": False}
    if field.words:
        table = {
            text.encode("ascii"): ours == "on"
            for text, ours in word_table(field.words, manner).items()
        }

    def read(data: bytes) -> Read:
        text = data.strip(b" ")
        found = table.get(text.upper() if manner.any_case else text)
        if found is None:
            raise ReplyMalformed(f"{data!r} is neither on nor off")
        return found, 0.0, _OK

    return read


def _word_reader(field: ReplyField, manner: Manner) -> FieldReader:
    table = word_table(field.words, manner)

    def read(data: bytes) -> Read:
        text = read_string(_text(data).strip(" "))
        found = table.get(text.upper() if manner.any_case else text)
        if found is None:
            raise ReplyMalformed(f"{data!r} is none of the words that the driver names")
        return found, 0.0, _OK

    return read


def _status_reader(field: ReplyField, manner: Manner) -> FieldReader:
    codes = {code: Status(word) for code, word in field.codes.items()} or dict(manner.status)
    table = {_code(code): status for code, status in codes.items()}

    def read(data: bytes) -> Read:
        code = _code(_text(data).strip(" "))
        status = table.get(code)
        if status is None:
            raise ReplyMalformed(f"{data!r} is no status code that the driver names")
        return code, 0.0, status

    return read


def _code(text: str) -> str:
    """Whole numbers compare as numbers: ``+0``, ``00`` and ``0`` are one code."""
    if re.fullmatch(r"[+-]?[0-9]{1,18}", text):
        return str(int(text))
    return text


def _flags_reader(field: ReplyField, manner: Manner) -> FieldReader:
    """The names of the bits that are set; a set bit without a name is not understood."""
    names = sorted(field.flags, key=lambda name: field.flags[name])
    known = sum({1 << bit for bit in field.flags.values()})

    def read(data: bytes) -> Read:
        text = _text(data).strip(" ")
        if not re.fullmatch(r"\+?[0-9]{1,10}", text) or int(text) & ~known:
            raise ReplyMalformed(f"{data!r} sets bits that the driver does not name")
        number = int(text)
        return tuple(name for name in names if number >> field.flags[name] & 1), 0.0, _OK

    return read


def _read_text(data: bytes) -> Read:
    return read_string(_text(data).strip(" ")), 0.0, _OK


def _read_channel_list(data: bytes) -> Read:
    return read_channels(_text(data)), 0.0, _OK


def _write_channel_list(value: Value) -> str:
    if not isinstance(value, tuple):
        raise TypeError("a channel list is a tuple of numbers")
    return write_channels(int(channel) for channel in value)


def _write_flags(field: ReplyField, value: Value) -> str:
    if not isinstance(value, tuple):
        raise TypeError("flags are a tuple of names")
    return str(sum(1 << field.flags[str(name)] for name in value))


def _ignore(data: bytes) -> Read:
    return _text(data), 0.0, _OK


_MAKERS: dict[str, Callable[[ReplyField, Manner], FieldReader]] = {
    "number": _number_reader,
    "switch": _switch_reader,
    "word": _word_reader,
    "status": _status_reader,
    "flags": _flags_reader,
    "text": lambda field, manner: _read_text,
    "channels": lambda field, manner: _read_channel_list,
    "ignored": lambda field, manner: _ignore,
}
