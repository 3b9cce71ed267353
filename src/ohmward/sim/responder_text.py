"""How a responder writes: numbers, words and whole replies, as a driver's data lays them out."""

from collections.abc import Mapping
from typing import Any

from ohmward.sim.meter_pairs import NOT_A_NUMBER, OVERFLOW
from ohmward.sim.plain import quantity


def switch_words(is_scpi: bool) -> dict[str, str]:
    """What on and off are called where a driver does not say."""
    return {"on": "ON", "off": "OFF"} if is_scpi else {"on": "1", "off": "0"}


def short_of(word: str) -> str:
    """The spelling that is sent: the capitals of ``SHORt``, or the word as it is."""
    capitals = "".join(letter for letter in word if not letter.islower())
    return capitals if capitals and word[:1].isupper() else word


def word_in(words: Mapping[str, str], text: str) -> str | None:
    """Our word for what the driver sent; None if it is none of them."""
    upper = text.upper()
    for ours, theirs in words.items():
        if upper in (theirs.upper(), short_of(theirs).upper()):
            return ours
    if set(words) == {"on", "off"} and upper in ("1", "0", "ON", "OFF"):
        return "on" if upper in ("1", "ON") else "off"
    return None


class Numbers:
    """The driver's way of writing numbers, for fields that do not state their own."""

    def __init__(self, table: Mapping[str, Any]) -> None:
        self._table = table

    def write(self, value: float, field: Mapping[str, Any]) -> str:
        """A number of SI units as this field sends it."""
        form = field.get("form") or self._table.get("form") or "NR3"
        width = field.get("width") or self._table.get("width")
        if abs(value) >= OVERFLOW:
            return f"{value:+.6E}"
        value /= quantity(field.get("factor", 1.0))
        if form == "NR1":
            return f"{round(value):0{width}d}" if width else str(round(value))
        if form == "NR2":
            decimals = field.get("decimals", self._table.get("decimals"))
            decimals = 6 if decimals is None else decimals
            plus = "+" if field.get("plus", self._table.get("plus")) else ""
            return f"{value:{plus}0{width}.{decimals}f}" if width else f"{value:{plus}.{decimals}f}"
        digits = width - 7 if width else 6  # sign, figure, point, E, sign, two figures
        plus = field.get("plus", self._table.get("plus", True))
        return f"{value:+.{digits}E}" if plus else f"{value: .{digits}E}"


class ReplyWriter:
    """Writes replies of one layout from values by field name."""

    def __init__(
        self, layout: Mapping[str, Any], numbers: Numbers, driver: Mapping[str, Any]
    ) -> None:
        fields = layout.get("fields", ())
        self._fields = [{"name": each} if isinstance(each, str) else dict(each) for each in fields]
        self._separator = layout.get("separator", ",")
        self._start = layout.get("starts_with", "")
        self._end = layout.get("ends_with", "")
        self._numbers = numbers
        self._driver = driver

    def write(self, values: Mapping[str, Any]) -> str:
        """The reply without its termination; a value that nobody has is sent as not a number."""
        parts: list[str] = []
        for field in self._fields:
            value = values.get(field["name"], values.get("", NOT_A_NUMBER))
            several = value if isinstance(value, tuple) and field.get("repeats") else (value,)
            parts += [str(field.get("label", "")) + self._field(each, field) for each in several]
        return f"{self._start}{self._separator.join(parts)}{self._end}"

    def _field(self, value: Any, field: Mapping[str, Any]) -> str:
        kind = field.get("kind", "number")
        if kind == "status":
            codes = field.get("codes") or self._driver.get("status", {})
            meaning = value if isinstance(value, str) else "ok"
            return next((code for code, word in codes.items() if word == meaning), "0")
        if kind == "channels":
            channels = value if isinstance(value, tuple) else ()
            return f"(@{','.join(channels)})"
        if kind == "flags":
            return "0"
        if kind in ("switch", "word"):
            return self._word(value, field, kind)
        if kind == "number":
            return self._number(float(value), field)
        return str(value)

    def _word(self, value: Any, field: Mapping[str, Any], kind: str) -> str:
        words = field.get("words") or ({"on": "1", "off": "0"} if kind == "switch" else {})
        if isinstance(value, bool):
            value = "on" if value else "off"
        if kind == "word" and value not in words:
            value = next(iter(words), value)  # nothing has been said of it: the first word
        return short_of(str(words.get(value, value)))

    def _number(self, value: float, field: Mapping[str, Any]) -> str:
        if abs(value) >= OVERFLOW:
            meaning = "overload" if abs(value) == OVERFLOW else "unbalanced"
            for text, word in self._driver.get("overflow", {}).items():
                if word == meaning:
                    return str(text)
        suffixes = field.get("suffixes")
        if suffixes:
            by_factor = sorted((float(factor), text) for text, factor in suffixes.items())
            fits = [each for each in by_factor if abs(value) >= each[0]]
            factor, text = fits[-1] if fits else by_factor[0]
            return self._numbers.write(value / factor, field) + str(text)
        return self._numbers.write(value, field) + str(field.get("suffix", ""))
