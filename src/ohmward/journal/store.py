"""One connection to a journal: creates, writes, reads and closes it, and knows what is in it.

Everything here is synchronous and meant for one thread at a time; ``writer`` decides which.
"""

import contextlib
import sqlite3
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

from ohmward.errors import OhmwardError
from ohmward.journal import schema

Row = tuple[Any, ...]


class JournalUnusable(OhmwardError):
    """The file is not a journal of ours, is of a newer format, is damaged, or cannot be written."""


class Store:
    """A journal file behind one SQLite connection.

    ``durable`` journals use WAL with synchronous FULL: what was committed survives a power cut.
    Others (dry runs) keep their rollback journal in memory and never wait for the disk.
    """

    def __init__(self, connection: sqlite3.Connection, path: Path) -> None:
        self._connection = connection
        self.path = path

    @classmethod
    def create(cls, path: Path, *, durable: bool) -> "Store":
        """Make a new journal; a file that is already there is an error, never overwritten."""
        if path.exists():
            raise JournalUnusable(f"{path} is already there")
        with _told(path):
            store = cls._connect(path, durable=durable)
            store._connection.executescript(schema.TABLES)
            store._connection.execute(f"PRAGMA user_version = {schema.USER_VERSION}")
            store._connection.commit()
        return store

    @classmethod
    def open(cls, path: Path, *, durable: bool) -> "Store":
        """Open a journal to go on writing."""
        _check(path)
        with _told(path):
            return cls._connect(path, durable=durable)

    @classmethod
    def read(cls, path: Path) -> "Store":
        """Open a journal to read only; nothing beside it is written."""
        _check(path)
        with _told(path):
            return cls(_connect_read_only(path), path)

    @classmethod
    def _connect(cls, path: Path, *, durable: bool) -> "Store":
        connection = sqlite3.connect(path, check_same_thread=False, isolation_level="DEFERRED")
        mode = "WAL" if durable else "MEMORY"
        connection.execute(f"PRAGMA journal_mode = {mode}")
        connection.execute(f"PRAGMA synchronous = {'FULL' if durable else 'OFF'}")
        connection.execute("PRAGMA foreign_keys = ON")
        return cls(connection, path)

    # -- writing -----------------------------------------------------------------------------

    def write(self, statement: str, rows: Sequence[Row]) -> None:
        """Add rows to the open transaction."""
        with _told(self.path):
            self._connection.executemany(statement, rows)

    def commit(self) -> None:
        """Make everything written so far lasting."""
        with _told(self.path):
            self._connection.commit()

    def close(self) -> None:
        """Commit, checkpoint, leave WAL so that the folder copies whole, and close."""
        try:
            with _told(self.path):
                self._connection.commit()
                # Somebody who reads the journal meanwhile keeps it in WAL; nothing is lost by
                # that, and a run must not fail for it.
                with contextlib.suppress(sqlite3.OperationalError):
                    self._connection.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchall()
                    self._connection.execute("PRAGMA journal_mode = DELETE").fetchall()
        finally:
            self.abandon()

    def abandon(self) -> None:
        """Close without a checkpoint: after a failed write, or after reading only."""
        with contextlib.suppress(sqlite3.Error):
            self._connection.close()

    # -- reading -----------------------------------------------------------------------------

    def examine(self) -> None:
        """Read every page; raises JournalUnusable where one is damaged."""
        found = [row[0] for row in self._select("PRAGMA quick_check(3)")]
        if found != ["ok"]:
            raise JournalUnusable(f"{self.path}: damaged: {'; '.join(found)}")

    def facts(self) -> dict[str, str]:
        """What the run table says: identity, hashes, paths, state."""
        return dict(self._select("SELECT key, value FROM run"))

    def instruments(self) -> dict[str, dict[str, str]]:
        """Each instrument's role, address, identity and driver, by name."""
        names = ("name", "role", "address", "identity", "driver", "driver_sha256")
        rows = self._select(f"SELECT {', '.join(names)} FROM instrument ORDER BY name")
        return {row[0]: dict(zip(names[1:], row[1:], strict=True)) for row in rows}

    def stages(self) -> dict[int, dict[str, str]]:
        """Name, kind, part, position and state of each stage that was begun, by number."""
        names = ("number", "name", "kind", "part_id", "position", "state")
        rows = self._select(f"SELECT {', '.join(names)} FROM stage ORDER BY number")
        return {row[0]: dict(zip(names[1:], row[1:], strict=True)) for row in rows}

    def settings(self, stage: int) -> dict[str, dict[str, str]]:
        """What each instrument was set to and read back at the start of a stage."""
        found: dict[str, dict[str, str]] = {}
        rows = self._select(
            "SELECT instrument, name, value FROM setting WHERE stage = ? ORDER BY 1, 2", (stage,)
        )
        for instrument, name, value in rows:
            found.setdefault(instrument, {})[name] = value
        return found

    def taken(self, stage: int) -> set[tuple[int, int]]:
        """The (point, repeat) pairs of a stage that have been read."""
        rows = self._select("SELECT point, repeat FROM impedance WHERE stage = ?", (stage,))
        return {(point, repeat) for point, repeat in rows}

    def last_instant(self) -> tuple[int, float] | None:
        """(time_us, elapsed_s) of the last thing written, or None in an empty journal."""
        rows = list(
            self._select(
                "SELECT time_us, elapsed_s FROM (SELECT time_us, elapsed_s FROM impedance"
                " UNION ALL SELECT time_us, elapsed_s FROM leakage"
                " UNION ALL SELECT time_us, elapsed_s FROM event) ORDER BY elapsed_s DESC LIMIT 1"
            )
        )
        return rows[0] if rows else None

    def impedance(self, rows_at_once: int = 2048) -> Iterator[list[Row]]:
        """Readings in order, in batches: ``reading`` then schema.IMPEDANCE_COLUMNS."""
        names = ", ".join(("reading", *schema.IMPEDANCE_COLUMNS))
        with _told(self.path):
            cursor = self._connection.execute(f"SELECT {names} FROM impedance ORDER BY reading")
            while batch := cursor.fetchmany(rows_at_once):
                yield batch

    def leakage(self, rows_at_once: int = 2048) -> Iterator[list[Row]]:
        """Readings under voltage in order, in batches: ``reading``, then LEAKAGE_COLUMNS."""
        names = ", ".join(("reading", *schema.LEAKAGE_COLUMNS))
        cursor = self._connection.execute(f"SELECT {names} FROM leakage ORDER BY reading")
        while batch := cursor.fetchmany(rows_at_once):
            yield batch

    def holds(self) -> dict[tuple[int, int], tuple[str, str]]:
        """What was asked and how it went, as JSON, by (stage, hold)."""
        rows = self._select("SELECT stage, hold, asked, held FROM hold ORDER BY 1, 2")
        return {(stage, hold): (asked, held) for stage, hold, asked, held in rows}

    def events(self) -> list[Row]:
        """Events in order: ``event`` then schema.EVENT_COLUMNS."""
        names = ", ".join(("event", *schema.EVENT_COLUMNS))
        return list(self._select(f"SELECT {names} FROM event ORDER BY event"))

    def _select(self, statement: str, values: Row = ()) -> Iterator[Row]:
        with _told(self.path):
            yield from self._connection.execute(statement, values)


