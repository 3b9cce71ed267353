"""``convert``: from any measured pair at a frequency to everything else, and from markings."""

from typing import Annotated

import typer


def add_to(app: typer.Typer) -> None:
    """Add this command to the program."""
    app.command()(convert)


def convert(
    given: Annotated[
        list[str],
        typer.Argument(
            metavar="NAME=VALUE... | MARKING",
            help='A pair such as Cs="1 uF" D=0.1, each with ± and its expanded uncertainty '
            "(k = 2) if known; or one marking such as 104K.",
        ),
    ],
    frequency: Annotated[
        str | None, typer.Option("--frequency", help='Frequency of the pair, such as "1 kHz".')
    ] = None,
    kind: Annotated[
        str | None, typer.Option("--kind", help="capacitor, inductor or resistor: for a marking.")
    ] = None,
    json: Annotated[bool, typer.Option("--json", help="Print JSON.")] = False,
) -> None:
    """Convert a pair such as C and D into all other quantities, or a marking into its value."""
    from ohmward import api

    converted = api.convert(given, frequency=frequency, kind=kind)
    if json:
        typer.echo(api.as_json(converted.as_dict()))
    else:
        for line in converted.lines():
            typer.echo(line)
