"""How high voltage is really wired, and what its relays really stand: plain data, SI units.

From the supply through its contact to the rail, at each position through a contact and the
series resistor to the part, back through the current meter with its bypass.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field


@dataclass(frozen=True, kw_only=True, slots=True)
class RelayKind:
    """One type of relay: what its contact is, how long it takes, and what it stands.

    It bounces ``bounces`` times, ``bounce_s`` each on average, when it makes. Making or
    breaking more than ``switch_v`` and ``switch_a`` welds it.
    """

    contact_ohm: float = 0.1
    operate_s: float = 4e-3
    release_s: float = 2e-3
    bounces: int = 2
    bounce_s: float = 3e-4
    switch_v: float = math.inf
    switch_a: float = math.inf


@dataclass(frozen=True, kw_only=True, slots=True)
class ContactAt:
    """One contact by its channel; ``stuck`` is "", "open" or "closed", whatever its coil does."""

    channel: str
    relay: str = ""
    rests_closed: bool = False
    stuck: str = ""


@dataclass(frozen=True, kw_only=True, slots=True)
class SupplyTruth:
    """A supply that gives current and takes none: its bleeder stays across it, on or off."""

    output_ohm: float = 5.0
    bleeder_ohm: float = 10e6
    capacitance_f: float = 10e-9
    most_v: float = 1000.0
    most_a: float = 10e-3


@dataclass(frozen=True, kw_only=True, slots=True)
class PlaceTruth:
    """One position. The first half of ``sense`` and ``meter`` is in the high lead, the rest low.

    ``broken`` names wires that do not conduct: "feed" (series resistor to clip), "high" and
    "low" (clips), "sense" (voltmeter to clip), "part" (within the part's own lead).
    """

    name: str
    connect: ContactAt
    series_ohm: float
    discharge: ContactAt
    discharge_ohm: float
    short: ContactAt
    short_ohm: float = 0.0
    sense: tuple[ContactAt, ...]
    meter: tuple[ContactAt, ...] = ()
    lead_ohm: float = 5e-3
    insulation_ohm: float = 1e14
    broken: frozenset[str] = frozenset()

    def contacts(self) -> tuple[ContactAt, ...]:
        """Every contact of the position."""
        return (self.connect, self.discharge, self.short, *self.sense, *self.meter)


@dataclass(frozen=True, kw_only=True, slots=True)
class PathTruth:
    """The whole path as it is wired; ``discharge_at`` is "rail" or "part".

    ``meter_ohm`` and ``meter_f`` is what the impedance meter is to a part, ``foreign_v`` the
    voltage that it stands; ``burden_ohm`` the current meter on its first range, ``survives_a``
    what it outlives with its bypass open.
    """

    supply: ContactAt
    bypass: ContactAt
    places: tuple[PlaceTruth, ...]
    relays: Mapping[str, RelayKind] = field(default_factory=dict)
    source: SupplyTruth = SupplyTruth()
    rail_f: float = 200e-12
    rail_ohm: float = 1e13
    divider_ohm: float = 1e9
    discharge_at: str = "rail"
    meter_ohm: float = 100.0
    meter_f: float = 200e-12
    foreign_v: float = 1.0
    burden_ohm: float = 10.0
    survives_a: float = math.inf

    def contacts(self) -> tuple[ContactAt, ...]:
        """Every contact of the bench."""
        return (
            self.supply,
            self.bypass,
            *(contact for place in self.places for contact in place.contacts()),
        )

    def kind(self, contact: ContactAt) -> RelayKind:
        """The type of relay of a contact; an ordinary one where none is named."""
        return self.relays[contact.relay] if contact.relay else _ORDINARY


_ORDINARY = RelayKind()
