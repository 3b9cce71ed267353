"""Reads and writes one value with its unit: ``4.7 uF``, ``4u7``, ``100 kHz``, ``1 h 30 min``.

What can be read in two ways is refused with the question, because a wrong capacitance is a
wrong decision and a wrong voltage is worse.
"""

import re
from decimal import Decimal
from math import isfinite, isnan

from ohmward.units.table import PREFIX_SPELLINGS, PREFIXES, UNITS, Unit

_SPACES = "\u00a0\u2007\u2009\u202f\t"
_CLEAN = str.maketrans(
    {
        "µ": "u",  # micro sign
        "μ": "u",  # Greek mu
        "\u2126": "Ω",  # ohm sign
        "\u2103": "°C",
        "\u2212": "-",
        "\u2013": "-",
        "\u2019": "'",
        **dict.fromkeys(_SPACES, " "),
    }
)
_NUMBER = re.compile(
    r"(?P<sign>[+-]?) ?(?P<digits>[.,]?[0-9](?:[0-9 '_.,]*[0-9])?\.?)"
    r"(?P<power>[eE][+-]?[0-9]{1,3})?"
)
_GROUPS = re.compile(r"[0-9]{1,3}(?P<mark>[ '_.,])[0-9]{3}(?:(?P=mark)[0-9]{3})*")
_INFIX = re.compile(
    r"(?P<sign>[+-]?)(?P<whole>[0-9]*)(?P<letter>[A-Za-zΩ]{1,3}?)(?P<part>[0-9]+)"
    r" ?(?P<unit>[A-Za-zΩ]*)"
)
_DURATION = re.compile(r"(?:[0-9]+(?:\.[0-9]+)? ?[a-z]+ ?){2,}")
_DURATION_PART = re.compile(r"([0-9]+(?:\.[0-9]+)?) ?([a-z]+)")
_MICRO_OR_MEGA = re.compile(r"(?i:m?mfd?s?|mmf)")


class UnitError(ValueError):
    """A value that cannot be read: ``expected`` says what can, ``found`` what was there."""

    def __init__(self, *, expected: str, found: str) -> None:
        super().__init__(f"expected {expected}, found {found}")
        self.expected = expected
        self.found = found


def clean(text: str) -> str:
    """The text with one spelling for micro, ohm, minus and space."""
    return re.sub(" +", " ", text.translate(_CLEAN)).strip()


def parse_quantity(text: str | float, unit: str, *, decimal_comma: bool = False) -> float:
    """Read a value in ``unit`` (a key of ``UNITS``) and return it in SI base units.

    A number (not a string) is taken as it is; a string must carry its unit, or at least a
    prefix (``47k``), unless the unit is ``"1"``. ``decimal_comma`` says that the text comes
    from where commas are decimal. Raises UnitError.
    """
    kind = UNITS[unit]
    if not isinstance(text, str):
        return _finite(float(text), kind, str(text))
    cleaned = clean(text)
    found = f"'{text.strip()}'"
    if unit == "s" and _DURATION.fullmatch(cleaned):
        return _duration(cleaned, kind, found)
    infix = _INFIX.fullmatch(cleaned)
    if infix is not None:
        scale = _infix_scale(infix, kind, found)
        if scale is not None:
            digits = f"{infix['sign']}{infix['whole'] or '0'}.{infix['part']}"
            return _finite(float(Decimal(digits).scaleb(scale)), kind, found)
    match = _NUMBER.match(cleaned)
    if match is None:
        raise UnitError(expected=_wanted(kind), found=found if text.strip() else "nothing")
    digits = _plain_digits(match["digits"], kind, found, decimal_comma=decimal_comma)
    number = Decimal(match["sign"] + digits + (match["power"] or ""))
    return _scaled(number, cleaned[match.end() :].strip(), kind, found)


def _scaled(number: Decimal, word: str, kind: Unit, found: str) -> float:
    multiple = kind.multiples.get(word) or kind.multiples.get(word.lower())
    if multiple is not None:
        return _finite(float(number * Decimal(repr(multiple))), kind, found)
    power = None if _asks_back(word, kind) else _power(word, kind)
    if power is None:
        raise _refusal(word, kind, found)
    return _finite(float(number.scaleb(power)), kind, found)


def _finite(value: float, kind: Unit, found: str) -> float:
    if not isfinite(value):
        raise UnitError(expected=_wanted(kind), found=found)
    return value


