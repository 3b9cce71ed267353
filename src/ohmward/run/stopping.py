"""Turns the signals that ask a program to stop into one orderly end.

The first signal cancels the work; later ones change nothing, because the end that follows the
first must not be cut short.
"""

import signal
import threading
from collections.abc import Awaitable, Callable, Iterator
from contextlib import contextmanager

import trio

from ohmward.errors import Stopped

SIGNALS = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)


class StopSignals:
    """Signals caught since ``catch_signals``; runs work that the first of them cancels."""

    def __init__(self) -> None:
        self._caught: list[int] = []
        self._scope = trio.CancelScope()

    def catch(self, number: int) -> None:
        """Note a signal and cancel the work."""
        self._caught.append(number)
        self._scope.cancel()

    async def run(self, work: Callable[[], Awaitable[None]]) -> None:
        """Run ``work()``; raises Stopped when a signal cancelled it, else what it raises."""
        with self._scope:
            await work()
        if self._caught:
            raise Stopped(f"stopped by {signal.Signals(self._caught[0]).name}")


@contextmanager
def catch_signals() -> Iterator[StopSignals]:
    """Catch the stopping signals while the context lasts; valid inside a trio run.

    Only a process's main thread may catch signals: in another thread none are caught, and the
    caller's own cancellation ends the work.
    """
    stop = StopSignals()
    if threading.current_thread() is not threading.main_thread():
        yield stop
        return
    token = trio.lowlevel.current_trio_token()

    def handler(number: int, frame: object) -> None:
        token.run_sync_soon(stop.catch, number, idempotent=True)

    before = {number: signal.signal(number, handler) for number in SIGNALS}
    try:
        yield stop
    finally:
        for number, former in before.items():
            signal.signal(number, former)
