"""What every brief tells a person before a hand goes near the bench."""

from collections.abc import Iterable

from ohmward.safety.hazard import SEVERE_J, energy_j
from ohmward.sequence.brief import (
    PlannedDirect,
    PlannedResistance,
    PlannedStage,
    PlannedSweep,
)
from ohmward.terms.kind import Kind
from ohmward.terms.part import Part
from ohmward.units.values import format_quantity

NO_INTERLOCK = (
    "Software is no interlock: what protects people is a current limit, a bleeder, an enclosure "
    "and an emergency stop in hardware. Local rules and qualified people come first."
)
DISCHARGE = (
    "Discharge every capacitor and check it with a voltmeter before it goes into the fixture: a "
    "charge left on it can injure people and destroys the meter's input."
)
SHOWN_AT_MOST = 5


def cautions(
    stages: Iterable[PlannedStage], parts: Iterable[Part], *, by_hand: bool
) -> tuple[str, ...]:
    """The cautions for these parts and stages, the most general first."""
    lot, every = tuple(parts), tuple(stages)
    planned = tuple(stage for stage in every if isinstance(stage, PlannedSweep))
    found = [NO_INTERLOCK]
    found += _high_voltage(stage for stage in every if isinstance(stage, PlannedDirect))
    if any(part.kind is Kind.CAPACITOR for part in lot):
        found.append(DISCHARGE)
    found += _large(lot)
    found += _charged(planned)
    if any(point.bias_a for stage in planned for point in stage.points):
        found.append(
            "Inductors are biased with a current: opening one while it flows makes a high voltage. "
            "Take no part out before its stage has ended."
        )
    safety = [part.part_id for part in lot if part.safety_class]
    if safety:
        found.append(
            f"{_listed(safety)}: safety parts are measured here, never accepted for service "
            "across the line."
        )
    if by_hand:
        found.append("Parts are loaded by hand: the time that this takes is not in the estimate.")
    return tuple(found)


def _high_voltage(direct: Iterable[PlannedDirect]) -> list[str]:
    """That parts are charged on purpose, and how far."""
    stages = list(direct)
    if not stages:
        return []
    most_v = max(stage.source_v for stage in stages)
    found = [
        f"Parts are charged to as much as {format_quantity(most_v, 'V')}: every part is live until "
        "it is proven dead, also when a run has ended early. Have a hardware current limit."
    ]
    if any(isinstance(stage, PlannedResistance) for stage in stages):
        found.append(
            "Windings carry a direct current: it goes to zero before any contact opens; an open "
            "winding has the supply's whole voltage on it."
        )
    return found


def _large(lot: Iterable[Part]) -> list[str]:
    """Capacitors that can hold an energy of the laboratory limit at their rating."""
    large = [
        f"{part.part_id} ({format_quantity(held, 'J', 2)})"
        for part in lot
        if part.kind is Kind.CAPACITOR
        and part.rated_v is not None
        and (held := energy_j(capacitance_f=part.nominal, voltage_v=part.rated_v)) >= SEVERE_J.value
    ]
    if not large:
        return []
    return [
        f"Charged to their rating these hold {format_quantity(SEVERE_J.value, 'J')} or more: "
        f"{_listed(large)}. Discharge them through a resistor, never by a direct short, and check "
        "them again after some minutes: absorption charges them up."
    ]


def _charged(planned: Iterable[PlannedSweep]) -> list[str]:
    """What the meter's own bias leaves on capacitors."""
    most_v = max(
        (
            point.bias_v
            for stage in planned
            if stage.part.kind is Kind.CAPACITOR
            for point in stage.points
        ),
        default=0.0,
    )
    if most_v <= 0:
        return []
    return [
        f"The meter's own bias charges capacitors to {format_quantity(most_v, 'V')}: touch none "
        "before its stage has ended."
    ]


def _listed(names: list[str]) -> str:
    more = len(names) - SHOWN_AT_MOST
    shown = ", ".join(names[:SHOWN_AT_MOST])
    return f"{shown} and {more} more" if more > 0 else shown
