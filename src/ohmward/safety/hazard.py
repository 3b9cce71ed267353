"""How dangerous a charged part or node is: energy, charge, current, grades against thresholds.

Everything here is arithmetic on SI values; every number that a grade hangs on is a
:class:`Threshold` with its source, so that a brief can print where a grade comes from.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from enum import IntEnum
from math import inf, log, sqrt


@dataclass(frozen=True, kw_only=True, slots=True)
class Threshold:
    """A limit between two grades: its value, unit, and who says so.

    ``confirmed`` is false where the source is quoted from memory; a brief then says that.
    """

    name: str
    value: float
    unit: str
    source: str
    confirmed: bool


_LIVE = "IEC 61010-1:2010, 6.3"
_LABORATORY = "capacitor safety limits of a national laboratory"

LIVE_DC_V = Threshold(
    name="hazardous live, DC", value=60.0, unit="V", source=_LIVE, confirmed=False
)
LIVE_PEAK_V = Threshold(
    name="hazardous live, AC peak", value=42.4, unit="V", source=_LIVE, confirmed=False
)
CHARGE_C = Threshold(
    name="hazardous charge up to 15 kV", value=45e-6, unit="C", source=_LIVE, confirmed=False
)
CHARGE_UP_TO_V = Threshold(
    name="where charge gives way to energy", value=15e3, unit="V", source=_LIVE, confirmed=False
)
ENERGY_ABOVE_J = Threshold(
    name="hazardous energy above 15 kV", value=0.35, unit="J", source=_LIVE, confirmed=False
)
SEVERE_V = Threshold(
    name="severe shock, voltage", value=100.0, unit="V", source=_LABORATORY, confirmed=True
)
SEVERE_J = Threshold(
    name="severe shock, energy", value=10.0, unit="J", source=_LABORATORY, confirmed=True
)
REFLEX_V = Threshold(
    name="reflex action, voltage", value=400.0, unit="V", source=_LABORATORY, confirmed=True
)
REFLEX_J = Threshold(
    name="reflex action, energy", value=0.25, unit="J", source=_LABORATORY, confirmed=True
)
BURN_BELOW_V = Threshold(
    name="burn, voltage", value=100.0, unit="V", source=_LABORATORY, confirmed=False
)
BURN_J = Threshold(name="burn, energy", value=100.0, unit="J", source=_LABORATORY, confirmed=False)

THRESHOLDS = (
    LIVE_DC_V,
    LIVE_PEAK_V,
    CHARGE_C,
    CHARGE_UP_TO_V,
    ENERGY_ABOVE_J,
    SEVERE_V,
    SEVERE_J,
    REFLEX_V,
    REFLEX_J,
    BURN_BELOW_V,
    BURN_J,
)


class Grade(IntEnum):
    """Shock grades, in rising order; from LIVE on a run needs somebody's authorisation."""

    NONE = 0  # at or below the voltage that may be touched
    LIVE = 1  # hazardous live while a source feeds it; what it stores is below the threshold
    HAZARDOUS = 2  # what it stores is hazardous by itself, after everything is switched off
    SEVERE = 3  # energy and voltage of the laboratory limit


@dataclass(frozen=True, kw_only=True, slots=True)
class Hazard:
    """What one part or one common node may do to a person.

    ``reasons`` are the thresholds that were passed. ``burn`` is the grade for large energy at
    low voltage, which burns through a ring or a tool and shocks nobody.
    """

    name: str
    peak_v: float
    capacitance_f: float
    energy_j: float
    charge_c: float
    prospective_a: float
    resistor_pulse_j: float
    discharge_s: float
    grade: Grade
    reflex: bool
    burn: bool
    reasons: tuple[Threshold, ...]

    @property
    def needs_authorisation(self) -> bool:
        """True when a person has to put a name to the run."""
        return self.grade >= Grade.LIVE or self.burn


@dataclass(frozen=True, kw_only=True, slots=True)
class Stored:
    """What can charge up: a capacitance (F) and the highest voltage on it (V)."""

    name: str
    capacitance_f: float
    bias_v: float
    level_v: float = 0.0


@dataclass(frozen=True, kw_only=True, slots=True)
class Path:
    """What a charge meets: resistances in ohm, the supply's output capacitance in F.

    ``series_ohm`` limits a short in the part, ``discharge_ohm`` takes the charge at the end,
    ``target_v`` is where the direct short may close.
    """

    series_ohm: float
    discharge_ohm: float
    target_v: float
    supply_capacitance_f: float = 0.0


def peak_voltage_v(*, bias_v: float, level_v: float) -> float:
    """Peak of a DC bias with an AC level (rms) on it: |bias| + √2·level."""
    return abs(bias_v) + sqrt(2.0) * level_v


def energy_j(*, capacitance_f: float, voltage_v: float) -> float:
    """Energy in a capacitance: ½·C·V²."""
    return 0.5 * capacitance_f * voltage_v * voltage_v


def charge_c(*, capacitance_f: float, voltage_v: float) -> float:
    """Charge on a capacitance: C·|V|."""
    return capacitance_f * abs(voltage_v)


def prospective_current_a(*, voltage_v: float, resistance_ohm: float) -> float:
    """Current in the first instant of a short: V/R; infinite where nothing limits it."""
    return abs(voltage_v) / resistance_ohm if resistance_ohm > 0.0 else inf


