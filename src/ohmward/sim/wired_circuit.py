"""A bench's high voltage as its instruments meet it: terminals and relays over one circuit.

The circuit knows neither watchdogs nor who asks; here every question and every order first lets
time pass, with the supply's watchdog striking at its own instant.
"""

import math
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Protocol

from ohmward.sim.open_ports import OpenInput, OpenSupply
from ohmward.sim.terminals import Relays
from ohmward.sim.terminals_dc import CurrentPort, SupplyPort, VoltagePort


class Engine(Protocol):
    """What is needed of the circuit that is solved in time."""

    @property
    def channels(self) -> frozenset[str]:
        """Every relay."""

    @property
    def supply_way(self) -> str:
        """How the supply works; "current" when its limit is at work."""

    def advance(self, to_s: float) -> None:
        """Let time pass; never backwards."""

    def set_supply(self, volts: float, limit_a: float, on: bool, slew_v_s: float) -> None:
        """Tell the supply its level, limit, output and slew."""

    def set_burden(self, ohm: float) -> None:
        """The current meter's input resistance."""

    def set_meter_bias(self, volts: float) -> None:
        """What a source at the impedance meter's bias input puts on what it measures."""

    def relay(self, channel: str, closed: bool) -> float:
        """Order one relay; returns when its contact will be at rest."""

    def contact_closed(self, channel: str) -> bool:
        """Whether a contact is closed."""

    def channel_closed(self, channel: str) -> bool:
        """Whether a channel is closed as its scanner sees it: the coil, not the contact."""

    def supply_voltage(self) -> float:
        """At the supply's terminals."""

    def supply_current(self) -> float:
        """What the supply gives."""

    def meter_current(self) -> float:
        """Through the current meter."""

    def divider_voltage(self) -> float:
        """Across the voltmeter."""


@dataclass(slots=True)
class _Watchdog:
    """What the supply's watchdog will do, and when."""

    until_s: float = math.inf
    limit_a: float = 1e-3
    slew_v_per_s: float = math.inf


class WiredCircuit:
    """Hands out the terminals of one circuit; ``interlock`` may be opened by whoever plays with it.

    A first supply drives the rail. A source of two quadrants is at the impedance meter's bias
    input. Any further supply has nothing connected.
    """

    def __init__(self, engine: Engine) -> None:
        self.engine = engine
        self.interlock = True
        self._watchdog = _Watchdog()
        self._rail_taken = False

    def to(self, now_s: float) -> Engine:
        """The circuit at this instant."""
        watchdog = self._watchdog
        if now_s > watchdog.until_s:
            self.engine.advance(watchdog.until_s)
            self.engine.set_supply(0.0, watchdog.limit_a, False, watchdog.slew_v_per_s)
            watchdog.until_s = math.inf
        self.engine.advance(now_s)
        return self.engine

    def watch(self, until_s: float, limit_a: float, slew_v_per_s: float) -> None:
        """The supply goes off at this instant unless it is told otherwise."""
        self._watchdog = _Watchdog(until_s, limit_a, slew_v_per_s)

    def open_interlock(self, now_s: float) -> None:
        """Somebody opens the enclosure: the supply is off at once, whatever it was told."""
        self.interlock = False
        self.to(now_s).set_supply(0.0, 1e-3, False, math.inf)

    def supply(
        self, name: str, *, drain_ohm: float, output_f: float, two_quadrant: bool = False
    ) -> SupplyPort:
        """The output of a supply."""
        if two_quadrant:
            return _BiasInput(self, drain_ohm=drain_ohm, output_f=output_f)
        if self._rail_taken:
            return OpenSupply(drain_ohm=drain_ohm, output_f=output_f)
        self._rail_taken = True
        return _Rail(self)

    def interlock_closed(self, now_s: float) -> bool:
        """Whether the door is closed."""
        return self.interlock

    def current_input(self, name: str) -> CurrentPort:
        """The input of the current meter in the return."""
        return _Return(self)

    def voltage_input(self, name: str) -> VoltagePort:
        """The input of the voltmeter at the divider."""
        return _Divider(self)


