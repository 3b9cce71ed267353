"""Replies as a driver lays them out: compiled once, then bytes to values and back."""

from collections.abc import Callable, Mapping, Sequence
from typing import NamedTuple

from ohmward.errors import ReplyMalformed
from ohmward.protocol.fields import FieldReader, Value, reader_of, writer_of
from ohmward.protocol.manner import Manner
from ohmward.setup.driver_replies import Reply, ReplyField
from ohmward.terms.status import Status


class Decoded(NamedTuple):
    """A reply's values by field name, what their last digits weigh, and what they are worth.

    A number that is a special value (overflow, not a number) is NaN, and ``status`` says why.
    """

    values: dict[str, Value]
    resolutions: dict[str, float]
    status: Status


class Layout(NamedTuple):
    """A compiled reply layout."""

    decode: Callable[[bytes], Decoded]
    encode: Callable[[Mapping[str, Value]], bytes]


def compile_layout(reply: Reply, manner: Manner) -> Layout:
    """Compile a layout of text fields, by position or by label.

    ``decode`` raises ReplyMalformed unless the whole message has exactly the layout's shape;
    ``encode`` is its inverse, as an instrument would send it.
    """
    readers = tuple((one.name, reader_of(one, manner)) for one in reply.fields)
    writers = tuple((one, writer_of(one, manner)) for one in reply.fields)
    unframe = _unframer(reply)
    separator = reply.separator.encode("ascii")
    split = _splitter(reply.fields, separator)
    arrange = _by_label(reply) if reply.by == "label" else _by_position(reply)

    def decode(message: bytes) -> Decoded:
        return _read(arrange(split(unframe(message))), readers, message)

    def encode(values: Mapping[str, Value]) -> bytes:
        parts: list[str] = []
        for one, write in writers:
            sent = values[one.name]
            several = sent if one.repeats and isinstance(sent, tuple) else (sent,)
            parts.extend(one.label + write(value) for value in several)
        return f"{reply.starts_with}{reply.separator.join(parts)}{reply.ends_with}".encode("ascii")

    return Layout(decode, encode)


def _read(
    parts: Sequence[bytes | list[bytes]],
    readers: tuple[tuple[str, FieldReader], ...],
    message: bytes,
) -> Decoded:
    values: dict[str, Value] = {}
    resolutions: dict[str, float] = {}
    status = Status.OK
    try:
        for (name, read), part in zip(readers, parts, strict=True):
            if isinstance(part, bytes):
                value, resolution, worth = read(part)
            else:
                value, resolution, worth = _read_all(read, part)
            values[name] = value
            if resolution:
                resolutions[name] = resolution
            if worth is not Status.OK and (status is Status.OK or name == "status"):
                status = worth
    except ReplyMalformed as error:
        raise ReplyMalformed(f"{error} in the reply {message[:200]!r}") from None
    return Decoded(values, resolutions, status)


def _read_all(read: FieldReader, parts: list[bytes]) -> tuple[Value, float, Status]:
    status = Status.OK
    values = []
    for part in parts:
        value, _, worth = read(part)
        values.append(value)
        status = status if worth is Status.OK else worth
    return tuple(values), 0.0, status  # type: ignore[return-value]


def _unframer(reply: Reply) -> Callable[[bytes], bytes]:
    """Takes off the text that every reply starts and ends with."""
    start, end = reply.starts_with.encode("ascii"), reply.ends_with.encode("ascii")
    if not start and not end:
        return lambda message: message

    def unframe(message: bytes) -> bytes:
        if (
            len(message) < len(start) + len(end)
            or not message.startswith(start)
            or not message.endswith(end)
        ):
            raise ReplyMalformed(f"{message[:200]!r} does not start and end as it must")
        return message[len(start) : len(message) - len(end)]

    return unframe


def _splitter(fields: tuple[ReplyField, ...], separator: bytes) -> Callable[[bytes], list[bytes]]:
    """Splits at the separator; outside quotes and brackets where fields may hold some."""
    if any(one.kind in ("text", "word", "channels", "ignored") for one in fields):
        return lambda message: split_outside(message, separator)
    return lambda message: message.split(separator)


def split_outside(message: bytes, separator: bytes) -> list[bytes]:
    """Split where the separator stands outside quotes and outside ``(…)``."""
    if b'"' not in message and b"'" not in message and b"(" not in message:
        return message.split(separator)
    parts: list[bytes] = []
    start = at = depth = 0
    quote = b""
    while at < len(message):
        byte = message[at : at + 1]
        if quote:
            quote = b"" if byte == quote else quote
        elif byte in (b'"', b"'"):
            quote = byte
        elif byte == b"(":
            depth += 1
        elif byte == b")":
            depth -= 1
        elif depth == 0 and message.startswith(separator, at):
            parts.append(message[start:at])
            at += len(separator)
            start = at
            continue
        at += 1
    parts.append(message[start:])
    return parts


def _by_position(reply: Reply) -> Callable[[list[bytes]], Sequence[bytes | list[bytes]]]:
    count = len(reply.fields)
    if reply.fields[-1].repeats:

        def gather(parts: list[bytes]) -> Sequence[bytes | list[bytes]]:
            if len(parts) < count:
                raise ReplyMalformed(f"{len(parts)} fields came, not {count} or more")
            return [*parts[: count - 1], parts[count - 1 :]]

        return gather

    def check(parts: list[bytes]) -> Sequence[bytes]:
        if len(parts) != count:
            raise ReplyMalformed(f"{len(parts)} fields came, not {count}: {parts!r}")
        return parts

    return check


def _by_label(reply: Reply) -> Callable[[list[bytes]], Sequence[bytes]]:
    """Fields in any order, each known by the text in front of it, each exactly once.

    One field may have no label: it is what no label fits.
    """
    labels = [one.label.encode("ascii") for one in reply.fields]
    longest_first = sorted(range(len(labels)), key=lambda index: -len(labels[index]))

    def arrange(parts: list[bytes]) -> Sequence[bytes]:
        found: dict[int, bytes] = {}
        for part in parts:
            text = part.strip(b" ")
            for index in longest_first:
                if text.startswith(labels[index]):
                    break
            else:
                raise ReplyMalformed(f"{part!r} starts with no label that is known")
            if index in found:
                raise ReplyMalformed(f"{labels[index]!r} came twice")
            found[index] = text[len(labels[index]) :]
        if len(found) != len(labels):
            raise ReplyMalformed(f"{len(found)} labels came, not {len(labels)}")
        return [found[index] for index in range(len(labels))]

    return arrange
