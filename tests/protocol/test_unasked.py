"""Meters that talk unasked: found again after garbage, agreed on twice, each number both ways."""

from collections.abc import Iterable
from math import isnan
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.errors import OhmwardError, Problems, ReplyMalformed
from ohmward.protocol.checks import crc16_ccitt, crc16_modbus, sum8, xor8
from ohmward.protocol.codec import Codec, codec_of
from ohmward.protocol.fields import Value
from ohmward.protocol.frames import FrameReceiver, sealed
from ohmward.protocol.receiver import NEED_DATA, Receiver
from ohmward.setup.driver import Driver, load_driver
from ohmward.setup.driver_tables import FrameTable
from ohmward.terms.status import Status


def driver_named(name: str) -> Driver:
    driver = load_driver(name, Path(), Problems())
    assert driver is not None
    return driver


LINES = driver_named("handheld-stream")
FRAMES = driver_named("handheld-frames")
CODECS: dict[str, Codec] = {"lines": codec_of(LINES), "frames": codec_of(FRAMES)}
LAYOUTS = {
    "lines": CODECS["lines"].layout(LINES.reading["impedance"]),
    "frames": CODECS["frames"].layout(FRAMES.reading["impedance"]),
}

LINE_VALUES: list[tuple[bytes, dict[str, Value], Status]] = [
    (
        b"P=CSD A=+100.21n B=+0.0012 F=1k V=0.60 S=0",
        {"pair": "Cs-D", "first": 100.21e-9, "second": 0.0012, "frequency_hz": 1e3, "level_v": 0.6},
        Status.OK,
    ),
    (
        b"P=RX A=-1.2345k B=+12.35M F=120 V=0.60 S=2",
        {"pair": "R-X", "first": -1234.5, "second": 12.35e6, "frequency_hz": 120.0, "level_v": 0.6},
        Status.OK,
    ),
    (
        b"P=LSQ A=+4.7123m B=+35.10 F=100k V=0.60 S=3",
        {"pair": "Ls-Q", "first": 4.7123e-3, "second": 35.1, "frequency_hz": 1e5, "level_v": 0.6},
        Status.UNBALANCED,
    ),
]


@pytest.mark.parametrize(("line", "values", "status"), LINE_VALUES)
def test_lines(line: bytes, values: dict[str, Value], status: Status) -> None:
    decoded = LAYOUTS["lines"].decode(line)
    assert {name: decoded.values[name] for name in values} == {
        name: value if isinstance(value, str) else pytest.approx(value)
        for name, value in values.items()
    }
    assert decoded.status is status


def test_the_last_digit_of_a_line_weighs_what_its_suffix_says() -> None:
    decoded = LAYOUTS["lines"].decode(LINE_VALUES[0][0])
    assert decoded.resolutions["first"] == pytest.approx(0.01e-9)
    assert decoded.resolutions["second"] == pytest.approx(1e-4)


def test_overload_of_a_line_is_no_number() -> None:
    decoded = LAYOUTS["lines"].decode(b"P=CSD A=+9.9E37 B=+9.9E37 F=1k V=0.60 S=1")
    assert isnan(float(decoded.values["first"]))  # type: ignore[arg-type]
    assert decoded.status is Status.OVERLOAD


@pytest.mark.parametrize(
    "line",
    [
        b"A=+100.21n B=+0.0012 F=1k V=0.60 S=0",
        b"P=CSD A=+100.21n B=+0.0012 F=1k V=0.60 S=0 S=0",
        b"P=CSD A=+100.21q B=+0.0012 F=1k V=0.60 S=0",
        b"P=CSD A=+100.21nn B=+0.0012 F=1k V=0.60 S=0",
        b"P=CSD A=+100,21n B=+0.0012 F=1k V=0.60 S=0",
        b"P=XYZ A=+100.21n B=+0.0012 F=1k V=0.60 S=0",
        b"P=CSD A=+100.21n B=+0.0012 F=1M V=0.60 S=0",
        b"P=CSD A=n B=+0.0012 F=1k V=0.60 S=0",
        b"00.21n B=+0.0012 F=1k V=0.60 S=0",
        b"",
    ],
)
def test_lines_that_cannot_be(line: bytes) -> None:
    with pytest.raises(ReplyMalformed):
        LAYOUTS["lines"].decode(line)


