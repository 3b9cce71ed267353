"""report.html of a run: one file without a network, made of the run's tables.

Data becomes dataclasses (`record`), figures become SVG (`figures`), a template puts them together.
"""

import tomllib
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import replace
from math import nan
from pathlib import Path
from typing import Any

import jinja2
import numpy as np
import pandas as pd

from ohmward.output import figures
from ohmward.output.figures import Bounds
from ohmward.output.record import (
    DECISIONS,
    MEANINGS,
    InstrumentRecord,
    PartRecord,
    Record,
    Tables,
    environment_of,
    read_tables,
    remarks_of,
    result_lines,
)
from ohmward.output.verdicts import verdict_of
from ohmward.terms.decision import Decision
from ohmward.units.values import format_quantity

FILE = "report.html"
UNITS = {"capacitor": "F", "inductor": "H", "resistor": "ohm"}
VALUES = {"capacitor": "capacitance_f", "inductor": "inductance_h", "resistor": "resistance_ohm"}
VIEWS = {"capacitor": "cs_f", "inductor": "ls_h", "resistor": "rs_ohm"}


def write(
    folder: Path, facts: Mapping[str, str], instruments: Mapping[str, Mapping[str, str]]
) -> Path:
    """Write report.html into a run's folder from its tables; returns its path.

    ``facts`` and ``instruments`` are the journal's. Raises RunUnreadable.
    """
    record = record_of(folder, facts, instruments)
    path = folder / FILE
    path.write_text(render(record), "utf-8")
    return path


def render(record: Record) -> str:
    """The report as HTML."""
    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("ohmward.output"),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
    )
    return environment.get_template("report.html.j2").render(record=record)


def record_of(
    folder: Path, facts: Mapping[str, str], instruments: Mapping[str, Mapping[str, str]]
) -> Record:
    """Everything that the report of a run's folder says."""
    tables = read_tables(folder)
    brief = tables.brief
    parts = tuple(_part(index, part, tables) for index, part in enumerate(brief["parts"], start=1))
    counts = Counter(part.decision for part in parts)
    times = pd.concat([tables.impedance["time_utc"], tables.events["time_utc"]])
    return Record(
        run_id=facts["run_id"],
        simulated=facts["simulated"] == "yes",
        state=facts["state"],
        name=brief["name"],
        purpose=brief["purpose"],
        follows=brief["follows"],
        bench=brief["bench"],
        began=str(times.min()) if len(times) else "-",
        ended=str(times.max()) if len(times) else "-",
        environment=environment_of(tables.impedance),
        compensation=str(brief.get("compensation") or "the sequence asks for none"),
        decision_rule=(
            f"guard band {brief['guard']:g} × U on each limit, U with a coverage of "
            f"k = {brief['coverage_k']:g} (JCGM 106; ILAC-G8 where the guard band is U)"
        ),
        counts=tuple((name, counts[name], MEANINGS[name]) for name in DECISIONS),
        parts=parts,
        instruments=_instruments(folder, instruments),
        cautions=tuple(brief["cautions"]),
        remarks=remarks_of(tables, parts),
        hashes=(("brief", brief["hash"]), *sorted(brief["hashes"].items())),
        ohmward=facts["ohmward"],
        readings=len(tables.impedance),
        lot_figure=_lot_figure(tables),
    )


def _part(index: int, part: Mapping[str, Any], tables: Tables) -> PartRecord:
    part_id, kind = part["part_id"], part["kind"]
    rows = tables.results[tables.results["part_id"] == part_id]
    decision, reason = verdict_of(rows.to_dict("records"))
    record = PartRecord(
        part_id=part_id,
        position=part["position"],
        what=f"{kind} {format_quantity(part['nominal'], UNITS[kind])}"
        + (f", {part['dielectric']}" if part["dielectric"] else ""),
        marking=part["marking"],
        decision=decision.value,
        reason=reason,
        results=result_lines(rows),
    )
    return replace(record, figures=_figures(index, part, tables))


