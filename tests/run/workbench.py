"""A small bench, lot and sequence in a folder, run dry, or served in a thread and run over TCP."""

import csv
import sqlite3
import threading
from collections.abc import Collection, Mapping
from pathlib import Path
from types import TracebackType

import pyvisa
import trio

from ohmward import api
from ohmward.api.preparing import Prepared
from ohmward.api.serving import bench_file
from ohmward.api.simulation import _plain, simulator_of
from ohmward.setup.resources import shipped
from ohmward.sim.bench import InstrumentAt, SimulatedBench
from ohmward.sim.device import Device
from ohmward.sim.faults import FaultLayer
from ohmward.sim.server import serve

Row = dict[str, str]

BENCH = """\
format = 1
name = "bench of the tests"
bias_ceiling = "40 V"
[instrument.meter]
role = "impedance meter"
driver = "{driver}"
address = "TCPIP::192.0.2.11::5025::SOCKET"
cable = "1 m"
[instrument.switch]
role = "scanner"
driver = "scpi-scanner"
address = "TCPIP::192.0.2.12::5025::SOCKET"
[instrument.room]
role = "thermometer"
driver = "scpi-thermometer"
address = "TCPIP::192.0.2.13::5025::SOCKET"
[fixture]
loading = "scanner"
[simulation]
physical_file = "physics.toml"
"""
POSITION = """
[[position]]
name = "{n}"
meter_channels = ["10{n}", "20{n}"]
"""
HAND_BENCH = """\
format = 1
name = "clip fixture"
bias_ceiling = "40 V"
[instrument.meter]
role = "impedance meter"
driver = "scpi-impedance-meter"
address = "TCPIP::192.0.2.11::5025::SOCKET"
[fixture]
loading = "by hand"
[simulation]
physical_file = "physics.toml"
[[position]]
name = "clips"
"""
PHYSICS = """\
format = 1
[part.C3]
model = "film-pet"
fault = "low"
"""
LOT = """\
part_id,position,kind,nominal,tolerance,rated_voltage,dielectric
C1,1,capacitor,1 uF,±10 %,630 V DC,PP
C2,2,capacitor,10 nF,±10 %,50 V DC,X7R
C3,3,capacitor,220 nF,±10 %,400 V DC,PET
"""
SEQUENCE = """\
format = 1
name = "short sweep"
purpose = "A few points"
follows = "nobody"
kinds = "capacitor"
[[stage]]
kind = "sweep"
name = "sweep"
frequency = ["1 kHz", "10 kHz", "100 kHz"]
level = "1 V"
integration = "short"
repeats = 3
closure = true
{more}
[[limit]]
stage = "sweep"
quantity = "capacitance_f"
at = {{ frequency = "1 kHz" }}
rule = "marked-tolerance"
source = "the part's own marking"
"""


def sequence(more: str = "", **changed: str) -> str:
    """The short sequence with lines changed, and more of them in its stage."""
    lines = SEQUENCE.format(more=more).splitlines()
    for key, value in changed.items():
        lines = [f"{key} = {value}" if line.startswith(f"{key} = ") else line for line in lines]
    return "\n".join(lines) + "\n"


