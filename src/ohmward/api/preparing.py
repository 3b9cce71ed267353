"""Loads what a person named, finds everything wrong with it in one go, and makes the brief."""

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from ohmward.errors import OhmwardError, Problems
from ohmward.protocol.check import check_driver
from ohmward.run.folder import Sources
from ohmward.sequence.brief import Brief
from ohmward.sequence.load import load_sequence
from ohmward.sequence.unroll import unroll
from ohmward.setup.bench import Bench, load_bench
from ohmward.setup.bench_drivers import load_drivers
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
        return Sources(files=files, drivers=self.drivers)

    @property
    def cable_m(self) -> dict[str, float]:
        """The length of each instrument's cable, by name."""
        return {name: one.cable_m for name, one in self.bench.instruments.items()}


def prepare(sequence: str | Path, *, bench: str | Path, parts: str | Path) -> Prepared:
    """Load a sequence, a bench and a parts list (paths, or names of shipped files).

    Raises BadInput with every problem of all of them; nothing is opened or written.
    """
    problems = Problems()
    sequence_path = find_file(str(sequence), "sequences")
    parts_path = find_file(str(parts), "simulators", ".csv")
    loaded_sequence = load_sequence(sequence_path, problems)
    loaded_bench = load_bench(find_file(str(bench), "simulators"), problems)
    drivers = load_drivers(loaded_bench, problems) if loaded_bench else None
    for driver in (drivers or {}).values():
        check_driver(driver, problems)
    loaded_parts = load_parts(parts_path, loaded_bench, problems)
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
    )
