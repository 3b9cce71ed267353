"""A run's tables as pandas data frames, for people who work in Python."""

from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import pandas as pd

from ohmward.output import columns
from ohmward.output.columns import Table
from ohmward.output.record import RunUnreadable

DTYPES = {"string": "str", "integer": "Int64", "double": "float64", "boolean": "boolean"}


@dataclass(frozen=True)
class Run:
    """A run's folder; each table is read when it is first asked for.

    Every frame has the columns of its CSV, and their units in ``frame.attrs["units"]``.
    """

    folder: Path

    @cached_property
    def impedance(self) -> pd.DataFrame:
        """One row per reading of an impedance meter."""
        return self._frame(columns.IMPEDANCE)

    @cached_property
    def leakage(self) -> pd.DataFrame:
        """One row per current reading under voltage; empty for a run without such stages."""
        return self._frame(columns.LEAKAGE, may_lack=True)

    @cached_property
    def results(self) -> pd.DataFrame:
        """One row per judged or reported quantity of a part."""
        return self._frame(columns.RESULTS)

    @cached_property
    def events(self) -> pd.DataFrame:
        """One row per thing that happened."""
        return self._frame(columns.EVENTS)

    def _frame(self, table: Table, *, may_lack: bool = False) -> pd.DataFrame:
        path = self.folder / table.file
        if may_lack and not path.exists():
            frame = pd.DataFrame(columns=list(table.names))
        else:
            types = {c.name: DTYPES[c.datatype] for c in table.columns if c.datatype in DTYPES}
            try:
                frame = pd.read_csv(
                    path, dtype=types, parse_dates=["time_utc"] * ("time_utc" in table.names)
                )
            except (OSError, ValueError) as error:
                raise RunUnreadable(f"{path}: {error}") from error
        frame.attrs["units"] = {c.name: c.unit for c in table.columns if c.unit}
        return frame


def open_run(folder: str | Path) -> Run:
    """Open a run's folder to read its tables. Raises RunUnreadable when there is none."""
    path = Path(folder)
    if not (path / columns.RESULTS.file).is_file():
        raise RunUnreadable(
            f"{path}: no run with tables is here ({columns.RESULTS.file} is missing)"
        )
    return Run(path)