def _wanted(kind: Unit) -> str:
    if kind.symbol == "1":
        return f"{kind.thing} such as 0.005 or '{kind.example}'"
    return f"{kind.thing} with its unit, such as '{kind.example}'"


def _is_name(word: str, kind: Unit) -> bool:
    return word in kind.exact or word.lower() in kind.names


def _power(word: str, kind: Unit) -> int | None:
    """The power of ten that a unit word stands for (``kHz`` is 3), or None."""
    word = word.replace(" ", "")
    if _is_name(word, kind):
        return 0
    found: int | None = None
    for spelling, prefix in PREFIX_SPELLINGS.items():
        if not word.startswith(spelling) or prefix not in kind.prefixes:
            continue
        rest = word[len(spelling) :]
        bare = rest == "" and kind.symbol not in {"s", "m"}  # 15m: minutes, metres, milli?
        if bare or (rest != "" and _is_name(rest, kind)):
            found = PREFIXES[prefix]
    return found


def _asks_back(word: str, kind: Unit) -> bool:
    """True for what the trade has used for two things: MFD, and megahertz in lower case."""
    if kind.symbol == "F":
        return word != "mF" and _MICRO_OR_MEGA.fullmatch(word) is not None
    return kind.symbol == "Hz" and word in {"mhz", "mHZ"}


def _refusal(word: str, kind: Unit, found: str) -> UnitError:
    """The error for a unit word that is not of this kind: a question where there is one."""
    if kind.symbol == "F" and _asks_back(word, kind):
        meant = "pF (picofarad)" if word.lower().startswith("mm") else "uF (microfarad)"
        return UnitError(expected=f"pF, nF, uF or mF: does '{word}' mean {meant}?", found=found)
    if kind.symbol == "Hz" and _asks_back(word, kind):
        return UnitError(expected="MHz (mega) or mHz (milli): which one?", found=found)
    if kind.symbol == "s" and word == "m":
        return UnitError(expected="min (minutes) or ms (milliseconds): which one?", found=found)
    if word.startswith("M") and "m" in kind.prefixes and _is_name(word[1:] or " ", kind):
        return UnitError(
            expected=f"m{kind.symbol} (milli) or the value without a prefix: does '{word}' mean "
            "milli, micro or mega?",
            found=found,
        )
    if not word:
        return UnitError(expected=_wanted(kind), found=f"{found}, which has no unit")
    for other in UNITS.values():
        if other is not kind and other.symbol != "1" and _power(word, other) is not None:
            return UnitError(expected=_wanted(kind), found=f"{found}, {other.thing}")
    return UnitError(expected=_wanted(kind), found=found)


def _infix_scale(match: re.Match[str], kind: Unit, found: str) -> int | None:
    """The power of ten of ``4u7``, ``4R7``, ``6V3``; None where the text is no such form."""
    letter, word = match["letter"], match["unit"]
    if word and not _is_name(word, kind):
        return None
    if letter in {"e", "E"} or kind.symbol == "1":
        return None
    if letter == "M" and kind.symbol != "Hz" and "M" not in kind.prefixes:
        raise UnitError(expected=f"'m' (milli) or 'u' (micro) {kind.symbol}", found=found)
    if len(letter) == 1 and (_is_name(letter, kind) or letter in kind.exact):
        return 0
    prefix = PREFIX_SPELLINGS.get(letter)
    return PREFIXES[prefix] if prefix is not None and prefix in kind.prefixes else None


def _plain_digits(digits: str, kind: Unit, found: str, *, decimal_comma: bool) -> str:
    """The number with a decimal point and no separators; refuses what reads in two ways.

    ``1 000``, ``1'000``, ``1,234.5``, ``1,000,000`` are grouped thousands; ``4,700`` alone may
    be either, and so may ``4.700`` where commas are decimal.
    """
    point, comma = (",", ".") if decimal_comma else (".", ",")
    whole, mark, part = digits.rpartition(point) if point in digits else (digits, "", "")
    wanted = UnitError(expected=f"{_wanted(kind)}, with a decimal point", found=found)
    if point in whole or (mark and not (part.isdigit() or part == "")):
        # two decimal marks, or thousands after one: 1.000.000 where commas are not decimal
        raise wanted
    if comma in whole and not mark:
        return _lone_mark(whole, comma, wanted, decimal_comma=decimal_comma)
    if not whole.isdigit() and whole:
        if _GROUPS.fullmatch(whole) is None or whole.startswith("0"):
            raise wanted
        whole = re.sub(r"[ '_.,]", "", whole)
    return f"{whole or '0'}.{part or '0'}"


