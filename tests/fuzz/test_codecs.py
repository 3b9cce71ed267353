"""Whatever bytes come in: a value with its status, a wish for more, or ReplyMalformed."""

from contextlib import suppress
from math import isfinite, isnan
from pathlib import Path

import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from ohmward.errors import LinkError, Problems, ReplyMalformed
from ohmward.instruments.transcript import Exchange, escaped, unescaped
from ohmward.protocol.codec import Codec, codec_of
from ohmward.protocol.layout import Layout
from ohmward.protocol.receiver import NEED_DATA
from ohmward.protocol.scpi import read_channels, read_error
from ohmward.setup.driver import Driver, load_driver
from ohmward.setup.resources import shipped
from ohmward.terms.status import Status

DRIVERS = sorted(path.stem for path in shipped("drivers").glob("*.toml"))


def driver_named(name: str) -> Driver:
    driver = load_driver(name, Path(), Problems())
    assert driver is not None
    return driver


CODECS: dict[str, tuple[Driver, Codec]] = {
    name: (driver, codec_of(driver)) for name in DRIVERS for driver in (driver_named(name),)
}

# pieces of what instruments send, so that chance gets past the first check
PIECES = st.sampled_from(
    [
        *(b"+1.234567E-07", b",", b"0", b"1", b"9.9E37", b"-9.900000E+37", b"\n", b"\r", b"\r\n"),
        *(b">", b"K", b"M", b"U0500.0", b"?1", b"(@101,102)", b"(@", b")", b'"', b"P=CSD ", b"A=+"),
        *(b"\xa5\x5a", b"\xa5", b"\x00", b"\xff", b"nan", b"inf", b"1e999", b"_", b" ", b"#210"),
    ]
)
BYTES = st.one_of(
    st.binary(max_size=64), st.lists(PIECES | st.binary(max_size=3), max_size=12).map(b"".join)
)


def layouts(driver: Driver, codec: Codec) -> list[Layout]:
    found = [codec.layout(setting.layout) for setting in driver.setting.values()]
    found += [codec.layout(reading) for reading in driver.reading.values()]
    found += [codec.layout(one.reply) for one in driver.action.values() if one.reply is not None]
    return found


@pytest.mark.parametrize("name", DRIVERS)
@given(message=BYTES)
@example(message=b"")
@example(message=b"1e308,1e308,0,1e308,1e308,1e308")
def test_any_bytes_are_a_finite_value_or_malformed(name: str, message: bytes) -> None:
    for layout in layouts(*CODECS[name]):
        try:
            values, resolutions, status = layout.decode(message)
        except ReplyMalformed:
            continue
        assert isinstance(status, Status)
        for value in values.values():
            if isinstance(value, float):
                assert isfinite(value) or (isnan(value) and status is not Status.OK)
        assert all(isfinite(one) and one >= 0 for one in resolutions.values())


@pytest.mark.parametrize("name", DRIVERS)
@given(
    chunks=st.lists(BYTES, max_size=6), answers=st.booleans(), sent=st.sampled_from([b"", b"M?"])
)
def test_any_stream_is_cut_into_messages_or_malformed(
    name: str, chunks: list[bytes], answers: bool, sent: bytes
) -> None:
    _, codec = CODECS[name]
    receiver = codec.receiver(sent, answers=answers)
    fed = 0
    for chunk in chunks:
        receiver.feed(chunk)
        fed += len(chunk)
        for _ in range(fed + 2):  # never more messages than bytes
            try:
                message = receiver.next()
            except LinkError:
                break
            if message is NEED_DATA:
                break
            assert isinstance(message, bytes)
        else:
            raise AssertionError("it gives messages without end")
    assert len(receiver.trailing) <= fed


@given(data=BYTES)
def test_any_bytes_as_an_error_or_a_channel_list(data: bytes) -> None:
    for read in (read_error, lambda raw: read_channels(raw.decode("latin-1"))):
        with suppress(ReplyMalformed):
            read(data)


@given(sent=st.binary(max_size=40), received=st.binary(max_size=40), error=st.text(max_size=20))
def test_a_transcript_s_line_is_read_as_it_was_written(
    sent: bytes, received: bytes, error: str
) -> None:
    exchange = Exchange(at_s=1.5, sent=sent, received=received, took_s=0.25, error=error)
    assert unescaped(escaped(sent)) == sent
    assert Exchange.from_line(exchange.as_line()) == exchange


LINES = st.one_of(
    st.text(max_size=40),
    st.builds(
        lambda sent, at: (
            f'{{"at_s": {at}, "sent": "{sent}", "received": "", "took_s": 0, "error": ""}}'
        ),
        st.text(alphabet='\\xq19"ué', max_size=6),
        st.sampled_from(["1", "null", '"x"', "[]", "1e999"]),
    ),
)


@given(line=LINES)
@example(line='{"at_s": 1, "sent": "\\\\q", "received": "", "took_s": 0, "error": ""}')
@example(line="[1, 2]")
def test_any_other_line_is_no_line_of_a_transcript(line: str) -> None:
    with suppress(ValueError):
        Exchange.from_line(line)
