"""Tolerances as people write them: ``±5 %``, ``-20/+80 %``, ``±0.25 pF``, or a letter."""

import re
from collections.abc import Callable

from ohmward.units.values import UnitError, clean, parse_quantity

# IEC 60062, in percent of the nominal value; Q, T, S, Z, H, N and those below 0.1 % from memory.
LETTERS_PCT: dict[str, tuple[float, float]] = {
    "E": (-0.005, 0.005),
    "L": (-0.01, 0.01),
    "P": (-0.02, 0.02),
    "W": (-0.05, 0.05),
    "B": (-0.1, 0.1),
    "C": (-0.25, 0.25),
    "D": (-0.5, 0.5),
    "F": (-1.0, 1.0),
    "G": (-2.0, 2.0),
    "H": (-3.0, 3.0),
    "J": (-5.0, 5.0),
    "K": (-10.0, 10.0),
    "M": (-20.0, 20.0),
    "N": (-30.0, 30.0),
    "Q": (-10.0, 30.0),
    "T": (-10.0, 50.0),
    "S": (-20.0, 50.0),
    "Z": (-20.0, 80.0),
}

# Below 10 pF these letters are picofarads, not percent; B, F and G from memory.
LETTERS_PF: dict[str, float] = {"B": 0.1, "C": 0.25, "D": 0.5, "F": 1.0, "G": 2.0}
SMALL_F = 10e-12

_BOTH = re.compile(r"(?:±|\+ ?/ ?-|\+-|-\+|- ?/ ?\+)? ?(?P<value>[^+\-±/].*)")
_TWO = re.compile(r"(?P<first>[+-]?[^+\-±/]+?) ?(?:/|\.\.\.|…| to )? ?(?P<second>[+-][^+\-±/]+)")
_ZERO = re.compile(r"[+-]? ?0+(?:[.,]0+)?")
_EXPECTED = "a tolerance such as '±5 %', '-20/+80 %', '±0.25 pF' or 'K'"


def tolerance_of_letter(letter: str, nominal: float, unit: str) -> tuple[float, float]:
    """Low and high of an IEC 60062 letter, as fractions of ``nominal`` (in ``unit``).

    Raises KeyError for what is no tolerance letter.
    """
    if unit == "F" and nominal < SMALL_F and letter in LETTERS_PF:
        share = LETTERS_PF[letter] * 1e-12 / nominal
        return -share, share
    low, high = LETTERS_PCT[letter]
    return low / 100.0, high / 100.0


def parse_tolerance(
    text: str, nominal: float, unit: str, *, decimal_comma: bool = False
) -> tuple[float, float]:
    """Read a tolerance of ``nominal`` (in ``unit``, positive) as fractions (low, high).

    ``±0.25 pF`` of 5 pF is (−0.05, 0.05). Low is negative or zero, high positive or zero.
    Raises UnitError.
    """
    cleaned = clean(text)
    found = f"'{text.strip()}'" if text.strip() else "nothing"
    if cleaned in LETTERS_PCT:
        return tolerance_of_letter(cleaned, nominal, unit)

    def share(part: str) -> float:
        part = part.strip()
        if part.endswith(("%", "ppm")):
            return parse_quantity(part, "1", decimal_comma=decimal_comma)
        return parse_quantity(part, unit, decimal_comma=decimal_comma) / nominal

    both = _BOTH.fullmatch(cleaned)
    two = _TWO.fullmatch(cleaned)
    try:
        if two is not None:
            low, high = sorted(_two_shares(two["first"], two["second"], share))
        elif both is not None:
            high = share(both["value"])
            low = -high
        else:
            low = high = 0.0
    except UnitError as error:
        asked = f"; {error.expected}" if "?" in error.expected else ""
        raise UnitError(expected=f"{_EXPECTED}{asked}", found=found) from error
    if two is None and both is None:
        raise UnitError(expected=_EXPECTED, found=found)
    if low > 0 or high < 0 or low == high or low <= -1:
        raise UnitError(expected=f"{_EXPECTED} around the nominal value", found=found)
    return low, high


def _two_shares(first: str, second: str, share: Callable[[str], float]) -> tuple[float, float]:
    """Both sides of ``-20/+80 %``: the first borrows the second's unit, a bare 0 is 0."""
    right = 0.0 if _ZERO.fullmatch(second) else share(second)
    if _ZERO.fullmatch(first.strip()):
        return 0.0, right
    if re.search(r"[%A-Za-zΩ]", first):
        return share(first), right
    letters = re.search(r"[%A-Za-zΩ].*", second)
    if letters is None:
        return share(first), right
    return share(f"{first} {letters.group()}"), right
