"""The simulated scanner and thermometer against their protocol pages."""

import pytest

from ohmward.sim.scanner import Contacts, Scanner
from ohmward.sim.thermometer import Thermometer


def scanner(stuck: dict[str, bool] | None = None) -> Scanner:
    channels = [str(base + n) for base in (100, 200) for n in range(1, 5)]
    return Scanner("scanner", "2001", Contacts(channels, stuck))


def ask(device: Scanner | Thermometer, message: str, now_s: float) -> str:
    device.receive(message.encode() + b"\n", now_s)
    return device.take(now_s + 60.0).decode().rstrip("\n")


def test_relays_take_five_milliseconds() -> None:
    device = scanner()
    device.receive(b"ROUT:CLOS (@101,201)\nROUT:CLOS? (@101,102,201)\n", 1.0)
    assert device.take(1.0) == b"0,0,0\n"
    device.receive(b"*OPC?\n", 1.001)
    assert device.due_s() == pytest.approx(1.005)
    assert device.take(1.005) == b"1\n"
    device.receive(b"ROUT:CLOS? (@101,102,201)\n", 1.005)
    assert device.take(1.005) == b"1,0,1\n"


def test_close_adds_and_open_takes_away() -> None:
    device = scanner()
    assert ask(device, "ROUT:CLOS (@101:103);*WAI;CLOS:STAT?", 1.0) == "(@101,102,103)"
    assert ask(device, "ROUT:CLOS (@204);*WAI;CLOS:STAT?", 2.0) == "(@101,102,103,204)"
    assert ask(device, "ROUT:OPEN (@102,204);*WAI;CLOS:STAT?", 3.0) == "(@101,103)"
    assert ask(device, "ROUT:OPEN:ALL;*WAI;:ROUT:CLOS:STAT?", 4.0) == "(@)"


def test_a_channel_that_is_not_fitted_moves_nothing() -> None:
    device = scanner()
    ask(device, "ROUT:CLOS (@101,105)", 1.0)
    assert ask(device, "SYST:ERR?", 2.0).startswith("-222,")
    assert ask(device, "ROUT:CLOS:STAT?", 3.0) == "(@)"


def test_the_last_order_for_a_contact_wins() -> None:
    device = scanner()
    device.receive(b"ROUT:CLOS (@101)\nROUT:OPEN (@101)\n", 1.0)
    assert ask(device, "*OPC?;:ROUT:CLOS:STAT?", 1.0) == "1;(@)"


def test_reset_opens_every_relay() -> None:
    device = scanner()
    ask(device, "ROUT:CLOS (@101)", 1.0)
    assert ask(device, "*RST;*OPC?;:ROUT:CLOS:STAT?", 2.0) == "1;(@)"


def test_a_stuck_contact_stays_and_the_answer_tells() -> None:
    device = scanner({"101": False, "104": True})
    assert ask(device, "ROUT:CLOS (@101,102);*WAI;CLOS:STAT?", 1.0) == "(@102,104)"
    assert ask(device, "ROUT:OPEN:ALL;*WAI;:ROUT:CLOS:STAT?", 2.0) == "(@104)"


class Warm:
    def temperature_c(self, now_s: float) -> float:
        return 23.5

    def humidity_pct(self, now_s: float) -> float:
        return 99.0


def test_the_thermometer_reads_the_room_within_its_accuracy() -> None:
    device = Thermometer("room", "3001", Warm(), (0.5, 1.0))
    device.receive(b"MEAS:TEMP?\n", 1.0)
    assert device.due_s() == pytest.approx(1.05)
    assert float(device.take(1.05)) == pytest.approx(23.6)
    assert float(ask(device, "MEASURE:HUMIDITY?", 2.0)) == 100.0
    assert ask(device, "*IDN?", 3.0) == "GENERIC,THERMOMETER,3001,1.0"
