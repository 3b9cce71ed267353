"""Finds out how far a run came, and whether what it began with is still what is there."""

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path

from ohmward.errors import BadInput, Problem, Problems
from ohmward.journal.store import JournalUnusable, Store
from ohmward.run.folder import JOURNAL
from ohmward.run.recorder import EPOCH
from ohmward.sequence.brief import Brief
from ohmward.setup.driver import Driver

NEEDED_FACTS = {"run_id", "simulated", "seed", "ohmward", "brief_sha256", "hashes", "paths"}


@dataclass(frozen=True, kw_only=True, slots=True)
class Progress:
    """How far a run came, as its journal says."""

    facts: Mapping[str, str]
    instruments: Mapping[str, Mapping[str, str]]
    ended: frozenset[int]
    taken: Mapping[int, set[tuple[int, int]]]
    last_utc: datetime | None
    last_elapsed_s: float

    @property
    def finished(self) -> bool:
        """Whether nothing is left to do."""
        return self.facts.get("state") == "finished"

    @property
    def simulated(self) -> bool:
        """Whether it was a dry run."""
        return self.facts.get("simulated") == "yes"

    def elapsed_now_s(self, now_utc: datetime) -> float:
        """Time since the run began, the pause included; never less than what was written."""
        if self.last_utc is None:
            return 0.0
        pause = max(now_utc - self.last_utc, timedelta(0))
        return self.last_elapsed_s + pause.total_seconds()


def progress_of(folder: Path) -> Progress:
    """Read the journal of a run's folder. Raises BadInput when it holds no run of ours."""
    try:
        progress = _progress_of(folder)
    except JournalUnusable as error:
        raise _no_run(folder, "no-journal", "the folder of a run", str(error)) from error
    if not set(progress.facts) >= NEEDED_FACTS:
        found = "one that ended before anything was done; start it again in a new folder"
        raise _no_run(folder, "run-never-began", "a run that has begun", found)
    return progress


def _no_run(folder: Path, id: str, expected: str, found: str) -> BadInput:  # noqa: A002
    problem = Problem(id=id, file=str(folder), key="DIR", expected=expected, found=found)
    return BadInput((problem,))


def _progress_of(folder: Path) -> Progress:
    store = Store.read(folder / JOURNAL)
    try:
        store.examine()
        stages = store.stages()
        begun = [number for number, stage in stages.items() if stage["state"] != "ended"]
        last = store.last_instant()
        return Progress(
            facts=store.facts(),
            instruments=store.instruments(),
            ended=frozenset(number for number in stages if number not in begun),
            taken={number: store.taken(number) for number in begun},
            last_utc=EPOCH + timedelta(microseconds=last[0]) if last else None,
            last_elapsed_s=last[1] if last else 0.0,
        )
    finally:
        store.abandon()


def note_differences(
    progress: Progress,
    brief: Brief,
    drivers: Mapping[str, Driver],
    began_with: Mapping[str, str],
    problems: Problems,
) -> None:
    """Note everything that is not what the run began with; ``began_with`` are the old hashes."""
    for what, digest in brief.hashes.items():
        if began_with.get(what) != digest:
            _changed(problems, f"{what}-changed", what, began_with.get(what), digest)
    if brief.hash != progress.facts.get("brief_sha256") and not len(problems):
        _changed(problems, "brief-changed", "brief", progress.facts.get("brief_sha256"), brief.hash)
    for name, instrument in progress.instruments.items():
        driver = drivers.get(name)
        if driver is not None and driver.digest != instrument["driver_sha256"]:
            _changed(
                problems,
                "driver-changed",
                f"instrument.{name} (driver {instrument['driver']})",
                instrument["driver_sha256"],
                driver.digest,
            )


def _changed(problems: Problems, id: str, key: str, then: str | None, now: str) -> None:  # noqa: A002
    problems.add(
        id=id,
        file=JOURNAL,
        key=key,
        expected=f"what the run began with (SHA-256 {str(then)[:12]}…)",
        found=f"another ({now[:12]}…)",
    )