def frame_by_hand(
    pair: int, frequency: int, state: int, digits: str, scale: int, digits2: str, scale2: int
) -> bytes:
    """A frame put together from docs/protocols/handheld-frames.md, not by our encoder."""
    body = bytes([pair | frequency << 4, state])
    body += bytes.fromhex(digits) + bytes([scale]) + bytes.fromhex(digits2) + bytes([scale2])
    body += b"\x07\x00"
    crc = 0xFFFF
    for byte in body:
        for bit in range(7, -1, -1):
            top = crc >> 15 ^ (byte >> bit & 1)
            crc = (crc << 1 & 0xFFFF) ^ (0x1021 if top else 0)
    return b"\xa5\x5a" + body + crc.to_bytes(2, "big")


FRAME_VALUES = [
    (frame_by_hand(0, 2, 0, "100210", 3, "001200", 9), "Cs-D", 1e3, 100.21e-9, 0.0012, Status.OK),
    (frame_by_hand(5, 1, 0x40, "123456", 12, "000001", 15), "R-X", 120.0, -123.456, 1.0, Status.OK),
    (
        frame_by_hand(4, 4, 0x82, "471230", 7, "150000", 9),
        "Ls-Rs",
        1e5,
        4.7123e-3,
        -0.15,
        Status.OK,
    ),
    (frame_by_hand(1, 0, 1, "999999", 0, "999999", 0), "Cp-D", 100.0, None, None, Status.OVERLOAD),
    (frame_by_hand(3, 3, 3, "000000", 0, "000000", 0), "Ls-Q", 1e4, 0.0, 0.0, Status.UNBALANCED),
]


@pytest.mark.parametrize(
    ("frame", "pair", "frequency_hz", "first", "second", "status"), FRAME_VALUES
)
def test_frames_both_ways(
    frame: bytes,
    pair: str,
    frequency_hz: float,
    first: float | None,
    second: float | None,
    status: Status,
) -> None:
    if first == 100.21e-9:  # 100210 x 1e-12: picofarads
        assert frame[4:8] == bytes.fromhex("10021003")
    layout = LAYOUTS["frames"]
    decoded = layout.decode(frame)
    assert decoded.values["pair"] == pair
    assert decoded.values["frequency_hz"] == frequency_hz
    assert decoded.values["counter"] == 7
    assert decoded.status is status
    if first is not None:
        assert decoded.values["first"] == pytest.approx(first)
        assert decoded.values["second"] == pytest.approx(second)
    assert layout.encode(decoded.values) == frame


def test_the_last_digit_of_a_frame_weighs_its_multiplier() -> None:
    decoded = LAYOUTS["frames"].decode(FRAME_VALUES[0][0])
    assert decoded.resolutions["first"] == pytest.approx(1e-12)
    assert decoded.resolutions["second"] == pytest.approx(1e-6)


def test_a_nibble_that_is_no_digit() -> None:
    frame = bytearray(FRAME_VALUES[0][0])
    frame[4] = 0x1A
    with pytest.raises(ReplyMalformed):
        LAYOUTS["frames"].decode(bytes(frame))


def come_out(receiver: Receiver, pieces: Iterable[bytes]) -> list[bytes]:
    found = []
    for piece in pieces:
        receiver.feed(piece)
        while (message := receiver.next()) is not NEED_DATA:
            found.append(message)
    return found


A, B = FRAME_VALUES[0][0], FRAME_VALUES[1][0]
LINE_A, LINE_B = LINE_VALUES[0][0], LINE_VALUES[1][0]
END = b"\r\n"

# bytes as they come, and the messages that count: a mode counts from its second message on
STREAMS = [
    ("frames", A + A + A, [A, A]),
    ("frames", A, []),
    ("frames", b"\x00\xa5\xa5\x5a\x01" + A + A, [A]),
    ("frames", A[7:] + A + A, [A]),  # joined in the middle of a frame
    ("frames", A + A[:9] + A + A, [A, A]),  # bytes lost in the middle of a frame
    ("frames", A + A + B + B + B, [A, B, B]),
    ("frames", A + B + A + B, []),  # never twice the same
    ("frames", A + A + B + A, [A, A]),  # one stray frame of another mode
    ("frames", A + A[:-1] + bytes([A[-1] ^ 1]) + A, [A]),  # a wrong check
    ("lines", (LINE_A + END) * 3, [LINE_A, LINE_A]),
    ("lines", LINE_A[9:] + END + (LINE_A + END) * 2, [LINE_A]),
    ("lines", b"\xff\x00garbage" + END + (LINE_A + END) * 2, [LINE_A]),
    ("lines", (LINE_A + END) * 2 + (LINE_B + END) * 2, [LINE_A, LINE_B]),
]


