"""Named limit rules: bounds that a standard or a maker's table gives for a part's own values.

A rule is a table and arithmetic written here, never text that is evaluated. It says for which
kinds, quantities and dielectrics it is stated, at which frequencies, and where it comes from.
"""

from collections.abc import Callable
from dataclasses import dataclass
from math import floor, isclose, pi

from ohmward.sequence.dielectric import dielectric_key
from ohmward.terms.kind import Kind
from ohmward.terms.part import Part

Bounds = tuple[float | None, float | None]


class RuleLacks(ValueError):
    """The parts list does not say what the rule needs: a person can fill the cell."""

    def __init__(self, *, cell: str, expected: str, found: str) -> None:
        super().__init__(f"{cell}: expected {expected}, found {found}")
        self.cell = cell
        self.expected = expected
        self.found = found


class NotStated(ValueError):
    """The rule's source says nothing about this part."""


def _any_frequency(part: Part) -> tuple[float, ...]:
    return ()


@dataclass(frozen=True, kw_only=True, slots=True)
class Rule:
    """A rule that a limit may name.

    ``bounds(part, frequency_hz)`` returns (minimum, maximum) in the quantity's SI unit, or
    raises RuleLacks (a cell is empty) or NotStated (the source does not cover the part);
    ``frequencies(part)`` lists where the source states it, first choice first, empty for any.
    ``needs_frequency`` says that the limit must name one; ``widens`` that a limit may multiply
    what the rule allows.
    """

    name: str
    meaning: str
    source: str
    kinds: frozenset[Kind]
    quantities: frozenset[str]
    bounds: Callable[[Part, float], Bounds]
    frequencies: Callable[[Part], tuple[float, ...]] = _any_frequency
    needs_frequency: bool = False
    widens: bool = True


def _dielectric_of(part: Part) -> str:
    if not part.dielectric.strip():
        raise RuleLacks(
            cell="dielectric", expected="a dielectric such as PP, X7R or aluminium", found="nothing"
        )
    return dielectric_key(part.dielectric)


# --- marked tolerance ------------------------------------------------------------------------


def marked_tolerance(part: Part, frequency_hz: float) -> Bounds:
    """Nominal × (1 + tolerance), both ends as marked; raises RuleLacks without a tolerance."""
    if part.tolerance_low is None or part.tolerance_high is None:
        raise RuleLacks(
            cell="tolerance", expected="a tolerance such as 10 % or -20/+80 %", found="nothing"
        )
    return (
        part.nominal * (1.0 + part.tolerance_low),
        part.nominal * (1.0 + part.tolerance_high),
    )


# --- short, open, or another part altogether ---

NOMINAL_IMPEDANCE_FACTOR = 3.0


def nominal_impedance_ohm(part: Part, frequency_hz: float) -> float:
    """|Z| in ohm of the ideal part: R, 2πfL or 1/(2πfC)."""
    match part.kind:
        case Kind.CAPACITOR:
            return 1.0 / (2.0 * pi * frequency_hz * part.nominal)
        case Kind.INDUCTOR:
            return 2.0 * pi * frequency_hz * part.nominal
        case Kind.RESISTOR:
            return part.nominal


def _nominal_impedance_bounds(part: Part, frequency_hz: float) -> Bounds:
    nominal = nominal_impedance_ohm(part, frequency_hz)
    return nominal / NOMINAL_IMPEDANCE_FACTOR, nominal * NOMINAL_IMPEDANCE_FACTOR


# --- aluminium electrolytics -----------------------------------------------------------------

TAN_DELTA_BY_RATING: tuple[tuple[float, float], ...] = (
    (6.3, 0.23),
    (10.0, 0.20),
    (16.0, 0.16),
    (25.0, 0.14),
    (35.0, 0.12),
    (50.0, 0.10),
    (63.0, 0.09),
    (100.0, 0.08),
    (160.0, 0.12),
    (200.0, 0.14),
    (250.0, 0.17),
    (350.0, 0.20),
    (400.0, 0.25),
    (450.0, 0.25),
)
"""Rated voltage in V → largest tan δ at 120 Hz, general-purpose aluminium electrolytics."""

TAN_DELTA_PER_FURTHER_1000_UF = 0.02
_TAN_DELTA_FREQUENCIES_HZ = (120.0, 100.0)
_ELECTROLYTIC = frozenset({"aluminium"})


