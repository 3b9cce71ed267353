"""What becomes of a reply on a bad line: each takes the bytes and a source of chance."""

import random
import re
from collections.abc import Callable

_NUMBER = re.compile(rb"[+-]?\d+\.?\d*(?:[eE][+-]?\d+)?")


def _lost(reply: bytes, draw: random.Random) -> bytes:
    if len(reply) < 3:
        return reply[-1:]
    start = draw.randrange(len(reply) - 2)
    return reply[:start] + reply[start + draw.randint(1, len(reply) - 1 - start) :]


def _truncated(reply: bytes, draw: random.Random) -> bytes:
    return reply[: draw.randrange(max(1, len(reply) - 1))] + reply[-1:]


def _unterminated(reply: bytes, draw: random.Random) -> bytes:
    return reply[: draw.randrange(max(1, len(reply)))]


def _garbage(reply: bytes, draw: random.Random) -> bytes:
    return bytes(draw.choice(b"\x00\x07#@~zQ!?,.;9-") for _ in range(len(reply))) + b"\n"


def _non_ascii(reply: bytes, draw: random.Random) -> bytes:
    place = draw.randrange(max(1, len(reply) - 1))
    return reply[:place] + bytes((draw.randrange(0x80, 0x100),)) + reply[place + 1 :]


def _comma(reply: bytes, _draw: random.Random) -> bytes:
    return reply.replace(b".", b",")


MUTATIONS: dict[str, Callable[[bytes, random.Random], bytes]] = {
    "lost": _lost,
    "truncated": _truncated,
    "unterminated": _unterminated,
    "garbage": _garbage,
    "non-ascii": _non_ascii,
    "comma": _comma,
}


_TERSE = re.compile(rb"([A-Za-z]+)([+-]?\d+(?:\.\d*)?)(\s*)")


def sets(message: bytes) -> bool:
    """Whether a command sets something: ``VOLT 5`` and, without a blank, ``U0500.0``."""
    header, _, values = message.partition(b" ")
    if b"?" in header:
        return False
    return bool(values.strip()) or _TERSE.fullmatch(message) is not None


def clamp(message: bytes) -> bytes:
    """A setting whose first number is halved; one without a number stays as it is."""
    terse = _TERSE.fullmatch(message)
    if terse is not None:  # the instrument wants its digits as they are
        letters, number, end = terse.groups()
        decimals = len(number.partition(b".")[2])
        return letters + b"%0*.*f" % (len(number), decimals, float(number) / 2.0) + end
    header, space, rest = message.partition(b" ")
    halved = _NUMBER.sub(lambda found: b"%.6E" % (float(found.group()) / 2.0), rest, count=1)
    return header + space + halved
