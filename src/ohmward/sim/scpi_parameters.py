"""What may stand behind a SCPI header: numbers with suffixes, choices, booleans, channel lists."""

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Protocol

from ohmward.sim.scpi_status import ScpiError

# SCPI-1999 volume 1, 7.2 and IEEE 488.2 table 7-2; "M" alone is milli, MHZ and MOHM are mega
MULTIPLIERS = {
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
    "": 1.0,
}
MEGA_UNITS = frozenset({"HZ", "OHM"})

_NUMBER = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+)(?:\s*E\s*[+-]?\s*\d+)?)\s*([A-Z][A-Z0-9/.\-]*)?$")
_RADIX = re.compile(r"#(?:H([0-9A-F]+)|Q([0-7]+)|B([01]+))$")
_SPECIAL = {
    "INF": 9.9e37,
    "INFINITY": 9.9e37,
    "NINF": -9.9e37,
    "NINFINITY": -9.9e37,
    "NAN": 9.91e37,
}
_CHANNEL = re.compile(r"\d{1,6}$")
MOST_CHANNELS = 1000


def short_form(mnemonic: str) -> str:
    """The short form of a mnemonic (SCPI-1999 volume 1, 6.2.1).

    Four letters or fewer stay as they are; else the first four, or the first three when the
    fourth is a vowel: FREQuency → FREQ, IMMediate → IMM.
    """
    letters = mnemonic.upper()
    if len(letters) <= 4:
        return letters
    return letters[:3] if letters[3] in "AEIOU" else letters[:4]


def matches(text: str, mnemonic: str) -> bool:
    """Whether upper-case ``text`` is the short or the long form of ``mnemonic``."""
    return text in (mnemonic.upper(), short_form(mnemonic))


def split_parameters(text: str) -> list[str]:
    """Split at the commas outside quotes and parentheses; raise −102, −103 or −151."""
    if not text:
        return []
    parts: list[str] = []
    start = depth = 0
    quote = ""
    for position, character in enumerate(text):
        if quote:
            quote = "" if character == quote else quote
        elif character in "\"'":
            quote = character
        elif character == "(":
            depth += 1
        elif character == ")":
            depth -= 1
        elif character == "," and depth == 0:
            parts.append(text[start:position].strip())
            start = position + 1
    if quote:
        raise ScpiError(-151, text)
    if depth:
        raise ScpiError(-171, text)
    parts.append(text[start:].strip())
    if not all(parts):
        raise ScpiError(-102, text)
    return parts


class Parameter(Protocol):
    """One parameter of a command."""

    def parse(self, text: str) -> object:
        """The value of ``text``; raises ScpiError."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Number:
    """A number in ``unit``; beyond the bounds it is −222, and the old value stays."""

    minimum: float = -math.inf
    maximum: float = math.inf
    default: float = 0.0
    unit: str = ""

    def named(self, text: str) -> float | None:
        """The value of MINimum, MAXimum or DEFault; None for anything else."""
        for name, value in (
            ("MINimum", self.minimum),
            ("MAXimum", self.maximum),
            ("DEFault", self.default),
        ):
            if matches(text, name):
                return value
        return None

    def parse(self, text: str) -> float:
        """The value in the base unit."""
        upper = text.upper()
        value = self.named(upper)
        if value is None:
            value = _SPECIAL.get(upper)
        if value is None:
            value = self._literal(upper)
        if not self.minimum <= value <= self.maximum:
            raise ScpiError(-222, text)
        return value

    def _literal(self, upper: str) -> float:
        radix = _RADIX.match(upper)
        if radix:
            for digits, base in zip(radix.groups(), (16, 8, 2), strict=True):
                if digits:
                    return float(int(digits, base))
        found = _NUMBER.match(upper)
        if found is None:
            raise ScpiError(-121 if upper[:1] in "+-.0123456789" else data_error(upper), upper)
        digits, suffix = found.groups()
        value = float(digits.replace(" ", ""))
        return value * self._multiplier(suffix) if suffix else value

    def _multiplier(self, suffix: str) -> float:
        if not self.unit:
            raise ScpiError(-138, suffix)
        if not suffix.endswith(self.unit):
            raise ScpiError(-131, suffix)
        prefix = suffix[: len(suffix) - len(self.unit)]
        if prefix == "M" and self.unit in MEGA_UNITS:
            return 1e6
        try:
            return MULTIPLIERS[prefix]
        except KeyError:
            raise ScpiError(-131, suffix) from None


def data_error(text: str) -> int:
    """The error for data of the wrong kind where a number is expected."""
    return -158 if text[:1] in "\"'" else -178 if text[:1] == "(" else -104


@dataclass(frozen=True, kw_only=True, slots=True)
class Whole(Number):
    """A whole number; fractions are rounded, as IEEE 488.2 has it."""

    def parse(self, text: str) -> int:
        """The rounded value."""
        return round(Number.parse(self, text))


@dataclass(frozen=True, slots=True)
class Boolean:
    """ON, OFF, or a number: rounded, anything but 0 is ON."""

    def parse(self, text: str) -> bool:
        """The state."""
        upper = text.upper()
        if upper in ("ON", "OFF"):
            return upper == "ON"
        return Whole().parse(text) != 0


@dataclass(frozen=True, slots=True)
class Choice:
    """Character data: one of these mnemonics, in short or long form; answers the short one."""

    mnemonics: Sequence[str]

    def parse(self, text: str) -> str:
        """The short form of the choice."""
        upper = text.upper()
        for mnemonic in self.mnemonics:
            if matches(upper, mnemonic):
                return short_form(mnemonic)
        if upper[:1] in "+-.0123456789#":
            raise ScpiError(-128, text)
        raise ScpiError(-224 if upper[:1].isalpha() else -104, text)


@dataclass(frozen=True, slots=True)
class Quoted:
    """A string in quotes, one of those allowed; upper and lower case are the same."""

    allowed: frozenset[str]

    def parse(self, text: str) -> str:
        """The string in upper case."""
        if len(text) < 2 or text[0] not in "\"'" or text[-1] != text[0]:
            raise ScpiError(-104, text)
        inner = text[1:-1].upper()
        if inner not in self.allowed:
            raise ScpiError(-224, text)
        return inner


@dataclass(frozen=True, slots=True)
class ChannelList:
    """A channel list ``(@101,103:105)``; a channel that does not exist is −222."""

    channels: Mapping[str, object] | frozenset[str] = field(default_factory=frozenset)

    def parse(self, text: str) -> tuple[str, ...]:
        """The channels in the order written, ranges unfolded."""
        if text[:1] != "(":
            raise ScpiError(-104, text)
        if not text.startswith("(@") or not text.endswith(")"):
            raise ScpiError(-171, text)
        named: list[str] = []
        for item in text[2:-1].split(","):
            named += self._unfold(item.strip())
            if len(named) > MOST_CHANNELS:
                raise ScpiError(-222, text)
        for channel in named:
            if channel not in self.channels:
                raise ScpiError(-222, channel)
        return tuple(named)

    def _unfold(self, item: str) -> list[str]:
        first, colon, last = item.partition(":")
        if not _CHANNEL.match(first) or (colon and not _CHANNEL.match(last)):
            raise ScpiError(-171, item)
        if not colon:
            return [first]
        start, end = int(first), int(last)
        if abs(end - start) > MOST_CHANNELS:
            raise ScpiError(-222, item)
        direction = 1 if end >= start else -1
        return [str(channel) for channel in range(start, end + direction, direction)]
