"""The ``[high_voltage]`` part of a bench: how it reaches a part and how the part is freed of it.

From the supply: its contact, the rail (with bleeder and capacitance), and at each position a
series resistor to the part, a discharge resistor, a direct short and the voltmeter's sense
contacts; back through the current meter with its bypass. Nothing here is assumed safe by
being left out: what the safety rules need and the file lacks is a problem.
"""

from collections.abc import Iterator
from typing import Annotated, Literal

from pydantic import Field

from ohmward.setup.names import Channel, Name
from ohmward.setup.quantities import (
    Model,
    PositiveAmperes,
    PositiveOhms,
    PositiveSeconds,
    PositiveVolts,
    quantity,
)

Capacitance = Annotated[float, quantity("F", minimum=0)]
Resistance = Annotated[float, quantity("ohm", minimum=0)]
Energy = Annotated[float, quantity("J", above=0)]
Power = Annotated[float, quantity("W", above=0)]
Share = Annotated[float, quantity("1", above=0, maximum=1)]
Drift = Annotated[float, quantity("V/s", minimum=0)]
ContactRating = Annotated[float, quantity("V", minimum=0)]
ContactCurrent = Annotated[float, quantity("A", minimum=0)]


class Relay(Model):
    """What one type of relay may do, from its data sheet."""

    switch_v: ContactRating = Field(
        alias="switch_voltage", description="largest voltage across it at which it may move"
    )
    switch_a: ContactCurrent = Field(
        alias="switch_current", description="largest current through it at which it may move"
    )
    stand_off_v: PositiveVolts = Field(
        alias="stand_off_voltage", description="what it holds back while it is open"
    )


class Contact(Model):
    """One contact: its scanner channel, its type of relay, and how it stands without power."""

    channel: Channel
    relay: str = Field(description="a name under [high_voltage.relay]")
    unpowered: Literal["open", "closed"] = Field(
        "open", description="how the contact stands while its relay has no power"
    )

    @property
    def made_unpowered(self) -> bool:
        """True if the contact is made while its relay has no power."""
        return self.unpowered == "closed"


class Resistor(Model):
    """A resistor of the path, with what it stands."""

    resistance_ohm: PositiveOhms = Field(alias="resistance")
    pulse_j: Energy = Field(alias="pulse", description="energy of one discharge that it stands")
    power_w: Power | None = Field(None, alias="power", description="what it stands for good")


class HighVoltagePosition(Model):
    """How high voltage reaches one position, and how the part there is freed of it."""

    name: Name = Field(description="as under [[position]]")
    connect: Contact = Field(description="joins the part to the rail")
    series: Resistor = Field(description="the resistor between rail and part")
    discharge: Contact = Field(description="puts the discharge resistor across the part")
    discharge_resistor: Resistor
    short: Contact = Field(description="shorts the part directly")
    short_ohm: Resistance = Field(0.0, alias="short_resistance")
    sense: tuple[Contact, ...] = Field(
        min_length=1, description="bring the voltmeter to the part's own terminals"
    )
    meter: tuple[Contact, ...] = Field(
        (), description="bring the impedance meter there: the position's meter_channels again"
    )
    meter_changeover: bool = Field(
        False, description="the meter's contact is a changeover, never made while 'connect' is"
    )

    def contacts(self) -> Iterator[tuple[str, Contact]]:
        """Every contact with the key that it stands under."""
        yield "connect", self.connect
        yield "discharge", self.discharge
        yield "short", self.short
        for name, many in (("sense", self.sense), ("meter", self.meter)):
            for index, contact in enumerate(many):
                yield f"{name}[{index + 1}]", contact


class Watchdog(Model):
    """What takes the voltage away when the computer is silent."""

    kind: Literal["supply timeout", "hardware"] = Field(
        description="the supply's own timeout, or a timer that cuts the supply's power"
    )
    time_s: PositiveSeconds = Field(alias="time", description="silence after which it acts")


class HighVoltage(Model):
    """The path of high voltage, its ceilings, and what the bench declares about its safety."""

    ceiling_v: PositiveVolts = Field(alias="ceiling", description="no part sees more")
    current_ceiling_a: PositiveAmperes = Field(
        alias="current_ceiling", description="largest current limit that the supply is given"
    )
    supply_capacitance_f: Capacitance = Field(
        alias="supply_capacitance", description="the supply's output capacitance"
    )
    rail_capacitance_f: Capacitance = Field(
        0.0, alias="rail_capacitance", description="rail and cables"
    )
    bleeder_ohm: PositiveOhms | None = Field(
        None, alias="bleeder", description="resistor that always lies across the rail"
    )
    divider_ohm: PositiveOhms = Field(
        alias="divider", description="resistance of the voltmeter's divider"
    )
    divider_ceiling_v: PositiveVolts = Field(
        alias="divider_ceiling", description="what the divider stands"
    )
    divider_rel: Share | None = Field(
        None, alias="divider_tolerance", description="how well the divider's resistance is known"
    )
    insulation_ohm: PositiveOhms | None = Field(
        None, alias="insulation", description="of fixture, relays and cables across a part"
    )
    supply_drift_v_per_s: Drift | None = Field(
        None, alias="supply_drift", description="how fast the supply's voltage may wander"
    )
    meter_survives_a: PositiveAmperes | None = Field(
        None,
        alias="current_meter_survives",
        description="largest current that the current meter outlives with its bypass open",
    )
    supply: Contact = Field(description="isolates the supply")
    bypass: Contact | None = Field(None, description="bypasses the current meter while made")
    relays: dict[str, Relay] = Field(alias="relay", min_length=1, description="types of relay")
    positions: tuple[HighVoltagePosition, ...] = Field(alias="position", min_length=1)
    watchdog: Watchdog | None = None
    enclosure_interlock: bool = Field(
        False, description="opening the enclosure takes the voltage away, in hardware"
    )

    def relay_of(self, contact: Contact) -> Relay:
        """The type of relay of a contact. Raises KeyError for one that is not described."""
        return self.relays[contact.relay]

    def at(self, position: str) -> HighVoltagePosition | None:
        """The path of a position, or None where high voltage does not reach it."""
        return next((place for place in self.positions if place.name == position), None)

    def contacts(self) -> Iterator[tuple[str, Contact]]:
        """Every contact of the path with its dotted key under ``high_voltage``."""
        yield "supply", self.supply
        if self.bypass is not None:
            yield "bypass", self.bypass
        for index, place in enumerate(self.positions):
            for key, contact in place.contacts():
                yield f"position[{index + 1}].{key}", contact

    def lacks_for_unattended(self) -> tuple[str, ...]:
        """What a person must make up for by staying: empty if the bench may be left alone."""
        lacking = []
        if self.watchdog is None:
            lacking.append("a hardware watchdog or the supply's own timeout")
        if self.supply.made_unpowered:
            lacking.append("a supply contact that opens without power")
        if not all(place.discharge.made_unpowered for place in self.positions):
            lacking.append("discharge contacts that close without power")
        if not self.enclosure_interlock:
            lacking.append("an enclosure interlock")
        return tuple(lacking)
