"""Reads what is printed on a part, by its kind: IEC 60062 letter codes and digit codes.

Everything that a marking may mean is gathered; one meaning is the answer, several are asked
back. ``104K`` is 100 nF ± 10 % on a capacitor; on a resistor it may be 104 kΩ too.
"""

import re
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from decimal import Decimal

from ohmward.units.rating import parse_rating
from ohmward.units.series import is_preferred
from ohmward.units.tolerance import LETTERS_PCT, parse_tolerance, tolerance_of_letter
from ohmward.units.values import UnitError, clean, format_quantity, parse_quantity


@dataclass(frozen=True, kw_only=True, slots=True)
class Marking:
    """What a marking says, in F, H or ohm; tolerances as fractions, None where it says none.

    ``voltage_v`` is a rated voltage printed with the value, None where there is none.
    """

    nominal: float
    tolerance_low: float | None = None
    tolerance_high: float | None = None
    voltage_v: float | None = None


class MarkingUnreadable(UnitError):
    """The marking is no value of this kind."""


class MarkingAmbiguous(UnitError):
    """The marking may mean several values: ``readings`` holds them, smallest first."""

    def __init__(self, *, expected: str, found: str, readings: tuple[Marking, ...]) -> None:
        super().__init__(expected=expected, found=found)
        self.readings = readings


@dataclass(frozen=True, kw_only=True, slots=True)
class _Code:
    """How one kind of part is marked.

    ``letters`` stand at the decimal point (power of ten); ``doubtful`` are letters there that
    makers have used for two powers. ``digits`` is the power of ten that a digit code counts in,
    ``bare`` those that a number without letter or unit may count in.
    """

    unit: str
    letters: dict[str, int]
    tolerances: str
    digits: int
    code_lengths: tuple[int, ...] = (3,)
    doubtful: dict[str, tuple[int, ...]]
    bare: tuple[int, ...]


_CODES = {
    "capacitor": _Code(
        unit="F",
        letters={"p": -12, "P": -12, "n": -9, "N": -9, "u": -6, "U": -6, "m": -3, "F": 0},
        doubtful={"M": (-3, -6), "R": (-12, -6)},
        tolerances="BCDFGHJKMNQSTZ",
        digits=-12,
        bare=(-12, -6),
    ),
    "inductor": _Code(
        unit="H",
        letters={"n": -9, "N": -9, "R": -6, "r": -6, "u": -6, "U": -6, "m": -3, "H": 0},
        doubtful={"M": (-3, -6)},
        tolerances="FGHJKMN",
        digits=-6,
        bare=(-9, -6, -3),
    ),
    "resistor": _Code(
        unit="ohm",
        letters={
            **{"R": 0, "r": 0, "Ω": 0, "k": 3, "K": 3, "M": 6, "G": 9, "T": 12},
            "L": -3,  # IEC 60062, from memory
        },
        doubtful={"m": (-3, 6)},
        tolerances="ELPWBCDFGHJKM",
        digits=0,
        code_lengths=(3, 4),
        bare=(0,),
    ),
}

# Last digit of a digit code: 8 and 9 mean × 0.01 and × 0.1, from memory.
_MULTIPLIERS = {**{str(power): power for power in range(8)}, "8": -2, "9": -1}

# The voltage code that stands before a digit code on film capacitors (2A104K), from memory.
_VOLTAGE_LETTERS = {
    **{"A": "1.0", "B": "1.25", "C": "1.6", "D": "2.0", "E": "2.5", "F": "3.15", "V": "3.5"},
    **{"G": "4.0", "W": "4.5", "H": "5.0", "J": "6.3", "K": "8.0"},
}

