"""Waiting for real instruments: in a worker thread, in short polls, under a monotonic deadline.

A message that fits is written from the loop, the other tasks get their turn, and where the
instrument was quick the last time its reply is awaited on the spot for at most a millisecond.
Everything longer is one hop to a worker thread that polls, looks every POLL_S whether it is
still wanted, and reads when the reply is whole. So a cancelled read has no second reader.

Sessions of other makers' libraries (USB, GPIB, VXI-11) cannot be polled without losing half
replies: there one read with the whole timeout waits in the thread. If it is cancelled and does
not end soon, the session is left to its thread, which closes it, and nobody uses it again.
"""

import threading
from collections.abc import Callable
from typing import Generic, TypeVar

import pyvisa
import trio
import trio.testing

from ohmward.clock import stopwatch_s
from ohmward.errors import LinkTimeout, OhmwardError
from ohmward.links.channel import WRITE_AT_ONCE_BYTES, Channel
from ohmward.links.foreign import foreign_errors, translated
from ohmward.links.sessions import register_sessions
from ohmward.links.settings import LinkSettings
from ohmward.links.stream_session import POLL_S, PatientSession

T = TypeVar("T")

ON_THE_SPOT_S = 0.001
PROMPT_S = 0.0005
"""A reply that took less counts as quick: the next one is awaited on the spot."""

SETTLE_S = 0.2
GRACE_S = 1.0
"""A thread that does not end within this after it was cancelled is hung in a library."""


class _Left(Exception):
    """Raised in a worker thread whose caller has been cancelled."""


class _Job(Generic[T]):
    """Work for a thread that can be told to stop, and that tidies up if nobody waited."""

    def __init__(self, work: "Callable[[_Job[T]], T]", tidy: Callable[[], None]) -> None:
        self._work = work
        self._tidy = tidy
        self._lock = threading.Lock()
        self._left = False
        self.started = False
        self.done = False
        self.stop = False

    def __call__(self) -> T:
        with self._lock:
            if self._left:
                raise _Left
            self.started = True
        try:
            return self._work(self)
        finally:
            with self._lock:
                self.done = True
                left = self._left
            if left:
                self._tidy()

    def leave(self) -> bool:
        """Wait no longer; True if the thread has begun and is still at it."""
        with self._lock:
            self._left = not self.done
            return self._left and self.started

    def check(self) -> None:
        """Raise in the thread if the caller has been cancelled."""
        if self.stop:
            raise _Left


