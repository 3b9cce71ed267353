"""Forming an electrolytic anew: when the next voltage may follow, and when it must end; pure.

The same steps decide while a part is formed, and afterwards from the journal what was reached.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from enum import StrEnum
from math import inf, isfinite, isnan

HOLDS_REL = 1e-3  # a current that has come to rest is not rising


class Step(StrEnum):
    """What follows a reading."""

    WAIT = "wait"
    NEXT = "next"  # the next voltage may follow
    DONE = "done"  # the last voltage is reached and the part holds it
    RISES = "rises"  # it is getting worse
    SPENT = "spent"  # the time is over


@dataclass(frozen=True, kw_only=True, slots=True)
class FormingRule:
    """Voltages (V) that rise, each for ``hold_s`` at least, all within ``budget_s``.

    The next follows when the leakage is falling and below ``next_below_a``. It ends when the
    leakage has risen ``rise_rel`` above its least at this voltage; ``error_a`` is how much of
    that two readings may differ by in any case.
    """

    voltages_v: tuple[float, ...]
    hold_s: float
    next_below_a: float
    rise_rel: float
    budget_s: float
    error_a: float = 0.0


@dataclass(slots=True)
class Forming:
    """How far one part has come; ``formed_v`` is the last voltage that it has passed."""

    rule: FormingRule
    formed_v: float | None = None
    _began_s: float | None = None
    _voltage_v: float = 0.0
    _least_a: float = inf
    _last_a: float = inf

    def take(
        self, *, elapsed_s: float, since_voltage_s: float, voltage_v: float, net_a: float | None
    ) -> Step:
        """The next step after one reading; ``net_a`` is None or NaN where there is no number."""
        rule = self.rule
        if self._began_s is None:
            self._began_s = elapsed_s - since_voltage_s
        if voltage_v != self._voltage_v:
            self._voltage_v, self._least_a, self._last_a = voltage_v, inf, inf
        step = Step.WAIT
        if net_a is not None and not isnan(net_a):
            if net_a > self._least_a * (1.0 + rule.rise_rel) + rule.error_a:
                return Step.RISES
            falling = isfinite(self._last_a) and net_a <= (
                self._last_a * (1.0 + HOLDS_REL) + rule.error_a
            )
            if since_voltage_s >= rule.hold_s and falling and net_a <= rule.next_below_a:
                self.formed_v = voltage_v
                step = Step.DONE if voltage_v >= rule.voltages_v[-1] else Step.NEXT
            self._least_a, self._last_a = min(self._least_a, net_a), net_a
        if step is not Step.DONE and elapsed_s - self._began_s >= rule.budget_s:
            return Step.SPENT
        return step

    def after(self, voltage_v: float) -> float:
        """The voltage that follows this one (V); the last is followed by itself."""
        return next((v for v in self.rule.voltages_v if v > voltage_v), voltage_v)

    def left_s(self, elapsed_s: float) -> float:
        """What is left of the time (s)."""
        began_s = elapsed_s if self._began_s is None else self._began_s
        return max(self.rule.budget_s - (elapsed_s - began_s), 0.0)


def replayed(
    rule: FormingRule, readings: Iterable[tuple[float, float, float, float]]
) -> tuple[float | None, Step]:
    """The voltage that was passed last, and how it ended, from what was read.

    Each reading is (elapsed s, since its voltage s, voltage V, net current A).
    """
    forming, step = Forming(rule), Step.WAIT
    for elapsed_s, since_s, voltage_v, net_a in readings:
        step = forming.take(
            elapsed_s=elapsed_s, since_voltage_s=since_s, voltage_v=voltage_v, net_a=net_a
        )
    return forming.formed_v, step
