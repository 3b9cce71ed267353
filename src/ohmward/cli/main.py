"""The program: its commands, and what an error becomes on the way out."""

import json
import signal
import sys
import traceback
from contextlib import suppress
from typing import Any

import typer

from ohmward import __version__
from ohmward.cli import (
    calculating,
    checking,
    metrology,
    recording,
    reference,
    running,
    serving,
    streams,
)
from ohmward.errors import BadInput, NotProvenSafe, OhmwardError, Problem, Stopped

app = typer.Typer(
    name="ohmward",
    help=(
        "Tests trays of capacitors, inductors and resistors from one written sequence "
        "and says, part by part, which may be used."
    ),
    epilog=(
        "Exit codes: 0 finished, whatever was decided; 1 our own fault; 2 bad input or nobody's "
        "authorisation; 3 a safety trip; 4 links lost; 5 the safe state is NOT proven; 6 the "
        "bench is held; 130 stopped by a signal."
    ),
    rich_markup_mode=None,
    no_args_is_help=True,
    pretty_exceptions_enable=False,
)
running.add_to(app)
metrology.add_to(app)
checking.add_to(app)
calculating.add_to(app)
recording.add_to(app)
reference.add_to(app)
serving.add_to(app)

for command in app.registered_commands:  # whole sentences in the list of commands
    command.short_help = (getattr(command.callback, "__doc__", None) or "").split("\n\n")[0]


def _version(asked: bool) -> None:
    if asked:
        typer.echo(f"ohmward {__version__}")
        raise typer.Exit


@app.callback()
def _program(
    version: bool = typer.Option(
        False, "--version", callback=_version, is_eager=True, help="Show the version and exit."
    ),
) -> None:
    """What comes before every command."""


def main() -> None:
    """Run the program and exit with the code that the outcome has."""
    for number in (signal.SIGTERM, signal.SIGHUP):
        if signal.getsignal(number) == signal.SIG_DFL:  # else it is to be ignored, as by nohup
            signal.signal(number, _as_interrupt)
    streams.prepare()
    code = _outcome()
    reason = streams.flush()
    sys.exit(code or (1 if reason else 0))


def _as_interrupt(number: int, frame: object) -> None:
    """Any signal that asks the program to stop ends it as Ctrl-C does."""
    raise KeyboardInterrupt


def _outcome() -> int:
    try:
        code = app(standalone_mode=False)
    except OhmwardError as error:
        return _told(error)
    except (typer.Abort, KeyboardInterrupt):
        return _told(Stopped("stopped"))
    except SystemExit as left:
        if isinstance(left.__context__, BrokenPipeError):
            return 0  # whoever read our output has left, and had what was wanted
        raise
    except OSError as error:
        where = error.filename or "what was to be said could not be written"
        return _told(OhmwardError(f"{where}: {error.strerror or type(error).__name__}"))
    except Exception as error:
        if hasattr(error, "show") and hasattr(error, "exit_code"):  # a usage error of click's
            return _told_usage(error)
        traceback.print_exc()
        return _told(OhmwardError("this is a fault of ohmward's own, not of what you wrote"))
    if code == Stopped.exit_code:  # the command line library's own end after Ctrl-C is silent
        return _told(Stopped("stopped"))
    return code if isinstance(code, int) else 0


def _told(error: OhmwardError) -> int:
    """Tell the error if anybody can still hear it; returns its exit code."""
    with suppress(OSError, ValueError):
        _tell(error)
    return error.exit_code


def _told_usage(error: Any) -> int:
    with suppress(OSError, ValueError):
        if _wants_json():
            text = " ".join(error.format_message().split())
            _tell_problems(BadInput((_usage_problem(text),)))
        else:
            error.show()
    return int(error.exit_code)


def _usage_problem(text: str) -> Problem:
    expected = "a command as --help shows it"
    return Problem(id="usage", file="command line", key="-", expected=expected, found=text)


def _wants_json() -> bool:
    return "--json" in sys.argv


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
    if _wants_json():
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
