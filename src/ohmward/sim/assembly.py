"""The circuits that a bench is just now, each going on in its own modes until its next turn."""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

import numpy as np

from ohmward.sim.islands import METER, RAIL, SUPPLY, Role, Situation, grouped, pieces
from ohmward.sim.modes import Array, Course, Edge, Modes
from ohmward.sim.output import Output
from ohmward.sim.path import ContactAt, PathTruth
from ohmward.sim.stressed import Stressed

HORIZON_S = 1e7
_REMEMBERED = 1024


@dataclass(frozen=True, slots=True)
class Turn:
    """When a circuit cannot go on as it does, why, and at which position or to which way.

    ``after_s`` counts from the course's begin: supply and rail settle within less than what the
    last digit of ``at_s`` is worth after an hour.
    """

    at_s: float
    after_s: float
    what: str
    whose: str = ""


@dataclass(slots=True)
class Island:
    """One circuit of the bench, as it goes on from ``course.began_s``."""

    groups: tuple[str, ...]
    modes: Modes
    course: Course
    turn: Turn


@dataclass(slots=True)
class Assembly:
    """Relays, parts and supply put together; ``memory`` holds the voltages of what stands idle.

    ``on_vent`` is called with the position of a part that has become too hot.
    """

    path: PathTruth
    closed: Callable[[ContactAt], bool]
    role_of: Mapping[str, Role]
    output: Output
    parts: dict[str, Stressed | None]
    broken: dict[str, frozenset[str]]
    burden_ohm: float
    on_vent: Callable[[str], None]
    meter_bias_v: float = 0.0
    meter_dead: bool = False
    struck: bool = False
    now_s: float = 0.0
    memory: dict[str, float] = field(default_factory=dict)
    islands: list[Island] = field(default_factory=list)
    _known: dict[object, Modes] = field(default_factory=dict)

    # ---- looking

    def island_of(self, group: str) -> Island | None:
        """The circuit that a group is in now."""
        return next((each for each in self.islands if group in each.groups), None)

    def potential(self, node: str, after_s: float = 0.0) -> float | None:
        """The voltage of a node above its circuit's ground; None where it is in no circuit."""
        for island in self.islands:
            if node in island.modes.nodes:
                return float(island.modes.node(node) @ island.course.at(self.now_s + after_s))
        return None

    def between(self, role: Role, after_s: float = 0.0) -> float:
        """The voltage across a contact; 0 where one side of it floats."""
        a, b = self.potential(role.a, after_s), self.potential(role.b, after_s)
        return a - b if a is not None and b is not None else 0.0

    # ---- putting together

    def freeze(self, island: Island, elapsed_s: float | None = None) -> None:
        """Remember where a circuit stands, and let its parts have lived until now.

        ``elapsed_s`` since its begin, where that is known better than by the clock.
        """
        if elapsed_s is None:
            elapsed_s = self.now_s - island.course.began_s
        if elapsed_s == 0.0:
            return
        before, state = island.course.after(0.0), island.course.after(elapsed_s)
        for place, name in enumerate(island.modes.names):
            self.memory[name] = float(state[place])
        for position, part, place in self._capacitors(island.groups, island.modes):
            part.live(0.5 * float(before[place] + state[place]), elapsed_s)
            if part.vent_if_hot():
                self.on_vent(position)

    def rebuild(self, island: Island) -> None:
        """Put a frozen circuit together again: what it is made of has changed."""
        self.islands[self.islands.index(island)] = self._made(island.groups)

    def renew(self, group: str, change: Callable[[], None]) -> None:
        """Change something in the circuit that a group is in, if it is in one."""
        island = self.island_of(group)
        if island is None:
            change()
            return
        self.freeze(island)
        change()
        self.rebuild(island)

    def regroup(self, touched: frozenset[str] | None = None) -> None:
        """Form the circuits anew; those that are as they were and untouched stay."""
        kept: dict[tuple[str, ...], Island] = {}
        for island in self.islands:
            if touched is None or touched & set(island.groups):
                self.freeze(island)
            else:
                kept[island.groups] = island
        wanted = grouped(self.path, self.closed)
        if not any(METER in groups for groups in wanted):
            self.memory["zm"] = self.meter_bias_v
            self.struck = False
        self.islands = []
        for groups in wanted:
            self.islands.append(kept.get(groups) or self._made(groups))

    def _made(self, groups: tuple[str, ...]) -> Island:
        modes = self._modes(groups)
        state = np.array([self.memory.setdefault(name, 0.0) for name in modes.names])
        fed, rising = np.zeros(len(state)), np.zeros(len(state))
        out = self.output
        if SUPPLY in groups:
            place = modes.index["out"]
            if out.way == "voltage":
                fed[place] = out.level_v(self.now_s) / out.output_ohm
                rising[place] = out.moves(self.now_s) / out.output_ohm
            elif out.way == "current":
                fed[place] = out.limit_a
        if METER in groups:
            fed[modes.index["zm"]] = self.meter_bias_v / self.path.meter_ohm
        for _, part, place in self._capacitors(groups, modes):
            volts = float(state[place])
            fed[place] -= part.linear(volts).offset_a
            rising[place] -= part.drift_a_s(volts)
        course = Course(modes, state, fed, rising, self.now_s)
        return Island(groups, modes, course, self._turn(groups, modes, course, state))

    def _capacitors(self, groups: tuple[str, ...], modes: Modes) -> list[tuple[str, Stressed, int]]:
        """Position, part and state of every capacitor in a circuit."""
        found = []
        for name in groups:
            part = self.parts.get(name)
            if part is not None and part.holds_voltage:
                place = modes.index.get(part.part.part_id)
                if place is not None:
                    found.append((name, part, place))
        return found

    def _modes(self, groups: tuple[str, ...]) -> Modes:
        """The circuit in its modes, remembered by all that it is made of."""
        here = frozenset(groups)
        closed = frozenset(
            contact.channel
            for contact in self.path.contacts()
            if here & self.role_of[contact.channel].touches and self.closed(contact)
        )
        parts = tuple(
            part.key(self.memory.get(part.part.part_id, 0.0))
            for name in groups
            if (part := self.parts.get(name)) is not None
        )
        regulating = self.output.way == "voltage" and SUPPLY in here
        burden_ohm = self.burden_ohm if RAIL in here else 0.0
        broken = tuple(self.broken.get(name) for name in groups)
        key = (groups, closed, parts, broken, regulating, burden_ohm)
        found = self._known.get(key)
        if found is None:
            if len(self._known) >= _REMEMBERED:
                self._known.clear()
            now = Situation(
                self.closed, self.parts, self.broken, self.memory, regulating, self.burden_ohm
            )
            made = pieces(self.path, groups, now)
            ground = "0" if here & {SUPPLY, RAIL} else "ret"
            found = self._known[key] = Modes(made.resistors, made.stores, made.coils, ground)
        return found

    # ---- looking ahead

    def _turn(self, groups: tuple[str, ...], modes: Modes, course: Course, state: Array) -> Turn:
        """The first thing that ends this circuit's course."""
        horizon_s, what = HORIZON_S, "look again"
        if SUPPLY in groups and self.output.arrives_s > self.now_s:
            horizon_s, what = self.output.arrives_s - self.now_s, "level"
        for _, part, place in self._capacitors(groups, modes):
            stands_s = part.stands_for_s(float(state[place]))
            if stands_s < horizon_s:
                horizon_s, what = stands_s, "drift"
        reached = course.first(self._edges(groups, modes, state), horizon_s)
        if reached is None:
            return Turn(self.now_s + horizon_s, horizon_s, what)
        after_s, edge = reached
        return Turn(self.now_s + after_s, after_s, edge.what, edge.whose)

    def _edges(self, groups: tuple[str, ...], modes: Modes, state: Array) -> list[Edge]:
        found: list[Edge] = []
        if SUPPLY in groups:
            out = modes.node("out")
            found += [
                Edge("way", each.follows, each.gain * out, each.offset, each.slope)
                for each in self.output.leavings(self.now_s)
            ]
        for position, part, place in self._capacitors(groups, modes):
            row = np.zeros(len(state))
            row[place] = 1.0
            linear = part.linear(float(state[place]))
            if math.isfinite(linear.high_v):
                found.append(Edge("up", position, row, -linear.high_v))
                found.append(Edge("down", position, -row, linear.low_v))
            if math.isfinite(part.breaks_v):
                found.append(Edge("gives way", position, row, -part.breaks_v))
        if METER in groups and not self.struck:
            row = modes.across("zm.hi", "zm.lo")
            most_v = max(self.path.foreign_v, 1.2 * abs(self.meter_bias_v))
            position = next((name for name in groups if name in self.parts), "")
            found += [Edge("struck", position, sign * row, -most_v) for sign in (1.0, -1.0)]
        if RAIL in groups and self._may_burn():
            row = modes.node("ret") / self.burden_ohm
            most_a = self.path.survives_a
            found += [Edge("burnt", "", sign * row, -most_a) for sign in (1.0, -1.0)]
        return found

    def _may_burn(self) -> bool:
        return (
            not self.meter_dead
            and math.isfinite(self.path.survives_a)
            and not self.closed(self.path.bypass)
        )
