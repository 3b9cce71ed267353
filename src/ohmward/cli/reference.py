"""``schema``: the JSON Schema of each kind of file that people write."""

from typing import Annotated

import typer


def add_to(app: typer.Typer) -> None:
    """Add this command to the program."""
    app.command()(schema)


def schema(
    name: Annotated[str, typer.Argument(metavar="NAME", help="bench, driver or sequence.")],
) -> None:
    """Print the JSON Schema of a bench, driver or sequence file, for an editor to check against."""
    from ohmward import api

    typer.echo(api.as_json(api.schema(name)))
