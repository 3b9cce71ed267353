"""The SCPI codec by one table of (value, bytes), read and written, whole and in pieces."""

from collections.abc import Mapping
from math import isnan
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.errors import InstrumentRefused, OhmwardError, Problems, ReplyMalformed
from ohmward.protocol.codec import Codec, codec_of
from ohmward.protocol.fields import Value
from ohmward.protocol.numbers import Form, read_number, write_number
from ohmward.protocol.receiver import NEED_DATA, LineReceiver
from ohmward.setup.driver import Driver, load_driver
from ohmward.setup.resources import shipped
from ohmward.terms.status import Status

STATUS_FIRST = "impedance-meter-status-first"

# driver, table, name, values, and the bytes of the command with its terminator
COMMANDS: list[tuple[str, str, str, dict[str, Value], bytes]] = [
    ("impedance-meter", "setting", "frequency", {"value": 1000.0}, b"FREQ 1000"),
    ("impedance-meter", "setting", "frequency", {"value": 123456.789}, b"FREQ 123456.789"),
    ("impedance-meter", "setting", "level", {"value": 0.005}, b"VOLT 0.005"),
    ("impedance-meter", "setting", "bias_voltage", {"value": -40.0}, b"VOLT:OFFS -40"),
    ("impedance-meter", "setting", "bias_voltage", {"value": -0.0}, b"VOLT:OFFS 0"),
    ("impedance-meter", "setting", "bias_voltage_output", {"value": True}, b"VOLT:OFFS:STAT ON"),
    ("impedance-meter", "setting", "bias_current", {"value": 1e-05}, b"CURR:OFFS 1E-5"),
    ("impedance-meter", "setting", "bias_current_output", {"value": False}, b"CURR:OFFS:STAT OFF"),
    ("impedance-meter", "setting", "pair", {"value": "R-X"}, b'FUNC "RX"'),
    ("impedance-meter", "setting", "pair", {"value": "Cs-D"}, b'FUNC "CSD"'),
    ("impedance-meter", "setting", "integration", {"value": "short"}, b"APER SHOR"),
    ("impedance-meter", "setting", "integration", {"value": "long"}, b"APER LONG"),
    ("impedance-meter", "setting", "range", {"value": 1e5}, b"RANG 100000"),
    ("impedance-meter", "setting", "range_automatic", {"value": True}, b"RANG:AUTO ON"),
    ("impedance-meter", "setting", "correction_open", {"value": False}, b"CORR:OPEN OFF"),
    ("impedance-meter", "setting", "correction_short", {"value": True}, b"CORR:SHOR ON"),
    ("impedance-meter", "setting", "correction_load", {"value": False}, b"CORR:LOAD OFF"),
    ("impedance-meter", "setting", "cable_length", {"value": 1.5}, b"CORR:LENG 1.5"),
    ("impedance-meter", "reading", "impedance", {}, b"READ?"),
    ("impedance-meter", "reading", "last_impedance", {}, b"FETC?"),
    ("impedance-meter", "action", "clear", {}, b"*CLS"),
    ("impedance-meter", "action", "reset", {}, b"*RST"),
    ("scanner", "action", "clear", {}, b"*CLS"),
    ("scanner", "action", "close", {"channels": (101, 201)}, b"ROUT:CLOS (@101,201)"),
    ("scanner", "action", "open", {"channels": (101,)}, b"ROUT:OPEN (@101)"),
    ("scanner", "action", "open_all", {}, b"ROUT:OPEN:ALL"),
    ("scanner", "reading", "closed", {"channels": (101, 102)}, b"ROUT:CLOS? (@101,102)"),
    ("scanner", "reading", "state", {}, b"ROUT:CLOS:STAT?"),
    ("thermometer", "action", "clear", {}, b"*CLS"),
    ("thermometer", "reading", "temperature", {}, b"MEAS:TEMP?"),
    ("thermometer", "reading", "humidity", {}, b"MEAS:HUM?"),
    ("interlock", "action", "clear", {}, b"*CLS"),
    ("interlock", "reading", "interlock", {}, b"SENS:DOOR?"),
    ("bias-source", "action", "clear", {}, b"*CLS"),
    ("bias-source", "action", "reset", {}, b"*RST"),
    ("bias-source", "action", "off", {}, b"OUTP OFF"),
    ("bias-source", "setting", "voltage", {"value": -12.5}, b"VOLT -12.5"),
    ("bias-source", "setting", "current_limit", {"value": 1e-6}, b"CURR:LIM 1E-6"),
    ("bias-source", "setting", "output", {"value": True}, b"OUTP ON"),
    ("bias-source", "reading", "voltage", {}, b"MEAS:VOLT?"),
    ("bias-source", "reading", "current", {}, b"MEAS:CURR?"),
    ("bias-source", "reading", "state", {}, b"STAT:QUES:COND?"),
    ("high-voltage-supply", "action", "clear", {}, b"*CLS"),
    ("high-voltage-supply", "action", "reset", {}, b"*RST"),
    ("high-voltage-supply", "action", "off", {}, b"OUTP OFF"),
    ("high-voltage-supply", "action", "clear_trip", {}, b"OUTP:PROT:CLE"),
    ("high-voltage-supply", "setting", "voltage", {"value": 1000.0}, b"VOLT 1000"),
    ("high-voltage-supply", "setting", "voltage_limit", {"value": 450.0}, b"VOLT:LIM 450"),
    ("high-voltage-supply", "setting", "ramp", {"value": 50.0}, b"VOLT:SLEW 50"),
    ("high-voltage-supply", "setting", "current_limit", {"value": 0.01}, b"CURR:LIM 0.01"),
    ("high-voltage-supply", "setting", "output", {"value": False}, b"OUTP OFF"),
    ("high-voltage-supply", "setting", "watchdog", {"value": 5.0}, b"SYST:WATC 5"),
    ("high-voltage-supply", "reading", "voltage", {}, b"MEAS:VOLT?"),
    ("high-voltage-supply", "reading", "current", {}, b"MEAS:CURR?"),
    ("high-voltage-supply", "reading", "state", {}, b"STAT:QUES:COND?"),
    ("current-meter", "action", "clear", {}, b"*CLS"),
    ("current-meter", "action", "reset", {}, b"*RST"),
    ("current-meter", "setting", "range", {"value": 2e-9}, b"CURR:RANG 2E-9"),
    ("current-meter", "setting", "range_automatic", {"value": False}, b"CURR:RANG:AUTO OFF"),
    ("current-meter", "setting", "integration", {"value": "medium"}, b"APER MED"),
    ("current-meter", "setting", "zero_check", {"value": True}, b"INP:ZERO ON"),
    ("current-meter", "reading", "current", {}, b"READ?"),
    ("multimeter", "action", "clear", {}, b"*CLS"),
    ("multimeter", "action", "reset", {}, b"*RST"),
    ("multimeter", "setting", "function", {"value": "voltage"}, b'FUNC "VOLT"'),
    ("multimeter", "setting", "range", {"value": 1000.0}, b"VOLT:RANG 1000"),
    ("multimeter", "setting", "range_automatic", {"value": True}, b"VOLT:RANG:AUTO ON"),
    ("multimeter", "setting", "integration", {"value": "long"}, b"APER LONG"),
    ("multimeter", "setting", "input_resistance", {"value": "fixed"}, b"INP:IMP:AUTO 0"),
    ("multimeter", "reading", "voltage", {}, b"MEAS:VOLT?"),
    (STATUS_FIRST, "action", "clear", {}, b"*CLS"),
    (STATUS_FIRST, "action", "reset", {}, b"*RST"),
    (STATUS_FIRST, "setting", "frequency", {"value": 1e4}, b"FREQ 10000;FREQ?"),
    (STATUS_FIRST, "setting", "level", {"value": 0.3}, b"VOLT 0.3"),
    (STATUS_FIRST, "setting", "pair", {"value": "Cs-Rs"}, b"FUNC CSRS"),
    (STATUS_FIRST, "setting", "integration", {"value": "short"}, b"APER SHOR"),
    (STATUS_FIRST, "setting", "range_automatic", {"value": True}, b"RANG:AUTO ON"),
    (STATUS_FIRST, "reading", "impedance", {}, b"*TRG;*WAI;FETC?"),
    (STATUS_FIRST, "reading", "last_impedance", {}, b"FETC?"),
]

