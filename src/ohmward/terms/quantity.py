"""Every quantity that can be judged or reported: its name, unit, and which kinds have it.

A quantity's name is the column of the tables and the key of a limit: one name for one thing.
"""

from dataclasses import dataclass

from ohmward.terms.kind import Kind

_ALL = frozenset(Kind)
_C = frozenset({Kind.CAPACITOR})
_L = frozenset({Kind.INDUCTOR})
_R = frozenset({Kind.RESISTOR})


@dataclass(frozen=True, kw_only=True, slots=True)
class Quantity:
    """A quantity that a limit may name.

    ``per`` says what one value belongs to: ``point`` (a frequency, level and bias), or
    ``part`` (one value for the whole stage, such as a self-resonance).
    """

    name: str
    unit: str
    kinds: frozenset[Kind]
    per: str
    meaning: str


def _point(name: str, unit: str, kinds: frozenset[Kind], meaning: str) -> Quantity:
    return Quantity(name=name, unit=unit, kinds=kinds, per="point", meaning=meaning)


QUANTITIES: dict[str, Quantity] = {
    quantity.name: quantity
    for quantity in (
        _point("resistance_ohm", "ohm", _ALL, "real part of the impedance"),
        _point("reactance_ohm", "ohm", _ALL, "imaginary part of the impedance"),
        _point("impedance_ohm", "ohm", _ALL, "magnitude of the impedance"),
        _point("phase_rad", "rad", _ALL, "angle of the impedance"),
        _point("cs_f", "F", _C, "capacitance, series model"),
        _point("cp_f", "F", _C, "capacitance, parallel model"),
        _point("ls_h", "H", _L, "inductance, series model"),
        _point("lp_h", "H", _L, "inductance, parallel model"),
        _point("rs_ohm", "ohm", _ALL, "equivalent series resistance (ESR)"),
        _point("rp_ohm", "ohm", _ALL, "equivalent parallel resistance"),
        _point("d", "1", _ALL, "dissipation factor, R/|X|"),
        _point("q", "1", _ALL, "quality factor, |X|/R"),
        _point("capacitance_f", "F", _C, "capacitance, in the model that fits its impedance"),
        _point("inductance_h", "H", _L, "inductance, in the model that fits its impedance"),
        _point("capacitance_change", "1", _C, "C at this bias over C at the least bias, less one"),
        _point("inductance_change", "1", _L, "L at this bias over L at the least bias, less one"),
        Quantity(
            name="self_resonance_hz",
            unit="Hz",
            kinds=_ALL,
            per="part",
            meaning="lowest frequency at which the reactance changes sign",
        ),
        *(
            Quantity(
                name=f"saturation_current_{percent}pct_a",
                unit="A",
                kinds=_L,
                per="part",
                meaning=f"bias current at which L is down by {percent} % from the least bias",
            )
            for percent in (10, 20, 30)
        ),
    )
}
