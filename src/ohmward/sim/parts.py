"""Simulated parts: one is drawn from its model by the seed, then behaves as a linear network.

A part's network is rebuilt when bias or temperature change and solved at each new frequency;
both are remembered, so that a reading at a standing point costs next to nothing.
"""

import itertools
import math
from collections.abc import Mapping
from dataclasses import dataclass

from ohmward.sim import noise
from ohmward.sim.network import C, L, Network, Parallel, R, Series
from ohmward.sim.physical import PartModel, PartTruth
from ohmward.sim.views import views_of

REFERENCE_HZ = 1000.0
REFERENCE_C = 20.0
LOSS_DECADES = range(-2, 9)
# One relaxation per decade whose C is this share of C·tan δ makes the sum's loss tan δ:
# a density g per unit of ln τ has ε'' = (π/2)·g, so C_k = (2/π)·ln 10·C·tan δ.
BRANCH_SHARE = 2 / math.pi * math.log(10)
_REMEMBERED = 4096


class UnknownFault(ValueError):
    """A physical file names a fault that no part can have."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Drawn:
    """The figures of one drawn part: value in F, H or ohm, and what comes with it."""

    value: float
    esr_ohm: float = 0.0
    short_ohm: float = 0.0
    gap_f: float = 0.0
    turn_coupling: float = 0.0


FAULTS: Mapping[str, tuple[str, ...]] = {
    "": ("capacitor", "inductor", "resistor"),
    "low": ("capacitor", "inductor", "resistor"),
    "dried out": ("capacitor",),
    "shorted": ("capacitor", "inductor", "resistor"),
    "open": ("capacitor", "inductor", "resistor"),
    "wrong dielectric": ("capacitor",),
    "shorted turn": ("inductor",),
}


class PhysicalPart:
    """One part: its impedance at any condition, and the true value of any quantity."""

    def __init__(
        self,
        *,
        part_id: str,
        model: PartModel,
        truth: PartTruth,
        nominal: float,
        tolerance: float,
        rated_v: float,
        rated_a: float,
        seed: int,
    ) -> None:
        if model.kind not in FAULTS.get(truth.fault, ()):
            raise UnknownFault(f"{part_id}: no {model.kind} is {truth.fault!r}")
        self.part_id = part_id
        self.kind = model.kind
        self.fault = truth.fault
        self._model = model
        self._rated_v = rated_v
        self._rated_a = rated_a
        self._drawn = _draw(model, truth, nominal, tolerance, seed, part_id)
        self._networks: dict[tuple[float, float, float], Network] = {}
        self._solved: dict[tuple[float, float, float, float], complex] = {}

    def impedance(
        self,
        frequency_hz: float,
        bias_v: float = 0.0,
        level_v: float = 0.0,
        temperature_c: float = REFERENCE_C,
        bias_a: float = 0.0,
    ) -> complex:
        """Impedance in ohm at the part's terminals; ``level_v`` is too small to matter here."""
        temperature_c = round(temperature_c, 2)  # a room drifts; a hundredth of a kelvin is nothing
        key = (frequency_hz, bias_v, temperature_c, bias_a)
        found = self._solved.get(key)
        if found is None:
            if len(self._solved) >= _REMEMBERED:
                self._solved.clear()
            network = self.network(bias_v, temperature_c, bias_a)
            found = self._solved[key] = network.impedance(2j * math.pi * frequency_hz)
        return found

    def resistance_dc_ohm(self) -> float:
        """Resistance to direct current, in ohm; infinite for a perfect insulator."""
        return self.network(0.0, REFERENCE_C, 0.0).impedance(0j).real

    def network(self, bias_v: float, temperature_c: float, bias_a: float) -> Network:
        """The linear network that the part is at this bias and temperature."""
        key = (bias_v, temperature_c, bias_a)
        found = self._networks.get(key)
        if found is None:
            if len(self._networks) >= _REMEMBERED:
                self._networks.clear()
            build = {"capacitor": _capacitor, "inductor": _inductor, "resistor": _resistor}
            found = build[self.kind](self, *key)
            if self._drawn.short_ohm:
                found = Parallel(found, R(self._drawn.short_ohm))
            if self._drawn.gap_f:
                found = Series(found, C(self._drawn.gap_f))
            self._networks[key] = found
        return found

    def truth(
        self,
        quantity: str,
        *,
        frequency_hz: float = math.nan,
        bias_v: float = 0.0,
        level_v: float = 0.0,
        bias_a: float = 0.0,
        temperature_c: float = REFERENCE_C,
    ) -> float:
        """The true value of a quantity, SI; NaN where the part has none."""
        if quantity == "self_resonance_hz":
            return self._self_resonance_hz(bias_v, temperature_c, bias_a)
        if quantity in ("capacitance_change", "inductance_change"):
            name = quantity.replace("_change", "_f" if quantity.startswith("c") else "_h")
            here = self._views(frequency_hz, bias_v, temperature_c, bias_a).get(name, math.nan)
            least = self._views(frequency_hz, 0.0, temperature_c, 0.0).get(name, math.nan)
            return here / least - 1
        return self._views(frequency_hz, bias_v, temperature_c, bias_a).get(quantity, math.nan)

    def _views(
        self, frequency_hz: float, bias_v: float, temperature_c: float, bias_a: float
    ) -> dict[str, float]:
        z = self.impedance(frequency_hz, bias_v, 0.0, temperature_c, bias_a)
        return views_of(z, frequency_hz) if math.isfinite(z.real) else {}

    def _self_resonance_hz(self, bias_v: float, temperature_c: float, bias_a: float) -> float:
        """The lowest frequency from 1 Hz to 10 GHz at which X changes sign, by bisection."""
        network = self.network(bias_v, temperature_c, bias_a)

        def reactance(frequency_hz: float) -> float:
            return network.impedance(2j * math.pi * frequency_hz).imag

        grid = [10 ** (step / 20) for step in range(201)]
        for low, high in itertools.pairwise(grid):
            below = reactance(low) < 0
            if below == (reactance(high) < 0):
                continue
            for _ in range(60):
                middle = math.sqrt(low * high)
                low, high = (middle, high) if (reactance(middle) < 0) == below else (low, middle)
            return math.sqrt(low * high)
        return math.nan

    # What the builders below need.

    @property
    def drawn(self) -> Drawn:
        """The figures that were drawn for this part."""
        return self._drawn

    @property
    def model(self) -> PartModel:
        """The make that this part is of."""
        return self._model

    def at_bias(self, bias_v: float) -> float:
        """C at this DC voltage over C at none: 1/(1 + (V/V_half)²)."""
        half = self._model.bias_half_v or self._model.bias_half_rated * self._rated_v
        return 1 / (1 + (bias_v / half) ** 2) if half else 1.0

    def at_current(self, bias_a: float) -> float:
        """L at this direct current over L at none: 70 % at the saturation current."""
        saturation = self._model.saturation_rated * self._rated_a
        return 1 / (1 + (1 / 0.7 - 1) * (bias_a / saturation) ** 2) if saturation else 1.0


