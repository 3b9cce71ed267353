"""How wrong a simulated impedance meter is: an error that stays, and noise that does not.

The error is drawn once per (seed, instrument, part), in magnitude and in phase apart, as a smooth
curve over frequency that stays within the figures and is spread evenly over them. The noise
is drawn anew for each reading.
"""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from itertools import pairwise
from statistics import NormalDist

Normal = Callable[..., float]  # (seed, *key) -> a standard normal number, the same each time

_CDF = NormalDist().cdf
_WAVES = (0.0, 0.15, 0.4)  # cycles per decade of frequency, of equal power
_REMEMBERED = 4096


@dataclass(frozen=True, kw_only=True, slots=True)
class MeterFigures:
    """What this very meter is like, as a physical file says it; half-widths and deviations.

    At frequency f and impedance Z the error of |Z| lies within::

        (magnitude(f) + short_ohm/|Z| + open_s·|Z|) · max(1, (full_level_v / level)^0.35)

    of |Z|, that of the phase within the same with phase(f), in rad; the level is the one that
    is set. ``frequency_rel`` is how far the frequency itself may be off. ``knots`` are (frequency,
    magnitude, phase), in between on straight lines over log f. ``noise`` is the relative
    standard deviation by aperture, raised by the same level factor. ``cable_m`` is the length
    of the leads as they are; None: as the meter is told.
    """

    knots: tuple[tuple[float, float, float], ...] = (
        (20.0, 9.0e-4, 9.0e-4),
        (100.0, 4.0e-4, 4.0e-4),
        (1.0e5, 4.0e-4, 4.0e-4),
        (1.0e6, 2.0e-3, 2.0e-3),
        (2.0e6, 4.0e-3, 4.0e-3),
    )
    short_ohm: float = 2.0e-4
    open_s: float = 5.0e-10
    full_level_v: float = 0.5
    noise: Mapping[str, float] = field(
        default_factory=lambda: {"SHOR": 6e-5, "MED": 2.5e-5, "LONG": 1e-5}
    )
    frequency_rel: float = 5.0e-5
    cable_m: float | None = None

    def half_widths(
        self, frequency_hz: float, impedance_ohm: float, level_v: float
    ) -> tuple[float, float]:
        """Half-widths of the error: relative in |Z|, and in rad."""
        magnitude, phase = self._basic(frequency_hz)
        ends = self.short_ohm / impedance_ohm + self.open_s * impedance_ohm
        factor = self.level_factor(level_v)
        return (magnitude + ends) * factor, (phase + ends) * factor

    def level_factor(self, level_v: float) -> float:
        """How much more a low level errs."""
        if level_v >= self.full_level_v:
            return 1.0
        return float((self.full_level_v / max(level_v, 1e-4)) ** 0.35)

    def _basic(self, frequency_hz: float) -> tuple[float, float]:
        knots = self.knots
        if frequency_hz <= knots[0][0]:
            return knots[0][1:]
        for low, high in pairwise(knots):
            if frequency_hz <= high[0]:
                share = math.log(frequency_hz / low[0]) / math.log(high[0] / low[0])
                return (
                    low[1] + share * (high[1] - low[1]),
                    low[2] + share * (high[2] - low[2]),
                )
        return knots[-1][1:]


class _SmoothDraw:
    """A number in −1 … +1 that depends smoothly on frequency, evenly spread at each of them.

    z = Σ √(1/n)·(A cos 2πwx + B sin 2πwx) over x = log10 f with normal A and B is standard
    normal at every x; 2Φ(z) − 1 is then uniform.
    """

    def __init__(self, normal: Normal, seed: int, *key: object) -> None:
        share = math.sqrt(1.0 / len(_WAVES))
        self._terms = tuple(
            (
                2.0 * math.pi * wave,
                share * normal(seed, *key, wave, "cosine"),
                share * normal(seed, *key, wave, "sine"),
            )
            for wave in _WAVES
        )

    def at(self, frequency_hz: float) -> float:
        x = math.log10(frequency_hz)
        z = sum(a * math.cos(w * x) + b * math.sin(w * x) for w, a, b in self._terms)
        return 2.0 * _CDF(z) - 1.0


class MeterError:
    """The error and the noise of one instrument under one seed."""

    def __init__(self, figures: MeterFigures, normal: Normal, seed: int, instrument: str) -> None:
        self.figures = figures
        self._normal = normal
        self._seed = seed
        self._instrument = instrument
        self._draws: dict[str, tuple[_SmoothDraw, _SmoothDraw]] = {}
        self._known: dict[tuple[str, float], tuple[float, float]] = {}
        drawn = 2.0 * _CDF(normal(seed, "frequency", instrument)) - 1.0
        self.frequency_ratio = 1.0 + figures.frequency_rel * drawn

    def share(self, part: str, frequency_hz: float) -> tuple[float, float]:
        """Which share (−1 … +1) of its half-widths the meter errs by, for this part."""
        found = self._known.get((part, frequency_hz))
        if found is None:
            if len(self._known) > _REMEMBERED:
                self._known.clear()
            magnitude, phase = self._curves(part)
            found = magnitude.at(frequency_hz), phase.at(frequency_hz)
            self._known[part, frequency_hz] = found
        return found

    def _curves(self, part: str) -> tuple[_SmoothDraw, _SmoothDraw]:
        found = self._draws.get(part)
        if found is None:
            key = ("accuracy", self._instrument, part)
            found = (
                _SmoothDraw(self._normal, self._seed, *key, "magnitude"),
                _SmoothDraw(self._normal, self._seed, *key, "phase"),
            )
            self._draws[part] = found
        return found

    def noise(self, part: str, reading: int) -> tuple[float, float]:
        """Two standard normal numbers for one reading: magnitude and phase."""
        normal, seed, name = self._normal, self._seed, self._instrument
        return (
            normal(seed, "noise", name, part, reading, "magnitude"),
            normal(seed, "noise", name, part, reading, "phase"),
        )
