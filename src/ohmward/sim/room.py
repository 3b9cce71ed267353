"""The air around a simulated bench."""

import math

_DAY_S = 86400.0


class SimulatedRoom:
    """A mean temperature with a swing over the day, and a steady humidity."""

    def __init__(self, temperature_c: float, swing_k: float, humidity_pct: float) -> None:
        self._temperature_c = temperature_c
        self._swing_k = swing_k
        self._humidity_pct = humidity_pct

    def temperature_c(self, now_s: float) -> float:
        """Air temperature: mean + swing · sin(2πt/day)."""
        if not self._swing_k:
            return self._temperature_c
        return self._temperature_c + self._swing_k * math.sin(2.0 * math.pi * now_s / _DAY_S)

    def humidity_pct(self, now_s: float) -> float:
        """Relative humidity in %."""
        return self._humidity_pct