def _draw(
    model: PartModel, truth: PartTruth, nominal: float, tolerance: float, seed: int, part_id: str
) -> Drawn:
    def limited(name: str, deviation: float, most: float) -> float:
        drawn = noise.normal(seed, "part", part_id, name) * deviation
        return max(-most, min(most, drawn))

    value = nominal * (1 + tolerance * limited("value", model.spread, model.spread_most))
    esr = max(model.esr_least_ohm, model.esr_ohm_f / nominal if model.kind == "capacitor" else 0.0)
    esr *= 1 + limited("esr", model.esr_spread, 2.5 * model.esr_spread)
    weight = truth.severity
    short = gap = coupling = 0.0
    match truth.fault:
        case "low":
            value *= 1 - 0.35 * weight
        case "dried out":
            value *= 1 - 0.45 * weight
            esr *= 1 + 9 * weight
        case "shorted":
            short = 0.4 / weight
        case "open":
            gap = 0.4e-12 / weight
        case "shorted turn":
            coupling = min(0.45 * weight, 0.95)
    return Drawn(value=value, esr_ohm=esr, short_ohm=short, gap_f=gap, turn_coupling=coupling)


def _loss_at(loss: tuple[tuple[float, float], ...], frequency_hz: float) -> float:
    """tan δ at a frequency: straight lines over log f, level outside the table."""
    if frequency_hz <= loss[0][0]:
        return loss[0][1]
    for (f1, d1), (f2, d2) in itertools.pairwise(loss):
        if frequency_hz <= f2:
            share = math.log(frequency_hz / f1) / math.log(f2 / f1)
            return d1 + share * (d2 - d1)
    return loss[-1][1]


