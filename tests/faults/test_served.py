"""The same faults behind real sockets, HiSLIP and terminals: the right value or none."""

import pytest
from tests.contracts.roles.works import outcome, visitor
from tests.contracts.roles.worlds import DRIVERS, FITTING, SPEED, Place, World, driver_of
from tests.faults.cells import DELAY_S, Cell, fits, undetectable

from ohmward.sim.faults import KINDS, OPENING_KINDS, SETTING_KINDS, Chance

pytestmark = [pytest.mark.processes, pytest.mark.slow]

SHORT = (("timeout", 0.2), ("drain", 0.02), ("open_timeout", 1.0), ("reopen_budget", 20.0))
"""Real seconds: here nobody waits for a slow instrument."""
UNTIL_REOPENED = frozenset({"babbling", "dead", "disconnect"})
"""They last until the next connection, of which a terminal does not tell its instrument."""


def visits_served(world: World, visits: int) -> Cell:
    codec = world.driver.codec
    kinds = tuple(
        kind
        for kind in KINDS
        if kind not in OPENING_KINDS | SETTING_KINDS
        and fits(kind, codec)
        and not undetectable(kind, codec)
        and not (world.link == "serial" and kind in UNTIL_REOPENED)
    )

    async def work(place: Place) -> Cell:
        await place.talker.identify()
        visit = visitor(place)
        await outcome(visit, 0)
        place.layer.at_random(Chance(kinds=kinds, share=0.15, delay_s=DELAY_S))
        cell, struck = Cell(), place.layer.struck
        for n in range(1, visits + 1):
            before = len(struck)
            cell.note(await outcome(visit, n), len(struck) - before)
            if len(struck) > before:
                await place.sleep(DELAY_S)
        return cell

    return world.run(work)


def judged(world: World, visits: int) -> None:
    cell = visits_served(world, visits)
    print(f"\n{world}: {cell.struck} faults, {dict(cell.outcomes)}")
    assert not cell.wrong, cell.wrong
    assert cell.struck > 0
    assert cell.delivered >= cell.unfaulted - max(1, cell.unfaulted // 100)


@pytest.mark.parametrize("link", ["socket", "hislip", "serial"])
def test_a_voltmeter_behind_faults(link: str) -> None:
    assert dict(SHORT)["timeout"] < DELAY_S / SPEED
    judged(World("scpi-multimeter", link, served=True, settings=SHORT), 15)


@pytest.mark.soak
@pytest.mark.parametrize(
    ("name", "link"), [(name, link) for name in DRIVERS for link in FITTING[driver_of(name).codec]]
)
def test_every_driver_behind_faults(name: str, link: str) -> None:
    slow = (*SHORT[1:], ("timeout", 0.6))  # a handheld meter sends every 25 ms here
    judged(World(name, link, served=True, settings=slow), 40)