GOOD: dict[str, Value] = {
    "first": 1.234567e-7,
    "second": 1.5e-3,
    "status": "0",
    "level_v": 1.0,
    "bias_v": -2.5,
}

# driver, table, name, the reply's values, its bytes, and what the reading is worth
REPLIES: list[tuple[str, str, str, dict[str, Value], bytes, Status]] = [
    ("impedance-meter", "setting", "frequency", {"value": 1000.0}, b"+1.000000E+03", Status.OK),
    ("impedance-meter", "setting", "bias_voltage", {"value": -40.0}, b"-4.000000E+01", Status.OK),
    ("impedance-meter", "setting", "bias_voltage_output", {"value": True}, b"1", Status.OK),
    ("impedance-meter", "setting", "range_automatic", {"value": False}, b"0", Status.OK),
    ("impedance-meter", "setting", "integration", {"value": "short"}, b"SHOR", Status.OK),
    (
        "impedance-meter",
        "reading",
        "impedance",
        {**GOOD, "range": 1000.0},
        b"+1.234567E-07,+1.500000E-03,0,+1.000000E+00,-2.500000E+00,+1.000000E+03",
        Status.OK,
    ),
    (
        "impedance-meter",
        "reading",
        "last_impedance",
        {**GOOD, "status": "3", "range": 1e5},
        b"+1.234567E-07,+1.500000E-03,3,+1.000000E+00,-2.500000E+00,+1.000000E+05",
        Status.OK,
    ),
    (
        "impedance-meter",
        "reading",
        "impedance",
        {**GOOD, "status": "2", "range": 1e5},
        b"+1.234567E-07,+1.500000E-03,2,+1.000000E+00,-2.500000E+00,+1.000000E+05",
        Status.UNBALANCED,
    ),
    ("scanner", "reading", "closed", {"closed": (True, False)}, b"1,0", Status.OK),
    ("scanner", "reading", "closed", {"closed": (True,)}, b"1", Status.OK),
    ("scanner", "reading", "state", {"channels": (101, 102)}, b"(@101,102)", Status.OK),
    ("scanner", "reading", "state", {"channels": ()}, b"(@)", Status.OK),
    ("thermometer", "reading", "temperature", {"temperature": 23.1}, b"+2.310000E+01", Status.OK),
    ("thermometer", "reading", "humidity", {"humidity": 45.0}, b"+4.500000E+01", Status.OK),
    (
        "interlock",
        "reading",
        "interlock",
        {"interlock": True, "opened": False},
        b"1,0",
        Status.OK,
    ),
    (
        STATUS_FIRST,
        "reading",
        "impedance",
        {"status": "N", "first": 1.23457e-7, "second": -1.5e-3},
        b"N, 1.23457E-07,-1.50000E-03",
        Status.OK,
    ),
    (
        "current-meter",
        "reading",
        "current",
        {"current": -1.5e-9, "status": "2", "range": 2e-9},
        b"-1.500000E-09,2,+2.000000E-09",
        Status.UNSETTLED,
    ),
    (
        "high-voltage-supply",
        "reading",
        "state",
        {"state": ("current_limit", "interlock_open")},
        b"5",
        Status.OK,
    ),
    ("high-voltage-supply", "reading", "state", {"state": ()}, b"0", Status.OK),
    ("bias-source", "reading", "voltage", {"voltage": -12.5}, b"-1.250000E+01", Status.OK),
    ("multimeter", "reading", "voltage", {"voltage": 450.0}, b"+4.500000E+02", Status.OK),
]