class ThreadWaiter:
    """Waits for real links; share one among all links of a process."""

    def __init__(self, grace_s: float = GRACE_S) -> None:
        self._limiter = trio.CapacityLimiter(64)
        self._grace_s = grace_s

    async def open(
        self, address: str, settings: LinkSettings, manager: pyvisa.ResourceManager
    ) -> Channel:
        """Open a session in a thread; under the virtual clock that is our own mistake."""
        if isinstance(trio.lowlevel.current_clock(), trio.testing.MockClock):
            raise OhmwardError(f"{address} would leave the loop under the virtual clock")
        register_sessions()
        opened: list[Channel] = []

        def connect(_job: "_Job[Channel]") -> Channel:
            channel = Channel(address=address, settings=settings, manager=manager)
            opened.append(channel)
            return channel

        def tidy() -> None:
            for channel in opened:
                channel.close()

        with foreign_errors(address):
            try:
                return await self._in_thread(connect, tidy)
            except trio.Cancelled:
                tidy()
                raise

    async def write(self, channel: Channel, message: bytes, timeout_s: float) -> None:
        """Write at once what fits, else in a thread."""
        with foreign_errors(channel.address):
            if _fits(channel.patient, message):
                channel.write(message)
                await trio.lowlevel.checkpoint()
                return

            def write(_job: "_Job[None]") -> None:
                channel.set_timeout(timeout_s)
                channel.write(message)

            await self._with_channel(channel, write, writing=True)

    async def query(self, channel: Channel, message: bytes, timeout_s: float) -> bytes:
        """Write and read; one hop to a thread at most."""
        deadline_s = stopwatch_s() + timeout_s
        try:
            if not _fits(channel.patient, message):
                return await self._with_channel(
                    channel, lambda job: _ask(channel, message, deadline_s, job), writing=True
                )
            channel.write(message)
            await trio.lowlevel.checkpoint()
            return await self._receive(channel, deadline_s)
        except Exception as error:
            raise translated(error, channel.address) from error

    async def read(self, channel: Channel, timeout_s: float) -> bytes:
        """Read on the spot where that is quick, else in a thread."""
        deadline_s = stopwatch_s() + timeout_s
        try:
            await trio.lowlevel.checkpoint()
            return await self._receive(channel, deadline_s)
        except Exception as error:
            raise translated(error, channel.address) from error

    async def _receive(self, channel: Channel, deadline_s: float) -> bytes:
        if channel.patient is not None and channel.whole_within(
            ON_THE_SPOT_S if channel.prompt else 0.0
        ):
            return channel.read()
        return await self._with_channel(channel, lambda job: _await(channel, deadline_s, job))

    async def drain(self, channel: Channel, quiet_s: float, at_most_s: float) -> bool:
        """Drain in a thread; a session that cannot be polled is cleared instead."""
        with foreign_errors(channel.address):
            return await self._with_channel(
                channel, lambda job: _drain(channel, quiet_s, at_most_s, job)
            )

    async def close(self, channel: Channel, *, orderly: bool) -> None:
        """Close in a thread, cancelled or not; a session left to a hung thread is that one's."""
        if channel.abandoned:
            await trio.lowlevel.checkpoint_if_cancelled()
            return

        def close(_job: "_Job[None]") -> None:
            if orderly and channel.patient is not None:
                _settle(channel.patient)
            channel.close()

        with trio.CancelScope(shield=True), foreign_errors(channel.address):
            await self._with_channel(channel, close)

    def unread(self, channel: Channel) -> bool:
        """True if bytes wait; unknown, and thus False, where one cannot ask."""
        return channel.patient is not None and channel.patient.unread()

    def lost(self, channel: Channel) -> bool:
        """True if the peer closed, or a hung thread kept the session."""
        return channel.abandoned or (channel.patient is not None and channel.patient.lost())

    async def _with_channel(
        self, channel: Channel, work: "Callable[[_Job[T]], T]", *, writing: bool = False
    ) -> T:
        def stop() -> None:
            # a read is asked to stop and its session lives on; a write that does not get
            # rid of its bytes has to be cut off
            if writing and channel.patient is not None:
                channel.patient.interrupt()

        def hung() -> None:
            channel.abandoned = True

        return await self._in_thread(work, channel.close, stop=stop, hung=hung)

    async def _in_thread(
        self,
        work: "Callable[[_Job[T]], T]",
        tidy: Callable[[], None],
        *,
        stop: Callable[[], None] = lambda: None,
        hung: Callable[[], None] = lambda: None,
    ) -> T:
        job = _Job(work, tidy)
        try:
            return await trio.to_thread.run_sync(job, abandon_on_cancel=True, limiter=self._limiter)
        except trio.Cancelled:
            job.stop = True
            stop()
            with trio.CancelScope(shield=True):
                give_up_s = stopwatch_s() + self._grace_s
                while job.started and not job.done and stopwatch_s() < give_up_s:
                    await trio.sleep(0.005)
            if job.leave():
                hung()
            raise


def _fits(patient: PatientSession | None, message: bytes) -> bool:
    return patient is not None and len(message) <= WRITE_AT_ONCE_BYTES and patient.writable()


def _ask(channel: Channel, message: bytes, deadline_s: float, job: _Job[bytes]) -> bytes:
    channel.set_timeout(deadline_s - stopwatch_s())
    channel.write(message)
    return _await(channel, deadline_s, job)


def _await(channel: Channel, deadline_s: float, job: _Job[bytes]) -> bytes:
    """Poll until a message is whole, and read it; or one long read where polls are no good."""
    if channel.patient is None:
        channel.set_timeout(deadline_s - stopwatch_s())
        return channel.read()
    started_s = stopwatch_s()
    while True:
        left_s = deadline_s - stopwatch_s()
        if channel.whole_within(max(0.0, min(left_s, POLL_S))):
            channel.prompt = stopwatch_s() - started_s < PROMPT_S
            return channel.read()
        channel.prompt = False
        job.check()
        if left_s <= 0:
            raise LinkTimeout("no whole reply in time", address=channel.address)


def _drain(channel: Channel, quiet_s: float, at_most_s: float, job: _Job[bool]) -> bool:
    patient = channel.patient
    if patient is None:
        channel.set_timeout(at_most_s)
        channel.resource.clear()
        return True
    end_s = stopwatch_s() + at_most_s
    silent_at_s = stopwatch_s() + quiet_s
    while True:
        now_s = stopwatch_s()
        if patient.discard():
            silent_at_s = now_s + quiet_s
        elif now_s >= silent_at_s:
            return True
        if now_s >= end_s:
            return False
        job.check()
        patient.complete_within(max(0.0, min(silent_at_s - now_s, POLL_S)), 1)


def _settle(patient: PatientSession) -> None:
    """Give what was written a moment to arrive: closing drops what has not."""
    end_s = stopwatch_s() + SETTLE_S
    pause = threading.Event()
    while not patient.settled() and stopwatch_s() < end_s:
        pause.wait(0.002)
