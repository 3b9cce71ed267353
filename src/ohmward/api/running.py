"""Runs a prepared brief: dry in virtual time, or on the real bench; and goes on after a stop."""

import json
import secrets
import sys
from collections.abc import Callable, Mapping, Sequence
from contextlib import nullcontext, suppress
from dataclasses import dataclass, replace
from datetime import timedelta
from importlib.metadata import version
from pathlib import Path

import trio
from rich.console import Console

from ohmward import __version__
from ohmward.api import simulation
from ohmward.api.mishaps import Fated, Mishap, read_mishaps
from ohmward.api.operator import TerminalOperator
from ohmward.api.preparing import Prepared, prepare, refuse_other_world
from ohmward.api.tabulating import Truth, tabulate
from ohmward.api.witness import Witness, WitnessedRecorder
from ohmward.clock import (
    DRY_RUN_START_UTC,
    Clock,
    run_in_real_time,
    run_in_virtual_time,
    today_utc,
)
from ohmward.errors import BadInput, OhmwardError, Problems
from ohmward.instruments.transcript import Transcripts
from ohmward.journal.store import Store
from ohmward.journal.writer import InlineWriter, ThreadWriter
from ohmward.output import manifest
from ohmward.output.screen import ProgressBar
from ohmward.output.verdicts import PartVerdict, verdicts
from ohmward.run import folder as run_folder
from ohmward.run.bench import Connections
from ohmward.run.recorder import Recorder
from ohmward.run.resuming import Progress, note_differences, progress_of
from ohmward.run.runner import Order, carry_out
from ohmward.run.stopping import StopSignals, catch_signals
from ohmward.run.watcher import Silent, Watcher
from ohmward.sim.bench import SimulatedBench

TRANSCRIPTS = "transcript"
RECORDED_PACKAGES = ("pyvisa", "pyvisa-py", "numpy", "scipy", "pandas", "pydantic", "trio")
OnBench = Callable[[SimulatedBench], None]


@dataclass(frozen=True, kw_only=True, slots=True)
class Outcome:
    """A finished run: its folder and the decision on every part."""

    folder: Path
    run_id: str
    simulated: bool
    verdicts: list[PartVerdict]
    notes: tuple[str, ...] = ()


def dry_run(
    prepared: Prepared,
    *,
    out: Path,
    seed: int = 0,
    watch: bool = False,
    faults: Sequence[str] = (),
    transcript: int = 0,
    on_bench: OnBench | None = None,
) -> Outcome:
    """Carry the brief out on a simulated bench in virtual time; same seed, same bytes.

    With ``transcript`` the last so many exchanges of each instrument are kept in the folder.
    ``on_bench`` gets the simulated bench beforehand, every instrument behind a layer of faults.
    ``faults`` are what is to go wrong, each as PART=KIND@STAGE+TIME. Opens none of the bench's
    addresses. Raises BadInput when ``out`` exists, or for a fault that there is not.
    """
    refuse_other_world(prepared, simulated=True)
    if faults:
        read_mishaps(faults, prepared.brief, simulation.build(prepared, seed=seed))
    run_id = f"dry-{prepared.brief.hash[:12]}-{seed}"
    journal = run_folder.make(out, prepared.sources, prepared.brief)
    facts = _facts(prepared, run_id=run_id, simulated=True, seed=seed)
    if faults:
        facts["faults"] = json.dumps(list(faults))
    with run_folder.held(out):
        task = _Task(
            prepared,
            out,
            journal,
            facts,
            seed=seed,
            transcripts=Transcripts(transcript) if transcript else None,
            on_bench=on_bench,
        )
        return _go(task, watch=watch)


def run(prepared: Prepared, *, out: Path, watch: bool = False, transcript: int = 0) -> Outcome:
    """Carry the brief out on the real bench.

    With ``transcript`` the last so many exchanges of each instrument are kept in the folder.

    Raises BadInput when ``out`` exists, a stage energises or nobody is there to load parts, and
    whatever ended the run early; what was measured until then is in the folder.
    """
    refuse_energising(prepared)
    refuse_unattended(prepared)
    refuse_other_world(prepared, simulated=False)
    now = today_utc()
    run_id = f"{now:%Y%m%dT%H%M%SZ}-{secrets.token_hex(2)}"
    journal = run_folder.make(out, prepared.sources, prepared.brief)
    facts = _facts(prepared, run_id=run_id, simulated=False, seed=None)
    with run_folder.held(out):
        transcripts = Transcripts(transcript) if transcript else None
        return _go(_Task(prepared, out, journal, facts, transcripts=transcripts), watch=watch)


