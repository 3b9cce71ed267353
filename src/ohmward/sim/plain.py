"""Numbers with units as TOML files carry them, read by the simulator for itself."""

import re

_QUANTITY = re.compile(r"\s*([+-]?[\d.]+(?:[eE][+-]?\d+)?)\s*([A-Za-zµΩ%]*)\s*$")
_PREFIXES = {
    "p": 1e-12,
    "n": 1e-9,
    "u": 1e-6,
    "µ": 1e-6,
    "m": 1e-3,
    "k": 1e3,
    "M": 1e6,
    "G": 1e9,
}
_UNITS = {
    "": 1.0,
    "Hz": 1.0,
    "V": 1.0,
    "A": 1.0,
    "s": 1.0,
    "ohm": 1.0,
    "Ω": 1.0,
    "F": 1.0,
    "H": 1.0,
    "S": 1.0,
    "m": 1.0,
    "W": 1.0,
    "J": 1.0,
    "degC": 1.0,
    "rad": 1.0,
    "pct": 1.0,
    "%": 0.01,
    "min": 60.0,
    "h": 3600.0,
}


def quantity(value: object) -> float:
    """A number in SI units: ``"10 ms"`` is 0.01, ``"0.5 %"`` is 0.005, a bare number is itself."""
    if isinstance(value, int | float) and not isinstance(value, bool):
        return float(value)
    if isinstance(value, str):
        found = _QUANTITY.match(value)
        if found is not None:
            number, unit = found.groups()
            if unit in _UNITS:
                return float(number) * _UNITS[unit]
            if unit[:1] in _PREFIXES and unit[1:] in _UNITS:
                return float(number) * _PREFIXES[unit[:1]] * _UNITS[unit[1:]]
    raise ValueError(f"{value!r} is no quantity")
