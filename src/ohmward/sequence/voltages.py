"""Named voltages: what a standard or practice puts on a part of a given rating.

Each says where it comes from; ``confirmed`` is false where the source is quoted from memory.
"""

from collections.abc import Callable
from dataclasses import dataclass

from ohmward.sequence.dielectric import dielectric_key
from ohmward.sequence.rules import NotStated, RuleLacks
from ohmward.terms.part import Part


@dataclass(frozen=True, kw_only=True, slots=True)
class VoltageRule:
    """A rule that a stage may name instead of a voltage.

    ``volts(rated_v)`` is the voltage (V) for a DC rating (V), or raises NotStated;
    ``dielectrics`` are those that its source covers, empty for any.
    """

    name: str
    meaning: str
    source: str
    confirmed: bool
    volts: Callable[[float], float]
    dielectrics: frozenset[str] = frozenset()

    def of(self, part: Part) -> float:
        """The voltage for a part. Raises RuleLacks (a cell is empty) or NotStated."""
        if self.dielectrics:
            if not part.dielectric.strip():
                raise RuleLacks(
                    cell="dielectric", expected="a dielectric such as PP or X7R", found="nothing"
                )
            if dielectric_key(part.dielectric) not in self.dielectrics:
                raise NotStated(f"not stated for {part.dielectric}")
        if part.rated_v is None:
            raise RuleLacks(
                cell="rated_voltage", expected="a DC rating such as 63 V", found="nothing"
            )
        return self.volts(part.rated_v)


def insulation_voltage(rated_v: float) -> float:
    """Below 10 V the rating itself; 10 V up to 100 V, 100 V up to 500 V, 500 V from there."""
    if rated_v < 10.0:
        return rated_v
    if rated_v < 100.0:
        return 10.0
    return 100.0 if rated_v < 500.0 else 500.0


def ceramic_proof_voltage(rated_v: float) -> float:
    """Up to 100 V 2.5·U; up to 200 V 1.5·U + 100 V; up to 500 V 1.3·U + 100 V; above 1.3·U."""
    if rated_v <= 100.0:
        return 2.5 * rated_v
    if rated_v <= 200.0:
        return 1.5 * rated_v + 100.0
    return 1.3 * rated_v + (100.0 if rated_v <= 500.0 else 0.0)


def surge_voltage(rated_v: float) -> float:
    """1.15·U up to 315 V, 1.10·U above."""
    return (1.15 if rated_v <= 315.0 else 1.10) * rated_v


def film_proof_voltage(rated_v: float) -> float:
    """1.6·U between the terminations."""
    return 1.6 * rated_v


def rated_voltage(rated_v: float) -> float:
    """The rating itself."""
    return rated_v


CERAMIC = frozenset({"c0g", "x7r", "x5r", "x7s", "x6s", "x8r", "y5v", "z5u", "x7t"})
FILM = frozenset({"pp", "pet", "pps", "pen", "paper", "pc", "ps"})

VOLTAGE_RULES: dict[str, VoltageRule] = {
    rule.name: rule
    for rule in (
        VoltageRule(
            name="insulation-by-rating",
            meaning="below 10 V the rating; 10 V up to 100 V, 100 V up to 500 V, else 500 V",
            source="IEC 60384-1, 4.5",
            confirmed=False,
            volts=insulation_voltage,
        ),
        VoltageRule(
            name="insulation-ceramic",
            meaning="the rating",
            source="IEC 60384-21 and -22 as quoted by makers",
            confirmed=True,
            volts=rated_voltage,
            dielectrics=CERAMIC,
        ),
        VoltageRule(
            name="proof-ceramic",
            meaning="2.5 U up to 100 V, 1.5 U + 100 V up to 200 V, 1.3 U + 100 V up to 500 V, "
            "1.3 U above",
            source="IEC 60384-21 and -22 as quoted by makers",
            confirmed=True,
            volts=ceramic_proof_voltage,
            dielectrics=CERAMIC,
        ),
        VoltageRule(
            name="proof-film",
            meaning="1.6 U between the terminations",
            source="IEC 60384-2 and -16",
            confirmed=False,
            volts=film_proof_voltage,
            dielectrics=FILM,
        ),
        VoltageRule(
            name="surge-electrolytic",
            meaning="1.15 U up to 315 V, 1.10 U above",
            source="IEC 60384-4",
            confirmed=False,
            volts=surge_voltage,
            dielectrics=frozenset({"aluminium"}),
        ),
    )
}
