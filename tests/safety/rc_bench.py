"""A small bench for the warden's tests: one rail, real contacts, parts that obey closed forms.

Each part is a capacitance with a leak across it and, if asked, one absorption branch (a resistor
and a capacitance in series). Between two events the circuit is linear, so it is carried forward
in closed form; the supply's current limit is a regime of its own, and the steps near its corner
are short enough for it not to matter. What the instruments say and what is true are two things:
faults sit in between, and the tests judge what is true.
"""

from collections.abc import Callable
from dataclasses import dataclass, field
from math import exp, inf, sqrt

import trio

from ohmward.errors import InstrumentRefused, LinkTimeout
from ohmward.safety.equipment import Equipment, Facts
from ohmward.safety.permit import Ceiling, Laws, Permit
from ohmward.safety.wiring import Contact, PositionWiring, Wiring
from ohmward.terms.kind import Kind
from ohmward.terms.reading import CurrentReading, SupplyReading, VoltageReading
from ohmward.terms.status import Status

DIVIDER_OHM = 500e6
SERIES_OHM = 10e3
DISCHARGE_OHM = 100e3
SHORT_OHM = 10.0
METER_OHM = 100.0  # what the impedance meter puts across a part
LIMIT_A = 10e-3


@dataclass
class Part:
    """A capacitor: F, leak in ohm, absorption branch as (F, ohm)."""

    farad: float
    leak_ohm: float = 1e12
    absorbs_f: float = 0.0
    absorbs_ohm: float = inf
    volts: float = 0.0
    inner_v: float = 0.0


@dataclass
class Relay:
    """A contact as it is, apart from what its coil is told."""

    contact: Contact
    powered: bool = False
    stuck: str = ""  # "", "made" or "broken"
    read_back_lies: bool = True

    @property
    def made(self) -> bool:
        if self.stuck:
            return self.stuck == "made"
        return self.powered != self.contact.made_unpowered


def wiring(*, weak: dict[str, float] | None = None) -> Wiring:
    """Two positions; the discharge connects without power, everything else isolates.

    ``weak`` gives channels a hot-switch voltage of their own.
    """

    def high(channel: str, *, made: bool = False) -> Contact:
        volts = (weak or {}).get(channel, 1000.0)
        return Contact(channel=channel, switch_v=volts, switch_a=0.5, made_unpowered=made)

    def dry(channel: str) -> Contact:
        return Contact(channel=channel, switch_v=1.0, switch_a=0.05, stand_off_v=1000.0)

    return Wiring(
        supply=high("1"),
        bypass=Contact(channel="2", switch_v=10.0, switch_a=0.5),
        divider_ohm=DIVIDER_OHM,
        meter_survives_a=1.0,
        positions=tuple(
            PositionWiring(
                position=str(n),
                connect=high(f"{n}01"),
                series_ohm=SERIES_OHM,
                discharge=high(f"{n}02", made=True),
                discharge_ohm=DISCHARGE_OHM,
                short=Contact(channel=f"{n}03", switch_v=30.0, switch_a=2.0),
                short_ohm=SHORT_OHM,
                sense=(high(f"{n}04"), high(f"{n}05")),
                meter=(dry(f"{n}06"), dry(f"{n}07")),
            )
            for n in (1, 2)
        ),
    )


def permit(*, nominal_f: float, rated_v: float = 450.0, kind: Kind = Kind.CAPACITOR) -> Permit:
    """Both positions hold a part of this value, ±20 %."""
    return Permit(
        brief_hash="b" * 64,
        bench_v=500.0,
        limit_a=LIMIT_A,
        ceilings=tuple(
            Ceiling(
                part_id=f"C{n}",
                position=str(n),
                kind=kind,
                voltage_v=rated_v,
                capacitance_min_f=0.8 * nominal_f,
                capacitance_max_f=1.2 * nominal_f,
                assumed_v=rated_v,
            )
            for n in (1, 2)
        ),
        laws=Laws(),
    )


