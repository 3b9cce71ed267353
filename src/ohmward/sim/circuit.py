"""The high-voltage bench in time: supply, relays, resistors, meters and parts, solved exactly.

Between events nothing switches, and each circuit of the bench goes on in its own modes, an hour
in one piece; an instant in it is looked up, not stepped to. Events are contacts that move, a
supply that reaches its limit, a level that arrives, a part whose voltage leaves the stretch in
which it is straight, something that gives way. What happened is told in ``events``.
"""

import heapq
import math
from collections.abc import Mapping
from dataclasses import dataclass

from ohmward.sim.assembly import Assembly, Island
from ohmward.sim.draw import LOST_CONTACT
from ohmward.sim.islands import METER, RAIL, SUPPLY, Role, roles
from ohmward.sim.output import Output
from ohmward.sim.parts import PhysicalPart
from ohmward.sim.path import ContactAt, PathTruth
from ohmward.sim.relay import Move, Relay
from ohmward.sim.stressed import PartState, Stressed

DRY_V = 1.0
LASTS_S = 2e-6  # a current that is over sooner charges a cable and harms no contact
ARC_A = 1e-3
MOST_AT_ONCE = 10_000  # events at one instant: beyond, something is wrong with the model


@dataclass(frozen=True, slots=True)
class Happening:
    """Something that happened on the bench, whether anybody saw it or not."""

    at_s: float
    kind: str
    where: str
    detail: str


