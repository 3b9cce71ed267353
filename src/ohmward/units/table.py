"""The units that ohmward reads and writes: their names, prefixes, and how an example looks."""

from dataclasses import dataclass, field

PREFIXES: dict[str, int] = {
    "f": -15,
    "p": -12,
    "n": -9,
    "u": -6,
    "m": -3,
    "c": -2,
    "k": 3,
    "M": 6,
    "G": 9,
    "T": 12,
}

# Other spellings of a prefix that can mean nothing else. A capital M is never a small one.
PREFIX_SPELLINGS: dict[str, str] = {
    **{prefix: prefix for prefix in PREFIXES},
    "U": "u",
    "N": "n",
    "P": "p",
    "K": "k",
    "uu": "p",
    "meg": "M",
    "Meg": "M",
    "MEG": "M",
    "pico": "p",
    "nano": "n",
    "micro": "u",
    "milli": "m",
    "kilo": "k",
    "mega": "M",
    "Mega": "M",
    "giga": "G",
    "Giga": "G",
}


@dataclass(frozen=True, kw_only=True, slots=True)
class Unit:
    """One unit: ``names`` in lower case match in any case, ``exact`` only as they stand.

    ``prefixes`` are those that make sense for a part or a meter: a megafarad does not, so a
    capital M is asked back. ``multiples`` are other units of the same thing, in this one.
    """

    symbol: str
    thing: str
    example: str
    names: tuple[str, ...] = ()
    exact: tuple[str, ...] = ()
    prefixes: str = ""
    multiples: dict[str, float] = field(default_factory=dict)
    shown: str = ""
    shown_prefixes: str = ""


def _unit(unit: Unit) -> tuple[str, Unit]:
    return unit.symbol, unit


UNITS: dict[str, Unit] = dict(
    _unit(unit)
    for unit in (
        Unit(
            symbol="F",
            thing="a capacitance",
            example="4.7 uF",
            names=("f", "farad", "farads", "fd"),
            prefixes="fpnum",
            shown="F",
            shown_prefixes="fpnu",  # a large capacitor is 1000 µF to everyone, never 1 mF
        ),
        Unit(
            symbol="H",
            thing="an inductance",
            example="10 mH",
            names=("h", "henry", "henries", "henrys"),
            prefixes="fpnum",
            shown="H",
            shown_prefixes="fpnum",
        ),
        Unit(
            symbol="ohm",
            thing="a resistance",
            example="4.7 kohm",
            names=("ohm", "ohms", "ω", "r"),
            prefixes="fpnumkMGT",
            shown="Ω",
            shown_prefixes="fpnumkMGT",
        ),
        Unit(
            symbol="V",
            thing="a voltage",
            example="5 V",
            names=("v", "volt", "volts"),
            prefixes="fpnumk",
            shown="V",
            shown_prefixes="fpnumk",
        ),
        Unit(
            symbol="A",
            thing="a current",
            example="10 mA",
            names=("a", "amp", "amps", "ampere", "amperes"),
            prefixes="fpnumk",
            shown="A",
            shown_prefixes="fpnumk",
        ),
        Unit(
            symbol="Hz",
            thing="a frequency",
            example="100 kHz",
            names=("hz", "hertz"),
            prefixes="mkMG",
            shown="Hz",
            shown_prefixes="mkMG",
        ),
        Unit(
            symbol="s",
            thing="a time",
            example="10 s",
            names=("sec", "secs", "second", "seconds"),
            exact=("s",),
            prefixes="fpnum",
            multiples={
                **dict.fromkeys(("min", "mins", "minute", "minutes"), 60.0),
                **dict.fromkeys(("h", "hr", "hrs", "hour", "hours"), 3600.0),
                **dict.fromkeys(("d", "day", "days"), 86400.0),
            },
            shown="s",
            shown_prefixes="fpnum",
        ),
        Unit(
            symbol="degC",
            thing="a temperature",
            example="23 degC",
            names=("degc", "°c", "c", "celsius"),
            shown="°C",
        ),
        Unit(symbol="K", thing="a temperature difference", example="2 K", exact=("K",), shown="K"),
        Unit(
            symbol="pct",
            thing="a percentage",
            example="45 %",
            names=("%", "pct", "percent", "%rh"),
            shown="%",
        ),
        Unit(
            symbol="W",
            thing="a power",
            example="0.25 W",
            names=("w", "watt", "watts"),
            prefixes="fpnumk",
            shown="W",
            shown_prefixes="fpnumk",
        ),
        Unit(
            symbol="J",
            thing="an energy",
            example="10 J",
            names=("j", "joule", "joules"),
            prefixes="fpnumk",
            shown="J",
            shown_prefixes="fpnumk",
        ),
        Unit(
            symbol="C",
            thing="a charge",
            example="45 uC",
            names=("coulomb", "coulombs"),
            exact=("C",),
            prefixes="fpnum",
            shown="C",
            shown_prefixes="fpnum",
        ),
        Unit(
            symbol="m",
            thing="a length",
            example="1 m",
            names=("metre", "metres", "meter", "meters"),
            exact=("m",),
            prefixes="umck",
            shown="m",
            shown_prefixes="um",
        ),
        Unit(
            symbol="S",
            thing="a conductance",
            example="10 nS",
            names=("siemens",),
            exact=("S",),
            prefixes="fpnum",
            shown="S",
            shown_prefixes="fpnum",
        ),
        Unit(
            symbol="V/s",
            thing="a rate of voltage",
            example="20 V/s",
            names=("v/s",),
            prefixes="umk",
            shown="V/s",
            shown_prefixes="umk",
        ),
        Unit(
            symbol="rad",
            thing="an angle",
            example="0.5 mrad",
            names=("rad", "radian", "radians"),
            prefixes="num",
            multiples=dict.fromkeys(("deg", "°", "degree", "degrees"), 0.017453292519943295),
            shown="rad",
            shown_prefixes="num",
        ),
        Unit(
            symbol="1",
            thing="a ratio",
            example="0.5 %",
            names=("",),
            multiples={"%": 0.01, "pct": 0.01, "percent": 0.01, "ppm": 1e-6},
        ),
    )
)
