"""What every simulated supply does behind its commands: level, limit, output, trip, watchdog."""

import math
from collections.abc import Callable
from dataclasses import dataclass

from ohmward.sim.terminals_dc import SupplyPort

LIMITING, TRIPPED, INTERLOCK_OPEN, ON_ITS_WAY = 1, 2, 4, 8
_ARRIVED = 1e-3


@dataclass(frozen=True, kw_only=True, slots=True)
class ScalarFigures:
    """Half-widths of what an instrument reads: ±(rel · reading + offset)."""

    rel: float
    offset: float


class ScalarError:
    """An error that stays within its figures: one share (−1 … +1) of gain, one of offset."""

    def __init__(self, uniform: Callable[..., float], seed: int, *key: object) -> None:
        self._gain = 2.0 * uniform(seed, *key, "gain") - 1.0
        self._offset = 2.0 * uniform(seed, *key, "offset") - 1.0

    def read(self, value: float, figures: ScalarFigures) -> float:
        """What the instrument makes of a value."""
        return value * (1.0 + self._gain * figures.rel) + self._offset * figures.offset


@dataclass(slots=True)
class SupplyCore:
    """A supply's state; every change is ordered from its terminals at once.

    A trip turns the output off until it is cleared. The watchdog, when it is not 0, trips
    after so many seconds without ``heard``.
    """

    port: SupplyPort
    level_v: float = 0.0
    slew_v_per_s: float = math.inf
    limit_a: float = 1e-3
    on: bool = False
    tripped: bool = False
    watchdog_s: float = 0.0
    _heard_s: float = 0.0

    def heard(self, now_s: float) -> None:
        """A command has come: first what has happened since the last one, then a new term."""
        self.update(now_s)
        self._heard_s = now_s
        if self.watchdog_s and self.on:
            self.apply(now_s)

    def update(self, now_s: float) -> None:
        """Notice an expired watchdog and an open interlock."""
        if self.on and now_s >= self._until_s():
            self.on, self.tripped = False, True
        if self.on and not self.port.interlock_closed(now_s):
            self.on = False
            self.apply(now_s)

    def _until_s(self) -> float:
        return self._heard_s + self.watchdog_s if self.watchdog_s else math.inf

    def apply(self, now_s: float) -> None:
        """Order from the terminals what is set."""
        self.port.order(
            now_s,
            level_v=self.level_v,
            slew_v_per_s=self.slew_v_per_s,
            limit_a=self.limit_a,
            on=self.on,
            until_s=self._until_s() if self.on else math.inf,
        )

    def may_turn_on(self, now_s: float) -> bool:
        """Whether nothing forbids an output."""
        return not self.tripped and self.port.interlock_closed(now_s)

    def condition(self, now_s: float) -> int:
        """What is the matter, as a sum of LIMITING, TRIPPED, INTERLOCK_OPEN and ON_ITS_WAY."""
        self.update(now_s)
        found = TRIPPED if self.tripped else 0
        if not self.port.interlock_closed(now_s):
            found |= INTERLOCK_OPEN
        if self.on:
            if self.port.limiting(now_s):
                found |= LIMITING
            far_v = abs(self.port.voltage_v(now_s) - self.level_v)
            if far_v > _ARRIVED * max(abs(self.level_v), 1.0):
                found |= ON_ITS_WAY
        return found
