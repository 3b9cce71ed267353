"""Binary frames: found by header, length and check, found again after garbage, read by place."""

from collections.abc import Callable, Mapping

from ohmward.errors import ReplyMalformed
from ohmward.protocol.checks import CHECKS
from ohmward.protocol.fields import Value
from ohmward.protocol.layout import Decoded, Layout
from ohmward.protocol.manner import Manner
from ohmward.protocol.places import field_reader, put_field
from ohmward.protocol.receiver import NEED_DATA, NeedDataType, Receiver
from ohmward.protocol.stream import AgreeingReceiver, mode_reader
from ohmward.protocol.text import TextCodec
from ohmward.setup.driver import Driver
from ohmward.setup.driver_replies import Reply
from ohmward.setup.driver_tables import FrameTable
from ohmward.terms.status import Status

LONGEST_FRAME = 4096


class FrameReceiver:
    """Whole frames with a right check; whatever is between them is skipped and counted."""

    def __init__(self, frame: FrameTable) -> None:
        self._frame = frame
        self._header = frame.header_bytes
        self._check, self._check_length = CHECKS[frame.check]
        self._buffer = bytearray()
        self.skipped = 0

    def feed(self, data: bytes) -> None:
        """Take bytes as they came."""
        self._buffer += data

    @property
    def trailing(self) -> bytes:
        """Bytes that came and belong to no frame yet."""
        return bytes(self._buffer)

    def next(self) -> bytes | NeedDataType:
        """The next whole frame, header and check included, or NEED_DATA; never raises."""
        while True:
            self._find_header()
            length = self._length()
            if length is None or (length > 0 and len(self._buffer) < length):
                return NEED_DATA
            if length > 0:
                frame = bytes(self._buffer[:length])
                if self._is_right(frame):
                    del self._buffer[:length]
                    return frame
            self._skip(1)  # a header that was none: look for the next one behind it

    def _find_header(self) -> None:
        """Skip to the header, or to what may become one when more comes."""
        at = self._buffer.find(self._header)
        if at < 0:
            keep = len(self._header) - 1
            while keep and not self._header.startswith(self._buffer[-keep:]):
                keep -= 1
            at = max(0, len(self._buffer) - keep)
        self._skip(at)

    def _skip(self, count: int) -> None:
        self.skipped += count
        del self._buffer[:count]

    def _length(self) -> int | None:
        """Length of the frame at the start; None when it is not known yet, 0 when it cannot be."""
        frame = self._frame
        if len(self._buffer) < len(self._header):
            return None
        if frame.length is not None:
            return frame.length
        at = frame.length_at or 0
        if len(self._buffer) <= at:
            return None
        length = self._buffer[at] + frame.length_adds
        least = max(at + 1, len(self._header)) + self._check_length
        return length if least <= length <= LONGEST_FRAME else 0

    def _is_right(self, frame: bytes) -> bool:
        if not self._check_length:
            return True
        end = len(frame) - self._check_length
        sent = int.from_bytes(frame[end:], self._frame.check_endian)
        return sent == self._check(frame[self._frame.check_from : end])


def sealed(frame: FrameTable, body: bytearray) -> bytes:
    """A frame with its header, count and check put in: what an instrument sends."""
    check, check_length = CHECKS[frame.check]
    body[: len(frame.header_bytes)] = frame.header_bytes
    if frame.length_at is not None:
        body[frame.length_at] = len(body) - frame.length_adds
    end = len(body) - check_length
    if check_length:
        value = check(bytes(body[frame.check_from : end]))
        body[end:] = value.to_bytes(check_length, frame.check_endian)
    return bytes(body)


def compile_frame(reply: Reply, frame: FrameTable, manner: Manner) -> Layout:
    """Compile a layout by place; ``decode`` raises ReplyMalformed, ``encode`` is its inverse."""
    readers = [(field, field_reader(field, manner)) for field in reply.fields]
    scales = {field.name: field.factors for field in reply.fields if field.factors}
    needed = max((field.at or 0) + (field.length or 1) for field in reply.fields)
    length = frame.length or needed + CHECKS[frame.check][1]

    def decode(message: bytes) -> Decoded:
        if len(message) < needed:
            raise ReplyMalformed(f"a frame of {len(message)} bytes is too short: {message!r}")
        values: dict[str, Value] = {}
        resolutions: dict[str, float] = {}
        status = Status.OK
        for field, read in readers:
            value, resolution, worth = read(message)
            values[field.name] = value
            if resolution:
                resolutions[field.name] = resolution
            if worth is not Status.OK and (status is Status.OK or field.name == "status"):
                status = worth
        for field, _ in readers:
            if field.scaled_by or field.negative_by:
                _scale(field.name, _factor(field.scaled_by, scales, values), values, resolutions)
                if field.negative_by and values[field.negative_by]:
                    _scale(field.name, -1.0, values, resolutions)
        return Decoded(values, resolutions, status)

    def encode(values: Mapping[str, Value]) -> bytes:
        body = bytearray(length)
        for field in reply.fields:
            value = values[field.name]
            if field.scaled_by or field.negative_by:
                value = abs(float(value)) if field.negative_by else float(value)  # type: ignore[arg-type]
                value /= _factor(field.scaled_by, scales, values)
            put_field(body, field, value)
        return sealed(frame, body)

    return Layout(decode, encode)


def _factor(
    name: str, scales: Mapping[str, Mapping[str, float]], values: Mapping[str, Value]
) -> float:
    if not name:
        return 1.0
    factor = scales[name].get(str(values[name]))
    if factor is None:
        raise ReplyMalformed(f"{name} is {values[name]!r}, which scales by nothing that is named")
    return factor


def _scale(
    name: str, factor: float, values: dict[str, Value], resolutions: dict[str, float]
) -> None:
    value = values[name]
    if isinstance(value, float):
        values[name] = value * factor
    if name in resolutions:
        resolutions[name] *= abs(factor)


class FramesCodec(TextCodec):
    """Frames of bytes that come unasked."""

    def __init__(self, driver: Driver) -> None:
        super().__init__(driver)
        if driver.frame is None:
            raise LookupError("a driver with the codec 'frames' needs a [frame]")
        self._frame = driver.frame
        self._mode_of: Callable[[bytes], tuple[object, ...]] = mode_reader(driver, self.layout)

    @property
    def unasked(self) -> bool:
        """Yes."""
        return True

    def layout(self, reply: Reply) -> Layout:
        """Compile a reply's layout: by place in the frame."""
        return compile_frame(reply, self._frame, self._manner)

    def receiver(self, sent: bytes = b"", *, answers: bool = True) -> Receiver:
        """A receiver of the frames that count."""
        return AgreeingReceiver(
            FrameReceiver(self._frame), self._mode_of, agreement=bool(self._driver.agree)
        )


__all__ = ["FrameReceiver", "FramesCodec", "compile_frame", "sealed"]
