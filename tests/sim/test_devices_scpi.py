"""The simulated SCPI side against IEEE 488.2 and SCPI-1999 (shared facts: both standards)."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.sim.scpi_device import ScpiDevice, format_number
from ohmward.sim.scpi_parameters import ChannelList, Number, short_form
from ohmward.sim.scpi_status import ScpiError
from ohmward.sim.scpi_tree import Later, variants


class Adjustable(ScpiDevice):
    """One voltage with a limit, one slow query, one overlapped operation."""

    def __init__(self) -> None:
        super().__init__("ADJUSTABLE", "7")
        self.volts = 0.0
        self.add_setting(
            "[SOURce:]VOLTage[:LEVel]",
            Number(minimum=-10.0, maximum=10.0, default=1.0, unit="V"),
            lambda: format_number(self.volts),
            lambda now_s, value: setattr(self, "volts", value),
        )
        self.tree.add("[SOURce:]VOLTage:RANGe?", lambda now_s: "10")
        self.tree.add("MEASure:SLOW?", lambda now_s: Later(now_s + 2.0, lambda at_s: "5", True))
        self.tree.add("ROUTe:MOVE", lambda now_s: self.begin_operation(now_s + 3.0))


def ask(device: ScpiDevice, message: str, now_s: float = 0.0, *, until_s: float = 1e3) -> str:
    device.receive(message.encode() + b"\n", now_s)
    return device.take(until_s).decode()


def errors(device: ScpiDevice) -> list[int]:
    found = []
    while True:
        number = int(ask(device, "SYST:ERR?", 1e3).split(",")[0])
        if number == 0:
            return found
        found.append(number)


@pytest.mark.parametrize(
    ("mnemonic", "short"),
    # SCPI-1999 volume 1, 6.2.1
    [("IMMediate", "IMM"), ("FREQuency", "FREQ"), ("VOLTage", "VOLT"), ("OFF", "OFF")],
)
def test_short_forms(mnemonic: str, short: str) -> None:
    assert short_form(mnemonic) == short


def test_optional_nodes_give_every_path() -> None:
    assert set(variants("[SOURce:]VOLTage[:LEVel]")) == {
        ("VOLTage",),
        ("SOURce", "VOLTage"),
        ("VOLTage", "LEVel"),
        ("SOURce", "VOLTage", "LEVel"),
    }


@pytest.mark.parametrize(
    "header",
    ["VOLT", "volt", "VOLTAGE", "SOUR:VOLT", "source:voltage:level", ":VOLT:LEV", "Volt:Level"],
)
def test_every_form_of_a_header_is_the_same_command(header: str) -> None:
    device = Adjustable()
    assert ask(device, f"{header} 2.5;:{header.lstrip(chr(58))}?") == "+2.500000E+00\n"
    assert errors(device) == []


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    # IEEE 488.2 table 7-2; SCPI-1999: MHZ and MOHM mean mega, M else milli
    [
        ("5 MHZ", "HZ", 5e6),
        ("5MOHM", "OHM", 5e6),
        ("5 MV", "V", 5e-3),
        ("5 MAV", "V", 5e6),
        ("1.5 KHZ", "HZ", 1.5e3),
        ("3 uA", "A", 3e-6),
        ("2 MA", "A", 2e-3),
        ("2E3", "V", 2e3),
        (" .5e-1 v".strip(), "V", 0.05),
        ("1 EXHZ", "HZ", 1e18),
        ("#HFF", "HZ", 255.0),
        ("#B101", "HZ", 5.0),
        ("#Q17", "HZ", 15.0),
        ("2 MM", "M", 2e-3),
        ("INF", "OHM", 9.9e37),
    ],
)
def test_numbers_with_suffixes(text: str, unit: str, value: float) -> None:
    assert Number(unit=unit).parse(text) == pytest.approx(value, rel=1e-12)


@pytest.mark.parametrize(
    ("message", "number"),
    [
        ("FRED", -113),
        ("VOLT", -109),
        ("VOLT 1,2", -108),
        ("VOLT 1 HZ", -131),
        ("VOLT 1 QV", -131),
        ('VOLT "1"', -158),
        ("VOLT (@1)", -178),
        ("VOLT abc", -104),
        ("VOLT 1.2.3", -121),
        ("VOLT 11", -222),
        ("VOLT? 3", -104),
        ("*ESE 256", -222),
        ("*FOO?", -113),
        ("VOLT 1,,2", -102),
        ("VOLT:?", -102),
        ('VOLT "1', -151),
        ("V\xb5LT 1", -101),
    ],
)
def test_a_wrong_message_is_its_standard_error_and_changes_nothing(
    message: str, number: int
) -> None:
    device = Adjustable()
    device.volts = 3.0
    device.receive(message.encode("latin-1") + b"\n", 0.0)
    assert device.take(1.0) == b""
    assert errors(device) == [number]
    assert device.volts == 3.0


@pytest.mark.parametrize(
    ("message", "bit"),
    # SCPI-1999: −1xx sets bit 5, −2xx bit 4, −3xx bit 3, −4xx bit 2 of the event register
    [("FRED", 5), ("VOLT 11", 4)],
)
def test_errors_set_their_event_bit(message: str, bit: int) -> None:
    device = Adjustable()
    ask(device, "*CLS")
    ask(device, message)
    assert ask(device, "*ESR?") == f"{1 << bit}\n"
    assert ask(device, "*ESR?") == "0\n"


def test_power_on_is_bit_7() -> None:
    assert ask(Adjustable(), "*ESR?") == "128\n"


def test_a_full_error_queue_ends_with_queue_overflow() -> None:
    device = Adjustable()
    ask(device, "*CLS")
    for _ in range(50):
        ask(device, "FRED")
    found = errors(device)
    assert found[:-1] == [-113] * (len(found) - 1)
    assert found[-1] == -350
    assert int(ask(device, "*ESR?")) & 0b1000


def test_min_max_and_default() -> None:
    device = Adjustable()
    assert ask(device, "VOLT? MIN;VOLT? MAXIMUM;VOLT? DEF") == (
        "-1.000000E+01;+1.000000E+01;+1.000000E+00\n"
    )
    assert ask(device, "VOLT MAX;VOLT?") == "+1.000000E+01\n"


def test_a_header_after_a_semicolon_stays_at_its_level() -> None:
    device = Adjustable()
    assert ask(device, "SOUR:VOLT:LEV 2;RANG?;LEV?") == "10;+2.000000E+00\n"
    ask(device, "VOLT:LEV 2;VOLT 3")  # VOLTage:VOLTage does not exist
    assert errors(device) == [-113]
    assert ask(device, "VOLT:LEV 2;*ESE 4;LEV?;:VOLT?") == "+2.000000E+00;+2.000000E+00\n"


def test_slow_commands_hold_up_what_follows_them() -> None:
    device = Adjustable()
    device.receive(b"MEAS:SLOW?;:VOLT?\n", 10.0)
    assert device.due_s() == 12.0
    assert device.take(11.999) == b""
    assert device.take(12.0) == b"5;+0.000000E+00\n"
    assert device.due_s() is None


def test_operation_complete_waits_for_what_is_pending() -> None:
    device = Adjustable()
    ask(device, "*CLS")
    device.receive(b"ROUT:MOVE;*OPC\n", 10.0)
    device.receive(b"*ESR?\n", 11.0)
    assert device.take(11.0) == b"0\n"
    device.receive(b"*OPC?\n", 11.0)
    assert device.due_s() == 13.0
    assert device.take(13.0) == b"1\n"
    assert ask(device, "*ESR?", 13.0) == "1\n"
    device.receive(b"ROUT:MOVE;*WAI;:VOLT?\n", 20.0)
    assert device.take(22.9) == b""
    assert device.take(23.0) == b"+0.000000E+00\n"


def test_a_stream_keeps_every_reply_in_order() -> None:
    device = Adjustable()
    device.receive(b"MEAS:SLOW?\nVOL", 0.0)
    device.receive(b"T?\r\n", 0.5)
    assert device.take(2.0) == b"5\n+0.000000E+00\n"


def test_a_message_that_comes_before_the_reply_was_read_interrupts_it() -> None:
    # IEEE 488.2 §6.3.2.3: Query INTERRUPTED, the reply is lost
    for instant_s in (1.0, 5.0):
        device = Adjustable()
        device.message_based = True
        ask(device, "*CLS")
        device.receive(b"MEAS:SLOW?\n", 0.0)
        device.receive(b"VOLT?\n", instant_s)
        assert device.take(20.0) == b"+0.000000E+00\n"
        assert ask(device, "*ESR?", 20.0) == "4\n"
        assert errors(device) == [-410]


def test_reading_with_nothing_asked_is_unterminated() -> None:
    device = Adjustable()
    device.message_based = True
    device.asked_in_vain(1.0)
    assert errors(device) == [-420]


def test_the_status_byte() -> None:
    device = Adjustable()
    ask(device, "*CLS")
    ask(device, "*ESE 32;*SRE 32;FRED")
    # error queue 2, event summary 5, request for service 6
    assert device.status_byte(1.0) == 0b0110_0100
    assert device.status_byte(1.0) == 0b0010_0100, "a serial poll takes the request back"
    assert ask(device, "*STB?") == f"{0b0110_0100}\n", "the master summary stays"
    device.receive(b"VOLT?\n", 2.0)
    assert device.status_byte(2.0) & 0b1_0000, "message available"


def test_device_clear_drops_what_is_pending_and_keeps_settings() -> None:
    device = Adjustable()
    ask(device, "VOLT 2")
    device.receive(b"MEAS:SLOW?;:VOLT 5\nVOLT 6\nVOL", 10.0)
    device.clear(11.0)
    assert device.take(100.0) == b""
    assert ask(device, "VOLT?") == "+2.000000E+00\n"


def test_channel_lists() -> None:
    channels = ChannelList(frozenset({"101", "102", "103", "104"}))
    assert channels.parse("(@101,103:104)") == ("101", "103", "104")
    assert channels.parse("(@104:102)") == ("104", "103", "102")
    for text, number in (("(@105)", -222), ("101", -104), ("(101)", -171), ("(@1:999999)", -222)):
        with pytest.raises(ScpiError) as refused:
            channels.parse(text)
        assert refused.value.number == number, text


@pytest.mark.slow
@given(st.lists(st.binary(max_size=40), max_size=8), st.booleans())
def test_no_bytes_break_the_device(pieces: list[bytes], message_based: bool) -> None:
    device = Adjustable()
    device.message_based = message_based
    for number, piece in enumerate(pieces):
        device.receive(piece, float(number))
        device.take(float(number))
    device.clear(50.0)
    assert ask(device, "*IDN?", 60.0) == "GENERIC,ADJUSTABLE,7,1.0\n"


@pytest.mark.slow
@given(st.floats(-10, 10), st.integers(1, 40))
def test_a_line_means_the_same_however_it_is_cut(volts: float, cut: int) -> None:
    line = f"VOLT {volts!r};VOLT?;*ESR?\n".encode()
    whole, pieces = Adjustable(), Adjustable()
    whole.receive(line, 1.0)
    pieces.receive(line[:cut], 1.0)
    pieces.receive(line[cut:], 1.0)
    assert whole.take(1.0) == pieces.take(1.0) != b""
