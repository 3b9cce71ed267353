"""What the warden needs of the instruments that it owns: as little as will do."""

from dataclasses import dataclass
from math import inf
from typing import Protocol

import trio

from ohmward.terms.reading import CurrentReading, SupplyReading, VoltageReading


class Scanner(Protocol):
    """Relays by channel; every method reads back what it did and raises when it was not done."""

    async def close(self, channels: tuple[str, ...]) -> None:
        """Close these relays."""

    async def open(self, channels: tuple[str, ...]) -> None:
        """Open these relays."""

    async def open_all(self) -> None:
        """Open every relay."""

    async def closed(self) -> frozenset[str]:
        """The channels that the scanner says are closed."""


class Supply(Protocol):
    """A high-voltage supply; a set method raises when the supply did not take the setting."""

    async def set_voltage(self, voltage_v: float) -> None:
        """Set the output voltage (V)."""

    async def set_limit(self, current_a: float) -> None:
        """Set the current limit (A)."""

    async def output(self, on: bool) -> None:
        """Switch the output; whether it did is found by ``read``."""

    async def read(self) -> SupplyReading:
        """What it was told and what it measures."""

    async def renew(self) -> None:
        """Abandon the session, whatever is pending in it, and open a fresh one."""


class CurrentMeter(Protocol):
    """The current meter in the return."""

    async def set_range(self, range_a: float) -> None:
        """Hold the range with this full scale (A)."""

    async def read(self) -> CurrentReading:
        """One reading; overload is a status, not an error."""


class Voltmeter(Protocol):
    """The voltmeter across the part's own terminals, its divider accounted for."""

    async def read(self) -> VoltageReading:
        """One reading; overload is a status, not an error."""


class Interlock(Protocol):
    """The enclosure."""

    async def closed(self) -> bool:
        """Whether the enclosure is closed."""


class Operator(Protocol):
    """The person who puts parts into a hand-loaded fixture."""

    async def place(self, part_id: str, position: str) -> None:
        """Return once the person says that this part, and nothing else, is at this position."""


class ProcessTime(Protocol):
    """The clock of the process: dwell, ramp, soak. A rehearsal may scale it; links never see it."""

    def now_s(self) -> float:
        """Seconds from an arbitrary zero, monotonic."""

    async def sleep(self, seconds: float) -> None:
        """Wait."""


class LoopTime:
    """Process time that is the loop's own, virtual or real."""

    def now_s(self) -> float:
        """The loop's clock."""
        return trio.current_time()

    async def sleep(self, seconds: float) -> None:
        """Wait on the loop's clock."""
        await trio.sleep(seconds)


@dataclass(frozen=True, kw_only=True, slots=True)
class Equipment:
    """Everything that can energise, connect or prove a part."""

    supply: Supply
    current_meter: CurrentMeter
    voltmeter: Voltmeter
    scanner: Scanner
    interlock: Interlock


@dataclass(frozen=True, kw_only=True, slots=True)
class Facts:
    """What the instruments' drivers say of them, as far as the rules depend on it.

    limit_a: the current limit that the supply is given (A). supply_error_a: half-width of the
    supply's own current reading (A). voltmeter_resolution_v: weight of its last digit (V).
    voltmeter_interval_s: how far apart it can read (s). ranges_a: the current meter's ranges,
    rising (A). meter_error_a: half-width of its reading near zero, on the lowest range (A).
    settle_s: how long relays and instruments take to settle (s). check_s: how often interlock,
    supply and voltage are looked at under voltage (s). ramp_every_s: time between two settings
    of a ramp (s). reply_s: how long a single command may take before its session is abandoned
    (s). observer_s: how long the runner may take to answer an observation (s).
    """

    limit_a: float
    supply_error_a: float
    voltmeter_resolution_v: float
    voltmeter_interval_s: float
    ranges_a: tuple[float, ...]
    meter_error_a: float
    settle_s: float = 0.1
    check_s: float = 0.5
    ramp_every_s: float = 0.2
    reply_s: float = 2.0
    observer_s: float = 5.0
    meter_bias_v: float = 0.0
    rail_leak_ohm: float = inf