def driver_named(kind: str) -> Driver:
    driver = load_driver(f"scpi-{kind}", Path(), Problems())
    assert driver is not None
    return driver


DRIVERS = {
    path.stem.removeprefix("scpi-"): driver_named(path.stem.removeprefix("scpi-"))
    for path in sorted(shipped("drivers").glob("scpi-*.toml"))
}
CODECS: dict[str, Codec] = {kind: codec_of(driver) for kind, driver in DRIVERS.items()}


def encode(kind: str, table: str, name: str, values: Mapping[str, Value]) -> bytes:
    driver, codec = DRIVERS[kind], CODECS[kind]
    if table == "setting":
        setting = driver.setting[name]
        return codec.command(setting.set_and_ask or setting.set, setting).encode(values)
    text = driver.reading[name].ask if table == "reading" else driver.action[name].send
    return codec.command(text).encode(values)


@pytest.mark.parametrize(("kind", "table", "name", "values", "sent"), COMMANDS)
def test_commands(kind: str, table: str, name: str, values: dict[str, Value], sent: bytes) -> None:
    assert encode(kind, table, name, values) == sent


def test_every_command_of_the_drivers_has_a_row() -> None:
    told = {(kind, table, name) for kind, table, name, _, _ in COMMANDS}
    for kind, driver in DRIVERS.items():
        wanted = {
            (kind, table, name)
            for table in ("setting", "reading", "action")
            for name in getattr(driver, table)
        }
        assert wanted <= told


