"""One shipped driver on its simulated instrument, in virtual time or served, on each link."""

from collections.abc import Awaitable, Callable, Sequence
from dataclasses import dataclass, field
from functools import partial
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any, TypeVar

import pyvisa
import trio

from ohmward.clock import Clock, run_in_real_time, run_in_virtual_time
from ohmward.errors import Problems
from ohmward.instruments.talker import Talker, open_talker
from ohmward.links.thread_waiter import ThreadWaiter
from ohmward.links.virtual_waiter import VirtualWaiter
from ohmward.links.waiter import Waiter
from ohmward.setup.driver import Driver, load_driver
from ohmward.setup.resources import shipped
from ohmward.sim.backend import InProcessLibrary
from ohmward.sim.bench import InstrumentAt, SimulatedBench
from ohmward.sim.faults import FaultLayer
from ohmward.sim.open_ports import OpenSupply
from ohmward.sim.server import serve
from ohmward.terms.role import Role

T = TypeVar("T")

DRIVERS = tuple(sorted(path.stem for path in shipped("drivers").glob("*.toml")))

# an address of each kind of link; in process nothing is opened at it
ADDRESSES = {
    "socket": "TCPIP::192.0.2.1::5025::SOCKET",
    "hislip": "TCPIP::192.0.2.1::hislip0::INSTR",
    "serial": "ASRL1::INSTR",
}
FITTING = {
    "scpi": ("socket", "hislip", "serial"),
    "lines": ("socket", "serial"),  # a prompt ends its replies, which a bus does not know
    "stream": ("socket", "serial"),
    "frames": ("socket", "serial"),
}

SPEED = 10.0
"""So many seconds pass at a served instrument in one real second; its link knows no such thing."""

PHYSICS = """
format = 1
[room]
temperature_c = 23.0
swing_k = 8.0
humidity_pct = 41.0
[part.C1]
model = "film-pp"
[part.C2]
model = "film-pp"
"""
PARTS = (
    {"part_id": "C1", "position": "1", "kind": "capacitor", "nominal": 100e-9, "rated_v": 400.0},
    {"part_id": "C2", "position": "1", "kind": "capacitor", "nominal": 330e-9, "rated_v": 400.0},
)
CHANNELS = ("101", "102", "103", "201", "202", "203")


class Known:
    """An input whose current, voltage and resistance the test knows."""

    def __init__(self) -> None:
        self.amperes, self.volts, self.ohms = 0.0, 0.0, 1e6

    def current_a(self, now_s: float) -> float:
        return self.amperes

    def voltage_v(self, now_s: float) -> float:
        return self.volts

    def resistance_ohm(self, now_s: float) -> float:
        return self.ohms

    def load(self, now_s: float, ohm: float) -> None:
        pass


class Playground:
    """A high-voltage side with nothing in it but what the test puts there."""

    def __init__(self) -> None:
        self.interlock = True
        self.input = Known()
        self.output: OpenSupply | None = None

    def supply(
        self, name: str, *, drain_ohm: float, output_f: float, two_quadrant: bool = False
    ) -> OpenSupply:
        self.output = OpenSupply(drain_ohm=drain_ohm, output_f=output_f, two_quadrant=two_quadrant)
        return self.output

    def current_input(self, name: str) -> Known:
        return self.input

    def voltage_input(self, name: str) -> Known:
        return self.input

    def interlock_closed(self, now_s: float) -> bool:
        return self.interlock

    def close_door(self, closed: bool) -> None:
        self.interlock = closed
        if self.output is not None:
            self.output.interlock = closed


@dataclass
class Place:
    """An open instrument, what is behind it, and its time."""

    talker: Talker
    bench: SimulatedBench
    playground: Playground
    layer: FaultLayer
    now_s: Callable[[], float]
    speed: float = 1.0
    heard: list[str] = field(default_factory=list)

    @property
    def device(self) -> Any:
        """The instrument's core itself."""
        return self.layer.device.device  # type: ignore[attr-defined]  # behind its record

    async def sleep(self, seconds: float) -> None:
        """Let time pass at the instrument."""
        await trio.sleep(seconds / self.speed)


