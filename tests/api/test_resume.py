"""Resume goes on only with what the run began with, and says what is not; tables are re-made."""

import os
import shutil
import sqlite3
from collections.abc import Callable
from pathlib import Path

import pytest
from tests.run.workbench import Served, Workbench, decisions, journal, places, sequence, table

from ohmward import api
from ohmward.errors import BadInput, BenchHeld
from ohmward.journal import schema
from ohmward.run.folder import held

Change = Callable[[Workbench], None]


def stopped(folder: Path) -> tuple[Workbench, Path]:
    """A dry run that looks as if it had been killed in the middle of its last part."""
    workbench = Workbench(folder)
    workbench.driver('[link]\ntimeout = "2 s"\n')
    return workbench, cut_short(workbench.dry_run())


def cut_short(out: Path) -> Path:
    """Take the last readings, all tables and the end of a run away, as a kill -9 would have."""
    connection = sqlite3.connect(out / "journal.sqlite")
    with connection:
        last = connection.execute("SELECT max(number) FROM stage").fetchone()[0]
        connection.execute("DELETE FROM impedance WHERE stage = ? AND point > 0", (last,))
        connection.execute("DELETE FROM event WHERE event >= 6")
        connection.execute("UPDATE stage SET state = 'begun' WHERE number = ?", (last,))
        connection.execute("UPDATE run SET value = 'begun' WHERE key = 'state'")
    connection.close()
    for path in [*out.glob("*.csv"), *out.glob("*-metadata.json"), out / "manifest.json"]:
        path.unlink()
    return out