def facts() -> Facts:
    """Instruments of a modest bench."""
    return Facts(
        limit_a=LIMIT_A,
        supply_error_a=0.5e-6,
        voltmeter_resolution_v=0.01,
        voltmeter_interval_s=0.02,
        ranges_a=(2e-6, 20e-6, 200e-6, 2e-3),
        meter_error_a=1e-9,
    )


@dataclass
class Bench:
    """The truth, and the instruments that look at it."""

    parts: dict[str, Part]
    wired: Wiring = field(default_factory=wiring)
    on: bool = False
    set_v: float = 0.0
    limit_a: float = 0.001
    tripped: bool = False
    obeys_off: bool = True
    lies_about_off: bool = False
    supply_hangs: bool = False
    enclosure_closed: bool = True
    sense_broken: bool = False
    contact_lost: set[str] = field(default_factory=set)
    scanner_dead: bool = False
    range_a: float = 2e-3
    now_s: float = 0.0
    highest_v: float = 0.0
    unlawful: list[str] = field(default_factory=list)
    log: list[tuple[float, str]] = field(default_factory=list)
    renewed: int = 0
    _script: list[tuple[float, Callable[["Bench"], None]]] = field(default_factory=list)
    _when: list[tuple[Callable[["Bench"], bool], Callable[["Bench"], None]]] = field(
        default_factory=list
    )

    def __post_init__(self) -> None:
        self.relays = {contact.channel: Relay(contact) for contact in self.wired.contacts()}

    # ---- faults

    def when(self, condition: Callable[["Bench"], bool], change: Callable[["Bench"], None]) -> None:
        """Change something once, as soon as the condition holds."""
        self._when.append((condition, change))

    def at(self, time_s: float, change: Callable[["Bench"], None]) -> None:
        """Change something at an instant."""
        self._script.append((time_s, change))

    def above(self, volts: float, change: Callable[["Bench"], None], after_s: float = 0.0) -> None:
        """Change something ``after_s`` after the part at position 1 has passed this voltage."""

        def later(bench: "Bench") -> None:
            bench._script.append((bench.now_s + after_s, change))

        self.when(lambda bench: bench.parts["1"].volts >= volts, later)

    # ---- physics

    def made(self, contact: Contact) -> bool:
        return self.relays[contact.channel].made

    def connected(self, position: str) -> bool:
        place = self.wired.at(position)
        assert place is not None
        return self.made(place.connect) and position not in self.contact_lost

    @property
    def feeding(self) -> bool:
        return self.on and not self.tripped and self.made(self.wired.supply)

    def advance(self, now_s: float) -> None:
        """Carry the truth forward to an instant, faults included."""
        while self.now_s < now_s:
            step_s = now_s - self.now_s
            if self.feeding and any(self._near_a_corner(n) for n in self.parts):
                step_s = min(step_s, 0.02)
            due = [at for at, _ in self._script if at > self.now_s]
            step_s = min([step_s, *(at - self.now_s for at in due)])
            for position, part in self.parts.items():
                self._step(position, part, step_s)
                self.highest_v = max(self.highest_v, part.volts)
            self.now_s += step_s
            self._faults()
        self._faults()

    def _near_a_corner(self, position: str) -> bool:
        """Whether the supply limits its current, or is about to feed: elsewhere all is linear."""
        ahead_v = self.set_v - self.parts[position].volts
        return self.connected(position) and (
            ahead_v / SERIES_OHM > self.limit_a or ahead_v < -1e-9 * self.set_v
        )

    def _faults(self) -> None:
        for condition, change in list(self._when):
            if condition(self):
                self._when.remove((condition, change))
                change(self)
        for at_s, change in list(self._script):
            if at_s <= self.now_s:
                self._script.remove((at_s, change))
                change(self)

    def _step(self, position: str, part: Part, step_s: float) -> None:
        """One linear step of one part: C dV/dt = I_in − V·G + (W − V)/R_a, C_a dW/dt = …"""
        place = self.wired.at(position)
        assert place is not None
        conductance = 1.0 / part.leak_ohm
        if any(map(self.made, place.sense)):
            conductance += 1.0 / DIVIDER_OHM
        if self.made(place.short) and position not in self.contact_lost:
            conductance += 1.0 / SHORT_OHM
        if all(map(self.made, place.meter)):
            conductance += 1.0 / METER_OHM
        amperes = 0.0
        if self.connected(position):
            discharging = self.made(place.discharge)
            if self.feeding:
                if (self.set_v - part.volts) / SERIES_OHM > self.limit_a:
                    amperes = self.limit_a
                elif self.set_v > part.volts:
                    amperes = self.set_v / SERIES_OHM
                    conductance += 1.0 / SERIES_OHM
            elif discharging:
                conductance += 1.0 / (SERIES_OHM + DISCHARGE_OHM)
        if part.absorbs_f:
            self._with_absorption(part, conductance, amperes, step_s)
        else:
            settled = amperes / conductance
            left = exp(-step_s * conductance / part.farad)
            part.volts = settled + (part.volts - settled) * left

    @staticmethod
    def _with_absorption(part: Part, conductance: float, amperes: float, step_s: float) -> None:
        """x' = A·x + u in two unknowns: e^(At) = e^(mt)·(cosh(st) + sinh(st)/s·(A − m))."""
        absorbs = 1.0 / part.absorbs_ohm
        a, b = -(conductance + absorbs) / part.farad, absorbs / part.farad
        c, d = absorbs / part.absorbs_f, -absorbs / part.absorbs_f
        settled = amperes / conductance  # both nodes end there
        mean = 0.5 * (a + d)
        spread = sqrt((0.5 * (a - d)) ** 2 + b * c)
        slow, fast = exp((mean + spread) * step_s), exp((mean - spread) * step_s)
        even, odd = 0.5 * (slow + fast), 0.5 * (slow - fast) / spread
        outer, inner = part.volts - settled, part.inner_v - settled
        part.volts = settled + even * outer + odd * ((a - mean) * outer + b * inner)
        part.inner_v = settled + even * inner + odd * (c * outer + (d - mean) * inner)

    def current_a(self) -> float:
        """What flows out of the supply, all of it through a part and its divider."""
        if not self.feeding:
            return 0.0
        total = 0.0
        for position, part in self.parts.items():
            if self.connected(position):
                flow = (self.set_v - part.volts) / SERIES_OHM
                total += min(max(flow, 0.0), self.limit_a)
        return total

    # ---- relays

    def power(self, channel: str, on: bool) -> None:
        relay = self.relays[channel]
        before = relay.made
        relay.powered = on
        if relay.made != before:
            self._judge_move(relay)

    def _judge_move(self, relay: Relay) -> None:
        """Whether a contact that truly moved was within its rating, by what was truly there."""
        channel = relay.contact.channel
        volts = 0.0
        if channel == "1":
            rail = max((p.volts for n, p in self.parts.items() if self.connected(n)), default=0.0)
            volts = abs((self.set_v if self.on else 0.0) - rail)
        elif channel != "2" and channel[0] not in self.contact_lost:
            volts = abs(self.parts[channel[0]].volts)
        if volts > relay.contact.switch_v * 1.000001:
            self.unlawful.append(f"contact {channel} moved at {volts:.3g} V")
        if channel[1:] in {"06", "07"} and volts > 1.0:
            self.unlawful.append(f"the meter path moved at {volts:.3g} V")

    def equipment(self) -> Equipment:
        return Equipment(
            supply=SupplyOf(self),
            current_meter=MeterOf(self),
            voltmeter=VoltmeterOf(self),
            scanner=ScannerOf(self),
            interlock=InterlockOf(self),
        )


