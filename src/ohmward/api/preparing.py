"""Loads what a person named, finds everything wrong with it in one go, and makes the brief."""

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from ohmward.clock import DRY_RUN_START_UTC, today_utc
from ohmward.errors import BadInput, OhmwardError, Problem, Problems
from ohmward.metrology.compensation import Compensation
from ohmward.protocol.check import check_driver
from ohmward.results.compensations import compensations_of
from ohmward.run.folder import Sources, note_unusable
from ohmward.sequence.brief import Brief
from ohmward.sequence.compensated import Compensated
from ohmward.sequence.load import load_sequence
from ohmward.sequence.unroll import unroll
from ohmward.setup.bench import Bench, load_bench
from ohmward.setup.bench_drivers import load_drivers
from ohmward.setup.compensation_file import CompensationFile, load_compensation
from ohmward.setup.driver import Driver
from ohmward.setup.parts import load_parts
from ohmward.setup.resources import find_file
from ohmward.terms.part import Part


@dataclass(frozen=True, kw_only=True, slots=True)
class Prepared:
    """A sequence, a bench and a parts list without a problem, and the brief made of them."""

    sequence_path: Path
    bench: Bench
    drivers: Mapping[str, Driver]
    parts_path: Path
    parts: tuple[Part, ...]
    brief: Brief
    compensated: Compensated | None = None

    @property
    def compensation(self) -> CompensationFile | None:
        """What is known of the fixture; None where it is not corrected."""
        return self.compensated.file if self.compensated else None

    @property
    def compensations(self) -> dict[str, Compensation]:
        """The same for each position, as it is applied."""
        return compensations_of(self.compensation) if self.compensation else {}

    @property
    def sources(self) -> Sources:
        """The files that this was made from, for copies in the run's folder."""
        files = {
            "sequence": self.sequence_path,
            "bench": self.bench.path,
            "parts": self.parts_path,
        }
        if self.bench.physical_path is not None:
            files["physical"] = self.bench.physical_path
        if self.compensated is not None:
            files["compensation"] = self.compensated.path
        return Sources(files=files, drivers=self.drivers)

    @property
    def cable_m(self) -> dict[str, float]:
        """The length of each instrument's cable, by name."""
        return {name: one.cable_m for name, one in self.bench.instruments.items()}


def prepare(
    sequence: str | Path,
    *,
    bench: str | Path,
    parts: str | Path,
    compensation: str | Path | None = None,
    out: Path | None = None,
) -> Prepared:
    """Load a sequence, a bench and a parts list (paths, or names of shipped files).

    ``compensation`` is the file that `compensate` wrote of the bench's fixture, if there is one.
    ``out`` is where the run's folder is to be made, if it is known already.

    Raises BadInput with every problem of all of them; nothing is opened or written.
    """
    problems = Problems()
    if out is not None:
        note_unusable(out, problems)
    sequence_path = find_file(str(sequence), "sequences")
    parts_path = find_file(str(parts), "simulators", ".csv")
    loaded_sequence = load_sequence(sequence_path, problems)
    loaded_bench = load_bench(find_file(str(bench), "simulators"), problems)
    drivers = load_drivers(loaded_bench, problems) if loaded_bench else None
    for driver in (drivers or {}).values():
        check_driver(driver, problems)
    loaded_parts = load_parts(parts_path, loaded_bench, problems)
    compensated = _compensated(compensation, problems)
    brief = None
    if loaded_sequence is not None:
        brief = unroll(
            loaded_sequence,
            bench=loaded_bench,
            drivers=drivers or {},
            parts=loaded_parts,
            sequence_file=sequence_path,
            parts_file=parts_path,
            problems=problems,
            compensation=compensated,
        )
    problems.raise_if_any()
    if brief is None or loaded_bench is None or drivers is None:
        raise OhmwardError("a brief was refused without a problem that says why")
    return Prepared(
        sequence_path=sequence_path,
        bench=loaded_bench,
        drivers=drivers,
        parts_path=parts_path,
        parts=loaded_parts,
        brief=brief,
        compensated=compensated,
    )


def _compensated(path: str | Path | None, problems: Problems) -> Compensated | None:
    """A compensation file; one of a simulated bench is as old as it is when a dry run begins."""
    file = None if path is None else load_compensation(Path(path), problems)
    if path is None or file is None:
        return None
    now = DRY_RUN_START_UTC if file.simulated else today_utc()
    return Compensated(file=file, path=Path(path), now=now)


def refuse_other_world(prepared: Prepared, *, simulated: bool) -> None:
    """Raise BadInput where a real fixture's compensation meets a simulated one, or the reverse."""
    given = prepared.compensated
    if given is not None and given.file.simulated is not simulated:
        here, there = ("simulated", "real") if simulated else ("real", "simulated")
        problem = Problem(
            id="compensation-other-world",
            file=str(given.path),
            key="simulated",
            expected=f"a compensation of the {here} bench"
            + (", made with 'compensate --dry'" if simulated else ""),
            found=f"one of the {there} bench",
        )
        raise BadInput((problem,))