_DIGITS = re.compile(r"(?P<digits>[0-9]+) ?(?P<tolerance>[A-Za-z]?)")
_LETTERED = re.compile(
    r"(?P<whole>[0-9]*)(?P<letter>[A-Za-zΩ])(?P<part>[0-9]*) ?(?P<tolerance>[A-Za-z]?)"
)
_DECIMAL = re.compile(r"[0-9]*\.[0-9]+")
_VOLTAGE_CODE = re.compile(r"(?P<power>[0-3])(?P<letter>[A-Z]) ?(?P<rest>[0-9]{3} ?[A-Za-z]?)")
_VOLTAGE_AFTER_LETTER = re.compile(r"(?P<rest>.*[0-9a-zA-Z][A-Za-z]) ?(?P<volts>[1-9][0-9]{1,3})")
_VOLTAGE_AFTER_VALUE = re.compile(
    r"(?P<rest>.*?[A-Za-z%Ω])[ /]+(?P<rating>[0-9][0-9.,kK]* ?[vV~=-].*)"
)
_TOLERANCE_AFTER_VALUE = re.compile(r"(?P<rest>.*?[A-Za-zΩ]) ?(?P<tolerance>[±+-][^A-Za-z]*%)")


def read_marking(text: str, kind: str, *, decimal_comma: bool = False) -> Marking:
    """Read the marking of a ``capacitor``, ``inductor`` or ``resistor``.

    Raises MarkingAmbiguous with all readings where there are several, MarkingUnreadable where
    there is none, UnitError for what is asked back (``MFD``), KeyError for another kind.
    """
    code = _CODES[kind]
    found = f"'{text.strip()}'" if text.strip() else "nothing"
    cleaned = clean(text)
    if decimal_comma:
        cleaned = cleaned.replace(",", ".")
    readings = _distinct(_readings(cleaned, code))
    if len(readings) == 1:
        return readings[0]
    if readings:
        meanings = " or ".join(_meaning(reading, code.unit) for reading in readings)
        raise MarkingAmbiguous(
            expected=f"{meanings}: which one, on {_article(kind)}?", found=found, readings=readings
        )
    _ask_back(cleaned, code)
    raise MarkingUnreadable(expected=f"the marking of {_article(kind)}", found=found)


def _article(kind: str) -> str:
    return f"{'an' if kind[0] in 'aeiou' else 'a'} {kind}"


def _distinct(readings: Iterable[Marking]) -> tuple[Marking, ...]:
    """Each value once, smallest first; of two readings of one value the one that says more."""
    best: dict[float, Marking] = {}
    for reading in readings:
        known = best.get(reading.nominal)
        if reading.nominal > 0 and (known is None or known.tolerance_low is None):
            best[reading.nominal] = reading
    return tuple(best[nominal] for nominal in sorted(best))


def _meaning(reading: Marking, unit: str) -> str:
    text = format_quantity(reading.nominal, unit)
    low, high = reading.tolerance_low, reading.tolerance_high
    if low is None or high is None:
        return text
    if -low == high:
        return f"{text} ± {format_quantity(high * 100, 'pct')}"
    return f"{text} −{-low * 100:g}/+{high * 100:g} %"


def _readings(text: str, code: _Code) -> Iterator[Marking]:
    """Everything that the text may mean."""
    yield from _of_value(text, code)
    if code.unit == "F":
        yield from _with_voltage_code(text, code)
    for pattern in (_VOLTAGE_AFTER_VALUE, _VOLTAGE_AFTER_LETTER):
        match = pattern.fullmatch(text)
        if match is None or (pattern is _VOLTAGE_AFTER_LETTER and code.unit != "F"):
            continue
        volts = _printed_voltage(match.groupdict())
        if volts is not None:
            for reading in _of_value(match["rest"], code):
                printed = pattern is _VOLTAGE_AFTER_VALUE or reading.tolerance_low is not None
                if printed:
                    yield replace(reading, voltage_v=volts)


def _of_value(text: str, code: _Code) -> Iterator[Marking]:
    """Readings of a value with at most its tolerance."""
    text = text.strip()
    yield from _of_digits(text, code)
    yield from _of_letters(text, code)
    if _DECIMAL.fullmatch(text):
        yield from (Marking(nominal=_scaled(text, power)) for power in code.bare)
    match = _TOLERANCE_AFTER_VALUE.fullmatch(text)
    try:
        if match is not None:
            nominal = parse_quantity(match["rest"], code.unit)
            low, high = parse_tolerance(match["tolerance"], nominal, code.unit)
            yield Marking(nominal=nominal, tolerance_low=low, tolerance_high=high)
        elif text[-2:-1].isalpha() or not _LETTERED.fullmatch(text):
            yield Marking(nominal=parse_quantity(text, code.unit))
    except UnitError:
        return


