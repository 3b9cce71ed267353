"""Lines with echo, prompt and acknowledgement: the terse supply's manual, byte by byte."""

from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.errors import InstrumentRefused, OhmwardError, Problems, ReplyMalformed
from ohmward.protocol.codec import codec_of
from ohmward.protocol.fields import Value
from ohmward.protocol.receiver import NEED_DATA
from ohmward.setup.driver import Driver, load_driver
from ohmward.terms.status import Status


def terse() -> Driver:
    driver = load_driver("terse-high-voltage-supply", Path(), Problems())
    assert driver is not None
    return driver


DRIVER = terse()
CODEC = codec_of(DRIVER)

# what is sent, whether it asks, all that comes back (docs/protocols/terse-high-voltage-supply.md),
# and the reply in it
EXCHANGES = [
    (b"U?", True, b"U?\rU0500.0\r>", b"U0500.0"),
    (b"U0500.0", False, b"U0500.0\rK\r>", b""),
    (b"T?", True, b"T?\rT HVS2000 0815\r>", b"T HVS2000 0815"),
    (b"M?", True, b"M?\rM+0499.8 +0.012 0\r>", b"M+0499.8 +0.012 0"),
    (b"N0", False, b"N0\rK\r>", b""),
]


@pytest.mark.parametrize(("sent", "answers", "back", "reply"), EXCHANGES)
def test_an_exchange_whole_in_pieces_and_with_more_behind(
    sent: bytes, answers: bool, back: bytes, reply: bytes
) -> None:
    whole = CODEC.receiver(sent, answers=answers)
    whole.feed(back)
    assert whole.next() == reply
    assert whole.trailing == b""

    pieces = CODEC.receiver(sent, answers=answers)
    for byte in back[:-1]:
        pieces.feed(bytes([byte]))
        assert pieces.next() is NEED_DATA
    pieces.feed(back[-1:])
    assert pieces.next() == reply

    trailing = CODEC.receiver(sent, answers=answers)
    trailing.feed(back + b"\rREADY\r>")
    assert trailing.next() == reply
    assert trailing.trailing == b"\rREADY\r>"


@pytest.mark.parametrize("answer", [b"?1", b"?2", b"?3"])
@pytest.mark.parametrize(("sent", "answers"), [(b"U9999.9", False), (b"X?", True)])
def test_refusals(sent: bytes, answers: bool, answer: bytes) -> None:
    receiver = CODEC.receiver(sent, answers=answers)
    receiver.feed(sent + b"\r" + answer + b"\r>")
    with pytest.raises(InstrumentRefused, match=r"\?"):
        receiver.next()


@pytest.mark.parametrize(
    ("sent", "answers", "back"),
    [
        (b"U?", True, b"U0500.0\rU?\r>"),  # no echo
        (b"U?", True, b"M?\rU0500.0\r>"),  # the echo of something else
        (b"U0500.0", False, b"U0500.0\rOK\r>"),  # another acknowledgement
        (b"U?", True, b"U?\rU0500.0\rU0500.0\r>"),  # two replies
        (b"U?", True, b"U?\rU0500.0\r\r>"),
    ],
)
def test_what_does_not_belong_to_the_exchange(sent: bytes, answers: bool, back: bytes) -> None:
    receiver = CODEC.receiver(sent, answers=answers)
    receiver.feed(back)
    with pytest.raises(ReplyMalformed):
        receiver.next()


VALUES: list[tuple[str, Value, bytes, bytes]] = [
    ("voltage", 500.0, b"U0500.0", b"U0500.0"),
    ("voltage", 2000.0, b"U2000.0", b"U2000.0"),
    ("voltage", 0.0, b"U0000.0", b"U0000.0"),
    ("current_limit", 2.5e-3, b"L2.500", b"L2.500"),
    ("current_limit", 1e-6, b"L0.001", b"L0.001"),
    ("output", True, b"N1", b"N1"),
    ("output", False, b"N0", b"N0"),
    ("watchdog", 5.0, b"W05", b"W05"),
]


