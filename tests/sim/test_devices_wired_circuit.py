"""Supply, current meter, voltmeter and relays as instruments, over the circuit solved in time."""

import math
from pathlib import Path

import pytest

from ohmward.sim import noise
from ohmward.sim.bench import InstrumentAt, SimulatedBench
from ohmward.sim.circuit import Circuit
from ohmward.sim.current_meter import RANGES_A, CurrentMeter
from ohmward.sim.multimeter import RANGES_V, Multimeter
from ohmward.sim.parts import PhysicalPart
from ohmward.sim.path import ContactAt, PathTruth, PlaceTruth
from ohmward.sim.physical import PartTruth, read_model
from ohmward.sim.scanner import Contacts, Scanner
from ohmward.sim.scpi_device import ScpiDevice
from ohmward.sim.scpi_supply import HighVoltageSupply
from ohmward.sim.supply_core import ScalarError
from ohmward.sim.wired_circuit import CircuitRelays, WiredCircuit

MODELS = Path(__file__).parents[2] / "simulators" / "parts"
SERIES_OHM = 1e6
DISCHARGE_OHM = 100e3


def contact(channel: str, *, rests_closed: bool = False) -> ContactAt:
    return ContactAt(channel=channel, rests_closed=rests_closed)


PATH = PathTruth(
    discharge_at="part",
    supply=contact("1"),
    bypass=contact("2"),
    places=(
        PlaceTruth(
            name="A",
            connect=contact("11"),
            series_ohm=SERIES_OHM,
            discharge=contact("12", rests_closed=True),
            discharge_ohm=DISCHARGE_OHM,
            short=contact("13"),
            sense=(contact("14"), contact("15")),
        ),
    ),
)


def errors(*key: object) -> ScalarError:
    return ScalarError(noise.uniform, 1, *key)


class Bench:
    """1 µF of polypropylene at position A."""

    def __init__(self) -> None:
        self.part = PhysicalPart(
            part_id="C1",
            model=read_model(MODELS / "film-pp.toml"),
            truth=PartTruth(model="film-pp"),
            nominal=1e-6,
            tolerance=0.05,
            rated_v=630.0,
            rated_a=0.0,
            seed=2,
        )
        self.circuit = Circuit(PATH, {"A": self.part}, seed=2)
        self.wired = WiredCircuit(self.circuit)
        port = self.wired.supply("hv", drain_ohm=10e6, output_f=10e-9)
        self.supply = HighVoltageSupply("hv", "1", port, (errors("u"), errors("i")))
        self.volts = Multimeter(
            "dmm", "2", self.wired.voltage_input("dmm"), {v: errors(v) for v in RANGES_V}
        )
        self.amperes = CurrentMeter(
            "pa", "3", self.wired.current_input("pa"), {a: errors(a) for a in RANGES_A}
        )
        self.relays = CircuitRelays(self.wired, Contacts(("101",)))
        self.scanner = Scanner("switch", "4", self.relays)
        self.now_s = 1.0

    def ask(self, device: ScpiDevice, message: str) -> str:
        device.receive(message.encode() + b"\n", self.now_s)
        while (due_s := device.due_s()) is not None and due_s > self.now_s:
            self.now_s = due_s
        return device.take(self.now_s).decode().rstrip("\n")

    def close(self, channels: str) -> None:
        assert self.ask(self.scanner, f"ROUT:CLOS (@{channels});*OPC?") == "1"

    def open(self, channels: str) -> None:
        assert self.ask(self.scanner, f"ROUT:OPEN (@{channels});*OPC?") == "1"

    def read_v(self) -> float:
        return float(self.ask(self.volts, "READ?"))


