"""What may go wrong on a simulated bench while it works, by name, at an instant."""

import math
from collections.abc import Callable, Mapping

from ohmward.sim.bench import SimulatedBench
from ohmward.sim.circuit import Circuit
from ohmward.sim.path import PlaceTruth
from ohmward.sim.supply_core import SupplyCore
from ohmward.sim.terminals_dc import SupplyPort
from ohmward.sim.wired_circuit import CircuitRelays, WiredCircuit


class NoSuchMishapError(ValueError):
    """It cannot happen on this bench."""


class _KeepsFeeding:
    """The output of a supply that says what it is told and goes on as it was."""

    def __init__(self, port: SupplyPort) -> None:
        self._port = port
        self._level_v = 0.0

    def order(
        self,
        now_s: float,
        *,
        level_v: float,
        slew_v_per_s: float,
        limit_a: float,
        on: bool,
        until_s: float,
    ) -> None:
        """Higher it goes; down and off it does not."""
        self._level_v = max(self._level_v, level_v, self._port.voltage_v(now_s))
        self._port.order(
            now_s,
            level_v=self._level_v,
            slew_v_per_s=slew_v_per_s,
            limit_a=limit_a,
            on=True,
            until_s=math.inf,
        )

    def voltage_v(self, now_s: float) -> float:
        """As it is."""
        return self._port.voltage_v(now_s)

    def current_a(self, now_s: float) -> float:
        """As it is."""
        return self._port.current_a(now_s)

    def limiting(self, now_s: float) -> bool:
        """As it is."""
        return self._port.limiting(now_s)

    def interlock_closed(self, now_s: float) -> bool:
        """As it is."""
        return self._port.interlock_closed(now_s)


Mishap = Callable[["_Scene"], None]


class _Scene:
    """One position of a bench at an instant."""

    def __init__(self, bench: SimulatedBench, position: str, now_s: float) -> None:
        if not isinstance(bench.circuit, WiredCircuit):
            raise NoSuchMishapError("this bench has no high voltage")
        self.bench, self.position, self.now_s = bench, position, now_s
        self.wired = bench.circuit
        engine = bench.circuit.to(now_s)
        if not isinstance(engine, Circuit):
            raise NoSuchMishapError("this bench's high voltage is not solved in time")
        self.circuit = engine
        found = next((p for p in engine.path.places if p.name == position), None)
        if found is None:
            raise NoSuchMishapError(f"high voltage does not reach position {position}")
        self.place: PlaceTruth = found

    def stick(self, channel: str, how: str) -> None:
        """A contact sticks, and the bench has to look at its contacts anew."""
        self.circuit.stick(channel, how)
        if isinstance(self.bench.contacts, CircuitRelays):
            self.bench.contacts.forget()

    def supply(self) -> SupplyCore:
        """The supply that drives the rail."""
        cores = (getattr(device, "core", None) for device in self.bench.devices.values())
        found = next((core for core in cores if isinstance(core, SupplyCore)), None)
        if found is None:
            raise NoSuchMishapError("this bench has no supply")
        return found


def _trips(scene: _Scene) -> None:
    core = scene.supply()
    core.on, core.tripped = False, True
    core.apply(scene.now_s)


def _ignores_off(scene: _Scene) -> None:
    core = scene.supply()
    core.port = _KeepsFeeding(core.port)


MISHAPS: Mapping[str, tuple[str, Mishap]] = {
    "short": (
        "the part breaks down for good",
        lambda on: on.circuit.harm(on.position, "breakdown"),
    ),
    "leak": ("the part springs a leak", lambda on: on.circuit.harm(on.position, "leak")),
    "open": (
        "the part's own lead comes off inside",
        lambda on: on.circuit.break_wire(on.position, "part"),
    ),
    "contact-lost": (
        "the part's high clip lets go",
        lambda on: on.circuit.break_wire(on.position, "high"),
    ),
    "feed-broken": (
        "the wire from the series resistor breaks",
        lambda on: on.circuit.break_wire(on.position, "feed"),
    ),
    "sense-broken": (
        "the voltmeter's wire to the part breaks",
        lambda on: on.circuit.break_wire(on.position, "sense"),
    ),
    "bypass-stuck": (
        "the current meter's bypass stays made",
        lambda on: on.stick(on.circuit.path.bypass.channel, "closed"),
    ),
    "bypass-open": (
        "the current meter's bypass makes no more",
        lambda on: on.stick(on.circuit.path.bypass.channel, "open"),
    ),
    "relay-welded": (
        "the contact that joins the part to the rail stays made",
        lambda on: on.stick(on.place.connect.channel, "closed"),
    ),
    "supply-welded": (
        "the contact that isolates the supply stays made",
        lambda on: on.stick(on.circuit.path.supply.channel, "closed"),
    ),
    "meter-welded": (
        "one contact of the impedance meter stays made",
        lambda on: on.stick(on.place.meter[0].channel, "closed"),
    ),
    "discharge-open": (
        "the discharge contact makes no more",
        lambda on: on.stick(on.place.discharge.channel, "open"),
    ),
    "short-open": (
        "the direct short makes no more",
        lambda on: on.stick(on.place.short.channel, "open"),
    ),
    "supply-trips": ("the supply switches itself off", _trips),
    "supply-ignores-off": ("the supply says that it is off and goes on feeding", _ignores_off),
    "interlock-opens": (
        "somebody opens the enclosure",
        lambda on: on.wired.open_interlock(on.now_s),
    ),
}


def befall(bench: SimulatedBench, kind: str, position: str, now_s: float) -> None:
    """Let something happen at a position, now. Raises NoSuchMishapError where it cannot."""
    if kind not in MISHAPS:
        raise NoSuchMishapError(f"there is no fault {kind!r}")
    MISHAPS[kind][1](_Scene(bench, position, now_s))