def received(codec: Codec, pieces: list[bytes]) -> tuple[list[bytes], bytes]:
    receiver = codec.receiver()
    messages = []
    for piece in pieces:
        receiver.feed(piece)
        while (message := receiver.next()) is not NEED_DATA:
            messages.append(message)
    return messages, receiver.trailing


@pytest.mark.parametrize(("kind", "table", "name", "values", "sent", "status"), REPLIES)
def test_replies_both_ways(
    kind: str, table: str, name: str, values: dict[str, Value], sent: bytes, status: Status
) -> None:
    driver, codec = DRIVERS[kind], CODECS[kind]
    reply = driver.setting[name].layout if table == "setting" else driver.reading[name]
    layout = codec.layout(reply)
    whole = sent + b"\n"
    assert received(codec, [whole]) == ([sent], b"")
    assert received(codec, [bytes([byte]) for byte in whole]) == ([sent], b"")
    assert received(codec, [whole + b"+9.9"]) == ([sent], b"+9.9")
    assert received(codec, [whole + whole]) == ([sent, sent], b"")
    decoded = layout.decode(sent)
    assert decoded.values == values
    assert decoded.status is status
    assert layout.encode(values) == sent


@pytest.mark.parametrize(("kind", "table", "name", "values", "sent", "status"), REPLIES)
def test_half_a_reply_is_never_a_value(
    kind: str, table: str, name: str, values: dict[str, Value], sent: bytes, status: Status
) -> None:
    """Cut anywhere, at either end, and still taken: then the value must be the same."""
    driver, codec = DRIVERS[kind], CODECS[kind]
    reply = driver.setting[name].layout if table == "setting" else driver.reading[name]
    if kind == "thermometer" or name == "closed":
        return  # no width is stated, and a shorter list of switches is a list too
    layout = codec.layout(reply)
    for cut in range(1, len(sent)):
        for part in (sent[:cut], sent[cut:]):
            with pytest.raises(ReplyMalformed):
                layout.decode(part)


def test_resolution_is_the_weight_of_the_last_digit() -> None:
    layout = CODECS["impedance-meter"].layout(DRIVERS["impedance-meter"].reading["impedance"])
    sent = b"+1.234567E-07,+1.500000E-03,0,+1.000000E+00,+0.000000E+00,+1.000000E+03"
    resolutions = layout.decode(sent).resolutions
    assert resolutions["first"] == pytest.approx(1e-13)
    assert resolutions["second"] == pytest.approx(1e-9)


@pytest.mark.parametrize(
    ("special", "status"),
    [
        (b"9.9E37", Status.OVERLOAD),
        (b"-9.9E37", Status.OVERLOAD),
        (b"+9.900000E+37", Status.OVERLOAD),
        (b"9.91E37", Status.UNBALANCED),
        (b"+9.910000E+37", Status.UNBALANCED),
    ],
)
def test_special_values_are_never_numbers(special: bytes, status: Status) -> None:
    layout = CODECS["impedance-meter"].layout(DRIVERS["impedance-meter"].reading["impedance"])
    decoded = layout.decode(special + b",+1.500000E-03,0,+1.000000E+00,+0.000000E+00,+1.000000E+03")
    assert isnan(float(decoded.values["first"]))  # type: ignore[arg-type]
    assert "first" not in decoded.resolutions
    assert decoded.status is status


GOOD_REPLY = b"+1.234567E-07,+1.500000E-03,0,+1.000000E+00,+0.000000E+00,+1.000000E+03"


