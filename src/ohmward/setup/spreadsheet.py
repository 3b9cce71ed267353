"""Reads a CSV as spreadsheets write it: any delimiter, BOM, decimal commas, old code pages."""

import csv
import io
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from ohmward.errors import Problems
from ohmward.setup.files import read_bytes
from ohmward.setup.toml import nearest, shown

DELIMITERS = (",", ";", "\t")
_POINT = re.compile(r"[0-9]*\.[0-9]+")
_THOUSANDS = re.compile(r"[1-9][0-9]{0,2}\.[0-9]{3}")
_HINT = re.compile(r"sep=(.)\r?\n?", re.IGNORECASE)


@dataclass(frozen=True, kw_only=True, slots=True)
class Row:
    """One row: its number in the spreadsheet (the heading is 1) and its cells by column."""

    number: int
    cells: Mapping[str, str]


@dataclass(frozen=True, kw_only=True, slots=True)
class Sheet:
    """The rows that hold something, and whether their numbers have decimal commas."""

    columns: tuple[str, ...]
    rows: tuple[Row, ...]
    decimal_comma: bool


def read_sheet(
    path: Path, known: Sequence[str], numeric: Sequence[str], problems: Problems
) -> Sheet | None:
    """Read a CSV whose columns are named in its first row, or note problems and return None.

    Columns that are not ``known`` are left out, but one that looks like a misspelt known one
    is a problem. ``numeric`` columns tell, with the delimiter, whether commas are decimal.
    """
    text = _text(path, problems)
    if text is None:
        return None
    hint = _HINT.match(text)
    if hint is not None:
        text = text[hint.end() :]  # spreadsheets do not count this line as a row
    delimiter = hint[1] if hint is not None else _delimiter(text, known)
    records = _records(text, delimiter, path, problems)
    if records is None:
        return None
    start = next((index for index, record in enumerate(records) if any(record)), None)
    if start is None:
        problems.add(
            id="empty-list", file=path, key="-", expected="a heading and rows", found="nothing"
        )
        return None
    columns = _columns(records[start], f"row {start + 1}", known, path, problems)
    rows = tuple(
        row
        for index, record in enumerate(records[start + 1 :], start=start + 2)
        if (row := _row(record, index, columns, known, path, problems)) is not None
    )
    comma = delimiter == ";" and not _has_points(rows, numeric)
    return Sheet(
        columns=tuple(name for name in columns if name in known), rows=rows, decimal_comma=comma
    )


def _text(path: Path, problems: Problems) -> str | None:
    """The file's text: UTF-8, UTF-16 with its mark, else Windows-1252."""
    raw = read_bytes(path, problems)
    if raw is None:
        return None
    marked = raw.startswith((b"\xff\xfe", b"\xfe\xff"))
    for encoding in ("utf-16",) if marked else ("utf-8-sig", "cp1252"):
        try:
            text = raw.decode(encoding)
        except UnicodeDecodeError:
            continue
        if "\0" not in text:
            return text
    problems.add(
        id="not-text", file=path, key="-", expected="text with separators", found="other bytes"
    )
    return None


def _delimiter(text: str, known: Sequence[str]) -> str:
    """The delimiter that splits the heading into the most known columns."""
    heading = next((line for line in text.splitlines() if line.strip(" \t,;")), "")

    def hits(delimiter: str) -> int:
        return sum(tidy_column(cell.strip('"')) in known for cell in heading.split(delimiter))

    return max(DELIMITERS, key=lambda mark: (hits(mark), heading.count(mark)))


def _records(text: str, delimiter: str, path: Path, problems: Problems) -> list[list[str]] | None:
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=delimiter, strict=True)
    try:
        return [[cell.strip() for cell in record] for record in reader]
    except csv.Error as error:
        problems.add(
            id="csv-syntax",
            file=path,
            key=f"line {reader.line_num}",
            expected="cells with matching quotes",
            found=shown(str(error), 100),
        )
        return None


def tidy_column(cell: str) -> str:
    """A heading as a column name: ``Rated Voltage`` is ``rated_voltage``."""
    return re.sub(r"[\s_-]+", "_", cell.strip().lower()).strip("_")


def _columns(
    heading: list[str], where: str, known: Sequence[str], path: Path, problems: Problems
) -> list[str]:
    columns: list[str] = []
    for cell in heading:
        name = tidy_column(cell)
        if name in columns and name in known:
            problems.add(
                id="duplicate-column",
                file=path,
                key=f"{where}, {name}",
                expected="each column once",
                found="two of it",
            )
        meant = "" if name in known else nearest(name, known)
        if meant and meant not in {tidy_column(other) for other in heading}:
            problems.add(
                id="unknown-column",
                file=path,
                key=where,
                expected=f"'{meant}'",
                found=shown(cell),
            )
        columns.append(name)
    return columns


def _row(
    record: list[str],
    number: int,
    columns: list[str],
    known: Sequence[str],
    path: Path,
    problems: Problems,
) -> Row | None:
    """The row's known cells; None where all are empty. More cells than columns is a problem."""
    if not any(record):
        return None
    surplus = [cell for cell in record[len(columns) :] if cell]
    if surplus:
        problems.add(
            id="too-many-cells",
            file=path,
            key=f"row {number}",
            expected=f"{len(columns)} cells, as in the heading",
            found=f"{len(record)}: {shown(surplus[0])} stands beyond them",
        )
    cells = dict.fromkeys(known, "")
    for name, cell in zip(columns, record, strict=False):
        if name in cells:
            cells[name] = cell
    return Row(number=number, cells=cells)


def _has_points(rows: Sequence[Row], numeric: Sequence[str]) -> bool:
    """True if a number has a decimal point that cannot be one of thousands."""
    for row in rows:
        for name in numeric:
            cell = row.cells[name]
            point = _POINT.search(cell)
            if point and "," not in cell and not _THOUSANDS.fullmatch(point.group()):
                return True
    return False
