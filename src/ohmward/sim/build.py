"""Builds the linear network that a drawn part is at one bias, temperature and condition."""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass

from ohmward.sim import dielectric
from ohmward.sim.draw import REFERENCE_C, Condition, Drawn
from ohmward.sim.network import C, L, Network, Parallel, R, Series
from ohmward.sim.physical import PartModel

REFERENCE_HZ = 1000.0
UNFORMED_C = 0.25  # by how much a thinner oxide raises C: this simulator's own figure


@dataclass(frozen=True, kw_only=True, slots=True)
class Figures:
    """All that a part's behaviour hangs on."""

    model: PartModel
    drawn: Drawn
    rated_v: float
    rated_a: float
    condition: Condition

    def at_bias(self, bias_v: float) -> float:
        """C at this DC voltage over C at none: 1/(1 + (V/V_half)²)."""
        half = self.half_v
        return 1 / (1 + (bias_v / half) ** 2) if half else 1.0

    @property
    def half_v(self) -> float:
        """The DC voltage that halves C; 0 where none does."""
        return self.model.bias_half_v or self.model.bias_half_rated * self.rated_v

    def at_current(self, bias_a: float) -> float:
        """L at this direct current over L at none: 70 % at the saturation current."""
        saturation = self.model.saturation_rated * self.rated_a
        return 1 / (1 + (1 / 0.7 - 1) * (bias_a / saturation) ** 2) if saturation else 1.0

    def farad(self, temperature_c: float) -> float:
        """C at 1 kHz without bias, as the part is now."""
        c = self.drawn.value * (1 + self.model.temperature_per_k * (temperature_c - REFERENCE_C))
        if self.condition.formed_v:
            c *= 1 + UNFORMED_C * max(0.0, 1 - self.condition.formed_v / self.rated_v)
        return c * self.condition.value_factor

    def esr_ohm(self, temperature_c: float) -> float:
        """Resistance of plates, leads and electrolyte."""
        warm = math.exp(self.model.esr_per_k * (temperature_c - REFERENCE_C))
        return self.drawn.esr_ohm * warm * self.condition.esr_factor

    def winding_ohm(self, temperature_c: float) -> float:
        """An inductor's resistance to direct current."""
        copper = 1 + 3.93e-3 * (temperature_c - REFERENCE_C)  # annealed copper, from memory
        ohm = max(self.model.winding_least_ohm, self.model.winding_ohm_h * self.drawn.value)
        return ohm * copper

    def core_ohm(self) -> float:
        """What an inductor's core loss is as a resistor across its inductance; 0: none."""
        return self.model.q_peak * 2 * math.pi * 10e3 * self.drawn.value

    def resistor_ohm(self, temperature_c: float) -> float:
        """A resistor's value."""
        return self.drawn.value * (1 + self.model.temperature_per_k * (temperature_c - REFERENCE_C))


def relaxations(
    part: Figures, bias_v: float, temperature_c: float
) -> tuple[float, tuple[dielectric.Relaxation, ...], tuple[dielectric.Relaxation, ...]]:
    """Of a capacitor: C without relaxations (F), the fast ones, and the slow ones.

    C at 1 kHz is what was drawn, so that what has relaxed by then is taken off the first. The
    slow ones do not feel the bias.
    """
    model, whole = part.model, part.farad(temperature_c)
    c = whole * part.at_bias(bias_v)
    fast = dielectric.fast(model.loss, c) if model.loss else ()
    slow = dielectric.slow(part.drawn.absorption, model.absorption_exponent, whole)
    for branch in fast:
        corner_hz = 1 / (2 * math.pi * branch.ohm * branch.farad)
        c -= branch.farad / (1 + (REFERENCE_HZ / corner_hz) ** 2)
    return c, fast, slow


def _capacitor(part: Figures, bias_v: float, temperature_c: float, bias_a: float) -> Network:
    c, fast, slow = relaxations(part, bias_v, temperature_c)
    members: list[Network] = [Series(R(branch.ohm), C(branch.farad)) for branch in (*fast, *slow)]
    members.append(C(c))
    if part.drawn.insulation_s:
        members.append(R(part.drawn.insulation_s / part.farad(temperature_c)))
    ends: list[Network] = []
    esr = part.esr_ohm(temperature_c)
    if esr:
        ends.append(R(esr))
    if part.model.esl_h:
        ends.append(L(part.model.esl_h))
    return Series(*ends, Parallel(*members))


def _inductor(part: Figures, bias_v: float, temperature_c: float, bias_a: float) -> Network:
    model, drawn = part.model, part.drawn
    warmer = temperature_c - REFERENCE_C
    henry = drawn.value * part.at_current(bias_a) * (1 + model.temperature_per_k * warmer)
    winding = part.winding_ohm(temperature_c)
    skin = Parallel(R(2 * winding), L(2 * winding / (2 * math.pi * 50e3)))
    core: list[Network] = [_core(henry, drawn.turn_coupling)]
    if model.q_peak:
        core.append(R(part.core_ohm()))
    inner = Series(R(winding), skin, Parallel(*core))
    if not model.self_resonance_hz_h:
        return inner
    own_f = 1 / (4 * math.pi**2 * model.self_resonance_hz_h**2)  # f0 = k/√L gives C = 1/(4π²k²)
    return Parallel(inner, C(own_f))


def _core(henry: float, coupling: float) -> Network:
    """The winding's inductance; a shorted turn is a loaded secondary seen from it.

    With coupling k: leakage (1 − k²)·L in series with k²·L beside the reflected resistance;
    ``coupling`` is k².
    """
    if not coupling:
        return L(henry)
    shared = coupling * henry
    return Series(L(henry - shared), Parallel(L(shared), R(2 * math.pi * 300.0 * shared)))


def _resistor(part: Figures, bias_v: float, temperature_c: float, bias_a: float) -> Network:
    model, ohm = part.model, part.resistor_ohm(temperature_c)
    body: Network = Parallel(R(ohm), C(model.stray_f)) if model.stray_f else R(ohm)
    return Series(L(model.esl_h), body) if model.esl_h else body


BUILD: Mapping[str, Callable[[Figures, float, float, float], Network]] = {
    "capacitor": _capacitor,
    "inductor": _inductor,
    "resistor": _resistor,
}
