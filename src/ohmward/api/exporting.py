"""Exports a run's tables for other programs: Parquet, Touchstone, a spreadsheet."""

import re
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd

from ohmward.api.opening import Run, open_run
from ohmward.errors import BadInput, OhmwardError, Problem
from ohmward.output.record import read_tables

TABLES = ("impedance", "leakage", "results", "events")


class ExtraMissing(OhmwardError):
    """An export needs a package that is not installed."""

    exit_code = 2


def export(folder: Path, *, form: str, out: Path) -> list[Path]:
    """Write a run's tables in another form; returns the files written.

    ``form`` is ``parquet`` (a folder per table, partitioned by lot), ``touchstone`` (a 1-port
    file per part, stage and bias) or ``spreadsheet`` (one xlsx with a sheet per table). ``out``
    must not exist. Raises BadInput, RunUnreadable, ExtraMissing.
    """
    forms: dict[str, Callable[[Path, Run, Path], list[Path]]] = {
        "parquet": _parquet,
        "touchstone": _touchstone,
        "spreadsheet": _spreadsheet,
    }
    if form not in forms:
        _refuse("unknown-form", "--as", f"one of {', '.join(forms)}", form)
    if out.exists() or out.is_symlink():
        _refuse("output-exists", "--out", "something that does not exist yet", str(out))
    run = open_run(folder)
    try:
        return forms[form](folder, run, out)
    except ImportError as error:
        extra = f"pip install 'ohmward[{form}]'"
        raise ExtraMissing(f"this export needs {error.name}: {extra}") from error


def _refuse(id: str, key: str, expected: str, found: str) -> None:  # noqa: A002
    raise BadInput((Problem(id=id, file="command line", key=key, expected=expected, found=found),))


def _frames(folder: Path, run: Run) -> dict[str, pd.DataFrame]:
    lots = {part["part_id"]: part["lot"] for part in read_tables(folder).brief["parts"]}
    frames = {}
    for name in TABLES:
        frame: pd.DataFrame = getattr(run, name)
        if len(frame):
            frames[name] = frame.assign(lot=frame["part_id"].map(lots).fillna(""))
    return frames


def _parquet(folder: Path, run: Run, out: Path) -> list[Path]:
    import pyarrow  # noqa: F401 - named here so that its absence is told before anything is written

    out.mkdir(parents=True)
    for name, frame in _frames(folder, run).items():
        frame.attrs = {}
        frame.to_parquet(out / name, engine="pyarrow", partition_cols=["lot"], index=False)
    return sorted(path for path in out.rglob("*") if path.is_file())


def _spreadsheet(folder: Path, run: Run, out: Path) -> list[Path]:
    import openpyxl  # noqa: F401 - as above

    path = out if out.suffix == ".xlsx" else out.with_name(out.name + ".xlsx")
    if path.exists():
        _refuse("output-exists", "--out", "something that does not exist yet", str(path))
    path.parent.mkdir(parents=True, exist_ok=True)
    with pd.ExcelWriter(path, engine="openpyxl") as writer:
        for name, frame in _frames(folder, run).items():
            if "time_utc" in frame:  # a spreadsheet knows no time zone: UTC as text
                frame["time_utc"] = frame["time_utc"].dt.strftime("%Y-%m-%dT%H:%M:%S.%fZ")
            frame.to_excel(writer, sheet_name=name, index=False)
    return [path]


def _touchstone(folder: Path, run: Run, out: Path) -> list[Path]:
    good = run.impedance[run.impedance["status"] == "ok"]
    groups = good.groupby(["part_id", "stage", "bias_set_v", "bias_set_a"], sort=False)
    out.mkdir(parents=True)
    written = []
    for (part_id, stage, bias_v, bias_a), rows in groups:
        sweep = rows.groupby("frequency_hz", sort=True)[["resistance_ohm", "reactance_ohm"]].mean()
        if len(sweep) < 2:
            continue
        name = f"{part_id}_{stage}"
        name += f"_{bias_v:g}V" if bias_v else f"_{bias_a:g}A" if bias_a else ""
        path = out / f"{re.sub(r'[^A-Za-z0-9._-]+', '-', name)}.s1p"
        path.write_text(touchstone(sweep, f"{part_id}, stage {stage}"), "ascii", "replace")
        written.append(path)
    return written


def touchstone(sweep: pd.DataFrame, title: str) -> str:
    """A 1-port Touchstone file (version 1.1): S11 as real and imaginary part.

    Referred to the sweep's own median |Z|, not to 50 Ω, so that Z = R·(1 + S)/(1 − S) survives
    for parts far from 50 Ω; 17 digits, which read back to the same number.
    """
    z = sweep["resistance_ohm"].to_numpy(float) + 1j * sweep["reactance_ohm"].to_numpy(float)
    reference = float(f"{np.median(np.abs(z)):.3g}")
    s = (z - reference) / (z + reference)
    lines = [f"! {title}", f"# HZ S RI R {reference!r}"]
    lines += [
        f"{f!r} {a!r} {b!r}"
        for f, a, b in zip(
            sweep.index.to_numpy(float).tolist(), s.real.tolist(), s.imag.tolist(), strict=True
        )
    ]
    return "\n".join(lines) + "\n"
