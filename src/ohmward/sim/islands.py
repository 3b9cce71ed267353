"""Which parts of the bench are one circuit just now, and of what resistors and capacitors.

Nodes: "out" and "0" are the supply's terminals, "rail" and "ret" the rail and the return;
at each position "n.hi" is its high clip, "n.term" and "n.low" the part's own leads; "vm.hi" and
"vm.lo" are the divider's ends, "zm.hi" and "zm.lo" the impedance meter's.
"""

from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache

from ohmward.sim.modes import Coil, Resistor, Store
from ohmward.sim.path import ContactAt, PathTruth, PlaceTruth
from ohmward.sim.stressed import Stressed

SUPPLY, RAIL, VOLTMETER, METER = "<supply>", "<rail>", "<voltmeter>", "<meter>"
# what holds a piece of wire that nothing is connected to, against nothing: a perfect insulator
NOWHERE_OHM = 1e16

Closed = Callable[[ContactAt], bool]


@dataclass(frozen=True, slots=True)
class Role:
    """What a contact joins: two nodes through a resistance, and the groups that it touches."""

    what: str
    a: str
    b: str
    ohm: float
    groups: tuple[str, ...]

    @property
    def touches(self) -> frozenset[str]:
        """The groups, as a set."""
        return frozenset(self.groups)


@dataclass(frozen=True, slots=True)
class Situation:
    """What the elements hang on, beside the wiring."""

    closed: Closed
    parts: Mapping[str, Stressed | None]
    broken: Mapping[str, frozenset[str]]
    memory: Mapping[str, float]
    regulating: bool
    burden_ohm: float


@dataclass(slots=True)
class Pieces:
    """The elements of one circuit."""

    resistors: list[Resistor]
    stores: list[Store]
    coils: list[Coil]

    def joined(self) -> Iterator[tuple[str, str]]:
        """The two nodes of every element."""
        yield from ((one.a, one.b) for one in self.resistors)
        yield from ((one.a, one.b) for one in self.stores)
        yield from ((one.a, one.b) for one in self.coils)