def driver_of(name: str, **link: float) -> Driver:
    """A shipped driver; ``link`` replaces values of its [link]."""
    driver = load_driver(name, Path(), Problems())
    assert driver is not None
    if not link:
        return driver
    return driver.model_copy(update={"link": driver.link.model_copy(update=link)})


def bench_of(driver: Driver, link: str, seed: int, playground: Playground) -> SimulatedBench:
    """A bench with this one instrument, called ``it``, behind a layer of faults."""
    positions: dict[str, Sequence[str]] = {"1": ()}
    if driver.role is Role.SCANNER:
        positions = {"1": CHANNELS}
    with TemporaryDirectory() as folder:
        physics = Path(folder) / "physics.toml"
        physics.write_text(PHYSICS, "utf-8")
        bench = SimulatedBench(
            physics,
            [InstrumentAt(name="it", address=ADDRESSES[link], simulator=driver.simulated_by)],
            positions,
            PARTS,
            seed,
            models=shipped("simulators") / "parts",
            faulty=("it",),
            circuit=playground,
        )
    if driver.role is Role.IMPEDANCE_METER:
        bench.place("C1")
    return bench


@dataclass(frozen=True)
class World:
    """Where a driver meets its instrument: in this process, or served on this machine."""

    name: str
    link: str
    served: bool
    seed: int = 0
    settings: tuple[tuple[str, float], ...] = ()

    def __str__(self) -> str:
        return f"{self.name} on {self.link}, {'served' if self.served else 'in process'}"

    @property
    def driver(self) -> Driver:
        return driver_of(self.name, **dict(self.settings))

    def run(self, work: Callable[[Place], Awaitable[T]]) -> T:
        """Run ``work`` on the instrument; its talker is not open yet."""
        driver, playground = self.driver, Playground()
        bench = bench_of(driver, self.link, self.seed, playground)
        if self.served:
            return run_in_real_time(partial(self._served, driver, playground, bench, work))
        return run_in_virtual_time(partial(self._in_process, driver, playground, bench, work))

    async def _in_process(
        self,
        driver: Driver,
        playground: Playground,
        bench: SimulatedBench,
        work: Callable[[Place], Awaitable[T]],
        clock: Clock,
    ) -> T:
        manager = pyvisa.ResourceManager(InProcessLibrary(bench, trio.current_time))
        talker = _talker(driver, ADDRESSES[self.link], manager, VirtualWaiter())
        layer = bench.layers["it"]
        try:
            return await work(Place(talker, bench, playground, layer, trio.current_time))
        finally:
            await talker.aclose()
            manager.close()

    async def _served(
        self,
        driver: Driver,
        playground: Playground,
        bench: SimulatedBench,
        work: Callable[[Place], Awaitable[T]],
        clock: Clock,
    ) -> T:
        addresses: dict[str, str] = {}
        listening = trio.Event()

        def ready(found: dict[str, str]) -> None:
            addresses.update(found)
            listening.set()

        async with trio.open_nursery() as nursery:
            began_s = trio.current_time()
            links = {"it": self.link}
            nursery.start_soon(partial(serve, bench, links=links, ready=ready, speed=SPEED))
            await listening.wait()
            manager = pyvisa.ResourceManager("@py")
            talker = _talker(driver, addresses["it"], manager, ThreadWaiter())
            try:
                return await work(
                    Place(
                        talker,
                        bench,
                        playground,
                        bench.layers["it"],
                        lambda: (trio.current_time() - began_s) * SPEED,
                        SPEED,
                    )
                )
            finally:
                with trio.CancelScope(shield=True):
                    await talker.aclose()
                manager.close()
                nursery.cancel_scope.cancel()


def _talker(
    driver: Driver, address: str, manager: pyvisa.ResourceManager, waiter: Waiter
) -> Talker:
    return open_talker(address=address, driver=driver, manager=manager, waiter=waiter)


def worlds(*roles: Role, served: bool | None = None) -> list[World]:
    """Every driver of these roles (of all, if none is named) on every link that fits it."""
    found = []
    for name in DRIVERS:
        driver = driver_of(name)
        if roles and driver.role not in roles:
            continue
        for link in FITTING[driver.codec]:
            for where in (False, True) if served is None else (served,):
                found.append(World(name, link, where))
    return found
