"""A whole simulated bench: wiring, parts, instruments and truth belong together."""

import math
import tomllib
from collections.abc import Iterator, Sequence
from pathlib import Path

import pytest
import pyvisa
from pyvisa.resources import MessageBasedResource

from ohmward.sim.backend import InProcessLibrary
from ohmward.sim.bench import SIMULATORS, InstrumentAt, SimulatedBench
from ohmward.sim.makers import IMPEDANCE_METER, SCANNER, THERMOMETER, meter_figures
from ohmward.sim.physical import PhysicalFileError
from ohmward.sim.tray import make_of

ROOT = Path(__file__).parents[2]
MODELS = ROOT / "simulators" / "parts"

PHYSICAL = """
format = 1
[room]
temperature_c = 22.0
swing_k = 0.0
[fixture]
series_ohm = 1e-4
stray_f = 1e-15
[part.C1]
model = "film-pp"
[part.C2]
model = "film-pet"
fault = "low"
[instrument.meter]
serial_number = "M-77"
knots = [[20.0, 1e-5, 1e-5], [2e6, 1e-5, 1e-5]]
short_ohm = 0.0
open_s = 0.0
frequency_rel = 0.0
noise = { short = 1e-6, medium = 1e-6, long = 1e-6 }
[instrument.switch]
stuck_open = ["103"]
"""

ROWS = [
    {"part_id": "C1", "position": "1", "kind": "capacitor", "nominal": 1e-6, "tolerance_high": 0.1},
    {"part_id": "C2", "position": "2", "kind": "capacitor", "nominal": 1e-6, "tolerance_high": 0.1},
    {"part_id": "R1", "position": "3", "kind": "resistor", "nominal": 1e3},
]
POSITIONS = {str(n): (str(100 + n), str(200 + n)) for n in range(1, 5)}
METER, SWITCH, ROOM = (f"TCPIP::192.0.2.{n}::5025::SOCKET" for n in (1, 2, 3))
INSTRUMENTS = (
    InstrumentAt(name="meter", address=METER, simulator=IMPEDANCE_METER),
    InstrumentAt(name="switch", address=SWITCH, simulator=SCANNER),
    InstrumentAt(name="room", address=ROOM, simulator=THERMOMETER, serial_number="T-5"),
)


class Bench:
    def __init__(
        self, made: SimulatedBench, addresses: Sequence[str] = (METER, SWITCH, ROOM)
    ) -> None:
        self.made = made
        self.now_s = 100.0
        library = InProcessLibrary(made, lambda: self.now_s, self._wait)
        self.manager = pyvisa.ResourceManager(library)
        self.meter, *others = (self._open(address) for address in addresses)
        self.others = others

    def _wait(self, until_s: float) -> None:
        self.now_s = until_s

    def _open(self, address: str) -> MessageBasedResource:
        found = self.manager.open_resource(
            address, read_termination="\n", write_termination="\n", timeout=5000
        )
        assert isinstance(found, MessageBasedResource)
        return found

    def connect(self, *channels: str) -> str:
        switch = self.others[0]
        return switch.query(f"ROUT:OPEN:ALL;:ROUT:CLOS (@{','.join(channels)});*OPC?;CLOS:STAT?")

    def read(self) -> complex:
        first, second, status, *_ = self.meter.query("READ?").split(",")
        assert status in ("0", "3")
        return complex(float(first), float(second))


def bench_of(physical: str, tmp_path: Path, seed: int = 4) -> Bench:
    path = tmp_path / "physics.toml"
    path.write_text(physical, "utf-8")
    return Bench(SimulatedBench(path, INSTRUMENTS, POSITIONS, ROWS, seed, models=MODELS))


@pytest.fixture
def bench(tmp_path: Path) -> Iterator[Bench]:
    made = bench_of(PHYSICAL, tmp_path)
    yield made
    made.manager.close()


def test_what_is_read_is_what_is_there(bench: Bench) -> None:
    bench.meter.write("FREQ 1000;:APER LONG")
    for part_id, position in (("C1", "1"), ("C2", "2")):
        bench.connect(*POSITIONS[position])
        x = bench.made.truth(part_id, "reactance_ohm", frequency_hz=1e3)
        r = bench.made.truth(part_id, "resistance_ohm", frequency_hz=1e3)
        seen = bench.read()
        # the file's accuracy 1e-5, the residual of the clips and seven digits
        assert seen.imag == pytest.approx(x, rel=1e-4)
        assert seen.real == pytest.approx(r, abs=1e-4 * abs(x))
    assert bench.made.fault("C1") == ""
    assert bench.made.fault("C2") == "low"
    assert bench.made.truth("C2", "cs_f", frequency_hz=1e3) < 0.8e-6


