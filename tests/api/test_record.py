"""A run months later: verified, opened in Python, exported, each read by other programs."""

import json
import shutil
import warnings
from pathlib import Path

import csvw
import duckdb
import numpy as np
import openpyxl
import pandas as pd
import pytest
import skrf

import ohmward
from ohmward import api
from ohmward.errors import BadInput
from ohmward.output.record import RunUnreadable


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("record") / "run"
    prepared = api.prepare("film-sweep", bench="depot-bench", parts="depot-lot")
    api.dry_run(prepared, out=folder, seed=5)
    api.write_report(folder)
    return folder


@pytest.fixture
def copy(run: Path, tmp_path: Path) -> Path:
    return Path(shutil.copytree(run, tmp_path / "copy"))


def test_an_untouched_copy_is_sound(copy: Path) -> None:
    verified = api.verify(copy)
    assert verified.sound, verified.lines()


def test_what_was_touched_is_named(copy: Path) -> None:
    results = copy / "results.csv"
    results.write_text(results.read_text("utf-8").replace(",reject,", ",accept,"), "utf-8")
    (copy / "inputs" / "parts.csv").unlink()
    (copy / "note.txt").write_text("mine")
    verified = api.verify(copy)
    assert not verified.sound
    assert verified.changed == ("results.csv",)
    assert verified.differing == ("results.csv",)
    assert verified.missing == ("inputs/parts.csv",)
    assert verified.added == ("note.txt",)


def test_damage_is_told_and_nothing_written(copy: Path) -> None:
    journal = copy / "journal.sqlite"
    journal.write_bytes(journal.read_bytes()[:2000])
    before = {path: path.stat().st_mtime_ns for path in copy.rglob("*")}
    verified = api.verify(copy)
    assert verified.unreadable
    assert "journal.sqlite" in verified.changed
    assert {path: path.stat().st_mtime_ns for path in copy.rglob("*")} == before
    (copy / "manifest.json").write_text("{")
    with pytest.raises(RunUnreadable, match=r"manifest\.json"):
        api.verify(copy)


def test_a_run_opens_as_frames_with_units(run: Path, tmp_path: Path) -> None:
    opened = ohmward.open_run(run)
    assert opened.impedance.attrs["units"]["cs_f"] == "F"
    assert str(opened.impedance["time_utc"].dtype).startswith("datetime64")
    assert set(opened.results["decision"]) <= {
        *("accept", "reject", "undecided", "invalid", "reported"),
    }
    assert opened.leakage.empty
    assert len(opened.events) > 0
    with pytest.raises(RunUnreadable):
        ohmward.open_run(tmp_path)


def test_parquet_read_by_duckdb_equals_the_csv(run: Path, tmp_path: Path) -> None:
    api.export(run, form="parquet", out=tmp_path / "out")
    columns = "reading, part_id, frequency_hz, resistance_ohm, reactance_ohm, cs_f, lot"
    query = f"SELECT {columns} FROM read_parquet('{tmp_path}/out/impedance/*/*.parquet', "
    query += "hive_partitioning = true) ORDER BY reading"
    read = duckdb.sql(query).df()
    table = ohmward.open_run(run).impedance
    assert read["reading"].tolist() == table["reading"].tolist()
    for name in ("frequency_hz", "resistance_ohm", "reactance_ohm", "cs_f"):
        np.testing.assert_array_equal(read[name].to_numpy(float), table[name].to_numpy(float))
    assert set(read["lot"]) == {"hoist drive", "radio"}


def test_touchstone_read_by_scikit_rf_keeps_z(run: Path, tmp_path: Path) -> None:
    """Z within 1e-9 of |Z| after another library has read S11 back."""
    written = api.export(run, form="touchstone", out=tmp_path / "out")
    table = ohmward.open_run(run).impedance
    assert written
    for path in written:
        part_id = path.stem.rpartition("_")[0]
        rows = table[(table["part_id"] == part_id) & (table["status"] == "ok")]
        mean = rows.groupby("frequency_hz")[["resistance_ohm", "reactance_ohm"]].mean()
        z = mean["resistance_ohm"].to_numpy() + 1j * mean["reactance_ohm"].to_numpy()
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # the reader's own deprecations
            read = skrf.Network(str(path))
        np.testing.assert_array_equal(read.f, mean.index.to_numpy(float))
        assert np.max(np.abs(read.z[:, 0, 0] - z) / np.abs(z)) < 1e-9


def test_a_spreadsheet_keeps_numbers_and_runs_nothing(run: Path, tmp_path: Path) -> None:
    (path,) = api.export(run, form="spreadsheet", out=tmp_path / "book.xlsx")
    book = openpyxl.load_workbook(path)
    assert book.sheetnames == ["impedance", "results", "events"]
    for sheet in book:
        assert all(cell.data_type != "f" for row in sheet for cell in row)
    read = pd.read_excel(path, sheet_name="impedance")
    table = ohmward.open_run(run).impedance
    np.testing.assert_array_equal(
        read["reactance_ohm"].to_numpy(float), table["reactance_ohm"].to_numpy(float)
    )


def test_exports_refuse_by_name(run: Path, tmp_path: Path) -> None:
    with pytest.raises(BadInput, match="unknown-form"):
        api.export(run, form="stone", out=tmp_path / "x")
    (tmp_path / "there").mkdir()
    with pytest.raises(BadInput, match="output-exists"):
        api.export(run, form="parquet", out=tmp_path / "there")


def test_metadata_and_tables_agree_for_a_csvw_reader(run: Path) -> None:
    """The `csvw` package validates each table against the metadata beside it."""
    for name in ("impedance", "results", "events", "truth"):
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # the reader's own deprecations
            group = csvw.CSVW(str(run / f"{name}.csv-metadata.json"))
            assert group.is_valid, (name, [str(w.message) for w in group.warnings])
        described = json.loads((run / f"{name}.csv-metadata.json").read_text("utf-8"))
        assert described["url"] == f"{name}.csv"
