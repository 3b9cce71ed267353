"""How high voltage reaches a part and how the part is freed of it: contacts and resistances."""

from dataclasses import dataclass, field
from math import inf

from ohmward.setup.high_voltage import Contact as DescribedContact
from ohmward.setup.high_voltage import HighVoltage


@dataclass(frozen=True, kw_only=True, slots=True)
class Contact:
    """One relay contact: its scanner channel and what it may switch while there is something.

    ``switch_v`` is the largest voltage across it and ``switch_a`` the largest current through
    it at which it may move, from the relay's data sheet; ``stand_off_v`` is what it holds back
    while open. ``made_unpowered`` says that the contact is made while its relay has no power:
    its channel then reads closed when the contact is broken.
    """

    channel: str
    switch_v: float
    switch_a: float
    stand_off_v: float = inf
    made_unpowered: bool = False


@dataclass(frozen=True, kw_only=True, slots=True)
class PositionWiring:
    """One position of the fixture.

    ``connect`` joins the part to the rail through ``series_ohm``; ``discharge`` puts
    ``discharge_ohm`` across what is connected and ``short`` shorts it directly (through
    ``short_ohm``); positions may share these two. ``sense`` are the contacts that bring the
    voltmeter to the part's own terminals, ``meter`` the two contacts in series that bring the
    impedance meter there, or its changeover. Resistances in ohm.
    """

    position: str
    connect: Contact
    series_ohm: float
    discharge: Contact
    discharge_ohm: float
    short: Contact
    short_ohm: float
    sense: tuple[Contact, ...]
    meter: tuple[Contact, ...]

    def contacts(self) -> tuple[Contact, ...]:
        """Every contact of the position, each once."""
        return (self.connect, self.discharge, self.short, *self.sense, *self.meter)


@dataclass(frozen=True, kw_only=True, slots=True)
class Wiring:
    """The whole path: supply contact, rail, positions, return with the bypassed current meter.

    ``divider_ohm`` is the resistance of the voltmeter's divider, whose current the current
    meter sees as well; ``supply_capacitance_f`` the supply's output capacitance and
    ``rail_capacitance_f`` that of the rail and its cables. ``meter_survives_a`` is the largest
    current that the current meter outlives with its bypass open.
    """

    supply: Contact
    bypass: Contact
    positions: tuple[PositionWiring, ...]
    divider_ohm: float
    supply_capacitance_f: float = 0.0
    rail_capacitance_f: float = 0.0
    meter_survives_a: float = inf
    _by_name: dict[str, PositionWiring] = field(
        init=False, repr=False, compare=False, default_factory=dict
    )

    def __post_init__(self) -> None:
        self._by_name.update({wired.position: wired for wired in self.positions})

    def at(self, position: str) -> PositionWiring | None:
        """The wiring of a position, or None where the bench has no such position."""
        return self._by_name.get(position)

    def contacts(self) -> tuple[Contact, ...]:
        """Every contact of the bench."""
        return (
            self.supply,
            self.bypass,
            *(contact for wired in self.positions for contact in wired.contacts()),
        )

    def node_capacitance_f(self) -> float:
        """What lies on the rail beside the part (F)."""
        return self.supply_capacitance_f + self.rail_capacitance_f


def wiring_of(path: HighVoltage) -> Wiring:
    """The wiring that a bench file describes; ValueError where it has no bypass."""
    if path.bypass is None:
        raise ValueError("the current meter has no bypass")

    def contact(described: DescribedContact) -> Contact:
        relay = path.relay_of(described)
        return Contact(
            channel=described.channel,
            switch_v=relay.switch_v,
            switch_a=relay.switch_a,
            stand_off_v=relay.stand_off_v,
            made_unpowered=described.made_unpowered,
        )

    return Wiring(
        supply=contact(path.supply),
        bypass=contact(path.bypass),
        divider_ohm=path.divider_ohm,
        supply_capacitance_f=path.supply_capacitance_f,
        rail_capacitance_f=path.rail_capacitance_f,
        meter_survives_a=inf if path.meter_survives_a is None else path.meter_survives_a,
        positions=tuple(
            PositionWiring(
                position=place.name,
                connect=contact(place.connect),
                series_ohm=place.series.resistance_ohm,
                discharge=contact(place.discharge),
                discharge_ohm=place.discharge_resistor.resistance_ohm,
                short=contact(place.short),
                short_ohm=place.short_ohm,
                sense=tuple(contact(each) for each in place.sense),
                meter=tuple(contact(each) for each in place.meter),
            )
            for place in path.positions
        ),
    )
