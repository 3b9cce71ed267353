"""Numbers as instruments send them: strictly read, with the weight of the last digit sent."""

import re
from collections.abc import Callable, Mapping
from decimal import Decimal
from enum import StrEnum
from math import isfinite
from typing import NamedTuple

from ohmward.errors import ReplyMalformed

# SCPI-1999 vol. 1 §7.2.1.4-5: infinity, negative infinity, not a number.
INFINITY = 9.9e37
NOT_A_NUMBER = 9.91e37

# No number that a meter measures is larger; anything above is a special value or nonsense.
LARGEST = 9.0e37


class Form(StrEnum):
    """How a number is written, in the words of IEEE 488.2 (§8.7.2-4 for replies).

    ``NR1`` is whole (``-12``), ``NR2`` has a point (``-1.25``), ``NR3`` has a point and an
    exponent (``-1.25E-06``). ``any`` takes all of these and also ``1E3``, ``1.`` and ``.5``.
    """

    ANY = "any"
    NR1 = "NR1"
    NR2 = "NR2"
    NR3 = "NR3"


# Each has two groups: the digits after the point, and the exponent; empty where there is none.
_PATTERNS = {
    Form.ANY: re.compile(rb"[+-]?(?=\.?\d)\d*(?:\.(\d*))?(?:[Ee]([+-]?\d{1,3}))?"),
    Form.NR1: re.compile(rb"[+-]?\d+()()"),
    Form.NR2: re.compile(rb"[+-]?\d+\.(\d+)()"),
    Form.NR3: re.compile(rb"[+-]?\d+\.(\d+)[Ee]([+-]?\d{1,3})"),
}

_SIGNS = (b"+", b"-")
_POWERS = {exponent: float(f"1e{exponent}") for exponent in range(-323, 309)}


class Number(NamedTuple):
    """A number and the weight of the last digit that was sent, in the same unit."""

    value: float
    resolution: float


def read_number(
    text: bytes, form: Form = Form.ANY, width: int | None = None, *, plus: bool = False
) -> Number:
    """Read the whole of ``text`` as one number of the given form, or raise ReplyMalformed.

    Blanks around the number are taken off. ``width`` is the exact count of characters, blanks
    included, for an instrument that always sends as many: it catches a number whose head or
    tail was lost. ``plus`` says that there is always a sign. Special values may be
    shorter and without a sign, and are the caller's.
    """
    return number_reader(form, width, plus=plus)(text)


def number_reader(
    form: Form = Form.ANY, width: int | None = None, *, plus: bool = False
) -> Callable[[bytes], Number]:
    """A reader of one form and width, made once and called for each reply."""
    match = _PATTERNS[form].fullmatch
    powers = _POWERS

    def read(text: bytes) -> Number:
        found = match(text)
        if found is None:
            found = match(text.strip(b" "))
        if found is None:
            # a special value may come in a shorter form than the numbers do
            special = _special(text)
            if special is not None:
                return special
            raise ReplyMalformed(f"{text!r} is not a number of form {form.value}")
        value = float(text)
        if width is not None and len(text) != width and not _is_special(value):
            raise ReplyMalformed(f"{text!r} has {len(text)} characters, not {width}")
        if plus and text[:1] not in _SIGNS and not _is_special(value):
            raise ReplyMalformed(f"{text!r} has lost its sign")
        if not isfinite(value):
            raise ReplyMalformed(f"{text!r} is beyond every number that is measured")
        fraction, exponent = found.groups()
        power = (int(exponent) if exponent else 0) - (len(fraction) if fraction else 0)
        return Number(value, powers.get(power, 0.0))

    return read


def _is_special(value: float) -> bool:
    return value in (INFINITY, -INFINITY, NOT_A_NUMBER)


def _special(text: bytes) -> Number | None:
    found = _PATTERNS[Form.ANY].fullmatch(text.strip(b" "))
    if found is None:
        return None
    value = float(text)
    return Number(value, 0.0) if _is_special(value) else None


def write_number(
    value: float,
    form: Form = Form.ANY,
    *,
    decimals: int | None = None,
    width: int = 0,
    sign: bool = False,
) -> str:
    """Write a finite number in the given form; raise ValueError for NaN and infinity.

    ``any`` writes the fewest digits that read back as the same float. ``decimals`` counts
    those after the point (NR2: 3, NR3: 6 unless stated), ``width`` pads with zeros after the
    sign, ``sign`` writes a plus.
    """
    if not isfinite(value):
        raise ValueError(f"{value} cannot be sent to an instrument")
    value = value + 0.0  # −0.0 is written as 0
    if value == 0.0:
        value = 0.0
    plus = "+" if sign else ""
    zeros = f"0{width}" if width else ""
    if form is Form.NR1:
        return f"{round(value):{plus}{zeros}d}"
    if form is Form.NR2:
        return f"{value:{plus}{zeros}.{3 if decimals is None else decimals}f}"
    if form is Form.NR3:
        return f"{value:{plus}{zeros}.{6 if decimals is None else decimals}E}"
    return _shortest(value, sign)


def _shortest(value: float, sign: bool) -> str:
    plain = repr(value)
    if plain.endswith(".0"):
        plain = plain[:-2]
    text = plain if "e" not in plain else f"{Decimal(plain).normalize():E}"
    return f"+{text}" if sign and not text.startswith("-") else text


# SCPI-1999 vol. 1 §7.2.1.3 and IEEE 488.2 table 7-1, with the multipliers' usual meanings.
_MULTIPLIERS: Mapping[str, float] = {
    "EX": 1e18,
    "PE": 1e15,
    "T": 1e12,
    "G": 1e9,
    "MA": 1e6,
    "K": 1e3,
    "M": 1e-3,
    "U": 1e-6,
    "N": 1e-9,
    "P": 1e-12,
    "F": 1e-15,
    "A": 1e-18,
}


def read_suffixed(text: str, unit: str) -> float:
    """Read a SCPI number with a suffix, such as ``100 KHZ`` in HZ or ``2.2MOHM`` in OHM.

    Case does not matter. ``M`` is milli, except that MHZ and MOHM mean mega (IEEE 488.2
    §7.7.3.4, the exceptions that SCPI keeps). Raises ReplyMalformed.
    """
    found = re.fullmatch(
        r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[Ee][+-]?\d{1,3})?)\s*([A-Za-z]*)\s*", text
    )
    unit = unit.upper()
    if found is None:
        raise ReplyMalformed(f"{text!r} is not a number with a suffix in {unit}")
    value, suffix = float(found[1]), found[2].upper()
    if suffix in ("", unit):
        return value
    if not suffix.endswith(unit):
        raise ReplyMalformed(f"{text!r} is not in {unit}")
    multiplier = suffix[: len(suffix) - len(unit)]
    if multiplier == "M" and unit in ("HZ", "OHM"):
        return value * 1e6
    if multiplier not in _MULTIPLIERS:
        raise ReplyMalformed(f"{text!r} has no multiplier that SCPI knows")
    return value * _MULTIPLIERS[multiplier]
