"""How a run writes its journal: a thread with group commits on a real bench, inline in a dry run.

``add`` hands a row over and returns; ``settled`` returns when everything added is lasting.
A reading counts as taken only after that. On a real bench the meter is already busy with the
next reading while the thread commits the last ones, so the disk costs no time; ``add`` waits
when more than ``MOST_WAITING`` rows are not yet lasting.
"""

import contextlib
import queue
import threading
from typing import Protocol

import trio

from ohmward.errors import OhmwardError
from ohmward.journal.store import Row, Store

MOST_WAITING = 64
ROWS_PER_COMMIT = 1024


class Writer(Protocol):
    """What the runner needs of a journal while it works."""

    async def add(self, statement: str, row: Row) -> None:
        """Hand over one row; raises what an earlier write failed with."""

    async def settled(self) -> None:
        """Return when everything handed over is committed; raises what a write failed with."""

    async def close(self) -> None:
        """Commit, checkpoint and close."""


class InlineWriter:
    """Writes in the caller's own thread, committing now and then: for virtual time."""

    def __init__(self, store: Store) -> None:
        self._store = store
        self._waiting: dict[str, list[Row]] = {}
        self._count = 0

    async def add(self, statement: str, row: Row) -> None:
        """Keep the row; write all kept rows when there are enough of them."""
        self._waiting.setdefault(statement, []).append(row)
        self._count += 1
        if self._count >= ROWS_PER_COMMIT:
            self._write()

    async def settled(self) -> None:
        """Write and commit what is kept."""
        self._write()

    async def close(self) -> None:
        """Write what is kept, then close the store."""
        self._write()
        self._store.close()

    def _write(self) -> None:
        waiting, self._waiting, self._count = self._waiting, {}, 0
        for statement, rows in waiting.items():
            self._store.write(statement, rows)
        self._store.commit()


class ThreadWriter:
    """One thread that owns the store: takes whatever waits, writes it, commits once, says so.

    Use as an async context manager; leaving it commits what was handed over and closes the store.
    """

    def __init__(self, store: Store) -> None:
        self._store = store
        self._queue: queue.SimpleQueue[tuple[str, Row] | None] = queue.SimpleQueue()
        self._handed = 0
        self._lasting = 0
        self._failure: OhmwardError | None = None
        self._told = trio.Event()
        self._token = trio.lowlevel.current_trio_token()
        self._thread = threading.Thread(target=self._work, name="journal", daemon=True)
        self._thread.start()

    async def add(self, statement: str, row: Row) -> None:
        """Hand the row to the thread; wait only while too many are not yet lasting."""
        self._raise_failure()
        self._handed += 1
        self._queue.put((statement, row))
        while self._handed - self._lasting > MOST_WAITING:
            await self._news()

    async def settled(self) -> None:
        """Return when every row handed over is committed."""
        while self._lasting < self._handed:
            await self._news()
        self._raise_failure()

    async def close(self) -> None:
        """Let the thread finish its work, then close the store."""
        self._queue.put(None)
        await trio.to_thread.run_sync(self._thread.join)
        if self._failure is not None:
            self._store.abandon()
            raise self._failure
        self._store.close()

    async def _news(self) -> None:
        self._raise_failure()
        await self._told.wait()
        self._raise_failure()

    def _raise_failure(self) -> None:
        if self._failure is not None:
            raise self._failure

    def _tell(self, count: int, failure: OhmwardError | None) -> None:
        """In the loop's thread: note what became lasting and wake whoever waits."""
        self._lasting += count
        self._failure = failure or self._failure
        self._told.set()
        self._told = trio.Event()

    def _work(self) -> None:
        while True:
            batch, ended = self._next_batch()
            failure: OhmwardError | None = None
            try:
                for statement, row in batch:
                    self._store.write(statement, [row])
                self._store.commit()
            except OhmwardError as error:
                failure = error
            except Exception as error:  # whoever waits for this thread must learn of its end
                failure = OhmwardError(f"the journal could not be written: {error!r}")
                failure.__cause__ = error
            with contextlib.suppress(trio.RunFinishedError):
                self._token.run_sync_soon(self._tell, 0 if failure else len(batch), failure)
            if ended or failure:
                self._failure = failure
                return

    def _next_batch(self) -> tuple[list[tuple[str, Row]], bool]:
        batch: list[tuple[str, Row]] = []
        item = self._queue.get()
        while item is not None:
            batch.append(item)
            try:
                item = self._queue.get_nowait()
            except queue.Empty:
                return batch, False
        return batch, True