@pytest.mark.parametrize(("name", "value", "sent", "reply"), VALUES)
def test_settings_both_ways(name: str, value: Value, sent: bytes, reply: bytes) -> None:
    setting = DRIVER.setting[name]
    assert CODEC.command(setting.set, setting).encode({"value": value}) == sent
    layout = CODEC.layout(setting.layout)
    assert layout.decode(reply).values["value"] == pytest.approx(value, rel=1e-12)
    assert layout.encode({"value": value}) == reply


@pytest.mark.parametrize(
    ("reply", "voltage", "current", "status"),
    [
        (b"M+0499.8 +0.012 0", 499.8, 12e-6, Status.OK),
        (b"M-0000.1 -0.001 1", -0.1, -1e-6, Status.OK),
        (b"M+0000.0 +0.000 2", 0.0, 0.0, Status.REFUSED),
    ],
)
def test_measured_values(reply: bytes, voltage: float, current: float, status: Status) -> None:
    layout = CODEC.layout(DRIVER.reading["voltage"])
    decoded = layout.decode(reply)
    assert decoded.values["voltage"] == voltage
    assert decoded.values["current"] == pytest.approx(current)
    assert decoded.resolutions["voltage"] == pytest.approx(0.1)
    assert decoded.resolutions["current"] == pytest.approx(1e-6)
    assert decoded.status is status
    assert layout.encode(decoded.values) == reply


@pytest.mark.parametrize(
    "reply",
    [
        b"M+0499.8 +0.012",
        b"M0499.8 +0.012 0",
        b"M+499.8 +0.012 0",
        b"M+0499.8 +0.012 7",
        b"M+0499,8 +0.012 0",
        b"+0499.8 +0.012 0",
        b"N+0499.8 +0.012 0",
        b"M+0499.8  +0.012 0",
    ],
)
def test_measured_values_that_cannot_be(reply: bytes) -> None:
    with pytest.raises(ReplyMalformed):
        CODEC.layout(DRIVER.reading["voltage"]).decode(reply)


def test_words_keep_their_case(tmp_path: Path) -> None:
    """Terse instruments mean different things by ``a`` and ``A``."""
    (tmp_path / "own.toml").write_text(
        """
        format = 1
        role = "impedance meter"
        codec = "lines"
        [setting.integration]
        kind = "word"
        set = "S{value}"
        ask = "S?"
        words = { short = "a", long = "A" }
        [reading.impedance]
        ask = "M"
        fields = ["first", "second"]
        """,
        encoding="utf-8",
    )
    problems = Problems()
    driver = load_driver("own.toml", tmp_path, problems)
    assert driver is not None, list(problems)
    codec = codec_of(driver)
    layout = codec.layout(driver.setting["integration"].layout)
    assert layout.decode(b"a").values == {"value": "short"}
    assert layout.decode(b"A").values == {"value": "long"}


@given(st.binary(max_size=80), st.booleans())
def test_any_bytes_after_a_command(data: bytes, answers: bool) -> None:
    receiver = CODEC.receiver(b"U?", answers=answers)
    receiver.feed(data)
    try:
        receiver.next()
    except OhmwardError:
        return


@given(st.lists(st.sampled_from([b"U?", b"\r", b"U0500.0", b"K", b">", b"?2", b"x"]), max_size=8))
def test_pieces_of_exchanges_in_any_order(pieces: list[bytes]) -> None:
    """Only the right order gives a reply, however much of it looks right."""
    receiver = CODEC.receiver(b"U?")
    came = b"".join(pieces)
    receiver.feed(came)
    try:
        reply = receiver.next()
    except OhmwardError:
        return
    if reply is not NEED_DATA:
        assert came.startswith(b"U?\r" + reply + b"\r>")
