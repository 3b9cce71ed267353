"""``report``, ``verify`` and ``export``: the record of a run, months later."""

from pathlib import Path
from typing import Annotated

import typer

RunArgument = Annotated[Path, typer.Argument(metavar="RUN", help="Folder of a run.")]


def add_to(app: typer.Typer) -> None:
    """Add these commands to the program."""
    for command in (report, verify, export):
        app.command()(command)


def report(run: RunArgument) -> None:
    """Make report.html of a run's folder again, from its tables."""
    from ohmward import api

    typer.echo(str(api.write_report(run)))


def verify(run: RunArgument) -> None:
    """Check every file of a run against its manifest, and its tables against its journal."""
    from ohmward import api

    verified = api.verify(run)
    for line in verified.lines():
        typer.echo(line)
    if not verified.sound:
        raise typer.Exit(2)


def export(
    run: RunArgument,
    form: Annotated[
        str, typer.Option("--as", metavar="FORM", help="parquet, touchstone or spreadsheet.")
    ],
    out: Annotated[Path, typer.Option("--out", metavar="PATH", help="New file or folder.")],
) -> None:
    """Write a run's tables for other programs."""
    from ohmward import api

    for path in api.export(run, form=form, out=out):
        typer.echo(str(path))
