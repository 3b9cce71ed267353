"""``report``: the record of a run, for people."""

from pathlib import Path
from typing import Annotated

import typer


def add_to(app: typer.Typer) -> None:
    """Add this command to the program."""
    app.command()(report)


def report(
    run: Annotated[Path, typer.Argument(metavar="RUN", help="Folder of a run.")],
) -> None:
    """Make report.html of a run's folder again, from its tables."""
    from ohmward import api

    typer.echo(str(api.write_report(run)))
