"""``brief``, ``dryrun``, ``run``, ``resume`` and ``demo``: a sequence, a bench and a parts list."""

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from ohmward.errors import OhmwardError

if TYPE_CHECKING:
    from ohmward.api import Outcome

SequenceArgument = Annotated[
    str, typer.Argument(metavar="SEQUENCE", help="Sequence file, or the name of a shipped one.")
]
BenchOption = Annotated[
    str, typer.Option("--bench", metavar="BENCH", help="Bench file, or the name of a shipped one.")
]
PartsOption = Annotated[
    str, typer.Option("--parts", metavar="PARTS", help="Parts list (CSV), or a shipped one's name.")
]
OutOption = Annotated[
    Path, typer.Option("--out", metavar="DIR", help="New folder for the run; must not exist yet.")
]
JsonOption = Annotated[bool, typer.Option("--json", help="Print JSON.")]
CompensationOption = Annotated[
    Path | None,
    typer.Option(
        "--compensation",
        metavar="FILE",
        help="What 'ohmward compensate' found of the bench's fixture.",
    ),
]
TranscriptOption = Annotated[
    int,
    typer.Option(
        "--transcript",
        metavar="N",
        min=0,
        help="Keep the last N exchanges of each instrument in the folder; none otherwise.",
    ),
]
SeedOption = Annotated[
    int, typer.Option("--seed", min=0, help="Draws parts and noise; same seed, same bytes.")
]


def add_to(app: typer.Typer) -> None:
    """Add these commands to the program."""
    for command in (brief, dryrun, run, resume, demo):
        app.command()(command)


def _show(carry_out: Callable[[], "Outcome"]) -> None:
    """Carry a run out, write its report and print the decisions: also where it ended early."""
    from ohmward import api

    try:
        outcome = carry_out()
    except OhmwardError as error:
        if error.outcome is not None:
            api.write_report(error.outcome.folder)
            api.show_run(error.outcome)
        raise
    api.write_report(outcome.folder)
    api.show_run(outcome)


def brief(
    sequence: SequenceArgument,
    bench: BenchOption,
    parts: PartsOption,
    compensation: CompensationOption = None,
    json: JsonOption = False,
) -> None:
    """Show what a run would do, how long it takes, and what this bench cannot tell."""
    from ohmward import api

    prepared = api.prepare(sequence, bench=bench, parts=parts, compensation=compensation)
    if json:
        typer.echo(api.as_json(prepared.brief.as_dict()))
    else:
        api.show_brief(prepared.brief)


def _list_faults(asked: bool) -> None:
    if asked:
        from ohmward import api

        for kind, meaning in api.fault_kinds().items():
            typer.echo(f"{kind:<20}{meaning}")
        raise typer.Exit


def dryrun(
    sequence: SequenceArgument,
    bench: BenchOption,
    parts: PartsOption,
    out: OutOption,
    compensation: CompensationOption = None,
    seed: SeedOption = 0,
    fault: Annotated[
        list[str] | None,
        typer.Option(
            "--fault",
            metavar="PART=KIND@STAGE+TIME",
            help="Let something go wrong, such as C3=short@leakage+60s; may be given again.",
        ),
    ] = None,
    faults: Annotated[
        bool,
        typer.Option(
            "--faults",
            callback=_list_faults,
            is_eager=True,
            help="List what can go wrong, and exit.",
        ),
    ] = False,
    transcript: TranscriptOption = 0,
) -> None:
    """Carry the sequence out on a simulated bench, in virtual time; opens no real address."""
    from ohmward import api

    prepared = api.prepare(sequence, bench=bench, parts=parts, compensation=compensation, out=out)
    _show(
        lambda: api.dry_run(
            prepared, out=out, seed=seed, watch=True, faults=fault or (), transcript=transcript
        )
    )


def run(
    sequence: SequenceArgument,
    bench: BenchOption,
    parts: PartsOption,
    out: OutOption,
    compensation: CompensationOption = None,
    transcript: TranscriptOption = 0,
) -> None:
    """Carry the sequence out on the real bench.

    Discharge every part before it goes into the fixture. This program is no interlock and
    replaces no local rule and no qualified person.
    """
    from ohmward import api

    prepared = api.prepare(sequence, bench=bench, parts=parts, compensation=compensation, out=out)
    _show(lambda: api.run(prepared, out=out, watch=True, transcript=transcript))


def resume(
    folder: Annotated[Path, typer.Argument(metavar="DIR", help="Folder of a stopped run.")],
) -> None:
    """Go on with a run that was stopped or killed; readings already taken are kept."""
    from ohmward import api

    _show(lambda: api.resume(folder, watch=True))


def demo(
    out: Annotated[
        Path, typer.Option("--out", metavar="DIR", help="New folder for the run.")
    ] = Path("demo-run"),
    seed: SeedOption = 0,
) -> None:
    """Test the demo lot on the simulated bench: a funicular depot's stores re-test their parts."""
    from ohmward import api
    from ohmward.setup.resources import shipped

    # by path: a file of the same name in this folder is not the demo's
    prepared = api.prepare(
        shipped("sequences") / "depot-survey.toml",
        bench=shipped("simulators") / "depot-bench.toml",
        parts=shipped("simulators") / "depot-lot.csv",
        out=out,
    )
    _show(lambda: api.dry_run(prepared, out=out, seed=seed, watch=True))