class _Rail:
    """The supply that drives the rail."""

    def __init__(self, circuit: WiredCircuit) -> None:
        self._circuit = circuit

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
        """Pass an order on."""
        engine = self._circuit.to(now_s)
        engine.set_supply(level_v, limit_a, on and self._circuit.interlock, slew_v_per_s)
        self._circuit.watch(until_s, limit_a, slew_v_per_s)

    def voltage_v(self, now_s: float) -> float:
        """At the supply's terminals."""
        return self._circuit.to(now_s).supply_voltage()

    def current_a(self, now_s: float) -> float:
        """Out of them."""
        return self._circuit.to(now_s).supply_current()

    def limiting(self, now_s: float) -> bool:
        """Whether the limit is at work."""
        return self._circuit.to(now_s).supply_way == "current"

    def interlock_closed(self, now_s: float) -> bool:
        """Whether the enclosure is closed."""
        return self._circuit.interlock


class _BiasInput(OpenSupply):
    """A source of two quadrants at the impedance meter's bias input."""

    def __init__(self, circuit: WiredCircuit, *, drain_ohm: float, output_f: float) -> None:
        super().__init__(drain_ohm=drain_ohm, output_f=output_f, two_quadrant=True)
        self._circuit = circuit

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
        """Set the bias of what the impedance meter measures."""
        super().order(
            now_s,
            level_v=level_v,
            slew_v_per_s=slew_v_per_s,
            limit_a=limit_a,
            on=on,
            until_s=until_s,
        )
        self._circuit.to(now_s).set_meter_bias(level_v if on else 0.0)


class _Return(OpenInput):
    """The current meter in the return."""

    def __init__(self, circuit: WiredCircuit) -> None:
        self._circuit = circuit

    def current_a(self, now_s: float) -> float:
        """Through the meter itself, not through its bypass."""
        return self._circuit.to(now_s).meter_current()

    def load(self, now_s: float, ohm: float) -> None:
        """Its input resistance."""
        self._circuit.to(now_s).set_burden(ohm)


class _Divider(OpenInput):
    """The voltmeter at the divider."""

    def __init__(self, circuit: WiredCircuit) -> None:
        self._circuit = circuit

    def voltage_v(self, now_s: float) -> float:
        """Across the divider."""
        return self._circuit.to(now_s).divider_voltage()


class CircuitRelays:
    """The bank of relays of a circuit, and any others that the bench has beside it.

    ``others`` are contacts of the meter's scanner that the circuit does not know.
    """

    def __init__(self, circuit: WiredCircuit, others: Relays | None = None) -> None:
        self._circuit = circuit
        self._others = others
        self._own = circuit.engine.channels
        self._channels = self._own | (others.channels if others else frozenset())
        self._rests_s: list[float] = []
        self._changed_s = -math.inf
        self._known: tuple[float, frozenset[str]] | None = None

    @property
    def channels(self) -> frozenset[str]:
        """Every channel that is fitted."""
        return self._channels

    def order(self, channels: Iterable[str], close: bool, now_s: float) -> float:
        """Order contacts; returns when the last of them is at rest."""
        engine = self._circuit.to(now_s)
        ordered = frozenset(channels)
        rest_s = max(
            (engine.relay(each, close) for each in sorted(ordered & self._own)), default=now_s
        )
        if self._others is not None:
            rest_s = max(rest_s, self._others.order(ordered - self._own, close, now_s))
        if rest_s > now_s:
            self._rests_s.append(rest_s)
        self._known = None
        return rest_s

    def closed(self, now_s: float) -> frozenset[str]:
        """The contacts that are closed now, remembered once all are at rest."""
        known = self._known
        if known is not None and now_s >= known[0]:
            return known[1]
        engine = self._circuit.to(now_s)
        found = frozenset(each for each in self._own if engine.contact_closed(each))
        if self._others is not None:
            found |= self._others.closed(now_s)
        self.changed_s(now_s)
        self._known = (now_s, found) if not self._rests_s else None
        return found

    def reported(self, now_s: float) -> frozenset[str]:
        """The relays whose coils are powered: of their contacts a scanner knows nothing."""
        engine = self._circuit.to(now_s)
        found = frozenset(each for each in self._own if engine.channel_closed(each))
        return found | self._others.reported(now_s) if self._others is not None else found

    def forget(self) -> None:
        """A contact has changed by itself: look again."""
        self._known = None

    def changed_s(self, now_s: float) -> float:
        """When a contact came to rest last."""
        over = [each for each in self._rests_s if each <= now_s]
        if over:
            self._rests_s = [each for each in self._rests_s if each > now_s]
            self._changed_s = max(self._changed_s, *over)
        others_s = self._others.changed_s(now_s) if self._others else -math.inf
        return max(self._changed_s, others_s)