def test_two_positions_connected_are_in_parallel(bench: Bench) -> None:
    bench.connect(*POSITIONS["1"], *POSITIONS["2"])
    total = sum(bench.made.truth(each, "cs_f", frequency_hz=1e3) for each in ("C1", "C2"))
    assert -1 / (2 * math.pi * 1e3 * bench.read().imag) == pytest.approx(total, rel=1e-3)


def test_an_empty_position_is_an_open_fixture(bench: Bench) -> None:
    bench.connect(*POSITIONS["4"])
    assert abs(bench.read()) > 1e9


def test_a_relay_that_sticks_leaves_its_part_out(bench: Bench) -> None:
    assert bench.connect(*POSITIONS["3"]).endswith("(@203)")
    assert abs(bench.read()) > 1e9


def test_instruments_say_who_they_are(bench: Bench) -> None:
    assert bench.meter.query("*IDN?") == "GENERIC,IMPEDANCE-METER,M-77,1.0"
    assert bench.others[1].query("*IDN?") == "GENERIC,THERMOMETER,T-5,1.0"
    assert float(bench.others[1].query("MEAS:TEMP?")) == pytest.approx(22.0, abs=0.21)


def test_the_same_seed_is_the_same_bench(tmp_path: Path) -> None:
    def readings(seed: int) -> list[complex]:
        made = bench_of(PHYSICAL, tmp_path, seed)
        made.connect(*POSITIONS["1"])
        found = [made.read() for _ in range(3)]
        made.manager.close()
        return found

    assert readings(1) == readings(1) != readings(2)


def test_a_bench_that_is_loaded_by_hand() -> None:
    rows = [{**row, "position": "clips"} for row in ROWS]
    made = SimulatedBench(None, INSTRUMENTS[:1], {"clips": ()}, rows, seed=4, models=MODELS)
    bench = Bench(made, (METER,))
    assert bench.meter.query("READ?").split(",")[2] == "1", "nothing is there yet"
    made.place("R1", now_s=bench.now_s)
    bench.now_s += 1.0
    assert abs(bench.read()) == pytest.approx(1e3, rel=0.06)
    made.place("C1", now_s=bench.now_s)
    bench.now_s += 1.0
    assert abs(bench.read()) == pytest.approx(159.0, rel=0.11)
    with pytest.raises(KeyError):
        made.place("C1", "shelf")
    bench.manager.close()


def test_an_instrument_without_a_simulator_is_made_of_its_driver() -> None:
    driver = tomllib.loads((ROOT / "drivers" / "scpi-impedance-meter.toml").read_text("utf-8"))
    driver["simulated_by"] = ""
    instruments = (InstrumentAt(name="meter", address=METER, driver=driver), *INSTRUMENTS[1:])
    made = SimulatedBench(None, instruments, POSITIONS, ROWS, seed=4, models=MODELS)
    bench = Bench(made)
    bench.connect(*POSITIONS["1"])
    bench.meter.write("VOLT 1")
    bench.meter.write("FREQ 1000")
    assert float(bench.meter.query("FREQ?")) == 1000.0
    x = made.truth("C1", "reactance_ohm", frequency_hz=1e3)
    assert bench.read().imag == pytest.approx(x, rel=1e-4)
    assert bench.meter.query("SYST:ERR?").startswith("0,")
    bench.manager.close()


def test_what_cannot_be_simulated_is_said() -> None:
    unknown = (InstrumentAt(name="meter", address=METER, simulator="oscilloscope"),)
    with pytest.raises(ValueError, match="oscilloscope"):
        SimulatedBench(None, unknown, POSITIONS, (), seed=1)
    with pytest.raises(PhysicalFileError, match="no part model"):
        SimulatedBench(None, (), POSITIONS, ROWS, seed=1)
    for table in ({"acuracy": 1}, {"noise": {"fast": 1e-5}}, {"knots": [[1, 2]]}):
        with pytest.raises(PhysicalFileError, match=r"instrument\.meter"):
            meter_figures(table, "meter")


@pytest.mark.parametrize(
    ("row", "make"),
    [
        ({"kind": "capacitor", "dielectric": "X7R"}, "ceramic-x7r"),
        ({"kind": "capacitor", "dielectric": "NP0"}, "ceramic-c0g"),
        ({"kind": "capacitor", "dielectric": "PET"}, "film-pet"),
        ({"kind": "capacitor", "dielectric": "", "polarity": "polar"}, "aluminium-electrolytic"),
        ({"kind": "capacitor"}, "film-pp"),
        ({"kind": "inductor"}, "choke-ferrite"),
        ({"kind": "resistor"}, "resistor-film"),
    ],
)
def test_a_part_that_no_physical_file_knows_is_a_good_one_of_a_likely_make(
    row: dict[str, object], make: str
) -> None:
    assert make_of(row) == make
    assert (MODELS / f"{make}.toml").is_file()