class Workbench:
    """The files of one small job in a folder; change them before they are used."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.write("sequence.toml", sequence())
        self.write("bench.toml", self.bench())
        self.write("physics.toml", PHYSICS)
        self.write("parts.csv", LOT)

    def write(self, name: str, text: str) -> Path:
        """Write a file of the job."""
        path = self.folder / name
        path.write_text(text, "utf-8")
        return path

    @staticmethod
    def bench(driver: str = "scpi-impedance-meter", positions: int = 4) -> str:
        """A bench file with a scanner."""
        places = (POSITION.format(n=n) for n in range(1, positions + 1))
        return BENCH.format(driver=driver) + "".join(places)

    def driver(self, text: str, extends: str = "scpi-impedance-meter") -> None:
        """Give the meter a driver file of its own, and make the bench file name it."""
        self.write("own.toml", f'format = 1\nextends = "{extends}"\n{text}')
        self.write("bench.toml", self.bench(str(self.folder / "own.toml")))

    def prepare(self, bench: str = "bench.toml") -> Prepared:
        """The job, without a problem."""
        return api.prepare(
            self.folder / "sequence.toml",
            bench=self.folder / bench,
            parts=self.folder / "parts.csv",
        )

    def dry_run(self, name: str = "dry", seed: int = 0) -> Path:
        """Run it dry; the folder of the run."""
        out = self.folder / name
        api.dry_run(self.prepare(), out=out, seed=seed)
        return out

    def run(self, name: str = "real", bench: str = "served.toml") -> Path:
        """Run it over links; the folder of the run."""
        out = self.folder / name
        api.run(self.prepare(bench), out=out)
        return out

    def arguments(self, out: Path | str, bench: str = "served.toml") -> list[str]:
        """What stands behind ``ohmward run`` for this job."""
        return [
            str(self.folder / "sequence.toml"),
            *("--bench", str(self.folder / bench)),
            *("--parts", str(self.folder / "parts.csv")),
            *("--out", str(out)),
        ]


class Served:
    """The workbench's simulated instruments behind loopback sockets, in a thread of their own.

    Writes ``served.toml``, the bench file with the addresses. Entered again after it was left,
    it comes back at the same addresses as an instrument does that was switched off and on.
    """

    def __init__(
        self,
        workbench: Workbench,
        *,
        faulty: Collection[str] = (),
        serial_numbers: Mapping[str, str] | None = None,
        seed: int = 0,
        power_cycle: bool = True,
    ) -> None:
        self._workbench = workbench
        self._prepared = workbench.prepare()
        self._faulty = faulty
        self._serial_numbers = serial_numbers or {}
        self._seed = seed
        self._power_cycle = power_cycle
        self._ports: dict[str, int] = {}
        self._simulated: SimulatedBench | None = None
        self.addresses: dict[str, str] = {}

    def _build(self) -> SimulatedBench:
        prepared = self._prepared
        return SimulatedBench(
            prepared.bench.physical_path,
            [
                InstrumentAt(
                    name=name,
                    address=one.address,
                    simulator=simulator_of(prepared.drivers[name]),
                    driver=prepared.drivers[name].merged,
                    serial_number=self._serial_numbers.get(name, one.serial_number),
                )
                for name, one in prepared.bench.instruments.items()
            ],
            {place.name: place.meter_channels for place in prepared.bench.positions},
            [_plain(part) for part in prepared.parts],
            self._seed,
            models=shipped("simulators") / "parts",
            faulty=self._faulty,
        )

    @property
    def simulated(self) -> SimulatedBench:
        """What is served."""
        assert self._simulated is not None
        return self._simulated

    def layer(self, name: str) -> FaultLayer:
        """The fault layer of a faulty instrument."""
        return self.simulated.layers[name]

    def be_another(self, **serial_numbers: str) -> None:
        """When it comes back, other instruments stand at these addresses."""
        self._serial_numbers = serial_numbers
        self._simulated = None

    def __enter__(self) -> "Served":
        if self._simulated is None or self._power_cycle:
            self._simulated = self._build()
        ready = threading.Event()
        self._scope = trio.CancelScope()
        self._thread = threading.Thread(target=trio.run, args=(self._main, ready), daemon=True)
        self._thread.start()
        assert ready.wait(10.0)
        return self

    async def _main(self, ready: threading.Event) -> None:
        self._token = trio.lowlevel.current_trio_token()

        def told(addresses: dict[str, str]) -> None:
            self.addresses = addresses
            self._ports = {name: int(one.split("::")[2]) for name, one in addresses.items()}
            text = bench_file(self._prepared.bench, dict(self._prepared.drivers), addresses)
            self._workbench.write("served.toml", text + "\n")
            ready.set()

        named: dict[str, Device] = dict(self.simulated.named)
        with self._scope:
            await serve(_Named(named), ports=self._ports, ready=told)

    def __exit__(
        self,
        kind: type[BaseException] | None = None,
        error: BaseException | None = None,
        trace: TracebackType | None = None,
    ) -> None:
        self._token.run_sync_soon(self._scope.cancel)
        self._thread.join(10.0)

    def ask(self, name: str, *queries: str) -> list[str]:
        """Ask an instrument over a plain PyVISA session."""
        manager = pyvisa.ResourceManager("@py")
        try:
            session = manager.open_resource(
                self.addresses[name],
                read_termination="\n",
                write_termination="\n",
                open_timeout=2000,
                timeout=2000,
            )
            assert isinstance(session, pyvisa.resources.MessageBasedResource)
            return [session.query(query) for query in queries]
        finally:
            manager.close()

    def at_rest(self) -> bool:
        """Whether the meter's biases are off, its level is least and no relay is closed."""
        found = self.ask("meter", "VOLT:OFFS:STAT?", "CURR:OFFS:STAT?", "VOLT:OFFS?", "VOLT?")
        relays = self.ask("switch", "ROUT:CLOS:STAT?")
        return [float(one) for one in found] == [0, 0, 0, 0.005] and relays == ["(@)"]

    def switch_on(self, *commands: str) -> None:
        """Set something on the meter, as a person did who used it before."""
        self.ask("meter", *(f"{command};*OPC?" for command in commands))


class _Named:
    def __init__(self, named: Mapping[str, Device]) -> None:
        self.named = named


def table(folder: Path, name: str) -> list[Row]:
    """The rows of a run's table."""
    with (folder / f"{name}.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def journal(folder: Path, query: str = "SELECT * FROM impedance ORDER BY reading") -> list[tuple]:  # type: ignore[type-arg]
    """Rows of a run's journal, read by SQLite itself from a copy, so that nothing is touched."""
    connection = sqlite3.connect(":memory:")
    source = sqlite3.connect(f"file:{folder / 'journal.sqlite'}?mode=ro", uri=True)
    try:
        source.backup(connection)
        return connection.execute(query).fetchall()
    finally:
        source.close()
        connection.close()


WHERE = ("part_id", "position", "stage", "repeat", "frequency_hz", "level_set_v", "bias_set_v")
KEY = ("part_id", "stage", "quantity", "frequency_hz", "level_v", "bias_v")


def places(folder: Path) -> list[tuple[str, ...]]:
    """What was read, in order: where each row of impedance.csv belongs, and its status."""
    return [tuple(row[name] for name in (*WHERE, "status")) for row in table(folder, "impedance")]


def decisions(folder: Path) -> list[tuple[str, ...]]:
    """What was decided, in order, without the numbers."""
    names = (*KEY, "unit", "limit_min", "limit_max", "limit_source", "decision")
    return [tuple(row[name] for name in names) for row in table(folder, "results")]
