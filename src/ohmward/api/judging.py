"""Decides a run again by other limits, beside what was decided then."""

import csv
from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path

from ohmward.api.past_run import PastRun, past_run
from ohmward.errors import BadInput, OhmwardError, Problem, Problems
from ohmward.output import columns
from ohmward.output.tables import TableWriter
from ohmward.results.compare import Change, changes
from ohmward.results.judge import judge, part_decisions
from ohmward.results.judged import Rule
from ohmward.results.merging import Row
from ohmward.run.folder import INPUTS
from ohmward.sequence.limits import resolve_limits
from ohmward.sequence.load import load_sequence
from ohmward.sequence.notes import Notes
from ohmward.setup.resources import find_file
from ohmward.terms.decision import Decision


@dataclass(frozen=True, kw_only=True, slots=True)
class JudgedAgain:
    """What other limits decide of a run, and what differs from what was decided then.

    ``parts`` are (part, decision then, decision now), each part of the run once.
    """

    run_id: str
    limits: Path
    parts: tuple[tuple[str, Decision, Decision], ...]
    changes: tuple[Change, ...]
    warnings: tuple[str, ...]
    rows: tuple[Row, ...]

    def as_dict(self) -> dict[str, object]:
        """In types that JSON has."""
        return {
            "run_id": self.run_id,
            "limits": str(self.limits),
            "parts": [
                {"part_id": part_id, "before": before.value, "after": after.value}
                for part_id, before, after in self.parts
            ],
            "changes": [
                {
                    "part_id": change.part_id,
                    "stage": change.stage,
                    "quantity": change.quantity,
                    "condition": change.condition,
                    "before": change.before.value if change.before else None,
                    "after": change.after.value if change.after else None,
                    "reason": change.reason,
                }
                for change in self.changes
            ],
            "warnings": list(self.warnings),
        }


def judge_again(run: Path, *, limits: str | Path, out: Path | None = None) -> JudgedAgain:
    """Decide a run's sweeps by the limits and the decision rule of another sequence file.

    What other stages decided stands. The run's folder is only read. ``out`` is a new CSV file
    for all rows, with its metadata beside it. Raises BadInput with every problem, also of limits
    on what was not measured.
    """
    past = past_run(run)
    path = find_file(str(limits), "sequences")
    problems = Problems()
    sequence = load_sequence(path, problems)
    if out is not None:
        _check_out(out, run, problems)
    notes = Notes(
        problems=problems,
        sequence_file=path,
        bench_file=run / INPUTS / "bench.toml",
        parts_file=run / INPUTS / "parts.csv",
    )
    resolved = resolve_limits(sequence, past.sweeps, notes) if sequence is not None else None
    problems.raise_if_any()
    if sequence is None or resolved is None:
        raise OhmwardError(f"{path} was refused without a problem that says why")
    rule = Rule(guard=sequence.decision.guard, coverage_k=sequence.decision.coverage)
    after = judge(
        past.readings,
        past.impedance,
        past.parts,
        resolved.limits,
        rule=rule,
        closures=past.closures,
        accuracies=past.accuracies,
        cable_m=past.cable_m,
        run_id=past.run_id,
    )
    before = _decided_then(past)
    swept = {stage.stage for stage in past.sweeps}
    after += [row for row in before if row["stage"] not in swept]  # as they were decided then
    if out is not None:
        with TableWriter(out.parent, replace(columns.RESULTS, file=out.name)) as table:
            table.rows(after)
    then, now = (part_decisions(rows, past.parts) for rows in (before, after))
    left_out = tuple(f"{one.who}, {one.stage}: {one.what}" for one in resolved.cannot_reach)
    return JudgedAgain(
        run_id=past.run_id,
        limits=path,
        parts=tuple((part_id, then[part_id], now[part_id]) for part_id in then),
        changes=tuple(changes(before, after)),
        warnings=(*notes.warnings, *left_out),
        rows=tuple(after),
    )


def _check_out(out: Path, run: Path, problems: Problems) -> None:
    expected = "a new file outside of the run's folder"
    found = ""
    if out.resolve().is_relative_to(run.resolve()):
        found = "one in it, which holds what the run itself left"
    elif out.exists():
        found = "one that is there already"
    elif not out.parent.is_dir():
        found = f"no folder {out.parent}"
    if found:
        problems.add(
            id="output-unusable", file=str(out), key="--out", expected=expected, found=found
        )


def _decided_then(past: PastRun) -> list[Row]:
    """The rows of the run's own results.csv, its numbers as numbers."""
    path = past.folder / columns.RESULTS.file
    try:
        with path.open(encoding="utf-8", newline="") as file:
            rows: list[Mapping[str, str]] = list(csv.DictReader(file))
        numbers = {column.name for column in columns.RESULTS.columns if column.datatype == "double"}
        return [
            {
                name: float(text or "nan") if name in numbers else text.removeprefix("'")
                for name, text in row.items()
            }
            for row in rows
        ]
    except (OSError, ValueError, AttributeError) as error:
        problem = Problem(
            id="results-missing",
            file=str(path),
            key="RUN",
            expected="what was decided then; 'ohmward resume' makes the tables of a finished run",
            found=str(error),
        )
        raise BadInput((problem,)) from error