class Instrument:
    """Takes its time over every command, and the truth goes on meanwhile."""

    takes_s = 0.01

    def __init__(self, bench: Bench) -> None:
        self.bench = bench

    async def _take(self) -> Bench:
        await trio.sleep(self.takes_s)
        self.bench.advance(trio.current_time())
        return self.bench


class SupplyOf(Instrument):
    """One-quadrant supply; it may ignore OFF, lie about it, trip by itself, or hang."""

    async def _take(self) -> Bench:
        if self.bench.supply_hangs:
            await trio.sleep(1e6)
        return await super()._take()

    async def set_voltage(self, voltage_v: float) -> None:
        bench = await self._take()
        if voltage_v > bench.set_v or bench.obeys_off:
            bench.set_v = voltage_v
        bench.log.append((bench.now_s, f"set {voltage_v:g} V"))

    async def set_limit(self, current_a: float) -> None:
        bench = await self._take()
        bench.limit_a = current_a

    async def output(self, on: bool) -> None:
        bench = await self._take()
        if on or bench.obeys_off:
            bench.on = on
        bench.log.append((bench.now_s, "on" if on else "off"))

    async def read(self) -> SupplyReading:
        bench = await self._take()
        says_off = bench.lies_about_off or not bench.on or bench.tripped
        current_a = bench.current_a()
        return SupplyReading(
            voltage_set_v=0.0 if bench.lies_about_off else bench.set_v,
            limit_set_a=bench.limit_a,
            voltage_v=bench.set_v if bench.feeding else 0.0,
            current_a=current_a,
            output_on=not says_off,
            limiting=bench.feeding and current_a >= bench.limit_a * 0.999,
            tripped=bench.tripped,
        )

    async def renew(self) -> None:
        self.bench.renewed += 1
        self.bench.supply_hangs = False
        await super()._take()