def _capacitor(part: PhysicalPart, bias_v: float, temperature_c: float, bias_a: float) -> Network:
    model, drawn = part.model, part.drawn
    warmer = temperature_c - REFERENCE_C
    c = drawn.value * part.at_bias(bias_v) * (1 + model.temperature_per_k * warmer)
    members: list[Network] = []
    relaxing_at_reference = 0.0
    if model.loss:
        for decade in LOSS_DECADES:
            corner_hz = 10.0**decade
            branch_f = BRANCH_SHARE * _loss_at(model.loss, corner_hz) * c
            branch_ohm = 1 / (2 * math.pi * corner_hz * branch_f)
            members.append(Series(R(branch_ohm), C(branch_f)))
            relaxing_at_reference += branch_f / (1 + (REFERENCE_HZ / corner_hz) ** 2)
    members.append(C(c - relaxing_at_reference))
    if model.tau_s:
        members.append(R(model.tau_s / c))
    esr = drawn.esr_ohm * math.exp(model.esr_per_k * warmer)
    ends: list[Network] = [R(esr)] if esr else []
    if model.esl_h:
        ends.append(L(model.esl_h))
    return Series(*ends, Parallel(*members))


def _inductor(part: PhysicalPart, bias_v: float, temperature_c: float, bias_a: float) -> Network:
    model, drawn = part.model, part.drawn
    warmer = temperature_c - REFERENCE_C
    henry = drawn.value * part.at_current(bias_a) * (1 + model.temperature_per_k * warmer)
    copper = 1 + 3.93e-3 * warmer  # annealed copper, IEC 60028, from memory
    winding = max(model.winding_least_ohm, model.winding_ohm_h * drawn.value) * copper
    skin = Parallel(R(2 * winding), L(2 * winding / (2 * math.pi * 50e3)))
    core: list[Network] = [_core(henry, drawn.turn_coupling)]
    if model.q_peak:
        core.append(R(model.q_peak * 2 * math.pi * 10e3 * drawn.value))
    inner = Series(R(winding), skin, Parallel(*core))
    if not model.self_resonance_hz_h:
        return inner
    own_f = 1 / (4 * math.pi**2 * model.self_resonance_hz_h**2)  # f0 = k/√L gives C = 1/(4π²k²)
    return Parallel(inner, C(own_f))


def _core(henry: float, coupling: float) -> Network:
    """The winding's inductance; a shorted turn is a loaded secondary seen from it.

    With coupling k: leakage (1 − k²)·L in series with k²·L beside the reflected resistance.
    """
    if not coupling:
        return L(henry)
    shared = coupling * henry
    return Series(L(henry - shared), Parallel(L(shared), R(2 * math.pi * 300.0 * shared)))


def _resistor(part: PhysicalPart, bias_v: float, temperature_c: float, bias_a: float) -> Network:
    model, drawn = part.model, part.drawn
    ohm = drawn.value * (1 + model.temperature_per_k * (temperature_c - REFERENCE_C))
    body: Network = Parallel(R(ohm), C(model.stray_f)) if model.stray_f else R(ohm)
    return Series(L(model.esl_h), body) if model.esl_h else body
