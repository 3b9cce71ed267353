"""Instruments that talk unasked: lines or frames, found again after garbage, agreed on twice."""

from collections.abc import Callable, Hashable

from ohmward.errors import ReplyMalformed
from ohmward.protocol.fields import Value
from ohmward.protocol.layout import Layout
from ohmward.protocol.receiver import NEED_DATA, LineReceiver, NeedDataType, Receiver
from ohmward.protocol.text import TextCodec
from ohmward.setup.driver import Driver
from ohmward.setup.driver_replies import Reply

Mode = tuple[Hashable, ...]


class AgreeingReceiver:
    """Lets whole messages through whose mode two messages in a row have agreed on.

    The mode is what a person turns on the instrument: pair, frequency, range. While it
    changes, a message may hold the old mode's number under the new mode's name: the first
    message of a new mode is therefore kept back. A message that the layout refuses is dropped
    and counted, and so is whatever the inner receiver has to skip to find the next message.
    """

    def __init__(
        self, inner: Receiver, mode_of: Callable[[bytes], Mode], *, agreement: bool
    ) -> None:
        self._inner = inner
        self._mode_of = mode_of
        # a meter whose driver names no such fields has one mode, and is always in it
        self._agreed: Mode | None = None if agreement else ()
        self._seen: Mode | None = None
        self.dropped = 0

    def feed(self, data: bytes) -> None:
        """Take bytes as they came."""
        self._inner.feed(data)

    @property
    def trailing(self) -> bytes:
        """Bytes that came and belong to no message yet."""
        return self._inner.trailing

    def next(self) -> bytes | NeedDataType:
        """The next message that counts, or NEED_DATA."""
        while True:
            try:
                message = self._inner.next()
            except ReplyMalformed:
                self.dropped += 1
                continue
            if message is NEED_DATA:
                return NEED_DATA
            try:
                mode = self._mode_of(message)
            except ReplyMalformed:
                self.dropped += 1
                self._seen = None
                continue
            agrees = mode == self._seen
            self._seen = mode
            if mode == self._agreed or agrees:
                self._agreed = mode
                return message
            self.dropped += 1


def mode_reader(
    driver: Driver, compile_reply: Callable[[Reply], Layout]
) -> Callable[[bytes], Mode]:
    """Reads from a message the values of the fields that must agree; raises ReplyMalformed."""
    layouts = [compile_reply(reading) for reading in driver.reading.values()]
    names = driver.agree

    def mode_of(message: bytes) -> Mode:
        problem: ReplyMalformed | None = None
        for layout in layouts:
            try:
                values = layout.decode(message).values
            except ReplyMalformed as error:
                problem = error
                continue
            return tuple(_known(values.get(name)) for name in names)
        raise problem or ReplyMalformed("the driver has no reading")

    return mode_of


def _known(value: Value | None) -> Hashable:
    return str(value)


class StreamCodec(TextCodec):
    """Lines that come unasked. A line that is cut, or is none of the driver's, is skipped."""

    def __init__(self, driver: Driver) -> None:
        super().__init__(driver)
        self._mode_of = mode_reader(driver, self.layout)

    @property
    def unasked(self) -> bool:
        """Yes."""
        return True

    def receiver(self, sent: bytes = b"", *, answers: bool = True) -> Receiver:
        """A receiver of the lines that count."""
        lines = LineReceiver(self._termination, self._driver.link.longest_reply)
        return AgreeingReceiver(lines, self._mode_of, agreement=bool(self._driver.agree))
