"""Fault × link × role: the right value or none, wherever it can be detected.

    pytest tests/faults -s        prints the table, one per driver

What cannot be detected stands in docs/links.md, and only what stands there may go wrong.
"""

import re
from pathlib import Path

import pytest
from tests.contracts.roles.worlds import DRIVERS, FITTING, World, driver_of
from tests.faults.cells import Cell, every_kind, fits, happens, one_kind, undetectable

from ohmward.sim.faults import KINDS

DOCS = Path(__file__).parents[2] / "docs" / "links.md"
VISITS = 6
MIXED_VISITS = 100
FAULTED = 10_000 // len(DRIVERS)
"""So many faulted exchanges for each driver: together the ten thousand of `make test`."""


def worlds_of(name: str) -> list[World]:
    return [World(name, link, served=False) for link in FITTING[driver_of(name).codec]]


def table_of(name: str, visits: int) -> dict[tuple[str, str], Cell]:
    """Cells by kind and link."""
    driver = driver_of(name)
    return {
        (kind, world.link): one_kind(world, kind, visits)
        for world in worlds_of(name)
        for kind in KINDS
        if happens(kind, driver)
    }


def printed(name: str, table: dict[tuple[str, str], Cell]) -> str:
    """The table as a person reads it: what came of each fault on each link."""
    driver = driver_of(name)
    links = FITTING[driver.codec]
    lines = [f"\n{driver.role} ({name})", f"{'fault':<16}" + "".join(f"{x:<16}" for x in links)]
    for kind in KINDS:
        if (kind, links[0]) in table:
            said = "".join(f"{table[kind, link]!s:<16}" for link in links)
            named = "  may be wrong: named" if undetectable(kind, driver.codec) else ""
            lines.append(f"{kind:<16}{said}{named}")
    return "\n".join(lines)


def judge(name: str, table: dict[tuple[str, str], Cell]) -> None:
    codec = driver_of(name).codec
    for (kind, link), cell in table.items():
        if not undetectable(kind, codec):
            assert not cell.wrong, (name, kind, link, cell.wrong)


def mixed(name: str, visits: int, seed: int = 0) -> Cell:
    """Every detectable kind at once, on every link of a driver."""
    total = Cell()
    for world in worlds_of(name):
        total.add(every_kind(World(world.name, world.link, served=False, seed=seed), visits))
    return total


@pytest.mark.slow
@pytest.mark.parametrize("name", DRIVERS)
def test_each_fault_leads_to_the_right_value_or_to_none(name: str) -> None:
    table = table_of(name, VISITS)
    print(printed(name, table))
    judge(name, table)
    for (kind, link), cell in table.items():
        assert cell.struck, f"{kind} never happened on {link}"
    total, seed = mixed(name, MIXED_VISITS), 0
    while (struck := total.struck + sum(cell.struck for cell in table.values())) < FAULTED:
        seed += 1
        total.add(mixed(name, MIXED_VISITS, seed))
    print(
        f"{struck} faulted exchanges; of {total.unfaulted} reads that no fault touched"
        f" {total.delivered} were delivered"
    )
    assert not total.wrong, total.wrong
    assert total.delivered >= 0.99 * total.unfaulted
    assert total.unfaulted > 20


@pytest.mark.soak
@pytest.mark.parametrize("name", DRIVERS)
def test_a_hundred_thousand_faulted_exchanges(name: str) -> None:
    total, seed = Cell(), 0
    while total.struck < 10 * FAULTED:
        seed += 1
        total.add(mixed(name, MIXED_VISITS, seed))
    print(
        f"\n{name}: {total.struck} faulted exchanges, {total.outcomes['right']} right values,"
        f" {len(total.wrong)} wrong; of {total.unfaulted} reads that no fault touched"
        f" {total.delivered} delivered"
    )
    assert not total.wrong, total.wrong
    assert total.delivered >= 0.99 * total.unfaulted


def test_the_docs_name_exactly_what_cannot_be_detected() -> None:
    text = DOCS.read_text("utf-8")
    table = text[text.index("| fault |") :].partition("\n\n")[0]
    named = {
        (kind, codec)
        for row in table.splitlines()[2:]
        for kind in re.findall(r"`([a-z-]+)`", row.split("|")[1])
        for codec in FITTING
        if codec in row.split("|")[2]
    }
    assert named == {
        (kind, codec)
        for kind in KINDS
        for codec in FITTING
        if undetectable(kind, codec) and fits(kind, codec)
    }