def resume(folder: Path, *, watch: bool = False) -> Outcome:
    """Go on with a run that was stopped or killed; readings that were taken are kept.

    Raises BadInput when there is no run in the folder, or naming every difference when sequence,
    bench, parts or drivers are not those that the run began with, or another instrument answers.
    """
    with run_folder.held(folder):
        return _resume(folder, watch=watch)


def _resume(folder: Path, *, watch: bool) -> Outcome:
    progress = progress_of(folder)
    facts = dict(progress.facts)
    paths = json.loads(facts["paths"])
    prepared = prepare(
        paths["sequence"],
        bench=paths["bench"],
        parts=paths["parts"],
        compensation=paths.get("compensation"),
    )
    problems = Problems()
    note_differences(
        progress, prepared.brief, prepared.drivers, json.loads(facts["hashes"]), problems
    )
    problems.raise_if_any()
    seed = int(facts["seed"]) if progress.simulated else 0
    task = _Task(prepared, folder, folder / run_folder.JOURNAL, facts, seed=seed, progress=progress)
    if progress.finished:
        world = _world_of(task)
        return _finish(task, None if world is None else world.truth())
    if not task.simulated:
        refuse_unattended(prepared)
    return _go(task, watch=watch)


def refuse_energising(prepared: Prepared) -> None:
    """Raise BadInput naming each stage that puts a hazardous voltage on a part."""
    problems = Problems()
    for stage in prepared.brief.energising:
        problems.add(
            id="stage-energises",
            file=prepared.sequence_path,
            key=f"stage '{stage}'",
            expected="no stage that energises: this version runs those on simulated benches only",
            found="one that does",
        )
    problems.raise_if_any()


def refuse_unattended(prepared: Prepared) -> None:
    """Raise BadInput where a person has to load each part and there is no terminal to ask at.

    Told before anything is opened or written: it is how the run was started that is wrong.
    """
    problems = Problems()
    if prepared.bench.fixture.loading == "by hand" and not sys.stdin.isatty():
        problems.add(
            id="nobody-to-load-parts",
            file=prepared.bench.path,
            key="fixture.loading",
            expected="a terminal at which a person is asked for each part, or a scanner",
            found="'by hand', and standard input is no terminal",
        )
    problems.raise_if_any()


@dataclass(frozen=True, slots=True)
class _Task:
    """One run, new or taken up again."""

    prepared: Prepared
    folder: Path
    journal: Path
    facts: Mapping[str, str]
    seed: int = 0
    progress: Progress | None = None
    transcripts: Transcripts | None = None
    on_bench: OnBench | None = None

    @property
    def simulated(self) -> bool:
        return self.facts["simulated"] == "yes"


@dataclass(frozen=True, slots=True)
class _World:
    """The simulated bench of a dry run, what is to go wrong on it, and who sees what is true."""

    bench: SimulatedBench
    mishaps: tuple[Mishap, ...]
    witness: Witness

    def truth(self) -> Truth:
        """What is behind each row of results.csv."""
        befell = {one.part_id: one.kind for one in self.mishaps}
        return simulation.truth_of(self.bench, self.witness, befell)


def _go(task: _Task, *, watch: bool) -> Outcome:
    """Run, then make tables of whatever was measured, also when the run ended early."""
    console = Console(stderr=True, highlight=False)
    bar = ProgressBar(console) if watch else nullcontext(Silent())
    world = _world_of(task)
    truth = None if world is None else world.truth()
    with catch_signals() as stop:  # until the tables are there: a second Ctrl-C must not tear them
        try:
            with bar as watcher:
                if world is not None:
                    _run_dry(task, world, watcher, stop)
                else:
                    _run_real(task, watcher, stop)
        except BadInput:
            raise
        except Exception as error:
            _finish_what_there_is(task, truth, error)
            raise
        return _finish(task, truth)


def _run_dry(task: _Task, world: _World, watcher: Watcher, stop: StopSignals) -> None:
    last_s = task.progress.last_elapsed_s if task.progress else 0.0

    async def main(clock: Clock) -> None:
        connections = simulation.connections(world.bench)
        recorder = WitnessedRecorder(
            InlineWriter(_store(task)), clock, world.witness, elapsed_offset_s=last_s
        )
        failed: Exception | None = None
        async with trio.open_nursery() as nursery:  # for what is to go wrong meanwhile
            fated = Fated(watcher, world.bench, world.mishaps, nursery)
            try:
                await _carry_out(task, connections, recorder, fated, stop)
            except Exception as error:
                failed = error
            nursery.cancel_scope.cancel()
        if failed is not None:
            raise failed

    run_in_virtual_time(main, start_utc=DRY_RUN_START_UTC + timedelta(seconds=last_s))


