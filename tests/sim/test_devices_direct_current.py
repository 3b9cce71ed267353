"""Supplies, current meter and multimeter against their protocol pages, on a circuit of R and C."""

import math

import pytest

from ohmward.sim import noise
from ohmward.sim.current_meter import RANGES_A, CurrentMeter
from ohmward.sim.multimeter import RANGES_V, Multimeter
from ohmward.sim.open_ports import OpenInput, OpenSupply
from ohmward.sim.scpi_device import ScpiDevice
from ohmward.sim.scpi_supply import BiasSource, HighVoltageSupply
from ohmward.sim.supply_core import ScalarError
from ohmward.sim.terse_supply import TerseSupply


def errors(name: str) -> tuple[ScalarError, ScalarError]:
    return ScalarError(noise.uniform, 1, name, "u"), ScalarError(noise.uniform, 1, name, "i")


def ask(device: ScpiDevice, message: str, now_s: float) -> str:
    device.receive(message.encode() + b"\n", now_s)
    return device.take(now_s + 1.0).decode().rstrip("\n")


# -- high-voltage supply: bleeder 10 MΩ, output capacitance 10 nF


def supply(*, on: bool = False) -> tuple[HighVoltageSupply, OpenSupply]:
    port = OpenSupply(drain_ohm=10e6, output_f=10e-9)
    return HighVoltageSupply("hv", "41", port, errors("hv"), on=on), port


def test_the_output_follows_its_level_at_the_slew() -> None:
    device, port = supply()
    ask(device, "VOLT 500;VOLT:SLEW 100;:OUTP ON", 10.0)
    assert port.voltage_v(12.0) == pytest.approx(200.0)
    assert ask(device, "STAT:QUES:COND?", 12.0) == "8"
    assert port.voltage_v(15.1) == 500.0
    assert ask(device, "STAT:QUES:COND?", 16.0) == "0"
    assert ask(device, "VOLT?;:OUTP?", 16.0) == "+5.000000E+02;1"
    seen = float(ask(device, "MEAS:VOLT?", 17.0))
    assert seen == pytest.approx(500.0, abs=500e-3 + 0.2)
    assert seen != 500.0


def test_one_quadrant_falls_through_its_bleeder_only() -> None:
    # V·e^(−t/RC), RC = 10 MΩ · 10 nF = 0.1 s
    device, port = supply()
    ask(device, "VOLT 500;VOLT:SLEW 1000;:OUTP ON", 10.0)
    ask(device, "VOLT 0", 20.0)
    assert port.voltage_v(20.0 + 0.3) == pytest.approx(500 - 300), "the slew is slower here"
    assert port.voltage_v(20.0 + 0.2) == pytest.approx(500 - 200)
    ask(device, "VOLT 500", 30.0)
    ask(device, "OUTP OFF", 40.0)
    assert port.voltage_v(40.0 + 0.2) == pytest.approx(500 * math.exp(-2))


def test_limits_and_what_is_refused() -> None:
    device, _ = supply()
    for message, number in (
        ("VOLT 1001", -222),
        ("VOLT:LIM 300;:VOLT 301", -222),
        ("CURR:LIM 0.011", -222),
        ("VOLT:SLEW 0.5", -222),
        ("SYST:WATC 0.5", -222),
    ):
        ask(device, message, 1.0)
        assert int(ask(device, "SYST:ERR?", 2.0).split(",")[0]) == number, message
    assert ask(device, "VOLT?", 3.0) == "+0.000000E+00"


def test_the_watchdog_takes_the_output_off_and_trips() -> None:
    device, port = supply()
    ask(device, "VOLT 100;:VOLT:SLEW 1000;:SYST:WATC 5;:OUTP ON", 10.0)
    assert ask(device, "OUTP?", 14.0) == "1"
    assert port.voltage_v(18.9) == 100.0
    assert port.voltage_v(19.0 + 0.1) == pytest.approx(100 * math.exp(-1)), "without being asked"
    assert ask(device, "OUTP?;:STAT:QUES:COND?", 20.0) == "0;2"
    ask(device, "*CLS;:OUTP ON", 21.0)
    assert ask(device, "SYST:ERR?;:OUTP?", 22.0).startswith("-221,")
    assert ask(device, "OUTP:PROT:CLE;:OUTP ON;:OUTP?", 23.0) == "1"


