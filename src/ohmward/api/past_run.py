"""A run looked at again: its folder alone says what was measured and with what.

Nothing but the folder is read, so that it may have been copied from another machine: the brief
and the drivers are those that were kept when the run began.
"""

import json
from collections.abc import Mapping
from dataclasses import dataclass, fields
from datetime import datetime
from pathlib import Path
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from ohmward.api.tabulating import Arrays, accuracies_of, journal_columns
from ohmward.api.under_voltage import UnderVoltage, under_voltage
from ohmward.errors import BadInput, Problem, Problems
from ohmward.journal import schema
from ohmward.journal.store import Row, Store
from ohmward.metrology.compensation import Compensation
from ohmward.results.compensations import compensations_of
from ohmward.results.derive import derive_impedance
from ohmward.results.judged import Rule
from ohmward.run.folder import INPUTS, JOURNAL
from ohmward.run.resuming import progress_of
from ohmward.sequence.brief import (
    PlannedAbsorption,
    PlannedDirect,
    PlannedInsulation,
    PlannedLeakage,
    PlannedProof,
    PlannedReform,
    PlannedResistance,
    PlannedSweep,
    Settle,
)
from ohmward.setup.bench import Bench
from ohmward.setup.compensation_file import load_compensation
from ohmward.setup.driver import Driver
from ohmward.setup.toml import read_toml, validate
from ohmward.terms.accuracy import ImpedanceAccuracy
from ohmward.terms.condition import Point
from ohmward.terms.kind import Kind, Polarity
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part

T = TypeVar("T")

NAMES = ("part_id", "position", "stage", "status", "range", "integration", "pair", "instrument")
DIRECT: Mapping[str, type[PlannedDirect]] = {
    stage.kind: stage
    for stage in (
        *(PlannedLeakage, PlannedInsulation, PlannedReform, PlannedProof),
        *(PlannedAbsorption, PlannedResistance),
    )
}


@dataclass(frozen=True, kw_only=True, slots=True)
class PastRun:
    """What was planned, what was read, and what it was read with."""

    folder: Path
    run_id: str
    parts: tuple[Part, ...]
    sweeps: tuple[PlannedSweep, ...]
    limits: tuple[Limit, ...]
    rule: Rule
    accuracies: Mapping[str, ImpedanceAccuracy]
    cable_m: Mapping[str, float]
    compensations: Mapping[str, Compensation]
    readings: Arrays
    events: list[Row]
    impedance: Mapping[str, NDArray[Any]]
    direct: UnderVoltage | None = None

    @property
    def closures(self) -> set[str]:
        """Names of the stages that end where they began."""
        return {stage.stage for stage in self.sweeps if stage.closure}


def past_run(folder: Path) -> PastRun:
    """Read a run's folder. Raises BadInput when it holds no run, or not what belongs to one."""
    facts = progress_of(folder).facts
    inputs = folder / INPUTS
    brief = _json(inputs / "brief.json")
    parts = tuple(_part(row) for row in brief["parts"])
    drivers = {
        path.stem: Driver.model_validate(_json(path))
        for path in sorted((inputs / "drivers").glob("*.json"))
    }
    bench = _bench(inputs)
    accuracies = accuracies_of(drivers)
    cable_m = {name: one.cable_m for name, one in bench.instruments.items()}
    compensations = _compensations(inputs)
    readings, events = _readings(folder)
    by_id = {part.part_id: part for part in parts}
    impedance = derive_impedance(
        readings,
        parts,
        accuracies,
        run_id=facts["run_id"],
        simulated=facts["simulated"] == "yes",
        cable_m=cable_m,
        compensations=compensations,
    )
    both = {**readings, **impedance}
    return PastRun(
        folder=folder,
        run_id=facts["run_id"],
        parts=parts,
        sweeps=tuple(_sweep(row, by_id) for row in brief["stages"] if row["kind"] == "sweep"),
        limits=tuple(_made(Limit, row) for row in brief["limits"]),
        rule=Rule(guard=brief["guard"], coverage_k=brief["coverage_k"]),
        accuracies=accuracies,
        cable_m=cable_m,
        compensations=compensations,
        readings=readings,
        events=events,
        impedance=impedance,
        direct=_direct(folder, brief, parts, bench, drivers, both, facts),
    )


