"""The forms of SCPI-1999 and IEEE 488.2: mnemonics, errors, channel lists, strings and blocks."""

import re
from collections.abc import Iterable
from typing import NamedTuple

from ohmward.errors import ReplyMalformed

_VOWELS = frozenset("AEIOU")


class ScpiError(NamedTuple):
    """One entry of an instrument's error queue; code 0 means that the queue is empty."""

    code: int
    text: str


_ERROR = re.compile(rb'\s*([+-]?\d{1,5})\s*,\s*"((?:[^"]|"")*)"\s*')


def read_error(reply: bytes) -> ScpiError:
    """Read a reply to ``SYSTem:ERRor?``, such as ``-113,"Undefined header"``.

    A doubled quote inside the text stands for one (IEEE 488.2 §8.7.8). Raises ReplyMalformed.
    """
    found = _ERROR.fullmatch(reply)
    if found is None:
        raise ReplyMalformed(f"{reply!r} is not an entry of an error queue")
    text = found[2].decode("ascii", "backslashreplace").replace('""', '"')
    return ScpiError(int(found[1]), text)


def write_error(error: ScpiError) -> bytes:
    """Write an entry as an instrument sends it; the inverse of ``read_error``."""
    quoted = error.text.replace('"', '""')
    return f'{error.code},"{quoted}"'.encode("ascii")


def event_bit(code: int) -> int | None:
    """The bit of the standard event status register that an error sets; None for no error.

    −1xx command error 5, −2xx execution error 4, −3xx and positive device error 3, −4xx query
    error 2 (SCPI-1999 vol. 2 §21.8.9-12).
    """
    if code == 0:
        return None
    if code > 0:
        return 3
    return {1: 5, 2: 4, 3: 3, 4: 2}.get(-code // 100)


def short_form(mnemonic: str) -> str:
    """The short form of a whole mnemonic: IMMEDIATE → IMM, FREQUENCY → FREQ, VOLTAGE → VOLT.

    Four letters or fewer stay; else the first four, or three where the fourth is a vowel
    (SCPI-1999 vol. 1 §6.2.1). A number at the end is kept: OUTPUT2 → OUTP2.
    """
    letters = mnemonic.upper().rstrip("0123456789")
    digits = mnemonic[len(letters) :]
    if len(letters) <= 4:
        return letters + digits
    return letters[: 3 if letters[3] in _VOWELS else 4] + digits


def spellings(word: str) -> frozenset[str]:
    """What an instrument may send for a word that the driver writes as ``SHORt``.

    The capitals are the short form, the whole is the long form; anything else is not the word.
    A word all in capitals has one spelling.
    """
    capitals = "".join(letter for letter in word if not letter.islower())
    return frozenset({capitals.upper(), word.upper()})


_CHANNEL_LIST = re.compile(r"\(@\s*([0-9,:\s]*)\)")
_RANGE = re.compile(r"\s*(\d{1,9})\s*(?::\s*(\d{1,9})\s*)?")
MOST_CHANNELS = 10_000


def read_channels(text: str) -> tuple[int, ...]:
    """Read a channel list: ``(@1,3:5)`` → 1, 3, 4, 5; ``(@)`` is empty (SCPI-1999 vol. 1 §8.3.2).

    A range may run downwards. Raises ReplyMalformed for anything else, and for a list that
    names a channel twice or more than 10 000 of them.
    """
    found = _CHANNEL_LIST.fullmatch(text.strip())
    if found is None:
        raise ReplyMalformed(f"{text!r} is not a channel list")
    if not found[1].strip():
        return ()
    channels: list[int] = []
    for item in found[1].split(","):
        ends = _RANGE.fullmatch(item)
        if ends is None:
            raise ReplyMalformed(f"{text!r} is not a channel list: {item!r}")
        first = int(ends[1])
        last = first if ends[2] is None else int(ends[2])
        if abs(last - first) + len(channels) >= MOST_CHANNELS:
            raise ReplyMalformed(f"{text!r} names more than {MOST_CHANNELS} channels")
        channels.extend(range(first, last + 1) if last >= first else range(first, last - 1, -1))
    if len(set(channels)) != len(channels):
        raise ReplyMalformed(f"{text!r} names a channel twice")
    return tuple(channels)


def write_channels(channels: Iterable[int]) -> str:
    """Write a channel list without ranges, which every scanner understands: ``(@101,102)``."""
    return f"(@{','.join(str(channel) for channel in channels)})"


def read_string(text: str) -> str:
    """Take the quotes off a string reply; a doubled quote stands for one.

    Text without quotes is returned as it is: instruments answer words either way.
    """
    if len(text) >= 2 and text[0] == text[-1] and text[0] in "\"'":
        quote = text[0]
        inner = text[1:-1]
        if quote in inner.replace(quote * 2, ""):
            raise ReplyMalformed(f"{text!r} has a quote inside the quotes")
        return inner.replace(quote * 2, quote)
    if '"' in text or "'" in text:
        raise ReplyMalformed(f"{text!r} has a quote without its fellow")
    return text


def read_block(data: bytes) -> tuple[bytes, bytes] | None:
    """Read an arbitrary block at the start of ``data``: its content and what follows it.

    ``#<n><length><bytes>`` has its length; ``#0<bytes><NL>`` ends with the message, its NL
    included (IEEE 488.2 §8.7.9-10). None while bytes are still missing; raises ReplyMalformed
    when it is no block.
    """
    if not data:
        return None
    if data[:1] != b"#" or (len(data) > 1 and not data[1:2].isdigit()):
        raise ReplyMalformed(f"{data[:20]!r} does not start a block")
    if len(data) < 2:
        return None
    digits = data[1] - 0x30
    if digits == 0:
        return (data[2:-1], b"") if data.endswith(b"\n") else None
    length = data[2 : 2 + digits]
    if length and not length.isdigit():
        raise ReplyMalformed(f"{data[:20]!r} has a block length that is no number")
    if len(length) < digits:
        return None
    start = 2 + digits
    end = start + int(length)
    return (data[start:end], data[end:]) if len(data) >= end else None


def write_block(content: bytes) -> bytes:
    """Write a definite block: ``#15hello``."""
    length = str(len(content))
    return f"#{len(length)}{length}".encode("ascii") + content
