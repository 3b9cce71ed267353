"""Draws one part from its make: how far it is off, what its fault has done to it.

The same seed and part id draw the same part. A good part lies comfortably within its tolerance,
and no two are alike.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass

from ohmward.sim import noise
from ohmward.sim.physical import PartModel, PartTruth

REFERENCE_C = 20.0
LOST_CONTACT = "lost contact"


class UnknownFault(ValueError):
    """A physical file names a fault that no part can have."""


_ALL = ("capacitor", "inductor", "resistor")
FAULTS: Mapping[str, tuple[str, ...]] = {
    "": _ALL,
    "low": _ALL,
    "dried out": ("capacitor",),
    "shorted": _ALL,
    "open": _ALL,
    "wrong dielectric": ("capacitor",),
    "shorted turn": ("inductor",),
    # seen under voltage only
    "leaky at voltage": ("capacitor",),
    "badly formed": ("capacitor",),
    "unrecoverable": ("capacitor",),
    "absorbs too much": ("capacitor",),
    "breaks down": ("capacitor",),
    LOST_CONTACT: _ALL,
}
SWEEP_FAULTS = ("low", "dried out", "shorted", "open", "wrong dielectric", "shorted turn")


@dataclass(frozen=True, kw_only=True, slots=True)
class Drawn:
    """The figures of one drawn part: value in F, H or ohm, and what comes with it.

    ``insulation_s`` is R·C of the insulation at 25 °C (0: none); ``breakdown_v`` the voltage
    that it does not stand (infinite: none within reach); ``weak_v`` the voltages at which a
    weak spot clears itself, rising; ``formed_v`` up to where an oxide is formed at first.
    """

    value: float
    esr_ohm: float = 0.0
    short_ohm: float = 0.0
    gap_f: float = 0.0
    turn_coupling: float = 0.0
    insulation_s: float = 0.0
    knee_a: float = 0.0
    absorption: float = 0.0
    breakdown_v: float = math.inf
    weak_v: tuple[float, ...] = ()
    formed_v: float = 0.0


@dataclass(frozen=True, kw_only=True, slots=True)
class Condition:
    """What voltage has done to a part since it was drawn."""

    formed_v: float = 0.0
    short_ohm: float = 0.0
    value_factor: float = 1.0
    esr_factor: float = 1.0
    clears: int = 0
    vented: bool = False

    @property
    def broken_down(self) -> bool:
        """Whether a breakdown has shorted it for good."""
        return self.short_ohm > 0.0


def draw(
    model: PartModel,
    truth: PartTruth,
    *,
    nominal: float,
    tolerance: float,
    rated_v: float,
    seed: int,
    part_id: str,
) -> Drawn:
    """One part of a make. Raises UnknownFault for a fault that its kind cannot have."""
    if model.kind not in FAULTS.get(truth.fault, ()):
        raise UnknownFault(f"{part_id}: no {model.kind} is {truth.fault!r}")

    def limited(name: str, deviation: float, most: float) -> float:
        drawn = noise.normal(seed, "part", part_id, name) * deviation
        return max(-most, min(most, drawn))

    value = nominal * (1 + tolerance * limited("value", model.spread, model.spread_most))
    esr = max(model.esr_least_ohm, model.esr_ohm_f / nominal if model.kind == "capacitor" else 0.0)
    esr *= 1 + limited("esr", model.esr_spread, 2.5 * model.esr_spread)
    weight = truth.severity
    short = gap = coupling = knee = 0.0
    insulation_s = model.tau_s * math.exp(limited("insulation", 0.25, 0.5))
    absorption = model.absorption * math.exp(limited("absorption", 0.1, 0.25))
    breakdown = model.breakdown_rated * (1 + limited("breakdown", 0.06, 0.15))
    formed = (0.99 + limited("formed", 0.015, 0.03)) if model.ionic_s else 0.0
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
        case "leaky at voltage":
            knee = 100 * weight * value * rated_v / (insulation_s or 1e3)
        case "badly formed":
            formed *= max(1 - 0.5 * weight, 0.1)
        case "unrecoverable":
            formed *= max(1 - 0.5 * weight, 0.1)
            insulation_s = 4.0 / weight
        case "absorbs too much":
            absorption *= 1 + 8 * weight
        case "breaks down":
            breakdown = 1.1 + 0.08 * noise.uniform(seed, "part", part_id, "weak") / weight
    return Drawn(
        value=value,
        esr_ohm=esr,
        short_ohm=short,
        gap_f=gap,
        turn_coupling=coupling,
        insulation_s=insulation_s,
        knee_a=knee,
        absorption=absorption,
        breakdown_v=breakdown * rated_v or math.inf,
        weak_v=tuple(sorted(share * rated_v for share in truth.clears)),
        formed_v=formed * rated_v,
    )
