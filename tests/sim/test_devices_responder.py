"""A responder answers as its driver expects, whatever the driver's style; judged by plain text."""

import math
import tomllib

import pytest

from ohmward.sim.fixture_terminals import FixtureTerminals
from ohmward.sim.plain import quantity
from ohmward.sim.responder import Responder
from ohmward.sim.responder_roles import PerfectMeter, PerfectScanner, PerfectThermometer
from ohmward.sim.scanner import Contacts


class Resistor:
    """R in series with L: 30 Ω and 1 mH unless said otherwise."""

    def __init__(self, ohm: float = 30.0, henry: float = 1e-3) -> None:
        self.ohm, self.henry = ohm, henry

    def impedance(
        self,
        frequency_hz: float,
        bias_v: float,
        level_v: float,
        temperature_c: float,
        bias_a: float = 0.0,
    ) -> complex:
        return complex(self.ohm, 2 * math.pi * frequency_hz * self.henry)

    def resistance_dc_ohm(self) -> float:
        return self.ohm


class BareClips:
    series_ohm = series_h = stray_f = stray_s = 0.0


class Air:
    def temperature_c(self, now_s: float) -> float:
        return 21.5

    def humidity_pct(self, now_s: float) -> float:
        return 40.0


def terminals() -> FixtureTerminals:
    found = FixtureTerminals(Contacts(()), {"1": ()}, BareClips(), Air())
    found.load("1", {"R1": Resistor()})
    return found


def talk(device: Responder, message: str, now_s: float = 1.0, end: str = "\n") -> str:
    device.receive((message + end).encode(), now_s)
    return device.take(now_s + 10.0).decode()


SCPI = """
role = "impedance meter"
constants = { n = "2" }
status = { 0 = "ok", 7 = "overload" }
[identity]
starts_with = "HOMEMADE,"
serial_field = 3
[errors]
[numbers]
form = "NR3"
width = 13
[setting.frequency]
set = "SENS{n}:FREQ {value}"
ask = "SENS{n}:FREQ?"
minimum = "40 Hz"
maximum = "200 kHz"
[setting.pair]
kind = "word"
set = "FUNC {value}"
ask = "FUNC?"
words = { "R-X" = "RESistance", "Ls-Q" = "LQ" }
[reading.impedance]
ask = "TRIG?"
fields = ["first", "second", { name = "status", kind = "status" }]
[timing]
reading = { "" = "30 ms" }
least_periods = 4
"""


def meter() -> Responder:
    return Responder(tomllib.loads(SCPI), "S-1", PerfectMeter(terminals()))


def test_a_scpi_driver() -> None:
    device = meter()
    assert talk(device, "*IDN?") == "HOMEMADE,SIMULATED,S-1\n"
    assert talk(device, "SENS2:FREQ 1000;:SENS2:FREQ?") == "+1.000000E+03\n"
    assert talk(device, "FUNC LQ;:FUNC?;:TRIG?") == "LQ;+1.000000E-03,+2.094395E-01,0\n"
    assert talk(device, "func res") == ""
    assert talk(device, "FUNC?") == "RES\n"
    # Z = 30 Ω + j·2π·1000·1 mH
    assert talk(device, "TRIG?") == "+3.000000E+01,+6.283185E+00,0\n"


def test_what_the_driver_does_not_say_is_an_error_and_so_is_a_value_out_of_range() -> None:
    device = meter()
    talk(device, "SENS2:FREQ 1000")
    assert talk(device, "NONSENSE?") == ""
    assert talk(device, "SYST:ERR?").startswith("-113,")
    assert talk(device, "SENS2:FREQ 300000") == ""
    assert talk(device, "SYST:ERR?").startswith("-222,")
    assert talk(device, "SENS2:FREQ?") == "+1.000000E+03\n"
    assert talk(device, "SYST:ERR?").startswith("0,")


def test_a_reading_takes_the_time_that_the_driver_states() -> None:
    device = meter()
    device.receive(b"SENS2:FREQ 50\nTRIG?\n", 5.0)
    assert device.due_s() == pytest.approx(5.0 + 4 / 50)


LINES = """
role = "impedance meter"
codec = "lines"
[link]
write_termination = "\\r"
read_termination = "\\r\\n"
echo = true
prompt = ">"
acknowledge = "OK"
refusals = ["ERR"]
[identity]
ask = "ID"
exactly = "BRIDGE 7"
[setting.frequency]
set = "F{value}"
ask = "F"
allowed = ["120 Hz", "1 kHz"]
written = { factor = 1000 }
[meter]
pair = "R-X"
[reading.impedance]
ask = "M"
by = "label"
separator = ";"
fields = [
  { name = "first", label = "R=", form = "NR2", decimals = 3, suffixes = { Ohm = 1, kOhm = 1e3 } },
  { name = "second", label = "X=", form = "NR2", decimals = 4, suffix = "Ohm" },
]
"""


def test_a_driver_of_labelled_lines_with_echo_prompt_and_acknowledgement() -> None:
    device = Responder(tomllib.loads(LINES), "", PerfectMeter(terminals(), pair="R-X"))
    assert talk(device, "ID", end="\r") == "ID\r\nBRIDGE 7\r\n>"
    assert talk(device, "F1", end="\r") == "F1\r\nOK\r\n>"
    assert talk(device, "M", end="\r") == "M\r\nR=30.000Ohm;X=6.2832Ohm\r\n>"
    assert talk(device, "X", end="\r") == "X\r\nERR\r\n>"


SCANNER = """
role = "scanner"
[action.close]
send = "CLOS {channels}"
wait = { ask = "*OPC?", until = "1" }
[action.open_all]
send = "OPEN:ALL"
[reading.state]
ask = "CLOS:STAT?"
fields = [{ name = "channels", kind = "channels" }]
[reading.closed]
ask = "CLOS? {channels}"
fields = [{ name = "closed", kind = "switch", repeats = true }]
"""


def test_a_scanner() -> None:
    contacts = Contacts(("1", "2", "3"))
    device = Responder(tomllib.loads(SCANNER), "", PerfectScanner(contacts))
    assert talk(device, "CLOS (@1,3)") == ""
    assert talk(device, "*OPC?") == "1\n"
    assert talk(device, "CLOS:STAT?") == "(@1,3)\n"
    assert talk(device, "CLOS? (@1,2,3)", 2.0) == "1,0,1\n"
    assert contacts.closed(2.0) == {"1", "3"}
    talk(device, "OPEN:ALL", 3.0)
    assert talk(device, "CLOS:STAT?", 3.0) == "(@)\n"


def test_a_thermometer_in_kelvin_that_counts_tenths() -> None:
    driver = {
        "role": "thermometer",
        "reading": {
            "temperature": {
                "ask": "T?",
                "fields": [{"name": "temperature", "form": "NR1", "factor": 0.1}],
            }
        },
    }
    device = Responder(driver, "", PerfectThermometer(Air()))
    assert talk(device, "T?") == "215\n"


@pytest.mark.parametrize(
    ("text", "value"),
    [("10 ms", 0.01), ("0.5 %", 0.005), ("2 MHz", 2e6), ("1 mohm", 1e-3), ("3 m", 3.0), (7, 7.0)],
)
def test_quantities(text: object, value: float) -> None:
    assert quantity(text) == pytest.approx(value)


@pytest.mark.parametrize("text", ["", "ten", "3 furlongs", None, True])
def test_what_is_no_quantity(text: object) -> None:
    with pytest.raises(ValueError, match="no quantity"):
        quantity(text)
