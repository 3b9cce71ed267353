"""Prints what the other functions return, for people and for programs."""

import json
from typing import Any

from rich.console import Console

from ohmward.api.running import Outcome
from ohmward.output import screen
from ohmward.sequence.brief import Brief

PIPE_COLUMNS = 120


def as_json(value: Any) -> str:
    """Indented JSON; NaN and infinities are refused, because JSON has none."""
    return json.dumps(value, indent=1, ensure_ascii=False, allow_nan=False)


def show_brief(brief: Brief) -> None:
    """Print a brief."""
    screen.show_brief(_console(), brief)


def show_run(outcome: Outcome) -> None:
    """Print the decisions of a finished run and where its tables are."""
    console = _console()
    screen.show_decisions(console, outcome.verdicts)
    for note in outcome.notes:
        console.print(note, markup=False, soft_wrap=True)
    console.print(f"Tables: {outcome.folder}", markup=False, soft_wrap=True)


def _console() -> Console:
    """A console as wide as the terminal; a pipe has no width, and gets 120 columns."""
    console = Console(highlight=False)
    return console if console.is_terminal else Console(highlight=False, width=PIPE_COLUMNS)
