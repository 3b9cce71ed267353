"""Replies in fixed columns: text fields found by their offset in the line."""

from collections.abc import Mapping

from ohmward.errors import ReplyMalformed
from ohmward.protocol.fields import Value, reader_of, writer_of
from ohmward.protocol.layout import Decoded, Layout
from ohmward.protocol.manner import Manner
from ohmward.setup.driver_replies import Reply
from ohmward.terms.status import Status


def compile_columns(reply: Reply, manner: Manner) -> Layout:
    """Compile a layout of columns; the line must be exactly as long as its last column ends.

    Offsets count from the start of the line. What stands between columns is not looked at, but
    for ``starts_with`` and ``ends_with``, which must be there.
    """
    start, end = reply.starts_with.encode("ascii"), reply.ends_with.encode("ascii")
    columns = [
        (one.name, one.at or 0, (one.at or 0) + (one.length or 1), reader_of(one, manner))
        for one in reply.fields
    ]
    writers = [(one, writer_of(one, manner)) for one in reply.fields]
    length = max(stop for _, _, stop, _ in columns) + len(end)

    def decode(message: bytes) -> Decoded:
        if len(message) != length:
            raise ReplyMalformed(f"{message[:200]!r} has {len(message)} characters, not {length}")
        if not message.startswith(start) or not message.endswith(end):
            raise ReplyMalformed(f"{message[:200]!r} does not start and end as it must")
        values: dict[str, Value] = {}
        resolutions: dict[str, float] = {}
        status = Status.OK
        for name, first, stop, read in columns:
            value, resolution, worth = read(message[first:stop])
            values[name] = value
            if resolution:
                resolutions[name] = resolution
            if worth is not Status.OK and (status is Status.OK or name == "status"):
                status = worth
        return Decoded(values, resolutions, status)

    def encode(values: Mapping[str, Value]) -> bytes:
        line = bytearray(b" " * (length - len(end)) + end)
        line[: len(start)] = start
        for one, write in writers:
            at, width = one.at or 0, one.length or 1
            text = write(values[one.name]).rjust(width).encode("ascii")
            if len(text) > width:
                raise ValueError(f"{text!r} does not fit into {one.name}")
            line[at : at + width] = text
        return bytes(line)

    return Layout(decode, encode)
