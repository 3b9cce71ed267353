"""Open, short and load standards as they really are, with the scatter of their contacts."""

import math
from dataclasses import dataclass

from ohmward.sim.noise import normal

KINDS = ("open", "short", "load")


@dataclass(frozen=True, kw_only=True, slots=True)
class StandardTruth:
    """A standard: R and L in series, C across both; an open has its C alone.

    ``contact_ohm`` and ``contact_h`` are standard deviations over insertions.
    """

    series_ohm: float = 0.0
    series_h: float = 0.0
    stray_f: float = 0.0
    contact_ohm: float = 0.0
    contact_h: float = 0.0


IDEAL = {
    "open": StandardTruth(),
    "short": StandardTruth(),
    "load": StandardTruth(series_ohm=100.0),
}


class Standard:
    """One standard as it lies in a position after one insertion; its contacts drawn by the key."""

    def __init__(self, kind: str, truth: StandardTruth, seed: int, *key: object) -> None:
        if kind not in KINDS:
            raise ValueError(f"there is no {kind} among {', '.join(KINDS)}")
        self._open = kind == "open"
        self._truth = truth
        self._contact_ohm = truth.contact_ohm * normal(seed, "contact", kind, *key, "ohm")
        self._contact_h = truth.contact_h * normal(seed, "contact", kind, *key, "henry")

    def impedance(
        self,
        frequency_hz: float,
        bias_v: float,
        level_v: float,
        temperature_c: float,
        bias_a: float = 0.0,
    ) -> complex:
        """Impedance in ohm; a standard minds nothing but the frequency."""
        w = 2.0 * math.pi * frequency_hz
        across = complex(0.0, w * self._truth.stray_f)
        if self._open:
            return 1.0 / across if across else complex(math.inf, 0.0)
        z = complex(self._truth.series_ohm, w * self._truth.series_h)
        if z and across:
            z = 1.0 / (1.0 / z + across)
        return z + complex(self._contact_ohm, w * self._contact_h)

    def resistance_dc_ohm(self) -> float:
        """Resistance to direct current."""
        return math.inf if self._open else self._truth.series_ohm + self._contact_ohm