def _check(path: Path) -> None:
    """Say what is wrong with a file before anything is written to it."""
    if not path.is_file():
        raise JournalUnusable(f"{path}: there is no journal here")
    with _told(path), contextlib.closing(_connect_read_only(path)) as connection:
        version = connection.execute("PRAGMA user_version").fetchone()[0]
        tables = {row[0] for row in connection.execute("SELECT name FROM sqlite_master")}
    if version > schema.USER_VERSION:
        raise JournalUnusable(
            f"{path}: written by a newer ohmward (journal format {version}, "
            f"this one reads up to {schema.USER_VERSION})"
        )
    if version < 1 or "impedance" not in tables:
        raise JournalUnusable(f"{path}: an SQLite file, but no journal of ohmward")


def _connect_read_only(path: Path) -> sqlite3.Connection:
    # A journal that a killed run left has its newest rows in the WAL, which only a connection
    # that may write the -shm file can read; one that was closed in order is opened immutable.
    # So is a rollback journal that was left while WAL was switched on or off.
    left_open = any(path.with_name(path.name + end).exists() for end in ("-wal", "-journal"))
    mode = "mode=rw" if left_open else "mode=ro&immutable=1"
    return sqlite3.connect(f"{path.absolute().as_uri()}?{mode}", uri=True, check_same_thread=False)


@contextlib.contextmanager
def _told(path: Path) -> Iterator[None]:
    """Turn SQLite's errors (full disk, damage, locks) into ours, naming the file."""
    try:
        yield
    except sqlite3.Error as error:
        raise JournalUnusable(f"{path}: {error}") from error