def test_an_open_interlock_keeps_the_output_off() -> None:
    device, port = supply()
    ask(device, "VOLT 100;:OUTP ON", 10.0)
    port.interlock = False
    assert ask(device, "STAT:QUES:COND?", 20.0) == "4"
    assert ask(device, "OUTP?", 21.0) == "0"
    ask(device, "*CLS;:OUTP ON", 22.0)
    assert ask(device, "SYST:ERR?", 23.0).startswith("-221,")


def test_it_may_wake_with_its_output_on() -> None:
    device, _ = supply(on=True)
    assert ask(device, "OUTP?", 1.0) == "1"
    assert ask(device, "*RST;:OUTP?", 2.0) == "0"


def test_the_bias_source_pulls_down_as_well() -> None:
    port = OpenSupply(drain_ohm=1e6, output_f=1e-9, two_quadrant=True)
    device = BiasSource("bias", "51", port, errors("bias"))
    ask(device, "VOLT 50;:OUTP ON", 10.0)
    assert port.voltage_v(10.005) == 50.0
    ask(device, "VOLT -20", 11.0)
    assert port.voltage_v(11.005) == -20.0
    assert float(ask(device, "MEAS:VOLT?", 12.0)) == pytest.approx(-20.0, abs=20 * 5e-4 + 5e-3)
    assert ask(device, "STAT:QUES:COND?", 13.0) == "0"


# -- terse supply


def terse() -> tuple[TerseSupply, OpenSupply]:
    port = OpenSupply(drain_ohm=20e6, output_f=5e-9)
    return TerseSupply("S77", port, errors("terse")), port


def say(device: TerseSupply, command: str, now_s: float) -> str:
    device.receive(command.encode() + b"\r", now_s)
    return device.take(now_s).decode()


def test_every_exchange_is_echo_answer_and_prompt() -> None:
    device, port = terse()
    device.opened(0.0)
    assert device.take(0.0) == b"\rREADY\r>"
    for number, (command, answer) in enumerate(
        [
            ("T?", "T HVS2000 S77"),
            ("U0500.0", "K"),
            ("U?", "U0500.0"),
            ("L2.500", "K"),
            ("L?", "L2.500"),
            ("N1", "K"),
            ("N?", "N1"),
            ("W05", "K"),
            ("W?", "W05"),
            ("X1", "?1"),
            ("U500", "?1"),
            ("U2000.1", "?2"),
            ("L0.000", "?2"),
        ]
    ):
        assert say(device, command, 1.0 + number) == f"{command}\r{answer}\r>"
    assert port.voltage_v(13.9) == 500.0
    volts, milliamperes, state = say(device, "M?", 14.0).split("\r")[1][1:].split()
    assert re_shape(volts, milliamperes) == ("+0000.0", "+0.000")
    assert float(volts) == pytest.approx(500.0, abs=500 * 5e-3 + 1.0)
    assert state == "0"
    assert port.voltage_v(14.0 + 5.0 + 0.1) == pytest.approx(500 * math.exp(-1)), "watchdog"
    assert say(device, "N1", 30.0).split("\r")[1] == "?3"
    assert say(device, "R", 31.0).split("\r")[1] == "K"
    assert say(device, "N1", 32.0).split("\r")[1] == "K"


def re_shape(*texts: str) -> tuple[str, ...]:
    """The texts with every digit a zero, and every sign a plus."""
    return tuple(
        "".join("0" if c.isdigit() else "+" if c in "+-" else c for c in text) for text in texts
    )


def test_the_line_must_rest_after_a_prompt() -> None:
    device, _ = terse()
    assert say(device, "N?", 1.0) == "N?\rN0\r>"
    assert say(device, "N?", 1.010) == ""
    assert say(device, "N?", 1.020) == "N?\rN0\r>"


# -- current meter


class Current(OpenInput):
    def __init__(self, ampere: float) -> None:
        self.ampere = ampere
        self.ohm = math.nan

    def current_a(self, now_s: float) -> float:
        return self.ampere

    def load(self, now_s: float, ohm: float) -> None:
        self.ohm = ohm