def everything(folder: Path) -> dict[str, bytes]:
    return {
        path.relative_to(folder).as_posix(): path.read_bytes()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def contents(journal: bytes | None) -> object:
    """Every row of a journal; the bytes where SQLite cannot read it."""
    if journal is None:
        return None
    connection = sqlite3.connect(":memory:")
    try:
        connection.deserialize(journal)
        return list(connection.iterdump())
    except sqlite3.Error:
        return journal
    finally:
        connection.close()


def refused(out: Path) -> list[tuple[str, str]]:
    """The problems that a resume names: identifier and key; nothing in the folder is touched."""
    before = everything(out) if out.is_dir() else {}
    with pytest.raises(BadInput) as caught:
        api.resume(out)
    assert caught.value.exit_code == 2
    if out.is_dir():
        after = everything(out)
        assert set(after) == set(before)
        assert all(
            after[name] == content
            for name, content in before.items()
            if name != "journal.sqlite"  # which counts how often it was opened; see the rows
        )
        assert contents(after.get("journal.sqlite")) == contents(before.get("journal.sqlite"))
    return [(problem.id, problem.key) for problem in caught.value.problems]


def test_a_stopped_dry_run_goes_on(tmp_path: Path) -> None:
    workbench, out = stopped(tmp_path)
    undisturbed = workbench.dry_run("undisturbed")
    kept = journal(out)
    outcome = api.resume(out)
    assert journal(out)[: len(kept)] == kept
    assert places(out) == places(undisturbed)
    assert decisions(out) == decisions(undisturbed)
    assert len(table(out, "truth")) == len(table(undisturbed, "truth"))
    assert [str(one.decision) for one in outcome.verdicts] == ["accept", "accept", "reject"]


def change(name: str, old: str, new: str) -> Change:
    def apply(workbench: Workbench) -> None:
        text = (workbench.folder / name).read_text("utf-8")
        assert old in text
        workbench.write(name, text.replace(old, new))

    return apply


@pytest.mark.parametrize(
    ("apply", "named"),
    [
        (change("sequence.toml", '"10 kHz"', '"11 kHz"'), "sequence"),
        (change("parts.csv", "220 nF,±10 %", "220 nF,±5 %"), "parts"),
        (change("bench.toml", 'cable = "1 m"', 'cable = "2 m"'), "bench"),
        (change("bench.toml", '["102", "202"]', '["112", "212"]'), "bench"),
        (change("own.toml", "[link]", '[link]\nopening_delay = "1 s"'), "driver"),
    ],
)
def test_what_is_not_what_the_run_began_with_is_named(
    tmp_path: Path, apply: Change, named: str
) -> None:
    workbench, out = stopped(tmp_path)
    apply(workbench)
    problems = refused(out)
    assert [one for one, _ in problems if one.startswith(named)] != [], problems
    others = {"sequence", "parts", "bench", "driver"} - {named}
    assert not [one for one, _ in problems if one.startswith(tuple(others))], problems


def test_everything_that_has_changed_is_named_at_once(tmp_path: Path) -> None:
    workbench, out = stopped(tmp_path)
    change("sequence.toml", '"10 kHz"', '"11 kHz"')(workbench)
    change("parts.csv", "220 nF,±10 %", "220 nF,±5 %")(workbench)
    change("bench.toml", 'cable = "1 m"', 'cable = "2 m"')(workbench)
    ids = {one for one, _ in refused(out)}
    assert {"sequence-changed", "parts-changed", "bench-changed"} <= ids


def test_a_comment_changes_nothing(tmp_path: Path) -> None:
    workbench, out = stopped(tmp_path)
    change("sequence.toml", "format = 1", "# a remark\nformat = 1")(workbench)
    change("sequence.toml", '"100 kHz"', '"0.1 MHz"')(workbench)
    api.resume(out)


def test_files_that_are_gone_are_named(tmp_path: Path) -> None:
    workbench, out = stopped(tmp_path)
    (workbench.folder / "parts.csv").unlink()
    with pytest.raises(BadInput, match=r"parts\.csv"):
        api.resume(out)


def test_a_finished_run_only_gets_its_tables_anew(tmp_path: Path) -> None:
    workbench = Workbench(tmp_path)
    out = workbench.dry_run()
    before = everything(out)
    for name in ("impedance.csv", "manifest.json", "truth.csv-metadata.json"):
        (out / name).unlink()
    (out / "results.csv").write_text("torn", "utf-8")
    api.resume(out)
    assert everything(out) == before


def test_a_folder_that_is_none_and_one_that_holds_no_run(tmp_path: Path) -> None:
    assert refused(tmp_path / "nowhere") == [("no-journal", "DIR")]
    empty = tmp_path / "empty"
    empty.mkdir()
    assert refused(empty) == [("no-journal", "DIR")]
    other = tmp_path / "other"
    other.mkdir()
    connection = sqlite3.connect(other / "journal.sqlite")
    with connection:
        connection.execute("CREATE TABLE something (else_ TEXT)")
    connection.close()
    assert refused(other) == [("no-journal", "DIR")]


def test_a_newer_journal(tmp_path: Path) -> None:
    _, out = stopped(tmp_path)
    connection = sqlite3.connect(out / "journal.sqlite")
    connection.execute(f"PRAGMA user_version = {schema.USER_VERSION + 1}")
    connection.close()
    assert refused(out) == [("no-journal", "DIR")]
    with pytest.raises(BadInput, match="newer ohmward"):
        api.resume(out)


@pytest.mark.parametrize("where", ["head", "middle", "cut off", "text"])
def test_a_damaged_journal(tmp_path: Path, where: str) -> None:
    _, out = stopped(tmp_path)
    path = out / "journal.sqlite"
    content = bytearray(path.read_bytes())
    if where == "head":
        content[:100] = os.urandom(100)
    elif where == "middle":
        content[4096:-4096] = b"\xff" * (len(content) - 8192)
    elif where == "cut off":
        del content[len(content) // 2 :]
    else:
        content = bytearray(b"part_id,value\n")
    path.write_bytes(content)
    assert refused(out) == [("no-journal", "DIR")]
    with pytest.raises(BadInput, match=r"journal\.sqlite"):
        api.resume(out)


def test_a_run_that_never_began(tmp_path: Path) -> None:
    _, out = stopped(tmp_path)
    connection = sqlite3.connect(out / "journal.sqlite")
    with connection:
        connection.execute("DELETE FROM run WHERE key = 'hashes'")
    connection.close()
    assert refused(out) == [("run-never-began", "DIR")]


def test_a_run_that_another_process_carries_out(tmp_path: Path) -> None:
    _, out = stopped(tmp_path)
    with held(out), pytest.raises(BenchHeld) as caught:
        api.resume(out)
    assert caught.value.exit_code == 6
    assert str(out) in str(caught.value)
    api.resume(out)


def test_a_folder_that_was_moved(tmp_path: Path) -> None:
    _, out = stopped(tmp_path)
    moved = tmp_path / "elsewhere" / "run"
    shutil.copytree(out, moved)
    api.resume(moved)
    assert table(moved, "results")


@pytest.mark.processes
@pytest.mark.slow
@pytest.mark.parametrize("stated", [False, True])
def test_another_serial_number_answers(tmp_path: Path, stated: bool) -> None:
    workbench = Workbench(tmp_path)
    workbench.write("sequence.toml", sequence(repeats="1"))
    numbers = {"meter": "M-1", "switch": "S-1"}
    if stated:
        change("bench.toml", 'cable = "1 m"', 'cable = "1 m"\nserial_number = "M-1"')(workbench)
    served = Served(workbench, serial_numbers=numbers)
    with served:
        out = cut_short(workbench.run())
    served.be_another(meter="M-2", switch="S-2")
    with served:
        problems = refused(out)
    wanted = ["instrument.meter"] if stated else ["instrument.meter", "instrument.switch"]
    assert problems == [("identity-changed", key) for key in wanted]
    served.be_another(**numbers)
    with served:
        api.resume(out)
        assert served.at_rest()
    assert len(table(out, "impedance")) == 3 * 4
