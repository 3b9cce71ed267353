"""What was committed is there, what was not is not, and a file that is no journal is named."""

import os
import shutil
import signal
import sqlite3
import subprocess
import sys
from pathlib import Path

import pytest
import trio

from ohmward.journal import schema
from ohmward.journal.store import JournalUnusable, Store
from ohmward.journal.writer import InlineWriter, ThreadWriter


def reading(stage: int, point: int, repeat: int) -> tuple[object, ...]:
    return (
        *(stage, point, repeat, 1_000_000 * point + repeat, float(point), 1000.0, 1.0, 0.99),
        *(0.0, None, 0.0, None, "100", "medium", "ok", "R-X", 1.5, -159.0, 1e-4, 1e-3),
        *(23.0, None, "meter", b"+1.5,-159\n"),
    )


def stage_row(number: int) -> tuple[object, ...]:
    return (number, "sweep", "sweep", f"C{number}", str(number))


@pytest.mark.parametrize("kind", ["inline", "thread"])
def test_what_was_settled_is_read_back(tmp_path: Path, kind: str) -> None:
    path = tmp_path / "journal.sqlite"

    async def write() -> None:
        store = Store.create(path, durable=kind == "thread")
        writer = ThreadWriter(store) if kind == "thread" else InlineWriter(store)
        for number in (0, 1):
            await writer.add(schema.BEGIN_STAGE, stage_row(number))
            for point in range(100):
                await writer.add(schema.INSERT_IMPEDANCE, reading(number, point, 0))
        await writer.settled()
        seen = Store.read(path)
        assert seen.taken(1) == {(point, 0) for point in range(100)}
        seen.abandon()
        await writer.close()

    trio.run(write)
    store = Store.read(path)
    rows = [row for batch in store.impedance(rows_at_once=64) for row in batch]
    assert len(rows) == 200
    assert rows[0][1:] == reading(0, 0, 0)
    assert store.stages()[1]["part_id"] == "C1"
    assert store.last_instant() == (99_000_000, 99.0)
    store.abandon()


def test_a_closed_journal_copies_whole(tmp_path: Path) -> None:
    """After closing in order one file is all there is: no -wal, no -shm (DELETE journal mode)."""

    async def write() -> None:
        writer = ThreadWriter(Store.create(tmp_path / "journal.sqlite", durable=True))
        await writer.add(schema.INSERT_FACT, ("run_id", "a"))
        await writer.close()

    trio.run(write)
    assert [path.name for path in tmp_path.iterdir()] == ["journal.sqlite"]
    copy = tmp_path / "copy.sqlite"
    shutil.copyfile(tmp_path / "journal.sqlite", copy)
    store = Store.read(copy)
    assert store.facts() == {"run_id": "a"}
    store.abandon()


def test_the_same_writes_give_the_same_bytes(tmp_path: Path) -> None:
    async def write(path: Path) -> None:
        writer = InlineWriter(Store.create(path, durable=False))
        await writer.add(schema.BEGIN_STAGE, stage_row(0))
        for point in range(50):
            await writer.add(schema.INSERT_IMPEDANCE, reading(0, point, 0))
        await writer.close()

    for name in ("a", "b"):
        trio.run(write, tmp_path / name)
    assert (tmp_path / "a").read_bytes() == (tmp_path / "b").read_bytes()


@pytest.mark.processes
def test_what_was_acknowledged_survives_kill_9(tmp_path: Path) -> None:
    script = f"""
import trio
from ohmward.journal import schema
from ohmward.journal.store import Store
from ohmward.journal.writer import ThreadWriter
from pathlib import Path
async def main():
    writer = ThreadWriter(Store.create(Path({str(tmp_path / "j.sqlite")!r}), durable=True))
    for number in range(10**6):
        await writer.add(schema.INSERT_EVENT, (number, float(number), "", "", "", "test", ""))
        await writer.settled()
        print(number, flush=True)
trio.run(main)
"""
    with subprocess.Popen([sys.executable, "-c", script], stdout=subprocess.PIPE) as child:
        assert child.stdout is not None
        for _ in range(30):
            child.stdout.readline()
        os.kill(child.pid, signal.SIGKILL)
        acknowledged = 30 + len(child.stdout.read().splitlines())
    store = Store.open(tmp_path / "j.sqlite", durable=True)
    kept = [row[1] for row in store.events()]
    assert len(kept) >= acknowledged - 1  # the last line may be torn
    assert kept == list(range(len(kept)))
    store.close()


def test_a_reading_is_kept_once(tmp_path: Path) -> None:
    store = Store.create(tmp_path / "j", durable=False)
    store.write(schema.BEGIN_STAGE, [stage_row(0)])
    store.write(schema.INSERT_IMPEDANCE, [reading(0, 1, 2)])
    with pytest.raises(JournalUnusable, match="UNIQUE"):
        store.write(schema.INSERT_IMPEDANCE, [reading(0, 1, 2)])
    store.abandon()


def test_a_failed_write_reaches_the_runner(tmp_path: Path) -> None:
    async def write() -> None:
        writer = ThreadWriter(Store.create(tmp_path / "j", durable=True))
        await writer.add(schema.INSERT_IMPEDANCE, reading(9, 0, 0))  # a stage that never began
        with pytest.raises(JournalUnusable):
            await writer.settled()
        with pytest.raises(JournalUnusable):
            await writer.close()

    trio.run(write)


def test_what_is_no_journal_is_named_and_left_alone(tmp_path: Path) -> None:
    absent = tmp_path / "absent"
    with pytest.raises(JournalUnusable, match="no journal here"):
        Store.read(absent)
    assert not absent.exists()

    text = tmp_path / "text"
    text.write_text("part_id,position\n" * 100)
    with pytest.raises(JournalUnusable, match="not a database"):
        Store.read(text)

    foreign = tmp_path / "foreign.sqlite"
    with sqlite3.connect(foreign) as connection:
        connection.execute("CREATE TABLE other (x)")
    connection.close()
    with pytest.raises(JournalUnusable, match="no journal of ohmward"):
        Store.open(foreign, durable=True)

    newer = tmp_path / "newer.sqlite"
    Store.create(newer, durable=False).close()
    with sqlite3.connect(newer) as connection:
        connection.execute(f"PRAGMA user_version = {schema.USER_VERSION + 1}")
    connection.close()
    before = newer.read_bytes()
    with pytest.raises(JournalUnusable, match="newer ohmward"):
        Store.open(newer, durable=True)
    assert newer.read_bytes() == before
