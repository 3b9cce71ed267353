"""``compensate``, ``budget`` and ``judge``: what the numbers rest on, and deciding again."""

from pathlib import Path
from typing import Annotated

import typer

RunArgument = Annotated[Path, typer.Argument(metavar="RUN", help="Folder of a run.")]
JsonOption = Annotated[bool, typer.Option("--json", help="Print JSON.")]


def add_to(app: typer.Typer) -> None:
    """Add these commands to the program."""
    for command in (compensate, budget, judge):
        app.command()(command)


def compensate(
    bench: Annotated[
        str,
        typer.Option(
            "--bench",
            metavar="BENCH",
            help="Bench file, or the name of a shipped one; its fixture names the standards.",
        ),
    ],
    sequence: Annotated[
        str,
        typer.Option(
            "--sequence", metavar="S", help="Sequence: at which frequencies it is needed."
        ),
    ],
    out: Annotated[
        Path, typer.Option("--out", metavar="FILE", help="New file for what is measured.")
    ] = Path("compensation.toml"),
    insertions: Annotated[
        int,
        typer.Option(
            "--insertions",
            min=1,
            max=100,
            help="How often short and load are put in; from 2 on, contacts are in the budget.",
        ),
    ] = 1,
    position: Annotated[
        list[str] | None,
        typer.Option("--position", metavar="NAME", help="Only this one; may be given for each."),
    ] = None,
    dry: Annotated[
        bool, typer.Option("--dry", help="On the simulated bench, for its dry runs.")
    ] = False,
    seed: Annotated[int, typer.Option("--seed", min=0, help="Draws noise, with --dry.")] = 0,
) -> None:
    """Measure a fixture's open, short and load, position by position, for later runs.

    Asks for each standard at the terminal. The meter's own corrections must be off.
    """
    from ohmward import api

    api.show_compensation(
        api.compensate(
            bench=bench,
            sequence=sequence,
            out=out,
            dry=dry,
            seed=seed,
            insertions=insertions,
            only=position or (),
            told=lambda text: typer.echo(text, err=True),
        ),
        out,
    )


def budget(
    run: RunArgument,
    part: Annotated[str, typer.Argument(metavar="PART", help="The part, as in its list.")],
    quantity: Annotated[
        str, typer.Argument(metavar="QUANTITY", help="Such as capacitance_f, d or rs_ohm.")
    ],
    at: Annotated[
        str | None, typer.Option("--at", metavar="FREQUENCY", help='Only here, such as "1 kHz".')
    ] = None,
    json: JsonOption = False,
) -> None:
    """Show what a value's uncertainty is made of: causes, sensitivities and shares."""
    from ohmward import api

    found = api.budget(run, part, quantity, at=at)
    if json:
        typer.echo(api.as_json(found.as_dict()))
    else:
        api.show_budget(found)


def judge(
    run: RunArgument,
    limits: Annotated[
        str,
        typer.Option(
            "--limits", metavar="FILE", help="Sequence file whose limits and rule decide."
        ),
    ],
    out: Annotated[
        Path | None,
        typer.Option("--out", metavar="FILE", help="New CSV file for every row decided again."),
    ] = None,
    json: JsonOption = False,
) -> None:
    """Decide a run again by other limits, from its journal, and show what changes.

    Nothing is measured, and the run's folder stays as it is.
    """
    from ohmward import api

    found = api.judge_again(run, limits=limits, out=out)
    if json:
        typer.echo(api.as_json(found.as_dict()))
    else:
        api.show_judged_again(found)