class MeterOf(Instrument):
    """The current meter in the return, behind its bypass."""

    takes_s = 0.02

    async def set_range(self, range_a: float) -> None:
        bench = await self._take()
        bench.range_a = range_a

    async def read(self) -> CurrentReading:
        bench = await self._take()
        through = 0.0 if bench.made(bench.wired.bypass) else bench.current_a()
        over = through > bench.range_a
        return CurrentReading(
            current_a=through,
            range_a=bench.range_a,
            status=Status.OVERLOAD if over else Status.OK,
        )


class VoltmeterOf(Instrument):
    """Across the terminals of the one position whose sense contacts are made."""

    takes_s = 0.02

    async def read(self) -> VoltageReading:
        bench = await self._take()
        seen = [
            part.volts
            for position, part in bench.parts.items()
            if all(map(bench.made, bench.wired.at(position).sense))
            and position not in bench.contact_lost
        ]
        volts = 0.0 if bench.sense_broken or not seen else max(seen)
        return VoltageReading(voltage_v=round(volts, 2))


class ScannerOf(Instrument):
    """Relays by channel; the read-back is the coil's unless the relay tells the truth."""

    takes_s = 0.005

    async def _take(self) -> Bench:
        if self.bench.scanner_dead:
            await trio.sleep(1.0)
            raise LinkTimeout("the scanner does not answer")
        return await super()._take()

    async def close(self, channels: tuple[str, ...]) -> None:
        await self._set(channels, True)

    async def open(self, channels: tuple[str, ...]) -> None:
        await self._set(channels, False)

    async def open_all(self) -> None:
        await self._set(tuple(self.bench.relays), False)

    async def _set(self, channels: tuple[str, ...], on: bool) -> None:
        bench = await self._take()
        for channel in channels:
            bench.power(channel, on)
        wrong = {c for c in channels if (c in self._read_back()) != on}
        if wrong:
            raise InstrumentRefused(f"relays {sorted(wrong)} did not obey")

    async def closed(self) -> frozenset[str]:
        await self._take()
        return self._read_back()

    def _read_back(self) -> frozenset[str]:
        return frozenset(
            channel
            for channel, relay in self.bench.relays.items()
            if (
                relay.powered
                if relay.read_back_lies
                else relay.made != relay.contact.made_unpowered
            )
        )


class InterlockOf(Instrument):
    """The enclosure."""

    takes_s = 0.005

    async def closed(self) -> bool:
        bench = await self._take()
        return bench.enclosure_closed
