"""The program: its commands, and what an error becomes on the way out."""

import json
import os
import signal
import sys

import typer

from ohmward import __version__
from ohmward.cli import calculating, checking, metrology, reference, running, serving
from ohmward.errors import BadInput, NotProvenSafe, OhmwardError

app = typer.Typer(
    name="ohmward",
    help=(
        "Tests trays of capacitors, inductors and resistors from one written sequence "
        "and says, part by part, which may be used."
    ),
    rich_markup_mode=None,
    no_args_is_help=True,
    pretty_exceptions_enable=False,
)
running.add_to(app)
metrology.add_to(app)
checking.add_to(app)
calculating.add_to(app)
reference.add_to(app)
serving.add_to(app)


def _version(asked: bool) -> None:
    if asked:
        typer.echo(f"ohmward {__version__}")
        raise typer.Exit


@app.callback()
def _program(
    version: bool = typer.Option(False, "--version", callback=_version, is_eager=True),
) -> None:
    """Exit codes: 0 finished, whatever was decided; 1 our own fault; 2 bad input; 3 a safety trip;
    4 links lost; 5 the safe state is NOT proven; 6 the bench is held; 130 stopped by a signal.
    """


def main() -> None:
    """Run the program and exit with the code that the outcome has."""
    for number in (signal.SIGTERM, signal.SIGHUP):
        if signal.getsignal(number) == signal.SIG_DFL:  # else it is to be ignored, as by nohup
            signal.signal(number, _as_interrupt)
    sys.exit(_outcome())


def _as_interrupt(number: int, frame: object) -> None:
    """Any signal that asks the program to stop ends it as Ctrl-C does."""
    raise KeyboardInterrupt


def _outcome() -> int:
    try:
        code = app(standalone_mode=False)
    except OhmwardError as error:
        _tell(error)
        return error.exit_code
    except typer.Abort:
        return _stopped()
    except KeyboardInterrupt:
        return _stopped()
    except BrokenPipeError:
        # whoever read our output has left; keep the interpreter from telling them again
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except Exception as error:
        if hasattr(error, "show") and hasattr(error, "exit_code"):  # a usage error of click's
            error.show()
            return int(error.exit_code)
        raise
    return code if isinstance(code, int) else 0


def _stopped() -> int:
    typer.echo("stopped", err=True)
    return 130


def _tell(error: OhmwardError) -> None:
    if isinstance(error, BadInput):
        _tell_problems(error)
        return
    if isinstance(error, NotProvenSafe):
        line = "=" * 72
        typer.echo(f"{line}\nTHE SAFE STATE IS NOT PROVEN. Treat every part as live.", err=True)
        typer.echo(f"{error}\n{line}", err=True)
        return
    notes = "".join(f" ({note})" for note in getattr(error, "__notes__", ()))
    typer.echo(f"ohmward: {error}{notes}", err=True)


def _tell_problems(error: BadInput) -> None:
    if "--json" in sys.argv:
        typer.echo(json.dumps(error.as_dict(), indent=1, ensure_ascii=False))
        return
    for problem in error.problems:
        typer.echo(str(problem), err=True)
    count = len(error.problems)
    typer.echo(
        f"{'one problem' if count == 1 else f'{count} problems'} to mend; "
        "nothing was opened or written",
        err=True,
    )