def _of_digits(text: str, code: _Code) -> Iterator[Marking]:
    """Digit codes (``104``, ``1002``) and plain numbers, with or without a tolerance letter."""
    match = _DIGITS.fullmatch(text)
    if match is None:
        return
    digits = match["digits"]
    if match["tolerance"] and not _is_tolerance(match["tolerance"], code):
        return
    powers: list[tuple[str, int]] = []
    is_code = len(digits) in code.code_lengths
    if is_code:
        powers.append((digits[:-1], _MULTIPLIERS[digits[-1]] + code.digits))
    if code.unit == "ohm":
        # 470 may be plain; 472 is no preferred value; two digits and a letter are another code
        plain = (is_code and digits[-1] == "0") or (not is_code and not match["tolerance"])
        powers.extend((digits, power) for power in code.bare if plain)
    elif code.unit == "F":
        if not is_code:
            powers.extend((digits, power) for power in code.bare)
        elif digits[-1] == "0":
            powers.append((digits, code.digits))  # 470 on old ceramics and micas is 470 pF
    elif not is_code and not match["tolerance"]:
        powers.extend((digits, power) for power in code.bare)
    for mantissa, power in powers:
        yield _with_letter(_scaled(mantissa, power), match["tolerance"], code)


def _of_letters(text: str, code: _Code) -> Iterator[Marking]:
    """Letter codes of IEC 60062: ``4n7``, ``R47``, ``100R``, each perhaps with a tolerance."""
    match = _LETTERED.fullmatch(text)
    if match is None or not (match["whole"] or match["part"]):
        return
    letter, whole, part = match["letter"], match["whole"], match["part"]
    if match["tolerance"] and not _is_tolerance(match["tolerance"], code):
        return
    if match["tolerance"] == code.unit and not part:
        return  # 470uF: the unit, not ± 1 %
    powers = code.doubtful.get(letter, ())
    if letter in code.letters:
        powers = (code.letters[letter],)
    trails = not part and not match["tolerance"]
    if trails and code.unit != "ohm" and _is_tolerance(letter, code):
        if letter == "M":
            return  # 104M is ± 20 %
        if len(whole) == 3 and not is_preferred(float(whole), "E24"):
            return  # 104N on a capacitor is 100 nF ± 30 %, for nobody makes 104 nF
    for power in powers:
        nominal = _scaled(f"{whole or '0'}.{part or '0'}", power)
        yield _with_letter(nominal, match["tolerance"], code)


def _with_voltage_code(text: str, code: _Code) -> Iterator[Marking]:
    """``2A104K``: 100 V, 100 nF ± 10 %."""
    match = _VOLTAGE_CODE.fullmatch(text)
    if match is None or match["letter"] not in _VOLTAGE_LETTERS:
        return
    volts = _scaled(_VOLTAGE_LETTERS[match["letter"]], int(match["power"]))
    for reading in _of_digits(match["rest"], code):
        yield replace(reading, voltage_v=volts)


def _printed_voltage(groups: dict[str, str]) -> float | None:
    """The DC voltage printed after a value: ``J63``, ``63 V``; None where it is none."""
    if "volts" in groups:
        return float(groups["volts"])
    try:
        return parse_rating(groups["rating"]).dc_v
    except UnitError:
        return None


def _is_tolerance(letter: str, code: _Code) -> bool:
    """True for a tolerance letter; in lower case only where it cannot be taken for a prefix.

    A lower-case m is taken for both, so that 104m is asked back.
    """
    small = letter not in code.letters or letter == "m"
    return letter.upper() in code.tolerances and (letter.isupper() or small)


def _with_letter(nominal: float, letter: str, code: _Code) -> Marking:
    letter = letter.upper()
    if letter not in LETTERS_PCT or nominal <= 0:
        return Marking(nominal=nominal)
    low, high = tolerance_of_letter(letter, nominal, code.unit)
    return Marking(nominal=nominal, tolerance_low=low, tolerance_high=high)


def _scaled(digits: str, power: int) -> float:
    return float(Decimal(digits).scaleb(power))


def _ask_back(text: str, code: _Code) -> None:
    """Raise the question that the value itself raises, if it raises one."""
    try:
        parse_quantity(text, code.unit)
    except UnitError as error:
        if "?" in error.expected:
            raise