def _readings(folder: Path) -> tuple[Arrays, list[Row]]:
    """Every column of the journal's readings in one piece, and the journal's events."""
    store = Store.read(folder / JOURNAL)
    try:
        batches, events = list(journal_columns(store)), store.events()
    finally:
        store.abandon()
    if not batches:
        nothing: Arrays = {
            name: np.array([], dtype=object if name in NAMES else np.float64)
            for name in (*("reading", *NAMES, "time_utc"), *schema.IMPEDANCE_COLUMNS)
        }
        return nothing | {"time_utc": np.array([], dtype="datetime64[us]")}, events
    names = batches[0]
    return {name: np.concatenate([one[name] for one in batches]) for name in names}, events


def _bench(inputs: Path) -> Bench:
    problems = Problems()
    table = read_toml(inputs / "bench.toml", problems)
    bench = None if table is None else validate(Bench, table, inputs / "bench.toml", problems)
    problems.raise_if_any()
    if bench is None:
        raise _unusable(inputs / "bench.toml", "the bench of the run", "none")
    return bench


def _direct(
    folder: Path,
    brief: Mapping[str, Any],
    parts: tuple[Part, ...],
    bench: Bench,
    drivers: Mapping[str, Driver],
    impedance: Mapping[str, NDArray[Any]],
    facts: Mapping[str, str],
) -> UnderVoltage | None:
    """What was read under voltage; None for a run without such stages."""
    by_id = {part.part_id: part for part in parts}
    planned = [
        _made(DIRECT[row["kind"]], _tuples(row), part=by_id[row["part"]])
        for row in brief["stages"]
        if row["kind"] in DIRECT
    ]
    if not planned:
        return None
    store = Store.read(folder / JOURNAL)
    try:
        return under_voltage(
            store,
            parts,
            planned,
            bench,
            drivers,
            impedance,
            rule=Rule(guard=brief["guard"], coverage_k=brief["coverage_k"]),
            run_id=facts["run_id"],
            simulated=facts["simulated"] == "yes",
        )
    finally:
        store.abandon()


def _tuples(row: Mapping[str, Any]) -> dict[str, Any]:
    return {key: tuple(value) if isinstance(value, list) else value for key, value in row.items()}


def _compensations(inputs: Path) -> dict[str, Compensation]:
    path = inputs / "compensation.toml"
    if not path.exists():
        return {}
    problems = Problems()
    file = load_compensation(path, problems)
    problems.raise_if_any()
    return {} if file is None else compensations_of(file)


def _json(path: Path) -> Any:
    try:
        return json.loads(path.read_text("utf-8"))
    except (OSError, ValueError) as error:
        raise _unusable(path, "what the run kept of its inputs", str(error)) from error


def _unusable(path: Path, expected: str, found: str) -> BadInput:
    problem = Problem(
        id="run-incomplete", file=str(path), key="RUN", expected=expected, found=found
    )
    return BadInput((problem,))


def _made(model: type[T], row: Mapping[str, Any], **more: Any) -> T:
    """A term from its JSON; keys that it does not know are of another version, and left out."""
    known = {one.name for one in fields(model)}  # type: ignore[arg-type]  # T is a dataclass
    return model(**{**{key: value for key, value in row.items() if key in known}, **more})


def _part(row: Mapping[str, Any]) -> Part:
    more: dict[str, Any] = {"kind": Kind(row["kind"]), "polarity": Polarity(row["polarity"])}
    for name in ("last_energised", "last_heated"):
        if row.get(name):
            more[name] = datetime.fromisoformat(row[name])
    return _made(Part, row, **more)


def _sweep(row: Mapping[str, Any], parts: Mapping[str, Part]) -> PlannedSweep:
    settle = row["settle"]
    return _made(
        PlannedSweep,
        row,
        part=parts[row["part"]],
        points=tuple(_made(Point, point) for point in row["points"]),
        settle=None if settle is None else _made(Settle, settle),
    )
