"""One part under voltage: what it is to the circuit now, and what voltage does to it meanwhile.

Between events a part is R, C and L alone. Where its capacitance or leakage bend with the voltage,
they are taken as straight over a cell of voltage, and leaving the cell is an event; where they
drift with time (an oxide that forms, a part that warms up), they stand still until they would
have moved by a small share, and that instant is an event.
"""

import math
from bisect import bisect_right
from collections.abc import Sequence
from dataclasses import dataclass, field, replace

from ohmward.sim.build import relaxations
from ohmward.sim.dielectric import Leakage, Relaxation
from ohmward.sim.modes import Coil, Resistor, Store
from ohmward.sim.parts import PhysicalPart

# Stretches in which a part is straight, over the rated voltage or the one that it is formed to:
# a capacitance that falls with the voltage bends everywhere, a leakage only high up.
_EVEN = tuple(0.04 * step for step in range(101))
_RISING = (0.0, 0.4, 0.6, 0.7, *(0.74 + 0.04 * step for step in range(90)))
GROWN_SHARE = 1e-5  # of the formed voltage, below which growth is kept aside
DRIFT_SHARE = 0.1  # of the ionic current, between two looks at an oxide that forms
NOTABLE_K = 1.0
BREAKDOWN_OHM = 30.0
LEAKING_S = 10.0  # R·C of a part that has sprung a leak; sound film has a thousand times more
CLEARED_SHARE = 0.3  # of the voltage that a clearing spot takes
CLEARED_F = 2e-4  # share of the capacitance that goes with it


@dataclass(frozen=True, slots=True)
class Linear:
    """What a part is while its voltage stays between ``low_v`` and ``high_v``.

    ``offset_a`` is the leakage at 0 V of the straight line, ``conductance_s`` its slope.
    """

    farad: float = 0.0
    conductance_s: float = 0.0
    offset_a: float = 0.0
    branches: tuple[Relaxation, ...] = ()
    low_v: float = -math.inf
    high_v: float = math.inf


@dataclass(frozen=True, kw_only=True, slots=True)
class PartState:
    """What one part really is at an instant."""

    part_id: str
    voltage_v: float
    leakage_a: float
    formed_v: float
    temperature_c: float
    clears: int
    broken_down: bool
    vented: bool


