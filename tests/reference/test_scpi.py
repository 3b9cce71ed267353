"""SCPI-1999 and IEEE 488.2 as published, against our reading of them (values.md names both)."""

import pytest

from ohmward.errors import ReplyMalformed
from ohmward.protocol.fields import sent_word
from ohmward.protocol.numbers import INFINITY, NOT_A_NUMBER, read_number, read_suffixed
from ohmward.protocol.scpi import (
    ScpiError,
    event_bit,
    read_block,
    read_channels,
    read_error,
    short_form,
    write_block,
    write_channels,
    write_error,
)

# SCPI-1999 vol. 2 §21.8: standard error numbers and their texts
ERRORS = [
    (b'0,"No error"', ScpiError(0, "No error"), None),
    (b'-102,"Syntax error"', ScpiError(-102, "Syntax error"), 5),
    (b'-104,"Data type error"', ScpiError(-104, "Data type error"), 5),
    (b'-108,"Parameter not allowed"', ScpiError(-108, "Parameter not allowed"), 5),
    (b'-109,"Missing parameter"', ScpiError(-109, "Missing parameter"), 5),
    (b'-113,"Undefined header"', ScpiError(-113, "Undefined header"), 5),
    (b'-131,"Invalid suffix"', ScpiError(-131, "Invalid suffix"), 5),
    (b'-222,"Data out of range"', ScpiError(-222, "Data out of range"), 4),
    (b'-350,"Queue overflow"', ScpiError(-350, "Queue overflow"), 3),
    (b'-410,"Query INTERRUPTED"', ScpiError(-410, "Query INTERRUPTED"), 2),
    (b'-420,"Query UNTERMINATED"', ScpiError(-420, "Query UNTERMINATED"), 2),
    (b'-430,"Query DEADLOCKED"', ScpiError(-430, "Query DEADLOCKED"), 2),
    (b'101,"Relay ""K1"" worn"', ScpiError(101, 'Relay "K1" worn'), 3),
]


@pytest.mark.parametrize(("sent", "error", "bit"), ERRORS)
def test_errors_and_the_event_bit_that_each_sets(
    sent: bytes, error: ScpiError, bit: int | None
) -> None:
    """Bits: −1xx 5 (CME), −2xx 4 (EXE), −3xx and positive 3 (DDE), −4xx 2 (QYE)."""
    assert read_error(sent) == error
    assert write_error(error) == sent
    assert event_bit(error.code) == bit


def test_an_empty_queue_with_a_plus() -> None:
    """Some instruments answer ``+0`` (values.md)."""
    assert read_error(b'+0,"No error"') == ScpiError(0, "No error")


@pytest.mark.parametrize(
    "reply",
    [b"", b"0", b'0,"No error', b"0,No error", b'0,"a"b"', b'x,"a"', b'0,"a",1', b"+1.0E+00"],
)
def test_what_is_no_error_entry(reply: bytes) -> None:
    with pytest.raises(ReplyMalformed):
        read_error(reply)


def test_special_values() -> None:
    """SCPI-1999 vol. 1 §7.2.1.4-5: 9.9E37, −9.9E37 and 9.91E37."""
    assert read_number(b"9.9E37").value == INFINITY == 9.9e37
    assert read_number(b"-9.9E37").value == -INFINITY
    assert read_number(b"9.91E37").value == NOT_A_NUMBER == 9.91e37


@pytest.mark.parametrize(
    ("whole", "short"),
    [
        ("IMMediate", "IMM"),
        ("FREQuency", "FREQ"),
        ("VOLTage", "VOLT"),
        ("OPEN", "OPEN"),
        ("SYSTem", "SYST"),
        ("ERRor", "ERR"),
        ("APERture", "APER"),
        ("SENSe", "SENS"),
        ("AUTO", "AUTO"),
        ("OUTPut2", "OUTP2"),
    ],
)
def test_short_forms(whole: str, short: str) -> None:
    """SCPI-1999 vol. 1 §6.2.1; the capitals in the standard's own tables are the short form."""
    assert short_form(whole) == short
    assert short_form(whole.upper()) == short
    assert sent_word(whole, short_forms=True) == short


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("1 MHZ", "Hz", 1e6),
        ("1 MOHM", "ohm", 1e6),
        ("1 MV", "V", 1e-3),
        ("1 MAHZ", "Hz", 1e6),
        ("100KHZ", "Hz", 1e5),
        ("2EXV", "V", 2e18),
        ("2 PEV", "V", 2e15),
        ("2 TV", "V", 2e12),
        ("2 GOHM", "ohm", 2e9),
        ("2.5UA", "A", 2.5e-6),
        ("2 NF", "F", 2e-9),
        ("2 PF", "F", 2e-12),
        ("2 FF", "F", 2e-15),
        ("2 AF", "F", 2e-18),
        ("-1e3", "V", -1e3),
    ],
)
def test_suffixes(text: str, unit: str, value: float) -> None:
    """EX PE T G MA K M U N P F A; MHZ and MOHM mean mega (IEEE 488.2 table 7-2)."""
    assert read_suffixed(text, unit) == pytest.approx(value, rel=1e-15)


@pytest.mark.parametrize("text", ["1 QV", "1 V V", "V", "", "1,5 V", "1 HZ"])
def test_suffixes_that_are_none(text: str) -> None:
    with pytest.raises(ReplyMalformed):
        read_suffixed(text, "V")


@pytest.mark.parametrize(
    ("text", "channels"),
    [("(@1,3:5)", (1, 3, 4, 5)), ("(@)", ()), ("(@101)", (101,)), ("(@3:1)", (3, 2, 1))],
)
def test_channel_lists(text: str, channels: tuple[int, ...]) -> None:
    """SCPI-1999 vol. 1 §8.3.2; ``(@1,3:5)`` is the example of values.md."""
    assert read_channels(text) == channels
    assert read_channels(write_channels(channels)) == channels


@pytest.mark.parametrize("text", ["", "1,2", "(@1,,2)", "(@1", "(@1,1)", "(@a)", "(@1:999999999)"])
def test_what_is_no_channel_list(text: str) -> None:
    with pytest.raises(ReplyMalformed):
        read_channels(text)


@pytest.mark.parametrize(
    ("sent", "content"),
    [(b"#15hello", b"hello"), (b"#10", b""), (b"#212hello\nworld!", b"hello\nworld!")],
)
def test_definite_blocks(sent: bytes, content: bytes) -> None:
    """IEEE 488.2 §8.7.9: ``#<n><length><bytes>``."""
    assert write_block(content) == sent
    assert read_block(sent) == (content, b"")
    assert read_block(sent + b",1") == (content, b",1")
    for cut in range(len(sent)):
        assert read_block(sent[:cut]) is None


def test_indefinite_block_ends_with_the_message() -> None:
    """IEEE 488.2 §8.7.10: ``#0…<NL>``."""
    assert read_block(b"#0a\nb") is None
    assert read_block(b"#0a\nb\n") == (b"a\nb", b"")


def test_what_is_no_block() -> None:
    for data in (b"15hello", b"#x", b"#2a5hello"):
        with pytest.raises(ReplyMalformed):
            read_block(data)
