"""Voltage ratings as people write them, DC and AC kept apart: ``450 V DC``, ``275 V~``."""

import re
from dataclasses import dataclass

from ohmward.units.values import UnitError, clean, parse_quantity

_EXPECTED = "a rating such as '450 V DC' or '275 V AC'"
# the voltage, then the word or sign that says which kind it is: V DC, VDCW, V=, V AC, V~ …
_STATED = re.compile(
    r"(?P<value>.+?) ?(?:(?P<dc>(?i:wv(?:dc)?|d\.?c\.?w?)|[=⎓-])|(?P<ac>(?i:a\.?c\.?|rms)|[~∼]))"
)
_BETWEEN = re.compile(r" ?(?:/|;|\||\band\b) ?")


@dataclass(frozen=True, kw_only=True, slots=True)
class Rating:
    """A part's voltage rating: DC, AC (rms) or both; ``stated`` if the text said which."""

    dc_v: float | None = None
    ac_v: float | None = None
    stated: bool = True


def parse_rating(text: str, *, decimal_comma: bool = False) -> Rating:
    """Read a rating; a bare ``63 V`` is a DC rating and ``stated`` is then False.

    Two ratings (``630 V DC / 250 V AC``) may stand together. Raises UnitError.
    """
    cleaned = clean(text)
    found = f"'{text.strip()}'" if text.strip() else "nothing"
    parts = [part for part in _BETWEEN.split(cleaned) if part]
    ratings = [_one(part, found, decimal_comma=decimal_comma) for part in parts]
    dc = [rating.dc_v for rating in ratings if rating.dc_v is not None]
    ac = [rating.ac_v for rating in ratings if rating.ac_v is not None]
    unsaid = any(not rating.stated for rating in ratings)
    if not ratings or len(dc) > 1 or len(ac) > 1 or (unsaid and len(ratings) > 1):
        raise UnitError(expected=f"{_EXPECTED}, one of each at most", found=found)
    return Rating(dc_v=dc[0] if dc else None, ac_v=ac[0] if ac else None, stated=not unsaid)


def _one(text: str, found: str, *, decimal_comma: bool) -> Rating:
    match = _STATED.fullmatch(text)
    value = match["value"].strip() if match else text
    if match and not value.endswith(("v", "V")):
        value = f"{value} V"  # 275~ says volts by its sign
    try:
        volts = parse_quantity(value, "V", decimal_comma=decimal_comma)
    except UnitError as error:
        asked = f"; {error.expected}" if "?" in error.expected else ""
        raise UnitError(expected=f"{_EXPECTED}{asked}", found=found) from error
    if volts <= 0:
        raise UnitError(expected=f"{_EXPECTED} above zero", found=found)
    if match and match["ac"]:
        return Rating(ac_v=volts)
    return Rating(dc_v=volts, stated=match is not None)
