"""Terminals with nothing connected, for instruments that a bench has and nobody has wired."""

import math


class OpenSupply:
    """A supply's output into nothing: its own capacitance, and what drains it.

    On, it moves to its level at the slew; a one-quadrant supply comes down only as its bleeder
    lets it, V·e^(−t/RC), and so does any supply that is off, through its off-state resistance.
    """

    def __init__(self, *, drain_ohm: float, output_f: float, two_quadrant: bool = False) -> None:
        self._tau_s = drain_ohm * output_f
        self._two_quadrant = two_quadrant
        self._level_v = 0.0
        self._slew_v_per_s = math.inf
        self._on = False
        self._until_s = math.inf
        self._from_v = 0.0
        self._from_s = 0.0
        self.interlock = True

    def order(
        self,
        now_s: float,
        *,
        level_v: float,
        slew_v_per_s: float,
        limit_a: float,
        on: bool,
        until_s: float,
    ) -> None:
        """Aim at another level from the voltage that there is now."""
        self._from_v = self.voltage_v(now_s)
        self._from_s = now_s
        self._level_v, self._slew_v_per_s = level_v, slew_v_per_s
        self._on, self._until_s = on, until_s

    def voltage_v(self, now_s: float) -> float:
        """Voltage at the terminals."""
        off_s = self._until_s if self._on else self._from_s
        if now_s <= off_s:
            return self._driven_v(now_s)
        start_v = self._driven_v(off_s) if self._on else self._from_v
        return start_v * math.exp(-(now_s - off_s) / self._tau_s)

    def _driven_v(self, now_s: float) -> float:
        if not self._on:
            return self._from_v
        elapsed_s = now_s - self._from_s
        way_v = self._level_v - self._from_v
        reach_v = self._slew_v_per_s * elapsed_s
        if abs(way_v) <= reach_v:
            ordered_v = self._level_v
        else:
            ordered_v = self._from_v + math.copysign(reach_v, way_v)
        if self._two_quadrant or way_v >= 0.0:
            return ordered_v
        return max(ordered_v, self._from_v * math.exp(-elapsed_s / self._tau_s))

    def current_a(self, now_s: float) -> float:
        """None: nothing is connected."""
        return 0.0

    def limiting(self, now_s: float) -> bool:
        """Never into nothing."""
        return False

    def interlock_closed(self, now_s: float) -> bool:
        """As it was left."""
        return self.interlock


class OpenInput:
    """The input of a current meter or a voltmeter with nothing connected."""

    def current_a(self, now_s: float) -> float:
        """None."""
        return 0.0

    def voltage_v(self, now_s: float) -> float:
        """None."""
        return 0.0

    def resistance_ohm(self, now_s: float) -> float:
        """Infinite."""
        return math.inf

    def load(self, now_s: float, ohm: float) -> None:
        """Nothing follows."""


class OpenCircuit:
    """A bench whose high-voltage side nobody has wired: every port of it is open.

    ``interlock`` is the enclosure's door, for whoever plays with it.
    """

    interlock = True

    def supply(
        self, name: str, *, drain_ohm: float, output_f: float, two_quadrant: bool = False
    ) -> OpenSupply:
        """The terminals of a supply."""
        return OpenSupply(drain_ohm=drain_ohm, output_f=output_f, two_quadrant=two_quadrant)

    def current_input(self, name: str) -> OpenInput:
        """The input of a current meter."""
        return OpenInput()

    def voltage_input(self, name: str) -> OpenInput:
        """The input of a voltmeter."""
        return OpenInput()

    def interlock_closed(self, now_s: float) -> bool:
        """As it was left."""
        return self.interlock
