"""kill -9 at any instant, then resume: what was committed is kept, the end is the same."""

import math
import random
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from tests.run.program import Program, pause
from tests.run.workbench import Served, Workbench, decisions, journal, places, sequence, table

pytestmark = [pytest.mark.processes, pytest.mark.slow]

EACH_RUN = 4
"""A run is killed this often before it is left to finish."""


class Job:
    """One job on a served bench, and how an undisturbed run of it ends."""

    def __init__(self, folder: Path, program: Program) -> None:
        self.workbench = Workbench(folder)
        text = sequence(
            "bias = ['0 V', '5 V']", frequency="['1 kHz', '3 kHz', '10 kHz', '30 kHz', '100 kHz']"
        )
        self.workbench.write("sequence.toml", text)
        self.program = program
        self.count = 0

    def undisturbed(self) -> float:
        """Run it in peace; its time in seconds."""
        out = self.workbench.folder / "undisturbed"
        start_s = time.monotonic()
        assert self.program.start("run", *self.workbench.arguments(out)).wait().code == 0
        self.places, self.decisions = places(out), decisions(out)
        self.results = table(out, "results")
        return time.monotonic() - start_s

    def kill_and_resume(self, instants_s: list[float]) -> int:
        """Kill one run after each of these times, then let it finish; how often it was begun."""
        self.count += 1
        out = self.workbench.folder / f"run-{self.count}"
        begun = False
        kept: list[tuple[object, ...]] = []
        for instant_s in instants_s:
            kept = self._same(kept, out) if begun else []
            arguments = ["resume", str(out)] if begun else ["run", *self.workbench.arguments(out)]
            running = self.program.start(*arguments)
            pause(instant_s)
            running.killed()
            if not begun:
                begun = self._begun(out)
                if not begun:
                    self._refused(out)
                    self.count += 1
                    out = self.workbench.folder / f"run-{self.count}"
        arguments = ["resume", str(out)] if begun else ["run", *self.workbench.arguments(out)]
        kept = self._same(kept, out) if begun else []
        ended = self.program.start(*arguments).wait()
        assert ended.code == 0, ended.err
        self._same(kept, out)
        self._ends_as_if_undisturbed(out)
        return len(kept)

    @staticmethod
    def _begun(out: Path) -> bool:
        """Whether the journal says which run it is: before that nothing was opened."""
        if not (out / "journal.sqlite").exists():
            return False
        tables = journal(out, "SELECT 1 FROM sqlite_master WHERE name = 'run'")
        return bool(tables and journal(out, "SELECT 1 FROM run WHERE key = 'state'"))

    def _refused(self, out: Path) -> None:
        ended = self.program.start("resume", str(out)).wait()
        assert ended.code == 2, ended.err
        assert str(out) in ended.err

    @staticmethod
    def _same(kept: list[tuple[object, ...]], out: Path) -> list[tuple[object, ...]]:
        """What was committed before is there, byte for byte, under its number."""
        now = journal(out)
        assert now[: len(kept)] == kept
        return now

    def _ends_as_if_undisturbed(self, out: Path) -> None:
        assert places(out) == self.places
        assert decisions(out) == self.decisions
        for one, other in zip(table(out, "results"), self.results, strict=True):
            if one["quantity"] == "capacitance_f":
                assert math.isclose(float(one["value"]), float(other["value"]), rel_tol=0.01)
        assert sorted(path.name for path in out.glob("journal*")) == ["journal.sqlite"]
        numbers = [row["reading"] for row in table(out, "impedance")]
        assert numbers == [str(n + 1) for n in range(len(numbers))]
        elapsed_s = [float(row["elapsed_s"]) for row in table(out, "impedance")]
        assert elapsed_s == sorted(elapsed_s)


@pytest.fixture(scope="module")
def job(tmp_path_factory: pytest.TempPathFactory, program: Program) -> Iterator[Job]:
    job = Job(tmp_path_factory.mktemp("job"), program)
    with Served(job.workbench) as served:
        yield job
        assert served.at_rest()


def kill(job: Job, times: int, seed: int) -> None:
    """Kill at random instants that fall into all of a run: opening, measuring and tables."""
    whole_s = job.undisturbed()
    chance = random.Random(seed)
    instants_s = [chance.uniform(0.0, 0.9 * whole_s) for _ in range(times)]
    with_readings = 0
    for first in range(0, times, EACH_RUN):
        with_readings += job.kill_and_resume(instants_s[first : first + EACH_RUN]) > 0
    assert with_readings > 0


def test_killed_at_eight_random_instants(job: Job) -> None:
    kill(job, 8, seed=1)


@pytest.mark.soak
def test_killed_at_fifty_random_instants(job: Job) -> None:
    kill(job, 50, seed=2)
