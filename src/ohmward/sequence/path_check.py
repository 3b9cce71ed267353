"""What a bench's path lacks for the stages that are planned on it, and what order they may have."""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from ohmward.safety.hazard import energy_j, prospective_current_a
from ohmward.sequence.dielectric import dielectric_key
from ohmward.sequence.high import High, capacitance_bounds
from ohmward.sequence.notes import Notes
from ohmward.sequence.planned import PlannedDirect, PlannedReform, PlannedResistance, PlannedStage
from ohmward.sequence.rating import SLACK
from ohmward.sequence.voltages import CERAMIC
from ohmward.setup.high_voltage import Contact, HighVoltagePosition
from ohmward.units.values import format_quantity

CLASS_2 = CERAMIC - {"c0g"}


@dataclass(frozen=True, kw_only=True, slots=True)
class _Worst:
    """The most that one position is asked for: voltage (V) and energy on the part (J)."""

    voltage_v: float
    part_j: float
    part_id: str


def check_path(planned: Iterable[PlannedStage], high: High, notes: Notes) -> None:
    """Note everything that the path lacks for these stages, position by position."""
    path = high.path
    direct = [stage for stage in planned if isinstance(stage, PlannedDirect)]
    if path is None or not direct:
        return
    for position, stages in _by_position(direct).items():
        place = path.at(position)
        if place is None:
            notes.bench(
                "position-without-high-voltage",
                "high_voltage.position",
                expected=f"how high voltage reaches position '{position}', where "
                f"{stages[0].part.part_id} lies",
                found="nothing",
            )
            continue
        key = f"high_voltage.position[{path.positions.index(place) + 1}]"
        worst = _worst(stages)
        if worst.voltage_v > path.ceiling_v * (1 + SLACK):
            continue  # noted with the stage: more than the bench allows at all
        _contacts(place, key, worst, high, notes)
        _resistors(place, key, worst, high, notes)


def _by_position(direct: Sequence[PlannedDirect]) -> dict[str, list[PlannedDirect]]:
    found: dict[str, list[PlannedDirect]] = {}
    for stage in direct:
        found.setdefault(stage.part.position, []).append(stage)
    return found


def _worst(stages: Sequence[PlannedDirect]) -> _Worst:
    volts = max(stage.source_v for stage in stages)
    energies = [
        energy_j(capacitance_f=capacitance_bounds(stage.part)[1], voltage_v=stage.source_v)
        for stage in stages
    ]
    part_j = max(energies)
    part_id = stages[energies.index(part_j)].part.part_id
    return _Worst(voltage_v=volts, part_j=part_j, part_id=part_id)


def _contacts(
    place: HighVoltagePosition, key: str, worst: _Worst, high: High, notes: Notes
) -> None:
    """A part that could not be brought down is not brought up."""
    assert high.path is not None
    relay_of, volts = high.path.relay_of, worst.voltage_v
    moving: list[tuple[str, Contact, float]] = [
        ("discharge", place.discharge, volts / place.discharge_resistor.resistance_ohm)
    ]
    moving += [
        (f"sense[{n}]", contact, volts / high.path.divider_ohm)
        for n, contact in enumerate(place.sense, start=1)
    ]
    for name, contact, amperes in moving:
        relay = relay_of(contact)
        if volts > relay.switch_v * (1 + SLACK) or amperes > relay.switch_a * (1 + SLACK):
            notes.bench(
                "relay-too-weak",
                f"{key}.{name}.relay",
                expected=f"one that may move at {_volts(volts)} and "
                f"{format_quantity(amperes, 'A', 3)}, as {worst.part_id} needs to be freed",
                found=f"'{contact.relay}', which may at {_volts(relay.switch_v)} and "
                f"{format_quantity(relay.switch_a, 'A', 3)}",
            )
    still = [("short", place.short)]
    still += [(f"meter[{n}]", contact) for n, contact in enumerate(place.meter, start=1)]
    for name, contact in still:
        held_v = relay_of(contact).stand_off_v
        if volts > held_v * (1 + SLACK):
            notes.bench(
                "relay-too-weak",
                f"{key}.{name}.relay",
                expected=f"one that holds back {_volts(volts)}",
                found=f"'{contact.relay}', which holds {_volts(held_v)}",
            )


