"""What a person sees in a terminal: the brief, the progress of a run, the decisions.

Plain words and plain tables; nothing is told by colour alone, and a pipe gets the same text.
"""

from collections import Counter
from collections.abc import Iterable, Sequence
from contextlib import suppress
from itertools import groupby
from typing import IO, Any, cast

from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn
from rich.table import Table
from rich.text import Text

from ohmward.errors import Problem
from ohmward.output import dangers
from ohmward.output.verdicts import PartVerdict
from ohmward.output.wording import duration
from ohmward.sequence.brief import Brief, PlannedStage, PlannedSweep
from ohmward.terms.decision import Decision
from ohmward.units.values import format_quantity

NARROW = 72  # columns: below it a table of five is no table any more

DECISION_STYLES = {
    Decision.ACCEPT: "green",
    Decision.REJECT: "bold red",
    Decision.UNDECIDED: "yellow",
    Decision.INVALID: "bold magenta",
}


def show_problems(console: Console, problems: Sequence[Problem]) -> None:
    """Every problem on a line of its own, file by file."""
    for problem in problems:
        console.print(str(problem), markup=False, highlight=False, soft_wrap=True)
    count = len(problems)
    what = "One problem" if count == 1 else f"{count} problems"
    console.print(f"{what} to mend; nothing was opened or written.", highlight=False)


def show_brief(console: Console, brief: Brief) -> None:
    """The brief as one reads it before a run: cautions first, then what is done and not done."""
    _line(console, f"{brief.name}: {brief.purpose}")
    if brief.follows:
        _line(console, f"Conditions: {brief.follows}")
    _line(
        console,
        f"{len(brief.parts)} parts on {brief.bench}, {brief.readings} readings, "
        f"about {duration(brief.duration_s)}",
    )
    if brief.compensation:
        _line(console, f"Compensation: {brief.compensation}")
    _list(console, "Before anyone touches the bench", brief.cautions)
    dangers.show(console, brief)
    if brief.sweeps:
        console.print()
        console.print(_stage_table(brief.sweeps))
    _list(
        console,
        "This bench cannot reach",
        [f"{left.who}, {left.stage}: {left.what}; {left.reason}" for left in brief.cannot_reach],
    )
    _list(console, "This bench cannot decide", [doubt.reason for doubt in brief.cannot_decide])
    _list(console, "Worth knowing", brief.warnings)


def _stage_table(stages: Sequence[PlannedSweep]) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    for heading in ("part", "position", "stage", "points", "frequency", "level", "bias", "time"):
        table.add_column(heading)
    for _, group in groupby(stages, key=lambda stage: stage.part.part_id):
        for stage in group:
            table.add_row(
                Text(stage.part.part_id),  # a Text is never read as markup
                Text(stage.part.position),
                Text(stage.stage),
                f"{len(stage.points)} × {stage.repeats}",
                _span((point.frequency_hz for point in stage.points), "Hz"),
                _span((point.level_v for point in stage.points), "V"),
                _bias_span(stage),
                duration(stage.duration_s),
            )
    return table


def _bias_span(stage: PlannedSweep) -> str:
    if any(point.bias_a for point in stage.points):
        return _span((point.bias_a for point in stage.points), "A")
    return _span((point.bias_v for point in stage.points), "V")


def _span(values: Iterable[float], unit: str) -> str:
    listed = sorted(set(values))
    first, last = format_quantity(listed[0], unit), format_quantity(listed[-1], unit)
    return first if len(listed) == 1 else f"{first} to {last}"


def show_decisions(console: Console, verdicts: Sequence[PartVerdict]) -> None:
    """One row per part with its decision and the reason, then the count of each decision."""
    if console.width < NARROW:
        for verdict in verdicts:
            console.print(Text.assemble(verdict.part.part_id, " ", _decision(verdict)))
            _line(console, f"  {_what(verdict)} in {verdict.part.position}: {verdict.reason}")
    else:
        console.print(_decision_table(verdicts))
    counts = Counter(verdict.decision for verdict in verdicts)
    _line(console, ", ".join(f"{counts[d]} {d}" for d in DECISION_STYLES if counts[d]))


