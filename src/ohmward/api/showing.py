"""Prints what the other functions return, for people and for programs."""

from math import isfinite, isinf, isnan
from pathlib import Path
from typing import TYPE_CHECKING

from rich.console import Console
from rich.table import Table

from ohmward.instruments.transcript import escaped
from ohmward.output import screen
from ohmward.results.reasons import condition
from ohmward.units.values import format_quantity

if TYPE_CHECKING:
    from ohmward.api.budgeting import BudgetOf
    from ohmward.api.judging import JudgedAgain
    from ohmward.api.running import Outcome
    from ohmward.instruments.exercise import Exercised
    from ohmward.results.budgets import PointBudget
    from ohmward.sequence.brief import Brief
    from ohmward.setup.compensation_file import CompensationFile
    from ohmward.setup.driver import Driver

PIPE_COLUMNS = 120


def show_brief(brief: "Brief") -> None:
    """Print a brief."""
    screen.show_brief(_console(), brief)


def show_run(outcome: "Outcome") -> None:
    """Print the decisions of a finished run and where its tables are."""
    console = _console()
    screen.show_decisions(console, outcome.verdicts)
    for note in outcome.notes:
        console.print(note, markup=False, soft_wrap=True)
    console.print(f"Tables and report: {outcome.folder}", markup=False, soft_wrap=True)


def show_commands(driver: "Driver") -> None:
    """Print what a driver without a problem sends."""
    from ohmward.api import checking

    table = _table("entry", "command", "query")
    for row in checking.commands_of(driver):
        table.add_row(*row)
    console = _console()
    console.print(table)
    console.print(f"{driver.name or driver.path.stem}: no problem found in the file")


def show_exercise(driver: "Driver", address: str) -> bool:
    """Try a driver on its instrument, printing each entry as it is done; True if all did well."""
    from ohmward.api import checking

    console = _console()

    def told(one: "Exercised") -> None:
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


def show_replay(driver: "Driver", transcript: Path) -> bool:
    """Print what each exchange of a transcript means to a driver; True if it took every reply."""
    from ohmward.api import checking
    from ohmward.instruments.transcript import escaped

    console = _console()
    found = checking.replay(driver, transcript)
    for one in found:
        exchange = one.exchange
        line = f"{exchange.at_s:12.6f} s  {escaped(exchange.sent) or '(nothing)'}"
        line += f" -> {escaped(exchange.received) or '(nothing)'}"
        if one.entry or one.meaning:
            line += f"  {one.entry}: {one.meaning}" if one.entry else f"  {one.meaning}"
        console.print(line, markup=False, soft_wrap=True)
    failed = sum(not one.understood for one in found)
    console.print(f"{len(found)} exchanges; replies that the driver does not understand: {failed}")
    return not failed


def show_bench(file: str) -> bool:
    """Open a bench's instruments and print who answered; True if all did."""
    from ohmward.api import checking

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


def show_compensation(file: "CompensationFile", out: Path) -> None:
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


def show_budget(found: "BudgetOf") -> None:
    """Print the budget of each point: causes with shares, then what they come to."""
    console = _console()
    for one in found.points:
        whole, unit = one.budget, found.unit
        what = one.view if one.view == found.quantity else f"{found.quantity} ({one.view})"
        console.print(
            f"{found.part_id}, {one.stage}: {what} at {condition(one.point)}",
            markup=False,
            style="bold",
        )
        table = _table("cause", "distribution", "u", "sensitivity", "contribution", "share")
        for part in whole.contributions:
            source = part.source
            table.add_row(
                source.name,
                source.distribution,
                format_quantity(source.u, source.unit, 3),
                f"{source.sensitivity:.4g}",
                format_quantity(source.contribution, unit, 3),
                f"{100 * part.share:.1f} %",
            )
        console.print(table)
        for line in _sums(one, unit):
            console.print(line, markup=False, soft_wrap=True)


def _sums(one: "PointBudget", unit: str) -> list[str]:
    whole = one.budget
    degrees = "infinite" if isinf(whole.degrees) else f"{whole.degrees:.1f}"
    lines = [
        f"value {format_quantity(whole.value, unit, 6)}, u {format_quantity(whole.u, unit, 3)}, "
        f"effective degrees of freedom {degrees}, k = {whole.k:.3g}, "
        f"U {format_quantity(whole.u_expanded, unit, 2)}"
    ]
    if one.monte_carlo:
        at = one.interval
        factor = "no factor" if isnan(at.k) else f"k = {at.k:.3g}"
        half = format_quantity(at.u_expanded, unit, 2) if isfinite(at.u_expanded) else "unbounded"
        lines.append(f"Decided by Monte Carlo, first order would not do: U {half}, {factor}")
    return [*lines, ""]


def show_judged_again(found: "JudgedAgain") -> None:
    """Print what other limits change, quantity by quantity and part by part."""
    console = _console()
    for warning in found.warnings:
        console.print(f"Worth knowing: {warning}", markup=False, soft_wrap=True)
    if found.changes:
        table = _table("part", "stage", "quantity", "at", "before", "now", "why")
        for change in found.changes:
            decided = (str(one or "not judged") for one in (change.before, change.after))
            table.add_row(
                change.part_id,
                change.stage,
                change.quantity,
                change.condition,
                *decided,
                change.reason,
            )
        console.print(table)
    moved = [(part, before, after) for part, before, after in found.parts if before is not after]
    for part_id, before, after in moved:
        console.print(f"{part_id}: {before} then, {after} now", markup=False)
    console.print(
        f"{found.run_id} by {found.limits}: {len(found.changes)} decisions differ, "
        f"{len(moved)} of {len(found.parts)} parts",
        markup=False,
        soft_wrap=True,
    )


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