def current_meter(ampere: float) -> tuple[CurrentMeter, Current]:
    port = Current(ampere)
    each = {a: ScalarError(noise.uniform, 1, "i", a) for a in RANGES_A}
    return CurrentMeter("i", "61", port, each), port


def numbers(text: str) -> list[float]:
    return [float(each) for each in text.split(",")]


def test_zero_check_takes_the_input_off_the_terminals() -> None:
    device, port = current_meter(5e-9)
    assert port.ohm == 10e3
    assert abs(numbers(ask(device, "READ?", 1.0))[0]) < 6e-6
    ask(device, "INP:ZERO OFF", 2.0)
    assert port.ohm == pytest.approx(5e6), "10 mV of burden at 2 nA, the range for nothing"
    for now_s in (3.0, 4.0, 5.0):
        last = numbers(ask(device, "READ?", now_s))
    assert last[0] == pytest.approx(5e-9, abs=5e-9 * 5e-3 + 5e-12)
    assert last[1:] == [0, 20e-9]


def test_current_ranges_settle_and_overflow() -> None:
    device, port = current_meter(150e-9)
    ask(device, "INP:ZERO OFF;:CURR:RANG 1.5E-7", 1.0)
    assert ask(device, "CURR:RANG?;:CURR:RANG:AUTO?", 2.0) == "+2.000000E-07;0"
    states = [numbers(ask(device, "READ?", 3.0 + n))[1] for n in range(4)]
    assert states == [2, 2, 0, 0]
    port.ampere = -201e-9
    assert numbers(ask(device, "READ?", 10.0)) == [-9.9e37, 1, 2e-7]
    device.receive(b"CURR:RANG:AUTO ON;:APER LONG;:READ?\n", 20.0)
    assert device.due_s() == pytest.approx(20.0 + 0.5 + 0.05)


# -- multimeter


class Voltage(OpenInput):
    def __init__(self, volt: float) -> None:
        self.volt = volt
        self.ohm = math.inf
        self.loads: list[float] = []

    def voltage_v(self, now_s: float) -> float:
        return self.volt

    def resistance_ohm(self, now_s: float) -> float:
        return self.ohm

    def load(self, now_s: float, ohm: float) -> None:
        self.loads.append(ohm)


def multimeter(volt: float) -> tuple[Multimeter, Voltage]:
    port = Voltage(volt)
    each = {v: ScalarError(noise.uniform, 1, "u", v) for v in RANGES_V}
    return Multimeter("u", "71", port, each), port


def test_voltage_in_its_range() -> None:
    device, port = multimeter(-63.0)
    assert float(ask(device, "READ?", 1.0)) == pytest.approx(-63.0, abs=63 * 1e-4 + 2e-3)
    assert ask(device, "VOLT:RANG?", 2.0) == "+1.000000E+02"
    ask(device, "VOLT:RANG 10", 3.0)
    assert ask(device, "READ?", 4.0) == "-9.900000E+37"
    port.volt = 11.9
    assert float(ask(device, "READ?", 5.0)) == pytest.approx(11.9, abs=2e-3), "1.2 × the range"


def test_input_resistance() -> None:
    device, port = multimeter(0.5)
    assert port.loads[-1] == 10e6
    ask(device, "VOLT:RANG 10;:INP:IMP:AUTO ON", 1.0)
    assert port.loads[-1] > 10e9
    ask(device, "VOLT:RANG 100", 2.0)
    assert port.loads[-1] == 10e6


def test_resistance_and_the_way_back_to_voltage() -> None:
    device, port = multimeter(2.0)
    ask(device, 'FUNC "RES"', 1.0)
    assert ask(device, "READ?", 2.0) == "+9.900000E+37"
    port.ohm = 470.0
    assert float(ask(device, "READ?", 3.0)) == pytest.approx(470.0, rel=2e-3)
    assert float(ask(device, "MEAS:VOLT?;:FUNC?", 4.0).split(";")[0]) == pytest.approx(
        2.0, abs=1e-3
    )
    assert ask(device, "FUNC?", 5.0) == '"VOLT"'
