"""Prints what the other functions return, for people and for programs."""

import json
from pathlib import Path
from typing import Any

from rich.console import Console
from rich.table import Table

from ohmward.api import checking
from ohmward.api.running import Outcome
from ohmward.instruments.exercise import Exercised
from ohmward.instruments.transcript import escaped
from ohmward.output import screen
from ohmward.sequence.brief import Brief
from ohmward.setup.compensation_file import CompensationFile
from ohmward.setup.driver import Driver
from ohmward.units.values import format_quantity

PIPE_COLUMNS = 120


def as_json(value: Any) -> str:
    """Indented JSON; NaN and infinities are refused, because JSON has none."""
    return json.dumps(value, indent=1, ensure_ascii=False, allow_nan=False)


def show_brief(brief: Brief) -> None:
    """Print a brief."""
    screen.show_brief(_console(), brief)


def show_run(outcome: Outcome) -> None:
    """Print the decisions of a finished run and where its tables are."""
    console = _console()
    screen.show_decisions(console, outcome.verdicts)
    for note in outcome.notes:
        console.print(note, markup=False, soft_wrap=True)
    console.print(f"Tables: {outcome.folder}", markup=False, soft_wrap=True)


def show_commands(driver: Driver) -> None:
    """Print what a driver without a problem sends."""
    table = _table("entry", "command", "query")
    for row in checking.commands_of(driver):
        table.add_row(*row)
    console = _console()
    console.print(table)
    console.print(f"{driver.name or driver.path.stem}: no problem found in the file")


def show_exercise(driver: Driver, address: str) -> bool:
    """Try a driver on its instrument, printing each entry as it is done; True if all did well."""
    console = _console()

    def told(one: Exercised) -> None:
        sent = "  ".join(
            f"{escaped(e.sent) or '(nothing)'} -> {escaped(e.received)}" for e in one.exchanges
        )
        line = f"{one.entry:<34}{1e3 * one.took_s:7.1f} ms  {one.verdict}"
        if one.value:
            line += f": {one.value}"
        console.print(line, markup=False, soft_wrap=True)
        if sent and one.failed:
            console.print(f"{'':<34}{sent}", markup=False, soft_wrap=True)

    return checking.exercise_driver(driver, address, told)


def show_bench(file: str) -> bool:
    """Open a bench's instruments and print who answered; True if all did."""
    bench, found = checking.check_bench(file)
    table = _table("instrument", "role", "address", "identity", "remarks")
    for one in found:
        identity = one.identity or "-"
        table.add_row(one.name, one.role, one.address, identity, "; ".join(one.remarks))
    console = _console()
    console.print(table)
    failed = [one.name for one in found if one.failed]
    console.print(
        f"{bench.name}: " + (f"no answer from {', '.join(failed)}" if failed else "all answer"),
        markup=False,
        soft_wrap=True,
    )
    return not failed


def show_compensation(file: CompensationFile, out: Path) -> None:
    """Print what a compensation found of the fixture, and what it is worth."""
    console = _console()
    table = _table("position", "short at highest frequency", "open, least", "symmetric")
    for place in file.positions:
        short = abs(complex(place.short.resistance_ohm[-1], place.short.reactance_ohm[-1]))
        pairs = zip(place.open.resistance_ohm, place.open.reactance_ohm, strict=True)
        unlike = place.symmetric.count(False)
        found = f"not at {unlike} of {len(place.symmetric)} frequencies" if unlike else "yes"
        table.add_row(
            place.name,
            format_quantity(short, "ohm", 3),
            format_quantity(min(abs(complex(*pair)) for pair in pairs), "ohm", 3),
            found if place.symmetric else "not known without a load",
        )
    console.print(table)
    contacts = (
        f"u(R) {format_quantity(file.contact_resistance_ohm, 'ohm', 2)}, "
        f"u(X) {format_quantity(file.contact_reactance_ohm, 'ohm', 2)}"
        if file.insertions > 1
        else "not known: put the standards in twice or more (--insertions)"
    )
    for line in (
        f"Contacts: {contacts}",
        f"{len(file.frequency_hz)} frequencies, {file.identity}, {file.cable_m:g} m of cable",
        f"Compensation: {out}" + (" (of the simulated bench)" if file.simulated else ""),
    ):
        console.print(line, markup=False, soft_wrap=True)


def _table(*headings: str) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    for heading in headings:
        table.add_column(heading, overflow="fold")
    return table


class _Console(Console):
    """A console whose reader may leave: what that means is for the command to say."""

    def on_broken_pipe(self) -> None:
        """Raise BrokenPipeError on, where rich would end the program."""
        raise


def _console() -> Console:
    """A console as wide as the terminal; a pipe has no width, and gets 120 columns."""
    console = _Console(highlight=False)
    return console if console.is_terminal else _Console(highlight=False, width=PIPE_COLUMNS)
