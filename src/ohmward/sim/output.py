"""A one-quadrant supply's output: which of its ways of working it is in, and when it leaves it.

It follows its level at a slew rate through its output resistance ("voltage"), gives its current
limit and no more ("current"), or gives nothing while something else holds its terminals higher
("blocked") or its output is off ("off"). It never takes current back; its bleeder does that.
"""

import math
from dataclasses import dataclass

SURE = 1e-6  # share of the limit by which a way of working must be left behind


@dataclass(frozen=True, slots=True)
class Leaving:
    """The way of working that follows once gain·v_out + offset + slope·t reaches 0."""

    follows: str
    gain: float
    offset: float
    slope: float


@dataclass(slots=True)
class Output:
    """What the supply was told and how it works; instants in s, voltages in V."""

    output_ohm: float
    set_v: float = 0.0
    limit_a: float = 1e-3
    on: bool = False
    slew_v_s: float = math.inf
    way: str = "off"
    from_v: float = 0.0
    since_s: float = 0.0

    def told(
        self, set_v: float, limit_a: float, on: bool, slew_v_s: float, now_s: float, out_v: float
    ) -> None:
        """Take a setting; the level starts from where it is, from the terminals when it wakes."""
        self.from_v = self.level_v(now_s) if self.on else max(min(out_v, set_v), 0.0)
        if slew_v_s == math.inf:
            self.from_v = set_v
        self.set_v, self.limit_a, self.on, self.slew_v_s = set_v, limit_a, on, slew_v_s
        self.since_s = now_s
        self.way = self.found(now_s, out_v)

    def level_v(self, now_s: float) -> float:
        """The level that it regulates to at this instant."""
        if now_s >= self.arrives_s:
            return self.set_v
        return self.from_v + self.rate_v_s * (now_s - self.since_s)

    @property
    def rate_v_s(self) -> float:
        """How fast the level moves while it does."""
        return math.copysign(self.slew_v_s, self.set_v - self.from_v)

    @property
    def arrives_s(self) -> float:
        """When the level has arrived."""
        if self.from_v == self.set_v:
            return self.since_s
        return self.since_s + abs(self.set_v - self.from_v) / self.slew_v_s

    def moves(self, now_s: float) -> float:
        """dv/dt of the level at this instant."""
        return self.rate_v_s if now_s < self.arrives_s else 0.0

    def regulating_a(self, now_s: float, out_v: float) -> float:
        """What it would give if it had no limit and two quadrants."""
        return (self.level_v(now_s) - out_v) / self.output_ohm

    def current_a(self, now_s: float, out_v: float) -> float:
        """What it gives."""
        if self.way == "voltage":
            return self.regulating_a(now_s, out_v)
        return self.limit_a if self.way == "current" else 0.0

    def found(self, now_s: float, out_v: float) -> str:
        """How it works with this at its terminals."""
        if not self.on:
            return "off"
        amperes = self.regulating_a(now_s, out_v)
        if amperes > self.limit_a:
            return "current"
        return "voltage" if amperes >= -self._sure_a(now_s) else "blocked"

    def leavings(self, now_s: float) -> tuple[Leaving, ...]:
        """What ends the present way of working, t counted from now."""
        ohm, sure = self.output_ohm, self._sure_a(now_s)
        amperes, rate = self.level_v(now_s) / ohm, self.moves(now_s) / ohm
        if self.way == "voltage":
            return (
                Leaving("current", -1 / ohm, amperes - self.limit_a - sure, rate),
                Leaving("blocked", 1 / ohm, -amperes - sure, -rate),
            )
        if self.way == "current":
            return (Leaving("voltage", 1 / ohm, self.limit_a - sure - amperes, -rate),)
        if self.way == "blocked":
            return (Leaving("voltage", -1 / ohm, amperes - sure, rate),)
        return ()

    def _sure_a(self, now_s: float) -> float:
        """By how much it must be past a limit: more than the clock's last digit moves it."""
        blurred_a = 8.0 * math.ulp(now_s) * abs(self.moves(now_s)) / self.output_ohm
        return max(SURE * self.limit_a, 1e-11, blurred_a)