@pytest.mark.parametrize(
    "reply",
    [
        b"",
        b"0",
        b"-12",  # the tail of a split number: visa-facts.md, silent wrong data
        b"+1.234567E",
        GOOD_REPLY + b",+1.000000E+03",  # one field too many
        GOOD_REPLY.rpartition(b",")[0],  # one too few
        GOOD_REPLY.replace(b",0,", b",7,"),  # a status that the driver does not name
        GOOD_REPLY.replace(b"+1.234567E-07", b"+1,234567E-07"),  # decimal comma
        GOOD_REPLY.replace(b"+1.234567E-07", b"+1.234567E-7"),  # not the width it always has
        GOOD_REPLY.replace(b"+1.234567E-07", b"1.2345670E-07"[:12]),
        GOOD_REPLY.replace(b"+1.234567E-07", b"+1.234567E-\xb97"),  # not ASCII
        GOOD_REPLY.replace(b"+1.234567E-07", b"+1.23 567E-07"),
        GOOD_REPLY.replace(b"+1.234567E-07", b"+9.200000E+37"),  # special, but which?
        GOOD_REPLY.replace(b"+1.234567E-07", b"nan"),
        GOOD_REPLY.replace(b"+1.234567E-07", b"inf"),
        GOOD_REPLY.replace(b"+1.234567E-07", b"+1.00000E+999"),
        GOOD_REPLY + b"\r",
    ],
)
def test_what_does_not_match_wholly_is_refused(reply: bytes) -> None:
    layout = CODECS["impedance-meter"].layout(DRIVERS["impedance-meter"].reading["impedance"])
    with pytest.raises(ReplyMalformed):
        layout.decode(reply)


@pytest.mark.parametrize("reply", [b"16", b"-1", b"1.0", b"", b"0x1", b"4294967296"])
def test_bits_without_a_name_are_not_understood(reply: bytes) -> None:
    layout = CODECS["high-voltage-supply"].layout(DRIVERS["high-voltage-supply"].reading["state"])
    with pytest.raises(ReplyMalformed):
        layout.decode(reply)


@pytest.mark.parametrize("reply", [b"SHOR", b"SHORT", b"shor", b"Short", b'"SHOR"'])
def test_words_in_either_form_and_any_case(reply: bytes) -> None:
    layout = CODECS["impedance-meter"].layout(
        DRIVERS["impedance-meter"].setting["integration"].layout
    )
    assert layout.decode(reply).values == {"value": "short"}


@pytest.mark.parametrize("reply", [b"SHO", b"SHORTE", b"", b'"SHOR', b"ON", b"1"])
def test_words_that_are_none(reply: bytes) -> None:
    layout = CODECS["impedance-meter"].layout(
        DRIVERS["impedance-meter"].setting["integration"].layout
    )
    with pytest.raises(ReplyMalformed):
        layout.decode(reply)


def test_a_function_in_quotes() -> None:
    layout = CODECS["impedance-meter"].layout(DRIVERS["impedance-meter"].setting["pair"].layout)
    assert layout.decode(b'"CSRS"').values == {"value": "Cs-Rs"}


@pytest.mark.parametrize("value", [float("nan"), float("inf"), -float("inf"), "much"])
def test_what_cannot_be_sent(value: Value) -> None:
    with pytest.raises(InstrumentRefused):
        encode("impedance-meter", "setting", "level", {"value": value})


def test_an_empty_channel_list_is_not_sent() -> None:
    """``ROUT:CLOS (@)`` means different things to different scanners."""
    with pytest.raises(InstrumentRefused):
        encode("scanner", "action", "close", {"channels": ()})


FORMS = st.sampled_from(list(Form))
FINITE = st.floats(allow_nan=False, allow_infinity=False, min_value=-1e30, max_value=1e30)


@given(FINITE)
def test_the_shortest_form_reads_back_exactly(value: float) -> None:
    assert read_number(write_number(value).encode()).value == value


@given(FINITE, FORMS, st.integers(0, 12))
def test_numbers_are_read_as_written(value: float, form: Form, decimals: int) -> None:
    if form in (Form.NR2, Form.NR3):
        decimals = max(decimals, 1)
    number = read_number(write_number(value, form, decimals=decimals).encode(), form)
    if form is not Form.ANY:
        assert abs(number.value - value) <= 0.5000001 * number.resolution + 1e-15 * abs(value)