def _resistors(
    place: HighVoltagePosition, key: str, worst: _Worst, high: High, notes: Notes
) -> None:
    """Pulses of a discharge, a short that lasts, and what a shorting part does to the meter."""
    assert high.path is not None
    volts = worst.voltage_v
    series, drain = place.series, place.discharge_resistor
    whole_j = worst.part_j + energy_j(capacitance_f=high.node_f(), voltage_v=volts)
    total_ohm = series.resistance_ohm + drain.resistance_ohm
    for name, resistor in (("discharge_resistor", drain), ("series", series)):
        pulse_j = whole_j * resistor.resistance_ohm / total_ohm
        if pulse_j > resistor.pulse_j * (1 + SLACK):
            notes.bench(
                "resistor-too-small",
                f"{key}.{name}.pulse",
                expected=f"at least {format_quantity(pulse_j, 'J', 3)}, its share of what "
                f"{worst.part_id} holds",
                found=format_quantity(resistor.pulse_j, "J", 3),
            )
    amperes = min(volts / series.resistance_ohm, high.limit_a)
    watts = amperes * amperes * series.resistance_ohm
    if series.power_w is not None and watts > series.power_w * (1 + SLACK):
        notes.bench(
            "resistor-too-small",
            f"{key}.series.power",
            expected=f"at least {format_quantity(watts, 'W', 3)}, what it takes when "
            f"{worst.part_id} shorts",
            found=format_quantity(series.power_w, "W", 3),
        )
    short_a = prospective_current_a(voltage_v=volts, resistance_ohm=series.resistance_ohm)
    survives_a = high.path.meter_survives_a
    if survives_a is not None and short_a > survives_a * (1 + SLACK):
        notes.bench(
            "current-meter-unprotected",
            f"{key}.series.resistance",
            expected=f"at least {format_quantity(volts / survives_a, 'ohm', 3)}: a part that "
            f"shorts with the bypass open must not destroy the current meter",
            found=format_quantity(series.resistance_ohm, "ohm", 3),
        )


def check_order(planned: Sequence[PlannedStage], notes: Notes) -> None:
    """Impedance first on class 2 ceramics; reform, or a date, first on stored electrolytics."""
    by_part: dict[str, list[PlannedStage]] = {}
    for stage in planned:
        by_part.setdefault(stage.part.part_id, []).append(stage)
    for stages in by_part.values():
        dielectric = dielectric_key(stages[0].part.dielectric)
        if dielectric in CLASS_2:
            _impedance_first(stages, notes)
        if dielectric == "aluminium":
            _reform_first(stages, notes)


def _impedance_first(stages: Sequence[PlannedStage], notes: Notes) -> None:
    part_id = stages[0].part.part_id
    energised = ""
    swept = False
    for stage in stages:
        if isinstance(stage, PlannedDirect):
            energised = energised or stage.stage
        elif energised and not swept:
            notes.sequence(
                "high-voltage-before-impedance",
                f"stage '{energised}'",
                expected=f"stage '{stage.stage}' before it: high voltage de-ages class 2 "
                f"ceramics such as {part_id}",
                found="before the first sweep",
            )
            return
        else:
            swept = True
            if energised:
                notes.warn(
                    f"stage {stage.stage} comes after high voltage, which de-ages class 2 "
                    "ceramics: C reads high for a day"
                )


def _reform_first(stages: Sequence[PlannedStage], notes: Notes) -> None:
    part = stages[0].part
    for stage in stages:
        if isinstance(stage, PlannedReform):
            return
        if isinstance(stage, PlannedDirect) and not isinstance(stage, PlannedResistance):
            if part.last_energised is None:
                notes.cell(
                    "reform-missing",
                    part,
                    "last_energised",
                    expected="when it last had its voltage, or a stage 'reform' before stage "
                    f"'{stage.stage}'",
                    found="neither",
                )
            return


def _volts(value: float) -> str:
    return format_quantity(value, "V", 4)