def high_half(contacts: Sequence[ContactAt]) -> Sequence[ContactAt]:
    """The contacts in the high lead."""
    return contacts[: (len(contacts) + 1) // 2]


def low_half(contacts: Sequence[ContactAt]) -> Sequence[ContactAt]:
    """The contacts in the low lead; none means that it is wired through."""
    return contacts[(len(contacts) + 1) // 2 :]


def roles(path: PathTruth) -> dict[str, Role]:
    """Every contact's role by its channel."""

    def ohm(contact: ContactAt) -> float:
        return path.kind(contact).contact_ohm

    found = {
        path.supply.channel: Role("supply", "out", "rail", ohm(path.supply), (SUPPLY, RAIL)),
        path.bypass.channel: Role("bypass", "ret", "0", ohm(path.bypass), (RAIL,)),
    }
    for place in path.places:
        n = place.name
        through = ohm(place.connect) + place.series_ohm
        found[place.connect.channel] = Role("connect", "rail", f"{n}.hi", through, (RAIL, n))
        across = ohm(place.discharge) + place.discharge_ohm
        found[place.discharge.channel] = (
            Role("discharge", "rail", "ret", across, (RAIL,))
            if path.discharge_at == "rail"
            else Role("discharge", f"{n}.hi", "ret", across, (n,))
        )
        short = ohm(place.short) + place.short_ohm
        found[place.short.channel] = Role("short", f"{n}.hi", "ret", short, (n,))
        for contact in high_half(place.sense):
            found[contact.channel] = Role(
                "sense", f"{n}.term", "vm.hi", ohm(contact), (n, VOLTMETER)
            )
        for contact in low_half(place.sense):
            found[contact.channel] = Role(
                "sense", f"{n}.low", "vm.lo", ohm(contact), (n, VOLTMETER)
            )
        for contact in high_half(place.meter):
            found[contact.channel] = Role("meter", f"{n}.hi", "zm.hi", ohm(contact), (n, METER))
        for contact in low_half(place.meter):
            found[contact.channel] = Role("meter", "ret", "zm.lo", ohm(contact), (n, METER))
    return found


def grouped(path: PathTruth, closed: Closed) -> list[tuple[str, ...]]:
    """The groups that are joined now, each set sorted; buses that nothing reaches are left out."""
    home = {name: name for name in (SUPPLY, RAIL, VOLTMETER, METER)}
    home.update((place.name, place.name) for place in path.places)

    def root(name: str) -> str:
        while home[name] != name:
            name = home[name]
        return name

    if closed(path.supply):
        home[root(SUPPLY)] = root(RAIL)
    for place in path.places:
        if closed(place.connect):
            home[root(place.name)] = root(RAIL)
        if any(map(closed, place.sense)):
            home[root(VOLTMETER)] = root(place.name)
        if any(map(closed, place.meter)):
            home[root(METER)] = root(place.name)
    sets: dict[str, list[str]] = {}
    for name in home:
        sets.setdefault(root(name), []).append(name)
    return [tuple(sorted(each)) for each in sets.values() if each not in ([VOLTMETER], [METER])]


def pieces(path: PathTruth, groups: Iterable[str], now: Situation) -> Pieces:
    """The elements of the circuit that these groups are."""
    here = frozenset(groups)
    found = Pieces([], [], [])
    if SUPPLY in here:
        source = path.source
        found.resistors.append(Resistor("out", "0", source.bleeder_ohm))
        found.stores.append(Store("out", "out", "0", source.capacitance_f))
        if now.regulating:
            found.resistors.append(Resistor("out", "0", source.output_ohm))
    if RAIL in here:
        _rail(path, here, now, found)
    if VOLTMETER in here:
        found.resistors.append(Resistor("vm.hi", "vm.lo", path.divider_ohm))
    if METER in here:
        found.resistors.append(Resistor("zm.hi", "zm.lo", path.meter_ohm))
        found.stores.append(Store("zm", "zm.hi", "zm.lo", path.meter_f))
    for place in path.places:
        if place.name in here:
            _place(path, place, now, found)
    _hold(found, "0" if here & {SUPPLY, RAIL} else "ret")
    return found


def _rail(path: PathTruth, here: frozenset[str], now: Situation, found: Pieces) -> None:
    closed = now.closed
    found.stores.append(Store("rail", "rail", "0", path.rail_f))
    found.resistors.append(Resistor("rail", "0", path.rail_ohm))
    found.resistors.append(Resistor("ret", "0", now.burden_ohm))
    if closed(path.bypass):
        found.resistors.append(Resistor("ret", "0", path.kind(path.bypass).contact_ohm))
    if SUPPLY in here and closed(path.supply):
        found.resistors.append(Resistor("out", "rail", path.kind(path.supply).contact_ohm))
    if path.discharge_at == "rail":
        shared = {
            place.discharge.channel: place.discharge_ohm + path.kind(place.discharge).contact_ohm
            for place in path.places
            if closed(place.discharge)
        }
        found.resistors += [Resistor("rail", "ret", ohm) for ohm in shared.values()]


def _place(path: PathTruth, place: PlaceTruth, now: Situation, found: Pieces) -> None:
    closed, part, broken = now.closed, now.parts.get(place.name), now.broken[place.name]
    n, add = place.name, found.resistors.append
    clip, term, low = f"{n}.hi", f"{n}.term", f"{n}.low"

    def ohm(contact: ContactAt) -> float:
        return path.kind(contact).contact_ohm

    add(Resistor(clip, "ret", place.insulation_ohm))
    if closed(place.connect) and "feed" not in broken:
        add(Resistor("rail", clip, place.series_ohm + ohm(place.connect)))
    if "high" not in broken:
        add(Resistor(clip, term, place.lead_ohm))
    if "low" not in broken:
        add(Resistor(low, "ret", place.lead_ohm))
    if closed(place.short):
        add(Resistor(clip, "ret", place.short_ohm + ohm(place.short)))
    if path.discharge_at != "rail" and closed(place.discharge):
        add(Resistor(clip, "ret", place.discharge_ohm + ohm(place.discharge)))
    if any(map(closed, place.sense)):
        high, lower = high_half(place.sense), low_half(place.sense)
        if all(map(closed, high)) and "sense" not in broken:
            add(Resistor(term, "vm.hi", sum(map(ohm, high))))
        if all(map(closed, lower)):
            add(Resistor(low, "vm.lo", sum(map(ohm, lower)) or place.lead_ohm))
    if any(map(closed, place.meter)):
        high, lower = high_half(place.meter), low_half(place.meter)
        if all(map(closed, high)):
            add(Resistor(clip, "zm.hi", sum(map(ohm, high))))
        if all(map(closed, lower)):
            add(Resistor("ret", "zm.lo", sum(map(ohm, lower)) or place.lead_ohm))
    if part is not None and "part" not in broken:
        resistors, stores, coils = part.elements(term, low, now.memory.get(part.part.part_id, 0.0))
        found.resistors += resistors
        found.stores += stores
        found.coils += coils


def _hold(found: Pieces, ground: str) -> None:
    """Hold what floats: a potential must be something, though no current hangs on it."""
    for name in _floating(tuple(found.joined()), ground):
        found.resistors.append(Resistor(name, ground, NOWHERE_OHM))


@lru_cache(maxsize=512)
def _floating(joined: tuple[tuple[str, str], ...], ground: str) -> tuple[str, ...]:
    """One node of every piece that nothing joins to the ground."""
    home: dict[str, str] = {ground: ground}

    def root(name: str) -> str:
        home.setdefault(name, name)
        while home[name] != name:
            home[name] = home[home[name]]
            name = home[name]
        return name

    for a, b in joined:
        home[root(a)] = root(b)
    base = root(ground)
    return tuple({root(name): name for name in list(home) if root(name) != base}.values())
