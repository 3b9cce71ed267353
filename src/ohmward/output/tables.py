"""Writes the tables as CSV, with their W3C CSVW metadata beside them.

Numbers are written with the fewest digits that read back to the same number; missing is empty,
never zero or ``nan``. Text that a spreadsheet would run as a formula is made harmless with a
leading apostrophe. UTF-8, commas, LF, no byte-order mark.
"""

import csv
import json
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from types import TracebackType
from typing import IO, Any

import numpy as np
import numpy.typing as npt

from ohmward.output.columns import Column, Table

Arrays = Mapping[str, npt.NDArray[Any]]

_RUN_AS_FORMULA = ("=", "+", "-", "@", "\t", "\r")


def harmless(text: str) -> str:
    """The text, with an apostrophe before it where a spreadsheet would run it as a formula."""
    return "'" + text if text.startswith(_RUN_AS_FORMULA) else text


class TableWriter:
    """Writes one table batch by batch, so that a table of any length needs little memory.

    The file must not be there yet. Use as a context manager; leaving it writes the metadata.
    """

    def __init__(self, folder: Path, table: Table) -> None:
        self._folder = folder
        self._table = table
        self._file: IO[str] = (folder / table.file).open("x", encoding="utf-8", newline="")
        self._csv = csv.writer(self._file, lineterminator="\n")
        self._csv.writerow(table.names)

    def __enter__(self) -> "TableWriter":
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, _: TracebackType | None
    ) -> None:
        self._file.close()
        if kind is None:
            write_metadata(self._folder, self._table)

    def arrays(self, columns: Arrays) -> None:
        """Write one row per element; the arrays have one length and the table's column names.

        Raises KeyError for a missing column, ValueError where lengths differ.
        """
        cells = [_cells(column, columns[column.name]) for column in self._table.columns]
        self._csv.writerows(zip(*cells, strict=True))

    def rows(self, rows: Iterable[Mapping[str, object]]) -> None:
        """Write rows given one by one; None and NaN are empty cells."""
        for row in rows:
            self._csv.writerow(
                [_cell(column, row.get(column.name)) for column in self._table.columns]
            )


def _cells(column: Column, values: npt.NDArray[Any]) -> Sequence[object]:
    listed = values.tolist()
    if column.datatype == "double":
        return ["" if number != number else number for number in listed]
    if column.datatype == "dateTime":
        return [f"{text}Z" for text in np.datetime_as_string(values, unit="us").tolist()]
    return [_cell(column, value) for value in listed]


def _cell(column: Column, value: object) -> object:
    if value is None or value != value:
        return ""
    if column.datatype == "string":
        return harmless(str(value))
    if column.datatype == "boolean":
        return "true" if value else "false"
    return value


def metadata(table: Table) -> dict[str, Any]:
    """The table's description, as CSVW (https://www.w3.org/TR/tabular-metadata/) has it."""
    columns = []
    for column in table.columns:
        described: dict[str, Any] = {
            "name": column.name,
            "titles": column.name,
            "datatype": column.datatype,
            "dc:description": column.meaning,
        }
        if column.unit:
            described["schema:unitText"] = column.unit
        if column.required:
            described["required"] = True
        columns.append(described)
    return {
        "@context": ["http://www.w3.org/ns/csvw", {"@language": "en"}],
        "url": table.file,
        "dc:description": f"One row is {table.row}.",
        "dialect": {"encoding": "utf-8", "delimiter": ",", "header": True},
        "tableSchema": {"columns": columns, "primaryKey": list(table.key)},
    }


def write_metadata(folder: Path, table: Table) -> None:
    """Write ``NAME-metadata.json`` beside ``NAME.csv``... as CSVW looks for it."""
    path = folder / f"{table.file}-metadata.json"
    path.write_text(json.dumps(metadata(table), indent=1, ensure_ascii=False) + "\n", "utf-8")
