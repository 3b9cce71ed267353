"""Holds a compensation against what a sequence requires and what the bench is."""

from collections.abc import Sequence as Listed
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path

import numpy as np

from ohmward.errors import Problems
from ohmward.metrology.errors import CompensationMismatch
from ohmward.results.compensations import age_s, compensations_of
from ohmward.sequence.brief import PlannedStage, PlannedSweep
from ohmward.sequence.model import Sequence
from ohmward.sequence.notes import Notes
from ohmward.setup.bench import Bench
from ohmward.setup.compensation_file import CompensationFile
from ohmward.terms.role import Role
from ohmward.units.values import format_quantity

MADE_BY = "one, made by 'ohmward compensate' and named with --compensation"


@dataclass(frozen=True, kw_only=True, slots=True)
class Compensated:
    """A compensation that was named for a run, the file it was read from, and what time it is."""

    file: CompensationFile
    path: Path
    now: datetime


def check_compensation(
    sequence: Sequence,
    bench: Bench,
    planned: Listed[PlannedStage],
    given: Compensated | None,
    notes: Notes,
) -> str:
    """What corrects the fixture, in a sentence; "" where nothing does. Notes every problem."""
    required = sequence.compensation
    if given is None:
        if required is not None:
            what = ", ".join(required.standards)
            notes.sequence(
                "compensation-missing", "compensation", expected=f"{MADE_BY}: {what}", found="none"
            )
        return ""
    check = _Check(given, notes.problems)
    check.belongs(bench)
    if required is not None:
        check.meets(required.standards, required.at_most)
    interpolated = check.covers([one for one in planned if isinstance(one, PlannedSweep)])
    return _sentence(given.file, interpolated)


class _Check:
    """Notes what is wrong with one compensation, under the keys of its file."""

    def __init__(self, given: Compensated, problems: Problems) -> None:
        self._file, self._path, self._now = given.file, given.path, given.now
        self._problems = problems

    def _note(self, id: str, key: str, expected: str, found: str) -> None:  # noqa: A002
        self._problems.add(id=id, file=self._path, key=key, expected=expected, found=found)

    def belongs(self, bench: Bench) -> None:
        """Fixture, instrument and cable are those that it was taken with."""
        file = self._file
        name = bench.name_of_role(Role.IMPEDANCE_METER)
        cable_m = bench.instruments[name].cable_m if name else 0.0
        if (file.bench, file.fixture) != (bench.name, bench.fixture.name):
            wanted, found = (
                f"{fixture or 'its fixture'} of {of}"
                for of, fixture in ((bench.name, bench.fixture.name), (file.bench, file.fixture))
            )
            self._note("compensation-other-fixture", "fixture", wanted, found)
        if file.instrument != name:
            self._note("compensation-other-instrument", "instrument", name, file.instrument)
        if file.cable_m != cable_m:
            wanted, found = f"{cable_m:g} m, as the bench file says", f"{file.cable_m:g} m"
            self._note("compensation-other-cable", "cable_m", wanted, found)

    def meets(self, standards: tuple[str, ...], at_most_s: float | None) -> None:
        """The standards that are required, and no older than allowed."""
        if "load" in standards and self._file.standards.load is None:
            self._note(
                "compensation-lacks-load",
                "standards",
                "open, short and load, which the sequence requires",
                "open and short",
            )
        age = age_s(self._file, self._now.timestamp())
        if at_most_s is not None and age > at_most_s:
            told = format_quantity(age, "s") if np.isfinite(age) else "one of a later time"
            self._note(
                "compensation-too-old",
                "taken",
                f"at most {format_quantity(at_most_s, 's')} old, as the sequence says",
                f"{told} ({self._file.taken.isoformat()})",
            )

    def covers(self, planned: Listed[PlannedSweep]) -> int:
        """Every position and frequency; how many frequencies are interpolated."""
        known = compensations_of(self._file)
        between: set[float] = set()
        for position in dict.fromkeys(stage.part.position for stage in planned):
            if position not in known:
                has = ", ".join(known)
                self._note("compensation-lacks-position", "position", position, f"only {has}")
                continue
            wanted = {
                point.frequency_hz
                for stage in planned
                if stage.part.position == position
                for point in stage.points
            }
            f = np.array(sorted(wanted))
            try:
                known[position].at(f)
            except CompensationMismatch as error:
                expected = f"what position {position} is measured at"
                self._note("compensation-lacks-frequency", "frequency_hz", expected, str(error))
                continue
            between.update(f[~known[position].is_exact(f)].tolist())
        return len(between)


def _sentence(file: CompensationFile, interpolated: int) -> str:
    kind = "open and short" if file.standards.load is None else "open, short and load"
    said = (
        f"{kind} of {file.taken:%Y-%m-%d %H:%M} UTC, by {file.identity}; its uncertainty adds to "
        "the meter's"
    )
    if interpolated:
        many = "frequency" if interpolated == 1 else "frequencies"
        said += f"; {interpolated} {many} interpolated"
    if file.own_correction == "unknown":
        said += "; whether the meter's own correction was off, it cannot be asked"
    return said
