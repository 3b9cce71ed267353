"""From a run's journal to its tables: everything derived is computed here, and can be again."""

from collections.abc import Callable, Iterator, Mapping, Sequence
from pathlib import Path
from sys import intern
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ohmward.api.under_voltage import of_sweeps, under_voltage, with_direct
from ohmward.journal import schema
from ohmward.journal.store import Row, Store
from ohmward.metrology.compensation import Compensation
from ohmward.output import columns
from ohmward.output.tables import TableWriter
from ohmward.results.derive import derive_impedance
from ohmward.results.judge import judge
from ohmward.results.judged import Rule
from ohmward.sequence.brief import Brief, PlannedDirect
from ohmward.setup.bench import Bench
from ohmward.setup.driver import Driver
from ohmward.terms.accuracy import ImpedanceAccuracy

Arrays = dict[str, NDArray[Any]]
ResultRow = dict[str, object]
Truth = Callable[[ResultRow], tuple[float, str]]

_TEXT = {"range", "integration", "status", "pair", "instrument"}
_KEPT_OF_JOURNAL = (
    "reading",
    "point",
    "part_id",
    "stage",
    "status",
    "range",
    "integration",
    "instrument",
    "frequency_hz",
    "level_set_v",
    "level_v",
    "bias_set_v",
    "bias_set_a",
    "temperature_c",
    "time_utc",
)
_KEPT_OF_DERIVED = (
    "resistance_ohm",
    "reactance_ohm",
    "u_resistance_ohm",
    "u_reactance_ohm",
    "r_rx",
)


def tabulate(
    folder: Path,
    brief: Brief,
    drivers: Mapping[str, Driver],
    cable_m: Mapping[str, float],
    truth: Truth | None = None,
    compensations: Mapping[str, Compensation] | None = None,
    bench: Bench | None = None,
) -> list[ResultRow]:
    """Write the tables of a run: impedance, leakage, results, events (and truth); returns results.

    The journal must be closed. leakage.csv is written where something was planned under voltage,
    for which ``bench`` is needed. Readings pass through in batches, so that memory does not grow
    with the number of columns.
    """
    store = Store.read(folder / "journal.sqlite")
    try:
        facts = store.facts()
        run_id, simulated = facts["run_id"], facts["simulated"] == "yes"
        kept = _Kept(_KEPT_OF_JOURNAL), _Kept(_KEPT_OF_DERIVED)
        with TableWriter(folder, columns.IMPEDANCE) as table:
            for readings in journal_columns(store):
                derived = derive_impedance(
                    readings,
                    brief.parts,
                    accuracies_of(drivers),
                    run_id=run_id,
                    simulated=simulated,
                    cable_m=cable_m,
                    compensations=compensations,
                )
                table.arrays(derived)
                kept[0].add(readings)
                kept[1].add(derived)
        write_events(folder, run_id, store.events())
        readings, derived = (one.whole() for one in kept)
        rule = Rule(guard=brief.guard, coverage_k=brief.coverage_k)
        direct = None
        planned = [stage for stage in brief.stages if isinstance(stage, PlannedDirect)]
        if bench is not None and planned:
            direct = under_voltage(
                store,
                brief.parts,
                planned,
                bench,
                drivers,
                {**readings, **derived},
                rule=rule,
                run_id=run_id,
                simulated=simulated,
            )
    finally:
        store.abandon()
    closures = {stage.stage for stage in brief.sweeps if stage.closure}
    results = judge(
        readings,
        derived,
        brief.parts,
        of_sweeps(brief.limits),
        rule=rule,
        closures=closures,
        accuracies=accuracies_of(drivers),
        cable_m=cable_m,
        run_id=run_id,
    )
    if direct is not None:
        with TableWriter(folder, columns.LEAKAGE) as table:
            table.arrays(direct.rows)
    results = with_direct(results, direct, brief.limits, brief.parts, run_id)
    with TableWriter(folder, columns.RESULTS) as table:
        table.rows(results)
    if truth is not None:
        with TableWriter(folder, columns.TRUTH) as table:
            table.rows(_truth_rows(results, truth))
    return results


def accuracies_of(drivers: Mapping[str, Driver]) -> dict[str, ImpedanceAccuracy]:
    """The impedance meters' accuracies, by the bench's name of the instrument."""
    found = ((name, driver.impedance_accuracy) for name, driver in drivers.items())
    return {name: accuracy for name, accuracy in found if accuracy is not None}


def journal_columns(store: Store, rows_at_once: int = 2048) -> Iterator[Arrays]:
    """The journal's readings as arrays by column, batch by batch, in order."""
    stages = store.stages()
    names = ("reading", *schema.IMPEDANCE_COLUMNS)
    for batch in store.impedance(rows_at_once):
        by_name = dict(zip(names, zip(*batch, strict=True), strict=True))
        arrays: Arrays = {}
        for name, values in by_name.items():
            if name in ("stage", "reply"):
                continue
            arrays[name] = _array(name, values)
        arrays["time_utc"] = arrays.pop("time_us").astype("datetime64[us]")
        begun = [stages[number] for number in by_name["stage"]]
        for name, key in (("stage", "name"), ("part_id", "part_id"), ("position", "position")):
            arrays[name] = np.array([stage[key] for stage in begun], dtype=object)
        yield arrays


def _array(name: str, values: Sequence[Any]) -> NDArray[Any]:
    if name in _TEXT:  # the same few words in every row: kept once each
        return np.array([intern(value) for value in values], dtype=object)
    if name in ("reading", "point", "repeat", "time_us"):
        return np.array(values, dtype=np.int64)
    return np.array(values, dtype=np.float64)  # None becomes NaN


class _Kept:
    """The columns that judging needs of every batch, put together without holding them twice."""

    def __init__(self, names: Sequence[str]) -> None:
        self._pieces: dict[str, list[NDArray[Any]]] = {name: [] for name in names}

    def add(self, columns: Mapping[str, NDArray[Any]]) -> None:
        """Keep this batch's columns."""
        for name, pieces in self._pieces.items():
            pieces.append(columns[name])

    def whole(self) -> Arrays:
        """Each column in one piece; the pieces are let go one column at a time."""
        whole: Arrays = {}
        while self._pieces:
            name, pieces = self._pieces.popitem()
            whole[name] = np.concatenate(pieces) if pieces else np.array([], dtype=np.float64)
        return whole


def write_events(folder: Path, run_id: str, events: list[Row]) -> None:
    """Write events.csv of the journal's events into a folder."""
    names = ("event", *schema.EVENT_COLUMNS)
    with TableWriter(folder, columns.EVENTS) as table:
        table.rows(
            {
                **(row := dict(zip(names, event, strict=True))),
                "run_id": run_id,
                "time_utc": f"{np.datetime64(row['time_us'], 'us')}Z",
            }
            for event in events
        )


def _truth_rows(results: list[ResultRow], truth: Truth) -> Iterator[ResultRow]:
    for row in results:
        true_value, fault = truth(row)
        yield {**row, "true_value": true_value, "fault": fault}
