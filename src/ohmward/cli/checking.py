"""``driver check``, ``try`` and ``replay``, ``bench check``: before anything is measured."""

from pathlib import Path
from typing import Annotated

import typer

driver_app = typer.Typer(
    name="driver", help="Check a driver file, alone or on its instrument.", no_args_is_help=True
)
bench_app = typer.Typer(
    name="bench", help="Check a bench: who answers at its addresses.", no_args_is_help=True
)


def add_to(app: typer.Typer) -> None:
    """Add these commands to the program."""
    driver_app.command("check")(check_driver)
    driver_app.command("try")(try_address)
    driver_app.command("replay")(replay)
    bench_app.command("check")(check_bench)
    app.add_typer(driver_app, rich_help_panel=None)
    app.add_typer(bench_app, rich_help_panel=None)


def check_driver(
    file: Annotated[
        str, typer.Argument(metavar="FILE", help="Driver file, or the name of a shipped driver.")
    ],
    address: Annotated[
        str | None,
        typer.Option("--address", metavar="A", help="VISA address: try every entry there, gently."),
    ] = None,
) -> None:
    """List everything wrong with a driver file; with an address, try it on the instrument.

    Nothing is energised and no relay moves: settings are set to what they are, biases and
    supplies only to 0 and off.
    """
    from ohmward import api

    driver = api.read_driver(file)
    if address is None:
        api.show_commands(driver)
    elif not api.show_exercise(driver, address):
        raise typer.Exit(4)


def try_address(
    address: Annotated[str, typer.Argument(metavar="A", help="VISA address.")],
    query: Annotated[str, typer.Option("--query", help="What to ask.")] = "*IDN?",
    termination: Annotated[
        str, typer.Option("--end", help=r"What ends a line, both ways: \n, \r or \r\n.")
    ] = r"\n",
) -> None:
    """Send one query to an address and show the bytes both ways, escaped."""
    from ohmward import api

    sent, received = api.try_address(address, query, termination)
    typer.echo(f"sent     {sent}")
    typer.echo(f"received {received}")


def replay(
    file: Annotated[
        str, typer.Argument(metavar="FILE", help="Driver file, or the name of a shipped driver.")
    ],
    transcript: Annotated[
        Path, typer.Argument(metavar="TRANSCRIPT", help="A transcript that --transcript kept.")
    ],
) -> None:
    """Put a transcript through a driver, without any instrument: what each reply means to it.

    Exit code 4 when a reply is none that the driver understands.
    """
    from ohmward import api

    if not api.show_replay(api.read_driver(file), transcript):
        raise typer.Exit(4)


def check_bench(
    bench: Annotated[str, typer.Argument(metavar="BENCH", help="Bench file.")],
) -> None:
    """Open every instrument of a bench: identity, serial number, calibration, interlock, state."""
    from ohmward import api

    if not api.show_bench(bench):
        raise typer.Exit(4)
