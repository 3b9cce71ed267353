"""What a report says, as plain dataclasses: read from a run's folder, rendered by a template.

Nothing is computed here that is not in the run's tables; a report made again months later says
the same.
"""

import json
from collections import Counter
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from ohmward.errors import OhmwardError
from ohmward.units.values import format_quantity

DECISIONS = ("accept", "reject", "undecided", "invalid")
MEANINGS = {
    "accept": "within all its limits, the guard band included",
    "reject": "outside at least one limit, beyond the guard band",
    "undecided": "the uncertainty straddles a limit",
    "invalid": "the measurement itself cannot be trusted",
}
WORTH_SAYING = frozenset(
    {"not-set", "stopped", "failed", "not-proven-safe", "stage-stopped", "tripped", "contact-lost"}
)


class RunUnreadable(OhmwardError):
    """The folder is no whole run of ours; says what is missing or wrong."""

    exit_code = 2


@dataclass(frozen=True, kw_only=True, slots=True)
class ResultLine:
    """One row of results.csv as a person reads it."""

    stage: str
    quantity: str
    condition: str
    value: str
    limits: str
    source: str
    decision: str
    reason: str


@dataclass(frozen=True, kw_only=True, slots=True)
class PartRecord:
    """One part: what it is, what was decided and why, its results and figures."""

    part_id: str
    position: str
    what: str
    marking: str
    decision: str
    reason: str
    results: tuple[ResultLine, ...]
    figures: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True, slots=True)
class InstrumentRecord:
    """One instrument: who it said it was, and the driver that it was spoken to with."""

    name: str
    role: str
    identity: str
    address: str
    driver: str
    calibration: str


@dataclass(frozen=True, kw_only=True, slots=True)
class Record:
    """Everything that a report shows."""

    run_id: str
    simulated: bool
    state: str
    name: str
    purpose: str
    follows: str
    bench: str
    began: str
    ended: str
    environment: str
    compensation: str
    decision_rule: str
    counts: tuple[tuple[str, int, str], ...]
    parts: tuple[PartRecord, ...]
    instruments: tuple[InstrumentRecord, ...]
    cautions: tuple[str, ...]
    remarks: tuple[str, ...]
    hashes: tuple[tuple[str, str], ...]
    ohmward: str
    readings: int
    lot_figure: str = ""


@dataclass(frozen=True, kw_only=True, slots=True)
class Tables:
    """A run's tables as data frames, and its brief as plain data."""

    brief: dict[str, Any]
    impedance: pd.DataFrame
    results: pd.DataFrame
    events: pd.DataFrame


def read_tables(folder: Path) -> Tables:
    """The tables of a run's folder. Raises RunUnreadable naming what is missing or damaged."""
    try:
        brief = json.loads((folder / "inputs" / "brief.json").read_text("utf-8"))
        return Tables(
            brief=brief,
            impedance=_read(folder / "impedance.csv"),
            results=_read(folder / "results.csv"),
            events=_read(folder / "events.csv"),
        )
    except (OSError, ValueError) as error:
        raise RunUnreadable(f"{folder}: {error}") from error


def _read(path: Path) -> pd.DataFrame:
    text = ["run_id", "part_id", "position", "stage", "kind", "detail", "range", "reason"]
    return pd.read_csv(path, dtype=dict.fromkeys(text, str), keep_default_na=True)


def result_lines(results: pd.DataFrame) -> tuple[ResultLine, ...]:
    """Rows of results.csv in words."""
    return tuple(_line(row) for row in results.to_dict("records"))


def _line(row: dict[Any, Any]) -> ResultLine:
    unit = str(row["unit"])
    return ResultLine(
        stage=str(row["stage"]),
        quantity=str(row["quantity"]),
        condition=_condition(row),
        value=_value(row, unit),
        limits=_limits(row, unit),
        source="" if pd.isna(row["limit_source"]) else str(row["limit_source"]),
        decision=str(row["decision"]),
        reason=str(row["reason"]),
    )


def _condition(row: dict[Any, Any]) -> str:
    parts = []
    for column, unit, before in (
        ("frequency_hz", "Hz", ""),
        ("level_v", "V", ""),
        ("bias_v", "V", "bias "),
        ("bias_a", "A", "bias "),
        ("voltage_v", "V", "at "),
        ("since_voltage_s", "s", "after "),
    ):
        value = row.get(column)
        if value is not None and not pd.isna(value) and not (before == "bias " and value == 0):
            parts.append(before + format_quantity(float(value), unit))
    return ", ".join(parts)


def _value(row: dict[Any, Any], unit: str) -> str:
    if pd.isna(row["value"]):
        return "no value"
    text = format_quantity(float(row["value"]), unit, 5)
    if pd.isna(row["u_expanded"]):
        return text
    expanded = format_quantity(float(row["u_expanded"]), unit, 2)
    return f"{text} ± {expanded} (k = {row['coverage_k']:.3g})"


def _limits(row: dict[Any, Any], unit: str) -> str:
    low, high = row["limit_min"], row["limit_max"]
    if pd.isna(low) and pd.isna(high):
        return ""
    if pd.isna(low):
        return f"at most {format_quantity(float(high), unit)}"
    if pd.isna(high):
        return f"at least {format_quantity(float(low), unit)}"
    return f"{format_quantity(float(low), unit)} to {format_quantity(float(high), unit)}"


def remarks_of(tables: Tables, parts: tuple[PartRecord, ...]) -> tuple[str, ...]:
    """Everything invalid, doubtful or interrupted, in plain sentences."""
    said = [
        f"{part.part_id} is {part.decision}: {part.reason}"
        for part in parts
        if part.decision in ("undecided", "invalid")
    ]
    statuses = Counter(tables.impedance["status"])
    said += [
        f"{count} of {len(tables.impedance)} readings have the status {status}: they are kept and "
        "enter nothing"
        for status, count in sorted(statuses.items())
        if status != "ok"
    ]
    for event in tables.events.to_dict("records"):
        if event["kind"] in WORTH_SAYING:
            where = f" ({event['part_id']}, {event['stage']})" if pd.notna(event["part_id"]) else ""
            detail = "" if pd.isna(event["detail"]) else f": {event['detail']}"
            said.append(f"{event['time_utc']}: {event['kind']}{where}{detail}")
    said += [f"This bench cannot reach: {_reached(left)}" for left in tables.brief["cannot_reach"]]
    said += [f"This bench cannot decide: {one['reason']}" for one in tables.brief["cannot_decide"]]
    return tuple(said)


def _reached(left: dict[str, Any]) -> str:
    return f"{left.get('what', '')}; {left.get('reason', '')}"


def environment_of(impedance: pd.DataFrame) -> str:
    """Temperature and humidity over the run, or that nobody measured them."""
    said = []
    for column, unit in (("temperature_c", "degC"), ("humidity_pct", "pct")):
        values = impedance[column].dropna() if column in impedance else pd.Series(dtype=float)
        if len(values):
            low = format_quantity(float(values.min()), unit, 3)
            high = format_quantity(float(values.max()), unit, 3)
            said.append(low if low == high else f"{low} to {high}")
    return ", ".join(said) or "not measured"
