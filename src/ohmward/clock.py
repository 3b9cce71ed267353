"""The one place that knows what time it is: trio's clock for waiting, UTC for the record.

Nothing else in ohmward reads a wall clock. Under the virtual clock a day passes in seconds:
trio's mock clock jumps to the next deadline whenever nothing is runnable, and UTC is a fixed
start plus the time that has passed, so that a dry run writes the same bytes each time.
"""

import time
from collections.abc import Awaitable, Callable
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Protocol, TypeVar

import trio
import trio.testing

T = TypeVar("T")

DRY_RUN_START_UTC = datetime(2026, 1, 1, tzinfo=UTC)


class Clock(Protocol):
    """What a run may ask about time; valid inside a trio run."""

    @property
    def virtual(self) -> bool:
        """True when time jumps and nothing may leave the loop."""

    def utc(self) -> datetime:
        """The instant, as an aware UTC datetime."""

    def elapsed_s(self) -> float:
        """Seconds since the clock was started, monotonic."""


@dataclass(slots=True)
class WallClock:
    """Real time: UTC from the system, elapsed time from trio's monotonic clock."""

    started_s: float

    @property
    def virtual(self) -> bool:
        """Never: this is real time."""
        return False

    def utc(self) -> datetime:
        """The system's UTC."""
        return datetime.now(UTC)  # noqa: TID251 - this module is the one place

    def elapsed_s(self) -> float:
        """Seconds since the start, from trio's monotonic clock."""
        return trio.current_time() - self.started_s


@dataclass(slots=True)
class VirtualClock:
    """Virtual time: a fixed UTC start plus what trio's mock clock says has passed."""

    started_s: float
    start_utc: datetime = DRY_RUN_START_UTC

    @property
    def virtual(self) -> bool:
        """Always: time jumps."""
        return True

    def utc(self) -> datetime:
        """The fixed start plus the elapsed virtual time."""
        return self.start_utc + timedelta(seconds=self.elapsed_s())

    def elapsed_s(self) -> float:
        """Virtual seconds since the start."""
        return trio.current_time() - self.started_s


def run_in_real_time(main: Callable[[Clock], Awaitable[T]]) -> T:
    """Run ``main(clock)`` in a trio loop on the system's clock and return its result."""

    async def start() -> T:
        return await main(WallClock(trio.current_time()))

    return trio.run(start)


def run_in_virtual_time(
    main: Callable[[Clock], Awaitable[T]], *, start_utc: datetime = DRY_RUN_START_UTC
) -> T:
    """Run ``main(clock)`` in a trio loop whose time jumps to the next deadline."""

    async def start() -> T:
        return await main(VirtualClock(trio.current_time(), start_utc))

    return trio.run(start, clock=trio.testing.MockClock(autojump_threshold=0))


def today_utc() -> datetime:
    """The system's UTC for decisions outside a run, such as 'is this calibration still valid?'."""
    return datetime.now(UTC)  # noqa: TID251 - this module is the one place


def stopwatch_s() -> float:
    """Seconds of a monotonic clock with an arbitrary zero, for deadlines in worker threads."""
    return time.monotonic()  # noqa: TID251 - this module is the one place
