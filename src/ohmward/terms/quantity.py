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

    ``per`` says what one value belongs to: ``point`` (a frequency, level and bias), ``part``
    (one value for a whole sweep, such as a self-resonance), ``time`` (a direct voltage and the
    time that the part has had it), or ``hold`` (one value for a whole stage under voltage or
    direct current).
    """

    name: str
    unit: str
    kinds: frozenset[Kind]
    per: str
    meaning: str


def _time(name: str, unit: str, meaning: str) -> Quantity:
    return Quantity(name=name, unit=unit, kinds=_C, per="time", meaning=meaning)


def _hold(name: str, unit: str, kinds: frozenset[Kind], meaning: str) -> Quantity:
    return Quantity(name=name, unit=unit, kinds=kinds, per="hold", meaning=meaning)


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
        _time("leakage_a", "A", "current through the part under direct voltage"),
        _time("insulation_ohm", "ohm", "insulation resistance, voltage over leakage"),
        _time("insulation_time_s", "s", "insulation resistance times capacitance, R·C"),
        _hold("absorption_ratio", "1", _C, "insulation resistance after 60 s over that after 30 s"),
        _hold("polarization_index", "1", _C, "insulation resistance after 10 min over 1 min"),
        _hold("absorption_rel", "1", _C, "voltage that comes back after a short, over the first"),
        _hold("reformed_v", "V", _C, "highest voltage at which reforming let the leakage fall"),
        _hold("withstood_v", "V", _C, "proof voltage that did not break the part down for good"),
        _hold("winding_ohm", "ohm", _L, "resistance of the winding to direct current"),
        _hold("direct_ohm", "ohm", _R, "resistance to direct current"),
    )
}