class Circuit:
    """A bench's high voltage. ``parts`` are by position; time only goes forward."""

    def __init__(
        self,
        path: PathTruth,
        parts: Mapping[str, PhysicalPart],
        seed: int = 0,
        *,
        temperature_c: float = 23.0,
    ) -> None:
        self.path = path
        self.events: list[Happening] = []
        self._output = Output(path.source.output_ohm)
        self._roles = roles(path)
        self._relays = {
            contact.channel: Relay(contact, path.kind(contact), seed) for contact in path.contacts()
        }
        self._temperature_c = temperature_c
        self._stressed: dict[str, Stressed] = {}
        self._moves: list[Move] = []
        self._all = Assembly(
            path=path,
            closed=self._closed,
            role_of=self._roles,
            output=self._output,
            parts={place.name: None for place in path.places},
            broken={place.name: place.broken for place in path.places},
            burden_ohm=path.burden_ohm,
            on_vent=self._vented,
        )
        for position, part in parts.items():
            self._put(position, part)
        self._all.regroup()

    @property
    def now_s(self) -> float:
        """The instant up to which time has passed."""
        return self._all.now_s

    # ---- what a person or an instrument does

    def advance(self, to_s: float) -> None:
        """Let time pass up to an instant; one that is past changes nothing."""
        bench = self._all
        stood = 0
        while True:
            island = min(bench.islands, key=lambda each: each.turn.at_s)
            move_s = self._moves[0].at_s if self._moves else math.inf
            at_s = min(island.turn.at_s, move_s)
            if at_s > to_s:
                break
            stood = stood + 1 if at_s <= bench.now_s else 0
            if stood > MOST_AT_ONCE:
                raise RuntimeError(f"the simulated circuit stands still at {at_s} s: {island.turn}")
            bench.now_s = max(bench.now_s, at_s)
            if move_s <= island.turn.at_s:
                self._move(heapq.heappop(self._moves))
            else:
                self._turn(island)
        bench.now_s = max(bench.now_s, to_s)

    def set_supply(
        self, volts: float, limit_a: float, on: bool, slew_v_s: float = math.inf
    ) -> None:
        """Tell the supply its level, limit and output, now; nothing changes where it has them."""
        out = self._output
        if (volts, limit_a, on, slew_v_s) == (out.set_v, out.limit_a, out.on, out.slew_v_s):
            return
        self._all.renew(
            SUPPLY,
            lambda: out.told(volts, limit_a, on, slew_v_s, self.now_s, self._all.memory["out"]),
        )

    def relay(self, channel: str, closed: bool) -> float:
        """Close a relay's channel or open it: its coil now, its contact later.

        Returns when the contact will be at rest. Raises KeyError for an unknown channel.
        """
        relay = self._relays[channel]
        if closed != relay.powered:
            self._forget_moves(channel)
            dry = abs(self._all.between(self._roles[channel])) < DRY_V
            for move in relay.order(closed, self.now_s, dry=dry):
                heapq.heappush(self._moves, move)
        return max((m.at_s for m in self._moves if m.channel == channel), default=self.now_s)

    def stick(self, channel: str, how: str) -> None:
        """A contact sticks "open" or "closed"; an empty string frees it."""
        relay = self._relays[channel]
        was = relay.closed
        self._forget_moves(channel)
        relay.stick(how)
        if relay.closed != was:
            self._all.regroup(self._roles[channel].touches)

    def break_wire(self, position: str, wire: str) -> None:
        """A wire of a position conducts no more: feed, high, low, sense or part."""
        self._say("wire broken", position, wire)
        broken = self._all.broken
        self._all.renew(position, lambda: broken.update({position: broken[position] | {wire}}))

    def place(self, position: str, part: PhysicalPart | None) -> None:
        """Put a part into a position, or take it out. Raises KeyError for an unknown position."""
        if position not in self._all.parts:
            raise KeyError(position)
        self._all.renew(position, lambda: self._put(position, part))

    def set_burden(self, ohm: float) -> None:
        """The current meter's input resistance, as its range makes it."""
        if ohm != self._all.burden_ohm:
            self._all.renew(RAIL, lambda: setattr(self._all, "burden_ohm", ohm))

    def set_meter_bias(self, volts: float) -> None:
        """What the impedance meter, or a source at its bias input, puts on what it measures."""
        if volts != self._all.meter_bias_v:
            self._all.renew(METER, lambda: setattr(self._all, "meter_bias_v", volts))

    def set_temperature(self, celsius: float) -> None:
        """The air; parts follow in steps of half a kelvin."""
        if abs(celsius - self._temperature_c) < 0.5:
            return
        self._temperature_c = celsius
        for island in self._all.islands:
            self._all.freeze(island)
        for each in self._stressed.values():
            each.ambient_c = celsius
        for island in list(self._all.islands):
            self._all.rebuild(island)

    def harm(self, position: str, kind: str) -> None:
        """Something befalls the part there: "breakdown" shorts it for good, "leak" lets it leak."""
        part = self._all.parts[position]
        harms = {} if part is None else {"breakdown": part.short, "leak": part.spring_a_leak}
        if part is None or kind not in harms:
            raise ValueError(f"nothing at {position} can suffer {kind!r}")
        self._say(kind, position, part.part.part_id)
        self._all.renew(position, harms[kind])

    # ---- what is there

    def contact_closed(self, channel: str) -> bool:
        """Whether a contact is closed, whatever its coil was told."""
        return self._relays[channel].closed

    def channel_closed(self, channel: str) -> bool:
        """Whether a channel is closed, as its scanner sees it: the coil, not the contact."""
        return self._relays[channel].powered

    def channel_stands(self, channel: str) -> bool:
        """Whether a channel looks closed to a scanner that watches its armature, not its coil."""
        relay = self._relays[channel]
        return relay.closed != relay.contact.rests_closed

    @property
    def channels(self) -> frozenset[str]:
        """Every relay."""
        return frozenset(self._relays)

    def voltage(self, position: str) -> float:
        """What is really across the part: a capacitor's own voltage, else that of its leads."""
        part, island = self._all.parts[position], self._all.island_of(position)
        if part is None or island is None:
            return 0.0
        if part.holds_voltage:
            place = island.modes.index.get(part.part.part_id)
            if place is None:
                return self._all.memory.get(part.part.part_id, 0.0)
            return float(island.course.at(self.now_s)[place])
        return self._difference(f"{position}.term", f"{position}.low")

    def supply_voltage(self) -> float:
        """At the supply's terminals."""
        return self._all.potential("out") or 0.0

    def supply_current(self) -> float:
        """What the supply gives, its bleeder and output capacitance not counted."""
        return self._output.current_a(self.now_s, self.supply_voltage())

    @property
    def supply_way(self) -> str:
        """How the supply works: off, voltage, current (its limit is at work) or blocked."""
        return self._output.way

    @property
    def supply_level_v(self) -> float:
        """The level that the supply regulates to, on its way to the one that was set."""
        return self._output.level_v(self.now_s)

    def meter_current(self) -> float:
        """Through the current meter itself, not through its bypass."""
        if self._all.meter_dead:
            return 0.0
        return (self._all.potential("ret") or 0.0) / self._all.burden_ohm

    def part_current(self, position: str) -> float:
        """Into the part: what its series resistor brings, less what divider and fixture take."""
        place = next(each for each in self.path.places if each.name == position)
        series_ohm = place.series_ohm + self.path.kind(place.connect).contact_ohm
        if not self.contact_closed(place.connect.channel) or "feed" in self._all.broken[position]:
            return 0.0
        given_a = self._difference("rail", f"{position}.hi") / series_ohm
        sensed = any(self.contact_closed(contact.channel) for contact in place.sense)
        taken_a = self.divider_voltage() / self.path.divider_ohm if sensed else 0.0
        return given_a - taken_a - self.voltage(position) / place.insulation_ohm

    def divider_voltage(self) -> float:
        """Across the voltmeter's divider; 0 where it is connected to nothing."""
        return self._difference("vm.hi", "vm.lo")

    def part_state(self, position: str) -> PartState | None:
        """What the part there really is now."""
        part = self._all.parts[position]
        if part is None:
            return None
        self._all.renew(position, lambda: None)
        return part.state(self.voltage(position))

    # ---- events

    def _turn(self, island: Island) -> None:
        """What this circuit waited for."""
        bench, what, whose = self._all, island.turn.what, island.turn.whose
        bench.freeze(island, island.turn.after_s)
        if what == "way":
            self._output.way = whose
        elif what in ("up", "down"):
            part = self._part(whose)
            edge_v = 1e-9 * part.unit_v
            bench.memory[part.part.part_id] += edge_v if what == "up" else -edge_v
        elif what == "gives way":
            part = self._part(whose)
            name = part.part.part_id
            volts = bench.memory[name]
            kind, bench.memory[name] = part.give_way(volts)
            self._say(kind, whose, f"{name} at {volts:.4g} V")
        elif what == "struck":
            bench.struck = True
            self._say("impedance meter struck", whose, f"{bench.memory['zm']:.4g} V")
        elif what == "burnt":
            bench.meter_dead = True
            self._say("current meter destroyed", "", f"more than {self.path.survives_a:g} A")
        bench.rebuild(island)

    def _move(self, move: Move) -> None:
        relay, role = self._relays[move.channel], self._roles[move.channel]
        if relay.stuck or relay.welded or relay.closed == move.closed:
            return
        bench = self._all
        before_v = bench.between(role)
        before_a = self._through(role) if relay.closed else 0.0
        relay.closed = move.closed
        bench.regroup(role.touches)
        if not move.first:
            return
        if move.closed:
            self._judge(relay, role, "made", before_v, self._through(role, LASTS_S))
        else:
            self._judge(relay, role, "broke", bench.between(role, 5 * LASTS_S), before_a)

    def _judge(self, relay: Relay, role: Role, verb: str, volts: float, amperes: float) -> None:
        """Whether a contact that moved could bear it: what it made, or what it broke."""
        kind, channel = relay.kind, relay.contact.channel
        over_a = abs(amperes) > kind.switch_a and (verb == "broke" or abs(volts) > DRY_V)
        over_v = abs(volts) > kind.switch_v and (verb == "made" or abs(amperes) > ARC_A)
        if not (over_a or over_v):
            return
        self._say("hot switched", channel, f"{role.what} {verb} {volts:.4g} V, {amperes:.3g} A")
        if not over_a:
            return
        self._forget_moves(channel)
        was = relay.closed
        relay.weld()
        self._say("welded", channel, role.what)
        if not was:
            self._all.regroup(role.touches)

    # ---- helpers

    def _put(self, position: str, part: PhysicalPart | None) -> None:
        if part is None:
            self._all.parts[position] = None
            return
        stressed = self._stressed.get(part.part_id)
        if stressed is None or stressed.part is not part:
            stressed = self._stressed[part.part_id] = Stressed(part, self._temperature_c)
        self._all.parts[position] = stressed
        if part.fault == LOST_CONTACT:
            self._all.broken[position] |= {"feed"}

    def _part(self, position: str) -> Stressed:
        part = self._all.parts[position]
        assert part is not None  # only a part's own circuit waits for it
        return part

    def _closed(self, contact: ContactAt) -> bool:
        return self._relays[contact.channel].closed

    def _forget_moves(self, channel: str) -> None:
        self._moves = [move for move in self._moves if move.channel != channel]
        heapq.heapify(self._moves)

    def _difference(self, a: str, b: str) -> float:
        high, low = self._all.potential(a), self._all.potential(b)
        return high - low if high is not None and low is not None else 0.0

    def _through(self, role: Role, after_s: float = 0.0) -> float:
        wire = {"connect": "feed", "sense": "sense"}.get(role.what, "")
        if any(wire in self._all.broken.get(group, ()) for group in role.groups):
            return 0.0
        return self._all.between(role, after_s) / role.ohm

    def _vented(self, position: str) -> None:
        part = self._part(position)
        self._say("vented", position, f"{part.part.part_id} at {part.temperature_c:.0f} °C")

    def _say(self, kind: str, where: str, detail: str) -> None:
        self.events.append(Happening(self.now_s, kind, where, detail))