def tan_delta_limit(rated_v: float, capacitance_f: float) -> float:
    """Largest tan δ at 120 Hz for a rating in V and a capacitance in F (dimensionless).

    Table value, plus 0.02 for each whole further 1000 µF above the first 1000 µF. A rating
    between two rows takes the stricter of its neighbours, so that a part is never accepted
    under a limit that nobody stated; outside the table it raises NotStated.
    """
    below = [row for row in TAN_DELTA_BY_RATING if row[0] <= rated_v * (1.0 + 1e-9)]
    above = [row for row in TAN_DELTA_BY_RATING if row[0] >= rated_v * (1.0 - 1e-9)]
    if not below or not above:
        raise NotStated(f"stated for 6.3 V to 450 V, not for {rated_v:g} V")
    base = min(below[-1][1], above[0][1])
    further_thousands = max(0, floor((capacitance_f * 1e6 - 1000.0) / 1000.0 + 1e-9))
    return base + TAN_DELTA_PER_FURTHER_1000_UF * further_thousands


def _electrolytic_tan_delta(part: Part) -> float:
    if _dielectric_of(part) not in _ELECTROLYTIC:
        raise NotStated(f"stated for aluminium electrolytics, not for {part.dielectric}")
    if part.rated_v is None:
        raise RuleLacks(cell="rated_voltage", expected="a DC rating such as 63 V", found="nothing")
    return tan_delta_limit(part.rated_v, part.nominal)


def _tan_delta_bounds(part: Part, frequency_hz: float) -> Bounds:
    return None, _electrolytic_tan_delta(part)


def _esr_bounds(part: Part, frequency_hz: float) -> Bounds:
    """ESR = tan δ/(2πfC), in ohm, at the frequency at which tan δ is stated."""
    return None, _electrolytic_tan_delta(part) / (2.0 * pi * frequency_hz * part.nominal)


def _tan_delta_frequencies(part: Part) -> tuple[float, ...]:
    return _TAN_DELTA_FREQUENCIES_HZ


# --- class 1 ceramics ------------------------------------------------------------------------

_CLASS_1 = frozenset({"c0g"})  # NP0 is the same, see dielectric.py
CLASS_1_HIGH_FREQUENCY_UP_TO_F = 1e-9


def class_1_q_limit(capacitance_f: float) -> float:
    """Least Q of a class 1 ceramic: 400 + 20·C with C in pF below 30 pF, 1000 from there."""
    picofarads = capacitance_f * 1e12
    return 400.0 + 20.0 * picofarads if picofarads < 30.0 else 1000.0


def class_1_frequency_hz(capacitance_f: float) -> float:
    """Where a class 1 ceramic is measured: 1 MHz up to 1 nF, 1 kHz above."""
    return 1e6 if capacitance_f <= CLASS_1_HIGH_FREQUENCY_UP_TO_F * (1.0 + 1e-9) else 1e3


def _class_1_q_bounds(part: Part, frequency_hz: float) -> Bounds:
    _need_class_1(part)
    return class_1_q_limit(part.nominal), None


def _class_1_d_bounds(part: Part, frequency_hz: float) -> Bounds:
    _need_class_1(part)
    return None, 1.0 / class_1_q_limit(part.nominal)


def _need_class_1(part: Part) -> None:
    if _dielectric_of(part) not in _CLASS_1:
        raise NotStated(f"stated for class 1 ceramics, not for {part.dielectric}")


def _class_1_frequencies(part: Part) -> tuple[float, ...]:
    return (class_1_frequency_hz(part.nominal),)


# --- dissipation by dielectric ---------------------------------------------------------------

DISSIPATION_BY_DIELECTRIC: dict[str, tuple[tuple[float, float], ...]] = {
    "pp": ((1e3, 0.0005), (1e4, 0.0008), (1e5, 0.0025)),
    "pet": ((1e3, 0.008), (1e4, 0.015), (1e5, 0.03)),
    "pps": ((1e3, 0.002), (1e4, 0.0025), (1e5, 0.005)),
    "c0g": ((1e3, 0.001), (1e4, 0.001), (1e5, 0.001)),
    "x7r": ((1e3, 0.025),),
}
"""Dielectric → (frequency in Hz, D), a film-capacitor maker's published table.

The table prints one figure for X7R; class 2 ceramics are measured at 1 kHz, so it is taken there.
"""