@given(st.binary(max_size=30), FORMS)
def test_any_bytes_are_a_number_or_refused(data: bytes, form: Form) -> None:
    try:
        number = read_number(data, form)
    except ReplyMalformed:
        return
    assert number.value == float(data)


@pytest.mark.parametrize(
    ("text", "form", "taken"),
    [
        (b"12", Form.NR1, True),
        (b"-12", Form.NR3, False),
        (b"12.", Form.NR2, False),
        (b".5", Form.NR2, False),
        (b".5", Form.ANY, True),
        (b"5.", Form.ANY, True),
        (b".", Form.ANY, False),
        (b"", Form.ANY, False),
        (b"1E3", Form.ANY, True),
        (b"1E3", Form.NR3, False),
        (b"1.0E3", Form.NR3, True),
        (b"1.0E", Form.NR3, False),
        (b"1.0", Form.NR1, False),
        (b"1_0", Form.ANY, False),
        (b" 1", Form.ANY, True),
        (b"1 2", Form.ANY, False),
        (b"\t1", Form.ANY, False),
        (b"- 1", Form.ANY, False),
        (b"0x10", Form.ANY, False),
    ],
)
def test_forms(text: bytes, form: Form, taken: bool) -> None:
    if taken:
        assert read_number(text, form).value == float(text)
    else:
        with pytest.raises(ReplyMalformed):
            read_number(text, form)


@given(st.lists(st.binary(max_size=20), max_size=8), st.sampled_from([b"\n", b"\r\n", b">"]))
def test_lines_come_out_however_they_are_chopped(lines: list[bytes], end: bytes) -> None:
    wanted = [line for line in lines if end not in line + end[:-1]]
    stream = b"".join(line + end for line in wanted)
    receiver = LineReceiver(end)
    found = []
    for byte in stream:
        receiver.feed(bytes([byte]))
        while (message := receiver.next()) is not NEED_DATA:
            found.append(message)
    assert b"".join(line + end for line in found) == stream
    whole = LineReceiver(end)
    whole.feed(stream)
    again = []
    while (message := whole.next()) is not NEED_DATA:
        again.append(message)
    assert again == found


def test_a_line_without_end_is_refused() -> None:
    receiver = LineReceiver(b"\n", longest=10)
    receiver.feed(b"x" * 11)
    with pytest.raises(ReplyMalformed):
        receiver.next()
    receiver.feed(b"short\n")
    assert receiver.next() == b"short"


@given(data=st.binary(max_size=120), which=st.sampled_from(range(len(REPLIES))))
def test_any_bytes_into_any_layout(data: bytes, which: int) -> None:
    kind, table, name, *_ = REPLIES[which]
    driver = DRIVERS[kind]
    reply = driver.setting[name].layout if table == "setting" else driver.reading[name]
    try:
        CODECS[kind].layout(reply).decode(data)
    except OhmwardError:
        return


def every_sample(driver: Driver) -> list[tuple[str, bytes, bytes]]:
    """Each command of a driver with a value that fits, and each reply written and read."""
    codec = codec_of(driver)
    rows = []
    for name, setting in driver.setting.items():
        number = setting.allowed[0] if setting.allowed else setting.maximum
        samples: dict[str, Value] = {
            "number": 1.0 if number is None else number,
            "switch": True,
            "word": next(iter(setting.words), ""),
            "text": "x",
        }
        value = samples[setting.kind]
        layout = codec.layout(setting.layout)
        sent = codec.command(setting.set or setting.set_and_ask, setting).encode({"value": value})
        reply = layout.encode({one.name: value for one in setting.layout.fields})
        back = layout.decode(reply).values["value"]
        assert back == (pytest.approx(value, rel=1e-5) if setting.kind == "number" else value)
        rows.append((name, sent, reply))
    for name, action in driver.action.items():
        values: dict[str, Value] = {"channels": (101, 102), "channel": 1.0, "seconds": 5.0}
        rows.append((name, codec.command(action.send).encode(values), b""))
    return rows


@pytest.mark.parametrize("name", sorted(path.stem for path in shipped("drivers").glob("*.toml")))
def test_every_command_of_every_shipped_driver(name: str) -> None:
    driver = load_driver(name, Path(), Problems())
    assert driver is not None
    for _, sent, _ in every_sample(driver):
        assert sent.isascii()
        assert b"{" not in sent
