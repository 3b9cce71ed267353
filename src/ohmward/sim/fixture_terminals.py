"""Between the meter's leads: relays, the fixture's positions, and the parts that lie in them."""

import cmath
import math
from collections.abc import Mapping, Sequence
from typing import Protocol

from ohmward.sim.terminals import Relays

_NOTHING = complex(math.inf, 0.0)


class Part(Protocol):
    """A part as it really is."""

    def impedance(
        self,
        frequency_hz: float,
        bias_v: float,
        level_v: float,
        temperature_c: float,
        bias_a: float = 0.0,
    ) -> complex:
        """Impedance in ohm under these conditions."""

    def resistance_dc_ohm(self) -> float:
        """Resistance to direct current; infinite for a perfect insulator."""


class Clips(Protocol):
    """What a position adds to its part: R and L in series, C and G across it."""

    @property
    def series_ohm(self) -> float:
        """Resistance of leads and clips."""

    @property
    def series_h(self) -> float:
        """Inductance of leads and clips."""

    @property
    def stray_f(self) -> float:
        """Capacitance across the part."""

    @property
    def stray_s(self) -> float:
        """Conductance across the part."""


class Air(Protocol):
    """The room, as parts feel it."""

    def temperature_c(self, now_s: float) -> float:
        """Air temperature in °C."""


class Connected:
    """One set of parts between the leads: in parallel, each through its own clips."""

    def __init__(self, parts: Mapping[str, Part], clips: Clips) -> None:
        self.key = "+".join(parts)
        self.temperature_c = 23.0
        self._parts = tuple(parts.values())
        self._only = self._parts[0] if len(self._parts) == 1 else None
        self._clips = clips
        self._clips_hz = math.nan
        self._series = self._stray = 0j
        self._direct_ohm: float | None = None

    def impedance(
        self, frequency_hz: float, level_v: float, bias_v: float, bias_a: float
    ) -> complex:
        """Impedance in ohm at the meter's leads."""
        only = self._only
        if only is not None:
            z = only.impedance(frequency_hz, bias_v, level_v, self.temperature_c, bias_a)
            return self._in_clips(z, frequency_hz)
        if not self._parts:
            return self.open_impedance(frequency_hz)
        total = 0j
        for part in self._parts:
            z = part.impedance(frequency_hz, bias_v, level_v, self.temperature_c, bias_a)
            z = self._in_clips(z, frequency_hz)
            if z == 0:
                return 0j
            total += 1.0 / z
        return 1.0 / total

    def _in_clips(self, z: complex, frequency_hz: float) -> complex:
        if frequency_hz != self._clips_hz:
            clips, w = self._clips, 2.0 * math.pi * frequency_hz
            self._clips_hz = frequency_hz
            self._series = complex(clips.series_ohm, w * clips.series_h)
            self._stray = complex(clips.stray_s, w * clips.stray_f)
        if z == 0:
            return self._series
        admittance = self._stray
        if cmath.isfinite(z):
            admittance += 1.0 / z
        return self._series + 1.0 / admittance if admittance else _NOTHING

    def resistance_dc_ohm(self) -> float:
        """Resistance to direct current at no bias."""
        if self._direct_ohm is None:
            siemens = self._clips.stray_s
            for part in self._parts:
                ohm = part.resistance_dc_ohm()
                siemens += 1.0 / ohm if ohm else math.inf
            across = 1.0 / siemens if siemens else math.inf
            self._direct_ohm = self._clips.series_ohm + across
        return self._direct_ohm

    def short_impedance(self, frequency_hz: float) -> complex:
        """The clips shorted."""
        return self._in_clips(0j, frequency_hz)

    def open_impedance(self, frequency_hz: float) -> complex:
        """The clips empty."""
        return self._in_clips(_NOTHING, frequency_hz)


class FixtureTerminals:
    """The meter's leads, through the relays, to whatever position they reach.

    A position is connected when all of its contacts are closed. One without contacts is
    connected always: its part has been put there by hand.
    """

    def __init__(
        self,
        contacts: Relays,
        positions: Mapping[str, Sequence[str]],
        clips: Clips,
        air: Air,
    ) -> None:
        self._contacts = contacts
        self._positions = {name: frozenset(channels) for name, channels in positions.items()}
        self._clips = clips
        self._air = air
        self._parts: dict[str, dict[str, Part]] = {name: {} for name in positions}
        self._known: dict[frozenset[str], Connected] = {}
        self._loaded_s = -math.inf

    def load(self, position: str, parts: Mapping[str, Part], now_s: float = -math.inf) -> None:
        """Put these parts, and no others, into a position; KeyError if there is none so called."""
        if position not in self._positions:
            raise KeyError(position)
        self._parts[position] = dict(parts)
        self._known.clear()
        self._loaded_s = max(self._loaded_s, now_s)

    def connection(self, now_s: float) -> Connected:
        """What is connected now."""
        closed = self._contacts.closed(now_s)
        found = self._known.get(closed)
        if found is None:
            parts: dict[str, Part] = {}
            for name, channels in self._positions.items():
                if channels <= closed:
                    parts |= self._parts[name]
            found = self._known[closed] = Connected(parts, self._clips)
        # in steps that a part does not feel, so that it need not be solved anew each time
        found.temperature_c = round(self._air.temperature_c(now_s), 2)
        return found

    def changed_s(self, now_s: float) -> float:
        """When a contact moved, or a part was put in, last."""
        return max(self._contacts.changed_s(now_s), self._loaded_s)