def _lone_mark(whole: str, comma: str, wanted: UnitError, *, decimal_comma: bool) -> str:
    """Digits with only the mark that is not decimal here: thousands, decimal, or a question."""
    grouped = _GROUPS.fullmatch(whole) is not None and not whole.startswith("0")
    if grouped and whole.count(comma) > 1:
        return whole.replace(comma, "")
    if grouped:
        bare = whole.replace(comma, "")
        decimal = whole.replace(comma, ".")
        raise UnitError(expected=f"{bare} or {decimal}: which one?", found=wanted.found)
    before, _, after = whole.partition(comma)
    if decimal_comma and after.isdigit() and (before.isdigit() or not before):
        return f"{before or '0'}.{after}"  # 4.7 in a list with decimal commas is still 4.7
    raise wanted


def _duration(text: str, kind: Unit, found: str) -> float:
    """Sum of ``1 h 30 min``; the units must fall from long to short."""
    total = 0.0
    last = float("inf")
    for number, word in _DURATION_PART.findall(text):
        size = _scaled(Decimal(1), word, kind, found)
        if size >= last:
            raise UnitError(expected=_wanted(kind), found=found)
        total += _scaled(Decimal(number), word, kind, found)
        last = size
    return total


def format_quantity(value: float | None, unit: str, digits: int = 4) -> str:
    """Write a value for people, ``digits`` significant digits, trailing zeros dropped.

    Raises KeyError for a unit that is not in ``UNITS``. Missing (None or NaN) is a dash.
    """
    kind = UNITS[unit]
    if value is None or isnan(value):
        return "–"
    if not isfinite(value):
        return f"{'−' if value < 0 else ''}∞ {kind.shown}".strip()
    if kind.symbol == "s" and abs(value) >= 60.0:
        return _format_duration(value, digits)
    number = Decimal(f"{value:.{max(digits, 1) - 1}e}")
    power, prefix = 0, ""
    if number != 0 and kind.shown_prefixes:
        power, prefix = _best_prefix(number.adjusted(), kind)
    shown = _trim(number.scaleb(-power))
    unit_shown = f"{prefix.replace('u', 'µ')}{kind.shown}"
    return f"{shown} {unit_shown}".strip()


def format_uncertain(value: float, u: float, unit: str) -> str:
    """A value with its uncertainty in one unit: ``15.94 Ω ± 0.28 Ω``, u with two digits.

    The value is rounded where its uncertainty is (JCGM 100:2008, 7.2.6). Raises KeyError for
    a unit that is not in ``UNITS``; both must be finite, and u above zero.
    """
    kind = UNITS[unit]
    spread = Decimal(f"{u:.1e}")
    power, prefix = 0, ""
    if kind.shown_prefixes:
        largest = max(Decimal(f"{abs(value):.15e}"), spread)
        power, prefix = _best_prefix(largest.adjusted(), kind)
    spread = spread.scaleb(-power)
    places = max(1 - spread.adjusted(), 0)
    rounded = Decimal(repr(float(value))).scaleb(-power)
    unit_shown = f" {prefix.replace('u', 'µ')}{kind.shown}".rstrip()
    return f"{rounded:.{places}f}{unit_shown} ± {spread:.{places}f}{unit_shown}"


def _best_prefix(exponent: int, kind: Unit) -> tuple[int, str]:
    wanted = exponent // 3 * 3
    choices = [(0, "")] + [(PREFIXES[prefix], prefix) for prefix in kind.shown_prefixes]
    return min(choices, key=lambda choice: abs(choice[0] - wanted))


def _trim(number: Decimal) -> str:
    text = f"{number:f}"
    if "." in text:
        text = text.rstrip("0").rstrip(".")
    return "0" if text == "-0" else text


def _format_duration(value: float, digits: int) -> str:
    """``90 s`` as ``1 min 30 s``; parts below the rounding are left out."""
    rounded = Decimal(f"{abs(value):.{max(digits, 1) - 1}e}")
    parts: list[str] = []
    for size, name in ((86400, "d"), (3600, "h"), (60, "min")):
        count, rounded = divmod(rounded, size)
        if count:
            parts.append(f"{_trim(count)} {name}")
    if rounded:
        parts.append(f"{_trim(rounded)} s")
    return ("-" if value < 0 else "") + " ".join(parts)