@dataclass(slots=True)
class Stressed:
    """A part in a position, with what changes in it."""

    part: PhysicalPart
    ambient_c: float
    warmer_k: float = 0.0
    _grown_v: float = 0.0
    _leakage: Leakage | None = None
    _linear: dict[tuple[object, ...], Linear] = field(default_factory=dict)

    # ---- what it is

    @property
    def temperature_c(self) -> float:
        """Of its core."""
        return self.ambient_c + self.warmer_k

    @property
    def holds_voltage(self) -> bool:
        """Whether it is a capacitor."""
        return self.part.kind == "capacitor"

    def leakage(self) -> Leakage:
        """Its leakage, as it is now; what is formed is an argument of it."""
        if self._leakage is None:
            self._leakage = self._leaks()
        return self._leakage

    def _leaks(self) -> Leakage:
        figures = self.part.figures
        farad = figures.farad(20.0)
        drawn, model = figures.drawn, figures.model
        return Leakage(
            rated_v=figures.rated_v or 1.0,
            insulation_ohm=drawn.insulation_s / farad if drawn.insulation_s else 1e18,
            per_k=model.leakage_per_k,
            knee_a=drawn.knee_a,
            ionic_a=drawn.value * figures.rated_v / model.ionic_s if model.ionic_s else 0.0,
        )

    def cell(self, volts: float) -> tuple[float, float]:
        """The stretch of voltage around this one in which it is taken as straight."""
        figures, leakage = self.part.figures, self.leakage()
        if not self.holds_voltage or not (figures.half_v or not leakage.is_linear):
            return -math.inf, math.inf
        unit_v = self.unit_v
        edges = _EVEN if figures.half_v else _RISING
        place = bisect_right(edges, abs(volts) / unit_v)
        near = edges[place - 1] * unit_v
        far = edges[place] * unit_v if place < len(edges) else 1e3 * near
        if place == 1:
            return -far, far
        return (near, far) if volts > 0.0 else (-far, -near)

    @property
    def unit_v(self) -> float:
        """The voltage that its bends go by."""
        figures = self.part.figures
        return (figures.condition.formed_v or figures.rated_v) or 1.0

    def linear(self, volts: float) -> Linear:
        """What a capacitor is around a voltage across its dielectric."""
        low_v, high_v = self.cell(volts)
        warm_c = round(self.temperature_c, 1)
        key = (low_v, warm_c, self.part.figures.condition)
        found = self._linear.get(key)
        if found is None:
            if len(self._linear) > 512:
                self._linear.clear()
            found = self._linear[key] = self._made(low_v, high_v, warm_c)
        return found

    def _made(self, low_v: float, high_v: float, warm_c: float) -> Linear:
        figures, leakage = self.part.figures, self.leakage()
        formed_v = figures.condition.formed_v
        middle_v = (low_v + high_v) / 2 if figures.half_v else 0.0
        farad, fast, slow = relaxations(figures, middle_v, warm_c)
        farad += sum(branch.farad for branch in fast)
        if math.isinf(high_v):
            return Linear(farad, leakage.current_a(1.0, warm_c, formed_v), 0.0, slow)
        at_low = leakage.current_a(low_v, warm_c, formed_v)
        at_high = leakage.current_a(high_v, warm_c, formed_v)
        slope = (at_high - at_low) / (high_v - low_v)
        return Linear(farad, slope, at_low - slope * low_v, slow, low_v, high_v)

    # ---- the circuit that it is

    def elements(
        self, high: str, low: str, volts: float
    ) -> tuple[list[Resistor], list[Store], list[Coil]]:
        """The part between two nodes; its main capacitor is a store named by the part's id."""
        figures, name = self.part.figures, self.part.part_id
        core, warm_c = f"{name}.core", self.temperature_c
        resistors: list[Resistor] = []
        stores: list[Store] = []
        coils: list[Coil] = []
        if figures.drawn.gap_f:
            stores.append(Store(f"{name}.gap", high, f"{name}.gap", figures.drawn.gap_f))
            high = f"{name}.gap"
        if self.part.kind == "resistor":
            resistors.append(Resistor(high, low, figures.resistor_ohm(warm_c)))
        elif self.part.kind == "inductor":
            resistors.append(Resistor(high, core, figures.winding_ohm(warm_c)))
            coils.append(Coil(name, core, low, figures.drawn.value))
            resistors.append(Resistor(core, low, figures.core_ohm() or 1e6))
        else:
            linear = self.linear(volts)
            resistors.append(Resistor(high, core, max(figures.esr_ohm(warm_c), 1e-3)))
            if linear.conductance_s > 0.0:
                resistors.append(Resistor(core, low, 1.0 / linear.conductance_s))
            stores.append(Store(name, core, low, linear.farad))
            for number, branch in enumerate(linear.branches):
                node = f"{name}.{number}"
                resistors.append(Resistor(core, node, branch.ohm))
                stores.append(Store(node, node, low, branch.farad))
        for short_ohm in (figures.drawn.short_ohm, figures.condition.short_ohm):
            if short_ohm:
                resistors.append(Resistor(high, low, short_ohm))
        return resistors, stores, coils

    def key(self, volts: float) -> tuple[object, ...]:
        """Equal while ``elements`` are equal."""
        figures = self.part.figures
        cell = self.cell(volts)[0]
        warm_c = round(self.temperature_c, 1)
        return (self.part.part_id, id(self.part), cell, warm_c, figures.condition)

    # ---- what voltage does to it

    def live(self, volts: float, seconds: float) -> None:
        """Let time pass under a voltage across its dielectric: it forms, and it warms up."""
        if not self.holds_voltage or seconds <= 0.0:
            return
        figures, leakage = self.part.figures, self.leakage()
        formed_v = figures.condition.formed_v
        rate = self._forming_v_s(leakage, volts, formed_v)
        if rate > 0.0:
            # at a constant voltage I falls as e^(−β·U_f): U_f grows with the logarithm of time
            beta = self._beta(leakage, volts, formed_v)
            grown_v = math.log1p(beta * rate * seconds) / beta
            self._grown_v += grown_v
            if self._grown_v > GROWN_SHARE * formed_v:
                formed_v += self._grown_v
                self._grown_v = 0.0
                self.part.change(replace(figures.condition, formed_v=formed_v))
        aim_k = self._aim_k(leakage, volts, formed_v)
        if aim_k > 0.05 or self.warmer_k > 0.05:
            tau_s = figures.model.warm_s
            self.warmer_k = aim_k + (self.warmer_k - aim_k) * math.exp(-seconds / tau_s)
        else:
            self.warmer_k = 0.0

    def stands_for_s(self, volts: float) -> float:
        """How long what drifts in it may be taken as standing still."""
        if not self.holds_voltage:
            return math.inf
        figures, leakage = self.part.figures, self.leakage()
        formed_v = figures.condition.formed_v
        found = math.inf
        rate = self._forming_v_s(leakage, volts, formed_v)
        if rate > 1e-9 * formed_v:
            found = DRIFT_SHARE / (self._beta(leakage, volts, formed_v) * rate)
        away_k = abs(self._aim_k(leakage, volts, formed_v) - self.warmer_k)
        if away_k > NOTABLE_K:
            found = min(found, figures.model.warm_s * NOTABLE_K / away_k)
        return found

    def drift_a_s(self, volts: float) -> float:
        """How fast its leakage falls as its oxide grows, in A/s (negative)."""
        if not self.holds_voltage:
            return 0.0
        leakage, formed_v = self.leakage(), self.part.figures.condition.formed_v
        rate = self._forming_v_s(leakage, volts, formed_v)
        if not rate:
            return 0.0
        warm = math.exp(leakage.per_k * (self.temperature_c - 25.0))
        falls = self._beta(leakage, volts, formed_v) * rate
        return -falls * leakage.ionic_at(volts, formed_v) * warm

    @staticmethod
    def _beta(leakage: Leakage, volts: float, formed_v: float) -> float:
        """−d ln I/dU_f of the ionic current: m·ln 10·V/U_f² (1/V)."""
        return leakage.ionic_decades * math.log(10) * volts / formed_v**2

    def _forming_v_s(self, leakage: Leakage, volts: float, formed_v: float) -> float:
        """dU_f/dt = I/(C·ξ)."""
        model = self.part.figures.model
        if not model.forming_charge:
            return 0.0
        farad = self.part.figures.drawn.value
        return leakage.ionic_at(volts, formed_v) / (farad * model.forming_charge)

    def _aim_k(self, leakage: Leakage, volts: float, formed_v: float) -> float:
        """How much warmer than the air it would become: P·R_th."""
        model = self.part.figures.model
        if not model.warm_k_w or not volts:
            return 0.0
        amperes = leakage.current_a(volts, self.temperature_c, formed_v)
        return float(abs(volts * amperes) * model.warm_k_w)

    @property
    def breaks_v(self) -> float:
        """The voltage at which something gives way next: a weak spot, or the whole."""
        figures = self.part.figures
        condition = figures.condition
        if not self.holds_voltage or condition.broken_down or condition.vented:
            return math.inf
        weak = figures.drawn.weak_v[condition.clears :]
        return min([*weak, figures.drawn.breakdown_v])

    def give_way(self, volts: float) -> tuple[str, float]:
        """What happens at ``breaks_v``: the event, and the voltage that is left."""
        figures = self.part.figures
        condition = figures.condition
        weak: Sequence[float] = figures.drawn.weak_v[condition.clears :]
        if weak and weak[0] < figures.drawn.breakdown_v and figures.model.heals:
            self.part.change(
                replace(
                    condition,
                    clears=condition.clears + 1,
                    value_factor=condition.value_factor * (1.0 - CLEARED_F),
                )
            )
            return "cleared itself", volts * (1.0 - CLEARED_SHARE)
        self.short()
        return "breakdown", volts

    def spring_a_leak(self) -> None:
        """Something conducts across it from now on, a hundred times worse than any good part."""
        farad = self.part.figures.drawn.value
        leak_ohm = LEAKING_S / farad if farad else LEAKING_S
        self.part.change(replace(self.part.figures.condition, short_ohm=leak_ohm))

    def short(self) -> None:
        """It breaks down for good."""
        self.part.change(replace(self.part.figures.condition, short_ohm=BREAKDOWN_OHM))

    def vent_if_hot(self) -> bool:
        """Open with a bang where it has become too hot; says whether it did."""
        figures = self.part.figures
        hottest_c = figures.model.vents_c
        if not hottest_c or figures.condition.vented or self.temperature_c < hottest_c:
            return False
        self.part.change(replace(figures.condition, vented=True, value_factor=0.3, esr_factor=30.0))
        return True

    def state(self, volts: float) -> PartState:
        """What it really is now."""
        figures = self.part.figures
        condition = figures.condition
        return PartState(
            part_id=self.part.part_id,
            voltage_v=volts,
            leakage_a=(
                self.leakage().current_a(volts, self.temperature_c, condition.formed_v)
                if self.holds_voltage
                else 0.0
            ),
            formed_v=condition.formed_v,
            temperature_c=self.temperature_c,
            clears=condition.clears,
            broken_down=condition.broken_down,
            vented=condition.vented,
        )