def _dissipation_frequencies(part: Part) -> tuple[float, ...]:
    rows = DISSIPATION_BY_DIELECTRIC.get(dielectric_key(part.dielectric), ())
    return tuple(frequency_hz for frequency_hz, _ in rows)


def _dissipation_bounds(part: Part, frequency_hz: float) -> Bounds:
    for stated_hz, dissipation in DISSIPATION_BY_DIELECTRIC.get(_dielectric_of(part), ()):
        if same_frequency(stated_hz, frequency_hz):
            return None, dissipation
    raise NotStated(f"not stated for {part.dielectric} at {frequency_hz:g} Hz")


# --- the registry ----------------------------------------------------------------------------

_CAPACITOR = frozenset({Kind.CAPACITOR})
_MAKER = "a maker's table for general-purpose aluminium electrolytics, 120 Hz"

RULES: dict[str, Rule] = {
    rule.name: rule
    for rule in (
        Rule(
            name="marked-tolerance",
            meaning="the nominal value within the part's own marked tolerance",
            source="the part's marking",
            kinds=frozenset(Kind),
            quantities=frozenset(
                {"capacitance_f", "cs_f", "cp_f", "inductance_h", "ls_h", "lp_h"}
                | {"resistance_ohm", "rs_ohm", "rp_ohm", "impedance_ohm", "direct_ohm"}
            ),
            bounds=marked_tolerance,
        ),
        Rule(
            name="nominal-impedance",
            meaning="|Z| within a factor of 3 of the ideal part's: neither shorted nor open",
            source="arithmetic from the nominal value; the factor is common practice",
            kinds=frozenset(Kind),
            quantities=frozenset({"impedance_ohm"}),
            bounds=_nominal_impedance_bounds,
            needs_frequency=True,
            widens=False,
        ),
        Rule(
            name="tan-delta-electrolytic",
            meaning="tan δ by rated voltage, + 0.02 for each further 1000 µF",
            source=_MAKER,
            kinds=_CAPACITOR,
            quantities=frozenset({"d"}),
            bounds=_tan_delta_bounds,
            frequencies=_tan_delta_frequencies,
        ),
        Rule(
            name="esr-electrolytic",
            meaning="ESR = tan δ/(2πfC) with tan δ by rated voltage",
            source=_MAKER,
            kinds=_CAPACITOR,
            quantities=frozenset({"rs_ohm"}),
            bounds=_esr_bounds,
            frequencies=_tan_delta_frequencies,
        ),
        Rule(
            name="class-1-q",
            meaning="Q ≥ 400 + 20·C(pF) below 30 pF, ≥ 1000 above; 1 MHz up to 1 nF, else 1 kHz",
            source="IEC 60384-21 as quoted by makers",
            kinds=_CAPACITOR,
            quantities=frozenset({"q"}),
            bounds=_class_1_q_bounds,
            frequencies=_class_1_frequencies,
        ),
        Rule(
            name="class-1-d",
            meaning="D ≤ 1/Q of class-1-q, for meters that are surer of D than of Q",
            source="IEC 60384-21 as quoted by makers",
            kinds=_CAPACITOR,
            quantities=frozenset({"d"}),
            bounds=_class_1_d_bounds,
            frequencies=_class_1_frequencies,
        ),
        Rule(
            name="dissipation-by-dielectric",
            meaning="D by dielectric at 1, 10 or 100 kHz",
            source="a film-capacitor maker's published table",
            kinds=_CAPACITOR,
            quantities=frozenset({"d"}),
            bounds=_dissipation_bounds,
            frequencies=_dissipation_frequencies,
        ),
    )
}


def same_frequency(first_hz: float, second_hz: float) -> bool:
    """Whether two frequencies are one condition: equal within one part in a million."""
    return isclose(first_hz, second_hz, rel_tol=1e-6)


def widen(bounds: Bounds, nominal: float, times: float) -> Bounds:
    """Bounds with their allowance multiplied by ``times``.

    Two bounds are a tolerance round ``nominal``: both distances are multiplied. One bound
    alone is a ceiling or a floor: a ceiling is multiplied, a floor divided.
    """
    minimum, maximum = bounds
    if minimum is not None and maximum is not None:
        return nominal + (minimum - nominal) * times, nominal + (maximum - nominal) * times
    return (
        None if minimum is None else minimum / times,
        None if maximum is None else maximum * times,
    )