def _figures(index: int, part: Mapping[str, Any], tables: Tables) -> tuple[str, ...]:
    mine = tables.impedance[tables.impedance["part_id"] == part["part_id"]]
    drawn = []
    for number, (stage, rows) in enumerate(mine.groupby("stage", sort=False), start=1):
        good = rows[rows["status"] == "ok"]
        key = f"p{index}s{number}"
        title = f"{part['part_id']}, stage {stage}"
        limits = _bounds(tables.results, part["part_id"], str(stage))
        biased = max(good["bias_set_v"].nunique(), good["bias_set_a"].nunique())
        if good["frequency_hz"].nunique() > 2:
            least = good[good["bias_set_v"].abs() == good["bias_set_v"].abs().min()]
            drawn.append(
                figures.svg(
                    figures.over_frequency(least, limits),
                    key=f"{key}f",
                    title=title,
                    description="Magnitude of impedance and ESR over frequency.",
                )
            )
        if biased > 2:
            drawn.append(
                figures.svg(
                    figures.over_bias(good, VIEWS[part["kind"]], limits),
                    key=f"{key}b",
                    title=title,
                    description="Value and dissipation factor over DC bias.",
                )
            )
        if good["frequency_hz"].nunique() <= 2 and biased <= 2 and len(good) > 20:
            drawn.append(
                figures.svg(
                    figures.over_time(good, VIEWS[part["kind"]]),
                    key=f"{key}t",
                    title=title,
                    description="The value over the time of the run.",
                )
            )
    return tuple(drawn)


def _bounds(results: pd.DataFrame, part_id: str, stage: str) -> dict[str, Sequence[Bounds]]:
    rows = results[(results["part_id"] == part_id) & (results["stage"] == stage)]
    found: dict[str, list[Bounds]] = {}
    for row in rows.to_dict("records"):
        low, high = row["limit_min"], row["limit_max"]
        if pd.isna(low) and pd.isna(high):
            continue
        at = None if pd.isna(row["frequency_hz"]) else float(row["frequency_hz"])
        bounds = Bounds(
            at=at,
            low=None if pd.isna(low) else float(low),
            high=None if pd.isna(high) else float(high),
        )
        found.setdefault(str(row["quantity"]), []).append(bounds)
    return dict(found)


def _lot_figure(tables: Tables) -> str:
    names, values, spans, tolerances = [], [], [], []
    for part in tables.brief["parts"]:
        rows = tables.results[
            (tables.results["part_id"] == part["part_id"])
            & (tables.results["quantity"] == VALUES[part["kind"]])
            & tables.results["value"].notna()
        ]
        judged = rows[rows["decision"] != Decision.REPORTED.value]
        row = (judged if len(judged) else rows).head(1).to_dict("records")
        if not row:
            continue
        nominal = float(part["nominal"])
        names.append(part["part_id"])
        values.append(100 * (float(row[0]["value"]) / nominal - 1))
        span = 100 * float(row[0]["u_expanded"]) / nominal
        spans.append(span if np.isfinite(span) else 0.0)
        low, high = part["tolerance_low"], part["tolerance_high"]
        tolerances.append(
            (nan, nan) if low is None or high is None else (100 * float(low), 100 * float(high))
        )
    if not names:
        return ""
    return figures.svg(
        figures.of_lot(names, values, spans, tolerances),
        key="lot",
        title="The lot",
        description="Deviation of each part from its nominal value, in percent.",
    )


def _instruments(
    folder: Path, instruments: Mapping[str, Mapping[str, str]]
) -> tuple[InstrumentRecord, ...]:
    bench = tomllib.loads((folder / "inputs" / "bench.toml").read_text("utf-8-sig"))
    stated = bench.get("instrument", {})
    return tuple(
        InstrumentRecord(
            name=name,
            role=one["role"],
            identity=one["identity"],
            address=one["address"],
            driver=f"{one['driver']} ({one['driver_sha256'][:12]})",
            calibration=str(stated.get(name, {}).get("calibration_due", "not stated")),
        )
        for name, one in instruments.items()
    )
