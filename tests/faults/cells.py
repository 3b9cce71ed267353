"""Cells of the fault table: one kind of fault on one driver over one link, visit by visit."""

from collections import Counter
from dataclasses import dataclass, field

from tests.contracts.roles.works import NONE, RIGHT, Visit, outcome, visitor
from tests.contracts.roles.worlds import Place, World

from ohmward.setup.driver import Driver
from ohmward.sim.faults import KINDS, OPENING_KINDS, Chance, Fault
from ohmward.terms.role import Role

DELAY_S = 5.0
"""Longer than any driver's timeout: what is late is too late."""
SHARE = 0.2
LEAST_STRUCK = 2
SETS_NOTHING = frozenset({Role.VOLTMETER, Role.THERMOMETER, Role.INTERLOCK})
AT_MOST = 10
NOT_MIXED = OPENING_KINDS | {"queue-overflow"}
"""Told of at the next opening or setting, not when they strike: in the table only."""
UNASKED = frozenset({"stream", "frames"})

# what no protocol without numbered replies can show, by codec: see docs/links.md
ASKED_UNDETECTABLE = frozenset({"stale", "previous"})
UNASKED_UNDETECTABLE = frozenset({"late", "split", "trickle", "jitter", "busy"})


def happens(kind: str, driver: Driver) -> bool:
    """Whether the work of a driver's role meets the fault at all."""
    return fits(kind, driver.codec) and (kind != "clamped" or driver.role not in SETS_NOTHING)


def fits(kind: str, codec: str) -> bool:
    """Whether instruments of this codec can have the fault at all."""
    if codec in UNASKED:
        return kind not in ("clamped", "identity", "queue-overflow", "stale", "previous")
    return kind != "queue-overflow" or codec == "scpi"


def undetectable(kind: str, codec: str) -> bool:
    """Whether a wrong number may come of it, as docs/links.md says by name."""
    return kind in (UNASKED_UNDETECTABLE if codec in UNASKED else ASKED_UNDETECTABLE)


@dataclass
class Cell:
    """What came of the visits."""

    outcomes: Counter[str] = field(default_factory=Counter)
    wrong: list[str] = field(default_factory=list)
    struck: int = 0
    unfaulted: int = 0
    delivered: int = 0

    def note(self, what: str, struck: int) -> None:
        """Keep one visit, during which so many faults struck."""
        if what not in (RIGHT, NONE):
            self.wrong.append(what)
            what = "wrong"
        self.outcomes[what] += 1
        self.struck += struck
        if not struck:
            self.unfaulted += 1
            self.delivered += what == RIGHT

    def add(self, other: "Cell") -> None:
        """Both together."""
        self.outcomes += other.outcomes
        self.wrong += other.wrong
        self.struck += other.struck
        self.unfaulted += other.unfaulted
        self.delivered += other.delivered

    def __str__(self) -> str:
        if self.wrong:
            return "WRONG"
        return " or ".join(word for word in (RIGHT, NONE) if self.outcomes[word])


def one_kind(world: World, kind: str, visits: int) -> Cell:
    """Visits while every message meets this kind with a fifth's chance."""

    async def work(place: Place) -> Cell:
        await place.talker.identify()
        visit = visitor(place)
        await outcome(visit, 0)
        if kind in OPENING_KINDS:
            place.layer.inject(Fault(kind=kind), Fault(kind="disconnect", after=2))
        else:
            place.layer.at_random(Chance(kinds=(kind,), share=SHARE, delay_s=DELAY_S))
        return await _visits(place, visit, visits, at_least=LEAST_STRUCK)

    return world.run(work)


def every_kind(world: World, visits: int) -> Cell:
    """Visits while messages meet any of the detectable kinds, with time to pass after each."""
    codec = world.driver.codec
    kinds = tuple(
        kind
        for kind in KINDS
        if fits(kind, codec) and not undetectable(kind, codec) and kind not in NOT_MIXED
    )

    share = SHARE / 6 if codec in UNASKED else SHARE / 2  # so that some visits go free

    async def work(place: Place) -> Cell:
        await place.talker.identify()
        visit = visitor(place)
        await outcome(visit, 0)
        place.layer.at_random(Chance(kinds=kinds, share=share, delay_s=DELAY_S))
        return await _visits(place, visit, visits)

    return world.run(work)


async def _visits(place: Place, visit: Visit, visits: int, *, at_least: int = 0) -> Cell:
    cell = Cell()
    struck = place.layer.struck
    for n in range(1, AT_MOST * visits):
        if n > visits and cell.struck >= at_least:
            break
        before = len(struck)
        what = await outcome(visit, n)
        cell.note(what, len(struck) - before)
        if len(struck) > before:
            await place.sleep(DELAY_S)  # what is still under way of it comes to its end
    return cell
