"""From the journal to the rows of leakage.csv, and to what is judged of stages under voltage."""

import json
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from math import inf, nan, pi, sqrt
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ohmward.journal import schema
from ohmward.journal.store import Store
from ohmward.results.judged import Rule
from ohmward.results.leakage import Path, derive_leakage, range_of
from ohmward.results.under_voltage import (
    Given,
    Outcome,
    PlannedHold,
    Row,
    judge_under_voltage,
)
from ohmward.run.high_voltage import error_a
from ohmward.run.holding import forming_rule
from ohmward.sequence.brief import (
    PlannedAbsorption,
    PlannedDirect,
    PlannedLeakage,
    PlannedProof,
    PlannedReform,
)
from ohmward.setup.bench import Bench
from ohmward.setup.driver import Driver
from ohmward.terms.accuracy import ScalarAccuracy
from ohmward.terms.kind import Kind
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part
from ohmward.terms.quantity import QUANTITIES
from ohmward.terms.role import Role

Arrays = dict[str, NDArray[Any]]

_TEXT = {"status", "instrument", "current_reply", "voltage_reply"}
_WHOLE = {"reading", "hold", "time_us"}


@dataclass(frozen=True, kw_only=True, slots=True)
class UnderVoltage:
    """What a run has read under voltage: rows of leakage.csv, and each stage with its outcomes."""

    rows: Arrays
    stages: Mapping[tuple[str, str], Given]


def under_voltage(
    store: Store,
    parts: Sequence[Part],
    planned: Iterable[PlannedDirect],
    bench: Bench,
    drivers: Mapping[str, Driver],
    impedance: Mapping[str, NDArray[Any]],
    *,
    rule: Rule,
    run_id: str,
    simulated: bool,
) -> UnderVoltage:
    """Derive everything under voltage from an open journal.

    ``impedance`` are part_id, frequency_hz, bias_set_v, reactance_ohm and u_reactance_ohm of
    what the sweeps have read: from there comes each part's capacitance.
    """
    capacitances = {part.part_id: capacitance_of(part, impedance) for part in parts}
    journal = leakage_columns(store)
    rows = derive_leakage(
        journal,
        accuracies=_scalar_accuracies(drivers),
        path=path_of(bench),
        capacitance_f={part_id: farad for part_id, (farad, _) in capacitances.items()},
        run_id=run_id,
        simulated=simulated,
    )
    outcomes = _outcomes(store)
    volts = drivers.get(bench.name_of_role(Role.VOLTMETER))
    ammeter = drivers.get(bench.name_of_role(Role.CURRENT_METER))
    stages = {}
    for stage in planned:
        number = stage.number
        here = journal["stage_number"] == number
        holds = outcomes.get(number, {})
        last = max(holds, default=0)
        here &= journal["hold"] == last
        stages[stage.part.part_id, stage.stage] = Given(
            plan=_plan(stage, ammeter),
            outcomes=tuple(holds[hold] for hold in sorted(holds)),
            rows={name: column[here] for name, column in rows.items()},
            capacitance=capacitances[stage.part.part_id],
            voltage_error_v=partial(_voltage_error_v, volts.scalar_accuracy if volts else None),
            rule=rule,
        )
    return UnderVoltage(rows=rows, stages=stages)


def with_direct(
    swept: list[Row],
    direct: UnderVoltage | None,
    limits: Iterable[Limit],
    parts: Sequence[Part],
    run_id: str,
) -> list[Row]:
    """The rows of results.csv: those of the sweeps, each part's then followed by the others."""
    if direct is None:
        return swept
    rows = swept + judge_under_voltage(limits, parts, direct.stages, run_id=run_id)
    place = {part.part_id: number for number, part in enumerate(parts)}
    return sorted(rows, key=lambda row: place[str(row["part_id"])])


def of_sweeps(limits: Iterable[Limit]) -> list[Limit]:
    """The limits that an impedance meter's readings are held against."""
    return [limit for limit in limits if QUANTITIES[limit.quantity].per in ("point", "part")]


def leakage_columns(store: Store) -> Arrays:
    """The journal's readings under voltage as arrays by column, in order."""
    stages = store.stages()
    names = ("reading", *schema.LEAKAGE_COLUMNS)
    rows = [row for batch in store.leakage() for row in batch]
    by_name = {name: [row[place] for row in rows] for place, name in enumerate(names)}
    arrays = {name: _array(name, values) for name, values in by_name.items()}
    arrays["time_utc"] = arrays.pop("time_us").astype("datetime64[us]")
    numbers = [int(number) for number in by_name["stage"]]
    arrays["stage_number"] = np.array(numbers, dtype=np.int64)
    for name, key in (("stage", "name"), ("part_id", "part_id"), ("position", "position")):
        arrays[name] = np.array([stages[number][key] for number in numbers], dtype=object)
    return arrays