def resistor_pulse_j(*, capacitance_f: float, voltage_v: float, share: float = 1.0) -> float:
    """Energy that a resistor takes when a capacitance empties through it.

    All of ½·C·V² ends in the resistances in its way, each in proportion to its ohms;
    ``share`` is this one's part (1 where it is alone).
    """
    return share * energy_j(capacitance_f=capacitance_f, voltage_v=voltage_v)


def discharge_time_s(
    *, resistance_ohm: float, capacitance_f: float, from_v: float, to_v: float
) -> float:
    """Time of a decay: R·C·ln(U0/U); 0 where it is there already.

    Raises ValueError for a target that a decay never reaches (0 V or below).
    """
    if to_v <= 0.0:
        raise ValueError(f"a decay never reaches {to_v} V")
    if abs(from_v) <= to_v:
        return 0.0
    return resistance_ohm * capacitance_f * log(abs(from_v) / to_v)


def grade(
    *, peak_v: float, capacitance_f: float, direct: bool = True
) -> tuple[Grade, tuple[Threshold, ...]]:
    """Shock grade of ``capacitance_f`` at ``peak_v``, and the thresholds that it passes.

    ``direct`` says that the voltage is DC, else the peak of an AC voltage. Values that equal
    a threshold pass it where the source says 'from' (the laboratory's), not where it says
    'above' (the standard's).
    """
    energy = energy_j(capacitance_f=capacitance_f, voltage_v=peak_v)
    charge = charge_c(capacitance_f=capacitance_f, voltage_v=peak_v)
    touch = LIVE_DC_V if direct else LIVE_PEAK_V
    if peak_v <= touch.value:
        return Grade.NONE, ()
    reasons, found = [touch], Grade.LIVE
    if peak_v <= CHARGE_UP_TO_V.value:
        if charge > CHARGE_C.value:
            reasons, found = [*reasons, CHARGE_C], Grade.HAZARDOUS
    elif energy > ENERGY_ABOVE_J.value:
        reasons, found = [*reasons, ENERGY_ABOVE_J], Grade.HAZARDOUS
    if reflexes(peak_v=peak_v, capacitance_f=capacitance_f):
        reasons, found = [*reasons, REFLEX_J], Grade.HAZARDOUS
    if peak_v >= SEVERE_V.value and energy >= SEVERE_J.value:
        reasons, found = [*reasons, SEVERE_J], Grade.SEVERE
    return found, tuple(reasons)


def reflexes(*, peak_v: float, capacitance_f: float) -> bool:
    """Whether a touch makes a person start back, and hit something else."""
    energy = energy_j(capacitance_f=capacitance_f, voltage_v=peak_v)
    return peak_v > REFLEX_V.value and energy > REFLEX_J.value


def burns(*, peak_v: float, capacitance_f: float) -> bool:
    """Whether the energy burns although the voltage is low."""
    energy = energy_j(capacitance_f=capacitance_f, voltage_v=peak_v)
    return peak_v < BURN_BELOW_V.value and energy > BURN_J.value


def assess_part(part: Stored, path: Path) -> Hazard:
    """The hazard of one part by itself, charged to its peak."""
    return _assess(
        name=part.name,
        peak_v=peak_voltage_v(bias_v=part.bias_v, level_v=part.level_v),
        capacitance_f=part.capacitance_f,
        direct=part.bias_v != 0.0,
        path=path,
    )


def assess_node(name: str, parts: Sequence[Stored], path: Path) -> Hazard:
    """The hazard of everything on one node: capacitances add, the supply's output included.

    The node is at the highest of its parts' peaks; a node without parts is the supply alone
    at 0 V.
    """
    peaks = [peak_voltage_v(bias_v=part.bias_v, level_v=part.level_v) for part in parts]
    return _assess(
        name=name,
        peak_v=max(peaks, default=0.0),
        capacitance_f=sum(part.capacitance_f for part in parts) + path.supply_capacitance_f,
        direct=any(part.bias_v != 0.0 for part in parts),
        path=path,
    )


def _assess(*, name: str, peak_v: float, capacitance_f: float, direct: bool, path: Path) -> Hazard:
    found, reasons = grade(peak_v=peak_v, capacitance_f=capacitance_f, direct=direct)
    burn = burns(peak_v=peak_v, capacitance_f=capacitance_f)
    total_ohm = path.series_ohm + path.discharge_ohm
    return Hazard(
        name=name,
        peak_v=peak_v,
        capacitance_f=capacitance_f,
        energy_j=energy_j(capacitance_f=capacitance_f, voltage_v=peak_v),
        charge_c=charge_c(capacitance_f=capacitance_f, voltage_v=peak_v),
        prospective_a=prospective_current_a(voltage_v=peak_v, resistance_ohm=path.series_ohm),
        resistor_pulse_j=resistor_pulse_j(
            capacitance_f=capacitance_f,
            voltage_v=peak_v,
            share=path.discharge_ohm / total_ohm if total_ohm > 0.0 else 1.0,
        ),
        discharge_s=discharge_time_s(
            resistance_ohm=total_ohm,
            capacitance_f=capacitance_f,
            from_v=peak_v,
            to_v=path.target_v,
        ),
        grade=found,
        reflex=reflexes(peak_v=peak_v, capacitance_f=capacitance_f),
        burn=burn,
        reasons=(*reasons, BURN_J) if burn else reasons,
    )
