"""One part of a lot, as the parts list says it is."""

from dataclasses import dataclass
from datetime import datetime

from ohmward.terms.kind import Kind, Polarity


@dataclass(frozen=True, kw_only=True, slots=True)
class Part:
    """A part from the tray: nominal value in F, H or ohm, tolerance as fractions of it.

    ``tolerance_low`` is negative or zero (−0.2 for −20 %), ``tolerance_high`` positive or
    zero; both ``None`` when the list does not say. ``rated_v`` is a DC rating; an AC rating
    is kept apart in ``rated_ac_v`` (rms) and never used as a DC one. ``reverse_v`` is how far
    below 0 V a polar part may go (0 unless stated; a magnitude). ``working_v`` is the DC voltage
    that its circuit puts on it; ``last_heated`` the last heating that undid a class 2 ceramic's
    ageing. Missing is None, never zero.
    """

    part_id: str
    position: str
    kind: Kind
    nominal: float
    tolerance_low: float | None = None
    tolerance_high: float | None = None
    rated_v: float | None = None
    rated_ac_v: float | None = None
    rated_a: float | None = None
    rated_w: float | None = None
    marking: str = ""
    dielectric: str = ""
    polarity: Polarity = Polarity.NONPOLAR
    reverse_v: float = 0.0
    lot: str = ""
    last_energised: datetime | None = None
    last_heated: datetime | None = None
    working_v: float | None = None
    safety_class: str = ""
    row: int = 0

    @property
    def unit(self) -> str:
        """The SI unit of ``nominal``."""
        return self.kind.unit