@pytest.mark.parametrize(("kind", "stream", "counting"), STREAMS)
def test_streams_whole_in_pieces_and_with_more_behind(
    kind: str, stream: bytes, counting: list[bytes]
) -> None:
    codec = CODECS[kind]
    assert come_out(codec.receiver(), [stream]) == counting
    assert come_out(codec.receiver(), (bytes([byte]) for byte in stream)) == counting
    more = A[:5] if kind == "frames" else LINE_A[:5]
    receiver = codec.receiver()
    assert come_out(receiver, [stream + more]) == counting
    assert receiver.trailing == more


CHECKED: list[tuple[str, bytes, int]] = [
    # the check values of the CRC catalogue for b"123456789": MODBUS and CCITT-FALSE
    ("crc16-modbus", b"123456789", 0x4B37),
    ("crc16-ccitt", b"123456789", 0x29B1),
    ("sum8", b"123456789", 0xDD),  # 9 x 0x35 = 0x1DD
    ("xor8", b"123456789", 0x31),
]


@pytest.mark.parametrize(("name", "data", "value"), CHECKED)
def test_checks(name: str, data: bytes, value: int) -> None:
    function = {
        "crc16-modbus": crc16_modbus,
        "crc16-ccitt": crc16_ccitt,
        "sum8": sum8,
        "xor8": xor8,
    }[name]
    assert function(data) == value


TABLES = [
    FrameTable(header="A5 5A", length=9, check="sum8"),
    FrameTable(header="A5 5A", length=9, check="crc16-modbus", check_endian="little"),
    FrameTable(header="02", length_at=1, length_adds=3, check="xor8", check_from=1),
    FrameTable(header="7E7E", length_at=2, length_adds=0, check="crc16-ccitt"),
]


def a_frame(table: FrameTable, content: bytes) -> bytes:
    length = table.length or len(content)
    return sealed(table, bytearray(content[:length].ljust(length, b"\x11")))


@pytest.mark.parametrize("table", TABLES)
@given(
    garbage=st.lists(st.binary(max_size=12), min_size=4, max_size=4),
    contents=st.lists(st.binary(min_size=9, max_size=20), min_size=3, max_size=3),
)
def test_every_frame_is_found_between_garbage_without_its_header(
    table: FrameTable, garbage: list[bytes], contents: list[bytes]
) -> None:
    """Garbage that holds no header cannot hide a frame, whatever else is in it."""
    first = table.header_bytes[:1]
    frames = [a_frame(table, content) for content in contents]
    clean = [piece.replace(first, b"\x00") for piece in garbage]
    stream = clean[0]
    for frame, piece in zip(frames, clean[1:], strict=True):
        stream += frame + piece
    assert come_out(FrameReceiver(table), [stream]) == frames
    assert come_out(FrameReceiver(table), (bytes([byte]) for byte in stream)) == frames


@given(data=st.binary(max_size=200), kind=st.sampled_from(["lines", "frames"]))
def test_any_bytes_into_a_stream_and_its_layout(data: bytes, kind: str) -> None:
    for message in come_out(CODECS[kind].receiver(), [data]):
        LAYOUTS[kind].decode(message)  # what counts has been read once already
    try:
        LAYOUTS[kind].decode(data)
    except OhmwardError:
        return


@given(flips=st.lists(st.integers(0, 127), min_size=1, max_size=3, unique=True))
def test_a_damaged_frame_gives_no_number(flips: list[int]) -> None:
    """A CRC of 16 bits finds every error of up to three bits in a frame of this length."""
    damaged = bytearray(A)
    for bit in flips:
        damaged[bit // 8] ^= 1 << bit % 8
    assert FRAMES.frame is not None
    assert come_out(FrameReceiver(FRAMES.frame), [bytes(damaged)]) == []