def _decision_table(verdicts: Sequence[PartVerdict]) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    for heading in ("part", "position", "what", "decision", "reason"):
        table.add_column(heading, overflow="fold")
    for verdict in verdicts:
        table.add_row(
            Text(verdict.part.part_id),  # a Text is never read as markup
            Text(verdict.part.position),
            Text(_what(verdict)),
            _decision(verdict),
            Text(verdict.reason),
        )
    return table


def _what(verdict: PartVerdict) -> str:
    return f"{verdict.part.kind} {format_quantity(verdict.part.nominal, verdict.part.unit)}"


def _decision(verdict: PartVerdict) -> Text:
    return Text(str(verdict.decision), style=DECISION_STYLES[verdict.decision])


def _line(console: Console, text: str) -> None:
    console.print(text, markup=False, highlight=False, soft_wrap=True)


def _list(console: Console, heading: str, items: Sequence[str]) -> None:
    if items:
        console.print()
        console.print(heading, style="bold")
        for item in items:
            _line(console, f"  - {item}")


class _Heedless:
    """A text stream whose reader may leave: what cannot be written is dropped."""

    def __init__(self, file: IO[str]) -> None:
        self._file = file

    def __getattr__(self, name: str) -> Any:
        return getattr(self._file, name)

    def write(self, text: str) -> int:
        """Write the text, or drop it."""
        with suppress(OSError, ValueError):
            self._file.write(text)
        return len(text)

    def flush(self) -> None:
        """Write out what is held, or drop it."""
        with suppress(OSError, ValueError):
            self._file.flush()


class ProgressBar:
    """Watches a run on a terminal: one bar for the lot, with the time that is left.

    On a pipe it writes one line per part instead. A run goes on when nobody reads it. Use as
    a context manager.
    """

    def __init__(self, console: Console) -> None:
        if console.file is not None:
            console.file = cast("IO[str]", _Heedless(console.file))
        self._console = console
        self._progress = Progress(
            TextColumn("{task.description}", markup=False),
            BarColumn(),
            TextColumn("{task.percentage:3.0f} %"),
            TextColumn("{task.fields[left]}"),
            console=console,
            transient=True,
            disable=not console.is_terminal,
        )
        self._task = self._progress.add_task("", total=None, left="")
        self._planned_s = 0.0
        self._behind_s = 0.0
        self._stage_s = 0.0
        self._part_id = ""

    def __enter__(self) -> "ProgressBar":
        self._progress.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._progress.stop()

    def begun(self, brief: Brief, *, behind_s: float) -> None:
        """The run begins; ``behind_s`` of its planned time is done already."""
        self._planned_s = max(brief.duration_s, 1e-9)
        self._behind_s = behind_s
        self._progress.update(self._task, total=self._planned_s, completed=behind_s)

    def stage(self, stage: PlannedStage) -> None:
        """A stage of a part begins."""
        self._behind_s += self._stage_s
        self._stage_s = stage.duration_s
        self._show(f"{stage.part.part_id}, {stage.stage}", self._behind_s)
        if not self._console.is_terminal and stage.part.part_id != self._part_id:
            share = 100 * self._behind_s / self._planned_s
            _line(self._console, f"{stage.part.part_id} at {stage.part.position} ({share:.0f} %)")
        self._part_id = stage.part.part_id

    def reading(self, stage: PlannedStage, *, done: int, of: int) -> None:
        """One more reading is taken; the bar moves now and then."""
        if done % 16 == 0 or done == of:
            self._show(
                f"{stage.part.part_id}, {stage.stage}", self._behind_s + self._stage_s * done / of
            )

    def note(self, text: str) -> None:
        """Something a person should know now."""
        _line(self._console, text)

    def _show(self, text: str, behind_s: float) -> None:
        left = f"about {duration(max(0.0, self._planned_s - behind_s))} left"
        self._progress.update(self._task, description=text, completed=behind_s, left=left)
