"""Tables read back whole in other programs' readers: same numbers, missing stays missing."""

import csv
import json
import math
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.output.columns import EVENTS, IMPEDANCE, LEAKAGE, RESULTS, TRUTH, Column, Table
from ohmward.output.tables import TableWriter, harmless, metadata
from ohmward.terms.quantity import QUANTITIES

SMALL = Table(
    file="small.csv",
    row="a row",
    key=("name",),
    columns=(
        Column(name="name", datatype="string", required=True),
        Column(name="value", datatype="double", unit="F"),
        Column(name="count", datatype="integer"),
        Column(name="when", datatype="dateTime"),
        Column(name="good", datatype="boolean"),
    ),
)

finite = st.floats(allow_nan=False, allow_infinity=False)


@given(st.lists(st.tuples(st.text(min_size=1), finite | st.just(math.nan)), max_size=20))
def test_numbers_and_text_survive_pandas(
    tmp_path_factory: pytest.TempPathFactory, rows: list[tuple[str, float]]
) -> None:
    folder = tmp_path_factory.mktemp("table")
    names = np.array([f"p{index}" for index in range(len(rows))], dtype=object)
    with TableWriter(folder, SMALL) as table:
        table.arrays(
            {
                "name": names,
                "value": np.array([value for _, value in rows], dtype=float),
                "count": np.arange(len(rows)),
                "when": np.full(len(rows), np.datetime64("2026-01-01T00:00:00.000001", "us")),
                "good": np.array([index % 2 == 0 for index in range(len(rows))]),
            }
        )
    read = pd.read_csv(folder / "small.csv")
    assert list(read.columns) == list(SMALL.names)
    assert [str(name) for name in read["name"]] == names.tolist()
    expected = [value for _, value in rows]
    for got, want in zip(read["value"], expected, strict=True):
        assert got == want or (math.isnan(got) and math.isnan(want))
    if len(rows):
        assert set(read["when"]) == {"2026-01-01T00:00:00.000001Z"}
        assert read["good"].tolist() == [index % 2 == 0 for index in range(len(rows))]


@given(st.text())
def test_no_text_starts_a_formula(text: str) -> None:
    """A spreadsheet runs a cell that begins with =, +, -, @, tab or return (common practice)."""
    safe = harmless(text)
    assert not safe.startswith(("=", "+", "-", "@", "\t", "\r"))
    assert safe.removeprefix("'") == text.removeprefix("'") or safe == text


def test_rows_and_arrays_write_the_same_bytes(tmp_path: Path) -> None:
    rows = [
        {"name": "=1+1", "value": 1e-7, "count": 1, "when": "2026-01-01T00:00:00.000000Z"},
        {"name": 'a "b", c', "value": None, "count": 2, "when": "2026-01-01T00:00:01.000000Z"},
    ]
    for name in ("rows", "arrays"):
        (tmp_path / name).mkdir()
    with TableWriter(tmp_path / "rows", SMALL) as table:
        table.rows([{**row, "good": True} for row in rows])
    with TableWriter(tmp_path / "arrays", SMALL) as table:
        table.arrays(
            {
                "name": np.array([row["name"] for row in rows], dtype=object),
                "value": np.array([1e-7, np.nan]),
                "count": np.array([1, 2]),
                "when": np.array(["2026-01-01T00:00:00", "2026-01-01T00:00:01"], "datetime64[us]"),
                "good": np.array([True, True]),
            }
        )
    written = (tmp_path / "rows" / "small.csv").read_bytes()
    assert written == (tmp_path / "arrays" / "small.csv").read_bytes()
    with (tmp_path / "rows" / "small.csv").open(newline="") as file:
        assert [row["name"] for row in csv.DictReader(file)] == ["'=1+1", 'a "b", c']


def test_a_table_is_never_written_over(tmp_path: Path) -> None:
    (tmp_path / "small.csv").write_text("mine")
    with pytest.raises(FileExistsError):
        TableWriter(tmp_path, SMALL)
    assert (tmp_path / "small.csv").read_text() == "mine"


@pytest.mark.parametrize(
    "table", [IMPEDANCE, LEAKAGE, RESULTS, EVENTS, TRUTH], ids=lambda t: t.file
)
def test_metadata_describes_every_column(table: Table) -> None:
    described = json.loads(json.dumps(metadata(table)))
    assert described["url"] == table.file
    columns = described["tableSchema"]["columns"]
    assert [column["name"] for column in columns] == list(table.names)
    assert set(described["tableSchema"]["primaryKey"]) <= set(table.names)
    assert all(column["dc:description"] for column in columns)


def test_a_quantity_and_its_column_have_one_unit() -> None:
    columns = {column.name: column for column in IMPEDANCE.columns}
    for name, quantity in QUANTITIES.items():
        if name in columns:
            assert columns[name].unit == quantity.unit