def test_the_shipped_meter_stays_within_what_its_driver_states() -> None:
    driver = tomllib.loads((ROOT / "drivers" / "scpi-impedance-meter.toml").read_text("utf-8"))
    accuracy = driver["accuracy"]
    figures = meter_figures({}, "meter")
    prefixes = {"k": 1e3, "M": 1e6, "m": 1e-3, "n": 1e-9, "G": 1e9, "%": 1e-2, "": 1.0}

    def number(text: str) -> float:
        digits, unit = text.split()
        known = unit in ("%", "Hz", "ohm", "S", "V", "rad")
        return float(digits) * (1e-2 if unit == "%" else 1.0 if known else prefixes[unit[0]])

    ends = {name: number(accuracy[name]) for name in ("short", "open")}
    levels = [(number(one["from_level"]), one["factor"]) for one in accuracy["level"]]
    for band in accuracy["band"]:
        low, high = (number(text) for text in band["frequency"])
        for step in range(11):
            frequency_hz = low * (high / low) ** (step / 10) * (0.999 if step == 10 else 1.0)
            for impedance_ohm in (0.01, 1.0, 1e3, 1e6, 1e9):
                for level_v in (2.0, 0.5, 0.1, 0.02, 0.005):
                    factor = next(factor for least, factor in levels if level_v >= least)
                    extra = ends["short"] / impedance_ohm + ends["open"] * impedance_ohm
                    widths = figures.half_widths(frequency_hz, impedance_ohm, level_v)
                    stated = [number(band[each]) + extra for each in ("magnitude", "phase")]
                    for width, allowed in zip(widths, stated, strict=True):
                        assert width <= allowed * factor, (frequency_hz, impedance_ohm, level_v)
    assert figures.frequency_rel <= number(accuracy["frequency_share"])


def test_every_simulator_that_a_shipped_driver_names_exists_and_answers_its_identity() -> None:
    for path in sorted((ROOT / "drivers").glob("*.toml")):
        driver = tomllib.loads(path.read_text("utf-8"))
        simulator = driver.get("simulated_by", "")
        assert simulator in SIMULATORS, path
        made = SimulatedBench(
            None,
            (InstrumentAt(name="it", address=METER, simulator=simulator, serial_number="Q9"),),
            POSITIONS,
            (),
            seed=1,
        )
        device = made.named["it"]
        device.opened(1.0)
        device.take(1.0)
        query = driver.get("identity", {}).get("ask", "*IDN?").encode()
        device.receive(query + device.ends_line, 2.0)
        answer = device.take(2.0)
        identity = driver.get("identity", {})
        start = identity.get("starts_with") or "".join(identity.get("fields", [""])[:1])
        assert start.encode() in answer, path


def test_instruments_that_share_an_address_each_get_what_is_meant_for_them() -> None:
    shared = [
        InstrumentAt(name=one.name, address=METER, simulator=one.simulator, serial_number="1")
        for one in INSTRUMENTS
    ]
    made = SimulatedBench(None, shared, POSITIONS, ROWS, seed=4, models=MODELS, faulty=("room",))
    assert made.named["meter"] is made.named["switch"] is made.layers["room"]
    bench = Bench(made, (METER,))
    ask = bench.meter.query
    assert ask("*IDN?") == "GENERIC,IMPEDANCE-METER,1,1.0"
    assert ask("ROUT:CLOS (@101,201);*OPC?;CLOS:STAT?") == "1;(@101,201)"
    assert float(ask("MEAS:TEMP?")) == pytest.approx(23.0, abs=0.21)
    x = made.truth("C1", "reactance_ohm", frequency_hz=1e3)
    assert bench.read().imag == pytest.approx(x, rel=2e-3)
    bench.meter.write("NONSENSE")
    assert ask("SYST:ERR?").startswith("-113,")
    bench.manager.close()
    lines = {"role": "thermometer", "codec": "lines", "link": {"write_termination": "\r"}}
    odd = InstrumentAt(name="odd", address=METER, driver=lines)
    with pytest.raises(ValueError, match="alike"):
        SimulatedBench(None, (*shared, odd), POSITIONS, (), seed=4)
    handheld = InstrumentAt(name="h", address=METER, simulator="impedance-meter-handheld-stream")
    with pytest.raises(ValueError, match="cannot share"):
        SimulatedBench(None, (*shared, handheld), POSITIONS, (), seed=4)
