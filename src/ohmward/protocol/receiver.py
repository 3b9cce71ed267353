"""Cuts what comes in into whole messages, however the bytes are chopped on their way."""

from enum import Enum
from typing import Final, Literal, Protocol

from ohmward.errors import ReplyMalformed


class NeedData(Enum):
    """What a receiver answers while the message is not whole yet."""

    NEED_DATA = "need data"


NEED_DATA: Final = NeedData.NEED_DATA
NeedDataType = Literal[NeedData.NEED_DATA]


class Receiver(Protocol):
    """Bytes in, whole messages out; nothing is lost in between and nothing is waited for."""

    def feed(self, data: bytes) -> None:
        """Take bytes as they came."""

    def next(self) -> bytes | NeedDataType:
        """The next whole message without its terminator, or NEED_DATA.

        Raises ReplyMalformed when what came cannot become a message.
        """

    @property
    def trailing(self) -> bytes:
        """Bytes that came and belong to no message yet."""


class LineReceiver:
    """Messages that end with a terminator, each no longer than ``longest`` bytes."""

    def __init__(self, termination: bytes, longest: int = 65536) -> None:
        if not termination:
            raise ValueError("a line needs a terminator")
        self._termination = termination
        self._longest = longest
        self._buffer = bytearray()
        self._searched = 0

    def feed(self, data: bytes) -> None:
        """Take bytes as they came."""
        self._buffer += data

    def next(self) -> bytes | NeedDataType:
        """The next line without its terminator, or NEED_DATA; ReplyMalformed when too long."""
        end = self._buffer.find(self._termination, self._searched)
        if end > self._longest or (end < 0 and len(self._buffer) > self._longest):
            self._drop()
            raise ReplyMalformed(f"more than {self._longest} bytes without a terminator")
        if end < 0:
            self._searched = max(0, len(self._buffer) - len(self._termination) + 1)
            return NEED_DATA
        line = bytes(self._buffer[:end])
        del self._buffer[: end + len(self._termination)]
        self._searched = 0
        return line

    @property
    def trailing(self) -> bytes:
        """Bytes that came and belong to no line yet."""
        return bytes(self._buffer)

    def skip(self, count: int) -> None:
        """Take so many bytes away that are no line."""
        del self._buffer[:count]
        self._searched = 0

    def _drop(self) -> None:
        self._buffer.clear()
        self._searched = 0
