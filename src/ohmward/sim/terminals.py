"""What an instrument sees of the bench: the ends of its leads, and the room it stands in."""

from collections.abc import Iterable
from typing import Protocol


class Connection(Protocol):
    """What lies between an impedance meter's leads, the fixture included."""

    key: str
    """Names what is connected: the part ids, joined; empty for an open fixture."""

    def impedance(
        self, frequency_hz: float, level_v: float, bias_v: float, bias_a: float
    ) -> complex:
        """Impedance in ohm at this rms level and DC bias; infinite when there is nothing."""

    def resistance_dc_ohm(self) -> float:
        """Resistance to direct current, in ohm; infinite when there is nothing."""

    def short_impedance(self, frequency_hz: float) -> complex:
        """What the meter sees with the fixture shorted in place of the part, in ohm."""

    def open_impedance(self, frequency_hz: float) -> complex:
        """What the meter sees with the fixture empty, in ohm."""


class Relays(Protocol):
    """The contacts of a bench, by channel, as they really are."""

    @property
    def channels(self) -> frozenset[str]:
        """Every channel that is fitted."""

    def order(self, channels: Iterable[str], close: bool, now_s: float) -> float:
        """Order contacts to close or open; returns when the last of them has come to rest."""

    def closed(self, now_s: float) -> frozenset[str]:
        """The contacts that are closed now."""

    def reported(self, now_s: float) -> frozenset[str]:
        """The channels that a scanner says are closed, as far as it can know."""

    def changed_s(self, now_s: float) -> float:
        """When a contact moved last."""


class Terminals(Protocol):
    """The ends of one impedance meter's leads."""

    def connection(self, now_s: float) -> Connection:
        """What is connected now."""

    def changed_s(self, now_s: float) -> float:
        """When a contact moved last."""


class Room(Protocol):
    """The air around the bench."""

    def temperature_c(self, now_s: float) -> float:
        """Air temperature in °C."""

    def humidity_pct(self, now_s: float) -> float:
        """Relative humidity in %."""