def _array(name: str, values: list[Any]) -> NDArray[Any]:
    if name in _TEXT:
        return np.array(values, dtype=object)
    return np.array(values, dtype=np.int64 if name in _WHOLE else np.float64)


def _outcomes(store: Store) -> dict[int, dict[int, Outcome]]:
    found: dict[int, dict[int, Outcome]] = {}
    for (stage, hold), (_, held) in store.holds().items():
        said = json.loads(held)
        found.setdefault(stage, {})[hold] = Outcome(
            reached=bool(said["reached"]),
            connection=str(said["connection"]),
            bypass_shown=bool(said["bypass_shown"]),
            stopped=str(said["stopped"]),
        )
    return found


def _plan(stage: PlannedDirect, ammeter: Driver | None) -> PlannedHold:
    lasts_s, forming, droop_rel, voltage_v = 0.0, None, 0.0, stage.source_v
    match stage:
        case PlannedLeakage():
            lasts_s, voltage_v = stage.soak_s, stage.voltage_v
        case PlannedReform():
            error = 0.0 if ammeter is None else error_a(ammeter, stage.next_below_a)
            forming, voltage_v = forming_rule(stage, error), stage.voltage_v
        case PlannedProof():
            lasts_s, voltage_v = stage.dwell_s, stage.voltage_v
        case PlannedAbsorption():
            lasts_s, voltage_v, droop_rel = stage.charge_s, stage.voltage_v, stage.droop_rel
        case _:
            pass
    return PlannedHold(
        part_id=stage.part.part_id,
        stage=stage.stage,
        kind=stage.kind,
        voltage_v=voltage_v,
        times_s=stage.times_s,
        lasts_s=lasts_s,
        forming=forming,
        droop_rel=droop_rel,
    )


def path_of(bench: Bench) -> Path:
    """What the bench states of its high-voltage path."""
    path = bench.high_voltage
    if path is None:
        return Path(series_ohm={})
    return Path(
        divider_rel=path.divider_rel or 0.0,
        insulation_ohm=path.insulation_ohm or inf,
        drift_v_per_s=path.supply_drift_v_per_s or 0.0,
        series_ohm={place.name: place.series.resistance_ohm for place in path.positions},
    )


def capacitance_of(part: Part, impedance: Mapping[str, NDArray[Any]]) -> tuple[float, float]:
    """C of a part and its standard uncertainty (F): as the sweeps read it, else as marked.

    From its lowest frequency at the least bias, read last: C = −1/(2πf·X). What is only marked
    is known to its tolerance; 0 for what is no capacitor.
    """
    if part.kind is not Kind.CAPACITOR:
        return 0.0, 0.0
    reactance = np.asarray(impedance["reactance_ohm"], dtype=np.float64)
    u_reactance = np.asarray(impedance["u_reactance_ohm"], dtype=np.float64)
    own = (impedance["part_id"] == part.part_id) & (reactance < 0) & np.isfinite(u_reactance)
    rows = np.flatnonzero(own)
    if rows.size == 0:
        most = max(abs(part.tolerance_low or 0.5), abs(part.tolerance_high or 0.5))
        return part.nominal, part.nominal * most / sqrt(3.0)
    frequency = np.asarray(impedance["frequency_hz"], dtype=np.float64)
    bias = np.abs(np.asarray(impedance["bias_set_v"], dtype=np.float64))
    row = min(rows.tolist(), key=lambda r: (frequency[r], bias[r], -r))
    farad = float(-1.0 / (2.0 * pi * frequency[row] * reactance[row]))
    return farad, farad * float(u_reactance[row] / -reactance[row])


def _scalar_accuracies(drivers: Mapping[str, Driver]) -> dict[str, ScalarAccuracy]:
    found = ((name, driver.scalar_accuracy) for name, driver in drivers.items())
    return {name: accuracy for name, accuracy in found if accuracy is not None}


def _voltage_error_v(accuracy: ScalarAccuracy | None, volts: float) -> float:
    """Half-width of the voltmeter at this voltage (V); not a number where it states none."""
    if accuracy is None:
        return nan
    on = range_of(accuracy, abs(volts))
    return on.reading_rel * abs(volts) + on.offset