def _world_of(task: _Task) -> _World | None:
    if not task.simulated:
        return None
    bench = simulation.build(task.prepared, seed=task.seed, with_faults=task.on_bench is not None)
    if task.on_bench is not None:
        task.on_bench(bench)
    faults = json.loads(task.facts.get("faults", "[]")) if task.progress is None else ()
    return _World(bench, read_mishaps(faults, task.prepared.brief, bench), Witness(bench))


def _run_real(task: _Task, watcher: Watcher, stop: StopSignals) -> None:
    from pyvisa import ResourceManager

    from ohmward.links.thread_waiter import ThreadWaiter

    async def main(clock: Clock) -> None:
        elapsed_s = task.progress.elapsed_now_s(clock.utc()) if task.progress else 0.0
        manager = ResourceManager("@py")
        connections = Connections(
            manager=manager, waiter=ThreadWaiter(), operator=TerminalOperator()
        )
        recorder = Recorder(ThreadWriter(_store(task)), clock, elapsed_offset_s=elapsed_s)
        try:
            await _carry_out(task, connections, recorder, watcher, stop)
        finally:
            manager.close()

    run_in_real_time(main)


def _store(task: _Task) -> Store:
    open_store: Callable[..., Store] = Store.open if task.progress else Store.create
    return open_store(task.journal, durable=not task.simulated)


async def _carry_out(
    task: _Task,
    connections: Connections,
    recorder: Recorder,
    watcher: Watcher,
    stop: StopSignals,
) -> None:
    connections = replace(connections, transcripts=task.transcripts)
    progress, brief = task.progress, task.prepared.brief
    ended = progress.ended if progress else frozenset()
    behind_s = sum(stage.duration_s for stage in brief.stages if stage.number in ended)
    try:
        if progress is None:
            for key, value in task.facts.items():
                await recorder.fact(key, value)
        await recorder.settled()
    except OhmwardError:
        with suppress(OhmwardError):
            await recorder.close()
        raise
    order = Order(
        brief=brief,
        bench=task.prepared.bench,
        drivers=task.prepared.drivers,
        ended=ended,
        taken=progress.taken if progress else {},
        identities=(
            {name: one["identity"] for name, one in progress.instruments.items()}
            if progress
            else {}
        ),
        compensated_by=(task.prepared.compensation.identity if task.prepared.compensation else ""),
    )
    watcher.begun(brief, behind_s=behind_s)
    await carry_out(order, connections, recorder, watcher, stop)


def _facts(prepared: Prepared, *, run_id: str, simulated: bool, seed: int | None) -> dict[str, str]:
    brief = prepared.brief
    paths = {
        "sequence": str(prepared.sequence_path.absolute()),
        "bench": str(prepared.bench.path.absolute()),
        "parts": str(prepared.parts_path.absolute()),
    }
    if prepared.compensated is not None:
        paths["compensation"] = str(prepared.compensated.path.absolute())
    return {
        "run_id": run_id,
        "simulated": "yes" if simulated else "no",
        "seed": "" if seed is None else str(seed),
        "sequence": brief.name,
        "purpose": brief.purpose,
        "brief_sha256": brief.hash,
        "hashes": json.dumps(dict(brief.hashes), sort_keys=True),
        "paths": json.dumps(paths, sort_keys=True),
        "ohmward": __version__,
        "packages": json.dumps({name: version(name) for name in RECORDED_PACKAGES}),
        "state": "begun",
    }


def _finish(task: _Task, truth: Truth | None) -> Outcome:
    """Tables and manifest of a run's folder, made anew from its journal.

    Raises FolderUnusable when they cannot be written.
    """
    prepared = task.prepared
    about = {key: task.facts[key] for key in ("run_id", "ohmward", "brief_sha256")}
    try:
        run_folder.forget_derived(task.folder)
        results = tabulate(
            task.folder,
            prepared.brief,
            prepared.drivers,
            prepared.cable_m,
            truth,
            prepared.compensations,
            prepared.bench,
        )
        if task.transcripts is not None:
            task.transcripts.write(task.folder / TRANSCRIPTS)
        manifest.write(task.folder, about)
    except OSError as error:
        reason = error.strerror or str(error)
        raise run_folder.FolderUnusable(f"{error.filename or task.folder}: {reason}") from error
    return Outcome(
        folder=task.folder,
        run_id=task.facts["run_id"],
        simulated=task.simulated,
        verdicts=verdicts(prepared.brief.parts, results),
        notes=simulation.notes(prepared) if task.simulated else (),
    )


def _finish_what_there_is(task: _Task, truth: Truth | None, error: Exception) -> None:
    """Tables of a run that ended early; a failure here must not hide what ended it."""
    try:
        outcome = _finish(task, truth)
        if isinstance(error, OhmwardError):
            error.outcome = outcome
    except Exception as second:
        error.add_note(f"its tables could not be written either: {second}")
