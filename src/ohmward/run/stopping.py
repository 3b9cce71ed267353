"""Turns the signals that ask a program to stop into one orderly end.

The first signal cancels the work; later ones change nothing, because the end that follows the
first must not be cut short, its tables included.
"""

import signal
import threading
from collections.abc import Awaitable, Callable, Iterator
from contextlib import contextmanager, suppress

import trio

from ohmward.errors import Stopped

SIGNALS = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)


class StopSignals:
    """Signals caught since ``catch_signals``; runs work that the first of them cancels."""

    def __init__(self) -> None:
        self._caught: list[int] = []
        self._token: trio.lowlevel.TrioToken | None = None
        self._scope = trio.CancelScope()

    def catch(self, number: int) -> None:
        """Note a signal and have the work cancelled; called between any two instructions."""
        self._caught.append(number)
        if self._token is not None:
            with suppress(trio.RunFinishedError):
                self._token.run_sync_soon(self._scope.cancel, idempotent=True)

    async def run(self, work: Callable[[], Awaitable[None]]) -> None:
        """Run ``work()``; raises Stopped when a signal cut it short, else what it raises."""
        self._token = trio.lowlevel.current_trio_token()
        if self._caught:  # it came before there was anything to cancel
            self._scope.cancel()
        try:
            with self._scope:
                await work()
        finally:
            self._token = None
        if self._scope.cancelled_caught:
            raise Stopped(f"stopped by {signal.Signals(self._caught[0]).name}")


@contextmanager
def catch_signals() -> Iterator[StopSignals]:
    """Catch the stopping signals while the context lasts.

    A signal that the process was told to ignore (by ``nohup``, by a shell for its background
    jobs) stays ignored. Only a process's main thread may catch signals: in another thread none
    are caught, and the caller's own cancellation ends the work.
    """
    stop = StopSignals()
    if threading.current_thread() is not threading.main_thread():
        yield stop
        return

    def handler(number: int, frame: object) -> None:
        stop.catch(number)

    heeded = [number for number in SIGNALS if signal.getsignal(number) != signal.SIG_IGN]
    before = {number: signal.signal(number, handler) for number in heeded}
    try:
        yield stop
    finally:
        for number, former in before.items():
            signal.signal(number, former)
