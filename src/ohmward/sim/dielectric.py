"""What a dielectric does: loss over frequency, absorption over hours, leakage, and its forming.

Loss and absorption are both rows of relaxations, a resistor and a capacitor in series each, so
that a part is the same R and C in the frequency and in the time domain.
"""

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache

# One relaxation per decade whose C is this share of C·tan δ makes the sum's loss tan δ:
# a density g per unit of ln τ has ε'' = (π/2)·g, so C_k = (2/π)·ln 10·C·tan δ.
BRANCH_SHARE = 2 / math.pi * math.log(10)
LOSS_DECADES = range(1, 9)
# Absorption: two relaxations per decade ripple a current that falls as 1/t by 0.2 %.
SLOW_TAUS_S = tuple(10 ** (half / 2) for half in range(-2, 13))
CHARGE_S, SHORT_S, READ_S = 900.0, 10.0, 900.0  # makers' method: charge, short, then read


@dataclass(frozen=True, slots=True)
class Relaxation:
    """A resistor and a capacitor in series."""

    ohm: float
    farad: float


def loss_at(loss: Sequence[tuple[float, float]], frequency_hz: float) -> float:
    """tan δ at a frequency: straight lines over log f, level outside the table."""
    if frequency_hz <= loss[0][0]:
        return loss[0][1]
    for (f1, d1), (f2, d2) in itertools.pairwise(loss):
        if frequency_hz <= f2:
            share = math.log(frequency_hz / f1) / math.log(f2 / f1)
            return d1 + share * (d2 - d1)
    return loss[-1][1]


def fast(loss: Sequence[tuple[float, float]], farad: float) -> tuple[Relaxation, ...]:
    """The relaxations of a capacitance that make its tan δ, by their corner from 10 Hz up."""
    found = []
    for decade in LOSS_DECADES:
        corner_hz = 10.0**decade
        branch_f = BRANCH_SHARE * loss_at(loss, corner_hz) * farad
        found.append(Relaxation(1 / (2 * math.pi * corner_hz * branch_f), branch_f))
    return tuple(found)


def slow(absorption: float, exponent: float, farad: float) -> tuple[Relaxation, ...]:
    """The relaxations that make dielectric absorption, from 0.1 s to 11 days.

    ``absorption`` is the share of the voltage that comes back by the makers' method;
    charging current falls as t^−``exponent`` (Curie and von Schweidler).
    """
    if not absorption:
        return ()
    share = absorption / _coming_back(exponent)
    return tuple(
        Relaxation(tau_s / (share * weight * farad), share * weight * farad)
        for tau_s, weight in zip(SLOW_TAUS_S, _weights(exponent), strict=True)
    )


@cache
def _weights(exponent: float) -> tuple[float, ...]:
    return tuple(tau_s ** (1.0 - exponent) for tau_s in SLOW_TAUS_S)


@cache
def _coming_back(exponent: float) -> float:
    """What comes back after charge, short and rest, over weights of 1, for a small absorption."""
    return sum(
        weight
        * -math.expm1(-CHARGE_S / tau_s)
        * math.exp(-SHORT_S / tau_s)
        * -math.expm1(-READ_S / tau_s)
        for tau_s, weight in zip(SLOW_TAUS_S, _weights(exponent), strict=True)
    )


@dataclass(frozen=True, kw_only=True, slots=True)
class Leakage:
    """The current that a dielectric lets through for good, by its three causes.

    Ohmic V/R, with R = ``insulation_ohm`` at 25 °C, less by ``per_k`` in the exponent; a weak
    spot that conducts only near the rated voltage, ``knee_a``·(V/U_R)^``knee_power``; and the
    ionic current of an oxide that was formed up to U_f, ``ionic_a``·(V/U_f)·10^(m·(V/U_f − 1)),
    which grows the oxide: dU_f/dt = I/(C·ξ). Figures and form are this simulator's own; that
    leakage doubles every 18 K is a maker's τ at 25 and 85 °C.
    """

    rated_v: float
    insulation_ohm: float
    per_k: float
    knee_a: float = 0.0
    knee_power: float = 12.0
    ionic_a: float = 0.0
    ionic_decades: float = 5.0

    def current_a(self, volts: float, temperature_c: float, formed_v: float) -> float:
        """Current at a voltage across the dielectric; odd in the voltage."""
        magnitude = abs(volts)
        warm = math.exp(self.per_k * (temperature_c - 25.0))
        amperes = magnitude / self.insulation_ohm
        if self.knee_a:
            amperes += self.knee_a * (magnitude / self.rated_v) ** self.knee_power
        amperes += self.ionic_at(magnitude, formed_v)
        return math.copysign(amperes * warm, volts)

    def ionic_at(self, volts: float, formed_v: float) -> float:
        """The ionic part of it at 25 °C, which forms the oxide."""
        if not self.ionic_a or volts <= 0.0:
            return 0.0
        over = volts / formed_v
        return self.ionic_a * over * 10 ** min(self.ionic_decades * (over - 1.0), 9.0)

    @property
    def is_linear(self) -> bool:
        """Whether it is a resistor, at one temperature."""
        return not (self.knee_a or self.ionic_a)