def test_charging_follows_the_series_resistor_and_discharging_the_discharge_resistor() -> None:
    bench = Bench()
    bench.close("12")  # powered, its resting contact opens
    bench.close("1,2,11,14,15,101")
    assert bench.ask(bench.scanner, "ROUT:CLOS? (@1,13,101)") == "1,0,1"
    bench.ask(bench.supply, "VOLT 400;:VOLT:SLEW 1000;:CURR:LIM 0.005;:OUTP ON")
    c = 1 / (2 * math.pi * 0.01 * abs(bench.part.impedance(0.01).imag))
    bench.now_s += 20.0
    assert bench.read_v() == pytest.approx(400.0, rel=2e-3)
    assert float(bench.ask(bench.supply, "MEAS:VOLT?")) == pytest.approx(400.0, abs=0.61)
    assert bench.ask(bench.supply, "STAT:QUES:COND?") == "0"
    bench.ask(bench.supply, "OUTP OFF")
    bench.open("1,11")
    before_v = bench.read_v()
    bench.open("12")
    start_s = bench.now_s
    bench.now_s += 0.2
    after_v = bench.read_v()
    elapsed_s = bench.now_s - start_s
    # V·e^(−t/RC); dielectric absorption and the relay's own time make it only nearly so
    assert math.log(before_v / after_v) == pytest.approx(elapsed_s / (DISCHARGE_OHM * c), rel=0.1)


def test_the_watchdog_strikes_at_its_instant_whoever_asks_first() -> None:
    bench = Bench()
    bench.close("1,2,11,12,14,15")
    bench.ask(bench.supply, "VOLT 100;:VOLT:SLEW 1000;:CURR:LIM 0.005;:SYST:WATC 10;:OUTP ON")
    bench.now_s += 9.0
    assert bench.read_v() == pytest.approx(100.0, rel=2e-2)
    bench.now_s += 3600.0
    assert bench.read_v() < 50.0, "an hour without a command: it has long been off"
    assert bench.ask(bench.supply, "OUTP?;:STAT:QUES:COND?") == "0;2"


def test_the_current_meter_sees_what_its_bypass_leaves() -> None:
    bench = Bench()
    bench.close("1,2,11,12")
    bench.ask(bench.amperes, "INP:ZERO OFF;:CURR:RANG 2E-4")
    bench.ask(bench.supply, "VOLT 100;:VOLT:SLEW 1000;:OUTP ON")
    bench.now_s += 0.3
    through_a = (100.0 - bench.circuit.voltage("A")) / SERIES_OHM
    bypassed_a = float(bench.ask(bench.amperes, "READ?").split(",")[0])
    # a bypass of 0.1 Ω beside a burden of 50 Ω; the meter's own offset is up to 50 nA
    assert bypassed_a == pytest.approx(through_a / 501, abs=60e-9)
    bench.open("2")
    value = float(bench.ask(bench.amperes, "READ?").split(",")[0])
    bench_v = 100.0 - bench.circuit.voltage("A")
    # what still flows into the part through the series resistor; the burden is 50 Ω
    assert value == pytest.approx(bench_v / SERIES_OHM, rel=0.1)


def test_an_open_enclosure_takes_the_voltage_away() -> None:
    bench = Bench()
    bench.close("1,2,11,12")
    bench.ask(bench.supply, "VOLT 100;:VOLT:SLEW 1000;:OUTP ON")
    bench.now_s += 1.0
    bench.wired.open_interlock(bench.now_s)
    assert bench.circuit.supply_way == "off"
    assert bench.ask(bench.supply, "STAT:QUES:COND?;:OUTP?") == "4;0"


def test_a_whole_bench_on_a_circuit() -> None:
    circuit = WiredCircuit(Circuit(PATH, {}, seed=2))
    instruments = [
        InstrumentAt(name=name, address=name, simulator=simulator)
        for name, simulator in (
            ("hv", "high-voltage-supply-scpi"),
            ("switch", "scanner-scpi"),
            ("dmm", "multimeter-scpi"),
        )
    ]
    bench = SimulatedBench(None, instruments, {"A": ("101",)}, (), seed=1, circuit=circuit)
    assert bench.contacts.channels >= {"1", "14", "101"}
    switch, supply, dmm = (bench.named[name] for name in ("switch", "hv", "dmm"))
    switch.receive(b"ROUT:CLOS (@1,11,12,14,15,101)\n", 1.0)
    supply.receive(b"VOLT 50;:VOLT:SLEW 1000;:CURR:LIM 0.005;:OUTP ON\n", 2.0)
    dmm.receive(b"READ?\n", 12.0)
    assert float(dmm.take(13.0)) == pytest.approx(50.0, rel=2e-2), "across an empty position"
    ordered = {"1", "11", "12", "14", "15", "101"}
    assert bench.contacts.reported(13.0) == ordered
    # the contact of channel 12 is closed at rest, so that its coil has opened it
    assert bench.contacts.closed(13.0) == ordered - {"12"}
