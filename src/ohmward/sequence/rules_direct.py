"""Named limits on leakage, insulation, absorption and proof, each with its source.

``bounds`` of these is asked with the voltage of the stage (V) where a rule for impedance is asked
with a frequency; ``times`` says at which time under voltage the source states it.
"""

from collections.abc import Callable
from dataclasses import dataclass

from ohmward.sequence.dielectric import dielectric_key
from ohmward.sequence.rules import Bounds, NotStated, Rule, RuleLacks
from ohmward.sequence.voltages import insulation_voltage, rated_voltage
from ohmward.terms.kind import Kind
from ohmward.terms.part import Part

_C = frozenset({Kind.CAPACITOR})
_LEAKAGE = frozenset({"leakage_a"})
_RESISTANCE = frozenset({"insulation_ohm"})


def _any_time(part: Part) -> tuple[float, ...]:
    return ()


def _no_voltage(part: Part) -> float | None:
    return None


@dataclass(frozen=True, kw_only=True, slots=True)
class DirectRule(Rule):
    """A rule for a quantity under direct voltage.

    ``bounds(part, voltage_v)`` as in `Rule`. ``times(part)`` lists when its source states it, in
    seconds since the part had its voltage, first choice first, empty for any; ``stated_v(part)``
    at which voltage (None: at any), so that another voltage is called an extrapolation.
    """

    times: Callable[[Part], tuple[float, ...]] = _any_time
    stated_v: Callable[[Part], float | None] = _no_voltage


def rated_v_of(part: Part) -> float:
    """The DC rating (V); RuleLacks where there is none."""
    if part.rated_v is None:
        raise RuleLacks(cell="rated_voltage", expected="a DC rating such as 63 V", found="nothing")
    return part.rated_v


def _electrolytic(part: Part) -> float:
    """The rating of an aluminium electrolytic (V)."""
    if not part.dielectric.strip():
        raise RuleLacks(cell="dielectric", expected="a dielectric", found="nothing")
    if dielectric_key(part.dielectric) != "aluminium":
        raise NotStated(f"stated for aluminium electrolytics, not for {part.dielectric}")
    return rated_v_of(part)


# --- leakage of electrolytics, in ampere from farad and volt -----------------------------------


def cv_leakage_a(capacitance_f: float, rated_v: float) -> float:
    """0.01·C·V: with C in µF the result is in µA."""
    return 0.01 * capacitance_f * rated_v


def general_purpose_leakage_a(capacitance_f: float, rated_v: float) -> float:
    """µA from µF and V: up to 100 V the greater of 0.01·CV and 3; above, up to CV = 1000
    0.03·CV + 15, else 0.02·CV + 25.
    """
    cv = capacitance_f * 1e6 * rated_v
    if rated_v <= 100.0:
        return max(0.01 * cv, 3.0) * 1e-6
    return (0.03 * cv + 15.0 if cv <= 1000.0 else 0.02 * cv + 25.0) * 1e-6


def standard_leakage_a(capacitance_f: float, rated_v: float) -> float:
    """0.02·C·U for general-purpose parts: the laxer of the standard's two."""
    return 0.02 * capacitance_f * rated_v


JAN_C_62: tuple[tuple[float, float], ...] = (
    (100.0, 0.01),
    (250.0, 0.02),
    (350.0, 0.025),
    (450.0, 0.04),
)
"""Rating up to (V) → k in I(mA) = k·C(µF) + 0.3."""


def jan_c_62_leakage_a(capacitance_f: float, rated_v: float) -> float:
    """I(mA) = k·C(µF) + 0.3 with k by rating; NotStated above 450 V."""
    for up_to_v, k in JAN_C_62:
        if rated_v <= up_to_v:
            return (k * capacitance_f * 1e6 + 0.3) * 1e-3
    raise NotStated(f"stated up to 450 V, not for {rated_v:g} V")


def _after(*seconds: float) -> Callable[[Part], tuple[float, ...]]:
    return lambda part: seconds


def _general_purpose_times(part: Part) -> tuple[float, ...]:
    return (120.0,) if rated_v_of(part) <= 100.0 else (300.0,)


def _leakage_by(formula: Callable[[float, float], float]) -> Callable[[Part, float], Bounds]:
    def bounds(part: Part, voltage_v: float) -> Bounds:
        return None, formula(part.nominal, _electrolytic(part))

    return bounds


# --- insulation, by dielectric -----------------------------------------------------------------

INSULATION_S: dict[str, float] = {
    "pp": 100_000.0,
    "pet": 10_000.0,
    "pps": 10_000.0,
    "c0g": 10_000.0,
    "x7r": 1_000.0,
    "tantalum": 100.0,
}
"""Dielectric → τ = R·C at 25 °C in MΩ·µF, which are seconds; a film-capacitor maker's table."""

ABOVE_F = 0.33e-6  # above it the standard states R·C, below it R
X7R_MOST_OHM = 100e9
X7R_S = 1000.0


def _typical_s(part: Part) -> float:
    if not part.dielectric.strip():
        raise RuleLacks(cell="dielectric", expected="a dielectric", found="nothing")
    found = INSULATION_S.get(dielectric_key(part.dielectric))
    if found is None:
        raise NotStated(f"not stated for {part.dielectric}")
    return found


def _insulation_bounds(part: Part, voltage_v: float) -> Bounds:
    """R ≥ τ/C above 0.33 µF, τ/0.33 µF up to it."""
    return _typical_s(part) / max(part.nominal, ABOVE_F), None


def _time_constant_bounds(part: Part, voltage_v: float) -> Bounds:
    return _typical_s(part), None


def _leakage_bounds(part: Part, voltage_v: float) -> Bounds:
    """I ≤ C·V/τ."""
    return None, part.nominal * voltage_v / _typical_s(part)


def _x7r_bounds(part: Part, voltage_v: float) -> Bounds:
    """The lesser of 100 GΩ and 1000 MΩ·µF."""
    if dielectric_key(part.dielectric) != "x7r":
        raise NotStated(f"stated for X7R, not for {part.dielectric or 'a part without dielectric'}")
    return min(X7R_MOST_OHM, X7R_S / part.nominal), None


def _standard_voltage(part: Part) -> float | None:
    return insulation_voltage(rated_v_of(part))


def _rated_voltage(part: Part) -> float | None:
    return rated_voltage(rated_v_of(part))


# --- absorption, proof, reform -----------------------------------------------------------------

ABSORPTION: dict[str, float] = {
    "pp": 0.0010,
    "pet": 0.0025,
    "pps": 0.0005,
    "c0g": 0.006,
    "x7r": 0.025,
}
"""Dielectric → largest absorption of a film-capacitor maker's table; for X7R sources disagree."""


def _absorption_bounds(part: Part, voltage_v: float) -> Bounds:
    found = ABSORPTION.get(dielectric_key(part.dielectric))
    if found is None:
        raise NotStated(f"not stated for {part.dielectric or 'a part without dielectric'}")
    return None, found


def _whole_voltage(part: Part, voltage_v: float) -> Bounds:
    return voltage_v, None


_FILM_TABLE = "a film-capacitor maker's published table, typical values at 25 °C"
_SERIES = "a maker's general-purpose aluminium electrolytic series"

DIRECT_RULES: tuple[DirectRule, ...] = (
    DirectRule(
        name="leakage-cv",
        meaning="leakage up to 0.01 CV (uA from uF and V), read after 2 min",
        source="a maker's published limit",
        kinds=_C,
        quantities=_LEAKAGE,
        bounds=_leakage_by(cv_leakage_a),
        times=_after(120.0),
        stated_v=_rated_voltage,
    ),
    DirectRule(
        name="leakage-general-purpose",
        meaning="up to 100 V the greater of 0.01 CV and 3 uA at 2 min; above, at 5 min, "
        "0.03 CV + 15 uA up to CV = 1000, else 0.02 CV + 25 uA",
        source=_SERIES,
        kinds=_C,
        quantities=_LEAKAGE,
        bounds=_leakage_by(general_purpose_leakage_a),
        times=_general_purpose_times,
        stated_v=_rated_voltage,
    ),
    DirectRule(
        name="leakage-iec-60384-4",
        meaning="0.02 CU at 5 min, general-purpose grade; long-life grade has half of it",
        source="IEC 60384-4, from memory",
        kinds=_C,
        quantities=_LEAKAGE,
        bounds=_leakage_by(standard_leakage_a),
        times=_after(300.0),
        stated_v=_rated_voltage,
    ),
    DirectRule(
        name="leakage-jan-c-62",
        meaning="I(mA) = k C(uF) + 0.3; k .01 up to 100 V, .02 to 250, .025 to 350, .04 to 450",
        source="JAN-C-62, military reform practice for stored parts; read at 5 min as in MIL-C-62",
        kinds=_C,
        quantities=_LEAKAGE,
        bounds=_leakage_by(jan_c_62_leakage_a),
        times=_after(300.0),
        stated_v=_rated_voltage,
    ),
    DirectRule(
        name="leakage-by-dielectric",
        meaning="leakage up to C V/tau, tau by dielectric",
        source=_FILM_TABLE,
        kinds=_C,
        quantities=_LEAKAGE,
        bounds=_leakage_bounds,
        times=_after(60.0),
        stated_v=_standard_voltage,
    ),
    DirectRule(
        name="insulation-by-dielectric",
        meaning="R at least tau/C above 0.33 uF, tau/0.33 uF up to it; tau by dielectric",
        source=f"{_FILM_TABLE}; 0.33 uF as in IEC 60384-1",
        kinds=_C,
        quantities=_RESISTANCE,
        bounds=_insulation_bounds,
        times=_after(60.0),
        stated_v=_standard_voltage,
    ),
    DirectRule(
        name="insulation-time-by-dielectric",
        meaning="R C at least tau, tau by dielectric",
        source=_FILM_TABLE,
        kinds=_C,
        quantities=frozenset({"insulation_time_s"}),
        bounds=_time_constant_bounds,
        times=_after(60.0),
        stated_v=_standard_voltage,
    ),
    DirectRule(
        name="insulation-x7r",
        meaning="R at least the lesser of 100 Gohm and 1000 Mohm uF",
        source="makers' tables for X7R",
        kinds=_C,
        quantities=_RESISTANCE,
        bounds=_x7r_bounds,
        times=_after(60.0),
        stated_v=_rated_voltage,
    ),
    DirectRule(
        name="absorption-by-dielectric",
        meaning="largest dielectric absorption by dielectric, 15 min after a short of 10 s",
        source=f"{_FILM_TABLE}; for X7R sources disagree, 0.6 to 2.5 %",
        kinds=_C,
        quantities=frozenset({"absorption_rel"}),
        bounds=_absorption_bounds,
        times=_after(900.0),
    ),
    DirectRule(
        name="whole-voltage",
        meaning="the whole voltage of the stage was reached and stood",
        source="the stage itself",
        kinds=_C,
        quantities=frozenset({"withstood_v", "reformed_v"}),
        bounds=_whole_voltage,
        widens=False,
    ),
)
