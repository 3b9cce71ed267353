"""The calculator: a pair at a frequency becomes every other quantity; a marking, a value."""

from collections.abc import Sequence
from dataclasses import dataclass
from math import degrees, isfinite, nan

from ohmward.errors import BadInput, Problem, Problems
from ohmward.metrology.immittance import PAIRS, covariance_of_pair, impedance_of_pair, views
from ohmward.terms.kind import Kind
from ohmward.units.markings import MarkingAmbiguous, read_marking
from ohmward.units.values import UnitError, format_quantity, format_uncertain, parse_quantity

COVERAGE_K = 2.0
DIGITS = 7
FILE = "command line"


@dataclass(frozen=True, kw_only=True, slots=True)
class Symbol:
    """How the trade writes a quantity, the tables' column for it, its unit and its meaning."""

    symbol: str
    column: str
    unit: str
    meaning: str


_ROWS = (
    ("R", "resistance_ohm", "ohm", "resistance"),
    ("X", "reactance_ohm", "ohm", "reactance"),
    ("Z", "impedance_ohm", "ohm", "impedance, magnitude"),
    ("theta", "phase_rad", "rad", "impedance, angle"),
    ("G", "conductance_s", "S", "conductance"),
    ("B", "susceptance_s", "S", "susceptance"),
    ("Cs", "cs_f", "F", "capacitance, series model"),
    ("Cp", "cp_f", "F", "capacitance, parallel model"),
    ("Ls", "ls_h", "H", "inductance, series model"),
    ("Lp", "lp_h", "H", "inductance, parallel model"),
    ("Rs", "rs_ohm", "ohm", "equivalent series resistance (ESR)"),
    ("Rp", "rp_ohm", "ohm", "equivalent parallel resistance"),
    ("D", "d", "1", "dissipation factor"),
    ("Q", "q", "1", "quality factor"),
    ("PF", "power_factor", "1", "power factor"),
)
SYMBOLS = {
    symbol: Symbol(symbol=symbol, column=column, unit=unit, meaning=meaning)
    for symbol, column, unit, meaning in _ROWS
}
GIVEN = tuple(symbol for symbol in SYMBOLS if symbol != "PF")  # PF does not tell X's sign
_ASKED_BACK = {"c": "Cs (series) or Cp (parallel): which one?", "l": "Ls or Lp: which one?"}
_OTHER_NAMES = {"θ": "theta", "phase": "theta", "|z|": "Z", "esr": "Rs", "df": "D", "tan δ": "D"}
_NEVER_NEGATIVE = ("Z",)


@dataclass(frozen=True, kw_only=True, slots=True)
class Converted:
    """Quantities by the tables' names: value in SI units and expanded uncertainty (k = 2) or NaN.

    ``heading`` says what they are of, in a line.
    """

    values: dict[str, tuple[float, float]]
    units: dict[str, str]
    heading: str

    def as_dict(self) -> dict[str, object]:
        """By table name: value, expanded uncertainty (or null) and unit."""
        return {
            name: {
                "value": value,
                "u_expanded": u if isfinite(u) else None,
                "unit": self.units[name],
            }
            for name, (value, u) in self.values.items()
        }

    def lines(self) -> list[str]:
        """The heading and one line per quantity, as a person reads it."""
        if "nominal" in self.values:
            return [self.heading, *self._marking_lines()]
        lines = [self.heading]
        for one in SYMBOLS.values():
            if one.column in self.values:
                text = _written(*self.values[one.column], one.unit)
                lines.append(f"{one.symbol:<6}{one.meaning:<36}{text}")
        return lines

    def _marking_lines(self) -> list[str]:
        given = {name: value for name, (value, _) in self.values.items()}
        lines = [f"nominal    {format_quantity(given['nominal'], self.units['nominal'], DIGITS)}"]
        if "tolerance_low" in given:
            low, high = 100 * given["tolerance_low"], 100 * given["tolerance_high"]
            both = f"±{high:.4g} %" if low == -high else f"{low:+.4g} % to {high:+.4g} %"
            lines.append(f"tolerance  {both}")
        if "rated_voltage" in given:
            lines.append(f"rated      {format_quantity(given['rated_voltage'], 'V')}")
        return lines


def _written(value: float, u: float, unit: str) -> str:
    if unit == "rad":
        value, u, unit = degrees(value), degrees(u), "1"
        degree = "°"
    else:
        degree = ""
    if isfinite(u) and u > 0:
        text = format_uncertain(value, u, unit)
        if degree:
            text = text.replace(" ±", f"{degree} ±") + degree
        return f"{text} (k = 2)"
    return format_quantity(value, unit, DIGITS) + degree


def convert(given: Sequence[str], *, frequency: str | None, kind: str | None) -> Converted:
    """Convert a pair (``["Cs=1 uF", "D=0.1"]`` at a frequency) or one marking.

    A value may carry ``± U``, its expanded uncertainty for k = 2 in its own unit or in percent;
    the two are then taken as uncorrelated. Raises BadInput with every problem.
    """
    problems = Problems()
    if len(given) == 1 and "=" not in given[0]:
        return _marking(given[0], kind)
    frequency_hz = _frequency(frequency, problems)
    name, (first, u_first), (second, u_second) = _pair(given, problems)
    problems.raise_if_any()
    r, x = impedance_of_pair(name, first, second, frequency_hz)
    if not (isfinite(r) and isfinite(x)) or not (r or x):
        wanted = "values that an impedance other than zero has"
        _note(problems, "no-impedance", "pair", wanted, " ".join(given))
        problems.raise_if_any()
    u_r, u_x, r_rx = covariance_of_pair(name, first, second, frequency_hz, u_first, u_second)
    names = tuple(one.column for one in SYMBOLS.values())
    table = views(frequency_hz, r, x, u_r, u_x, r_rx, names)
    known = u_first > 0 or u_second > 0
    values = {
        view: (
            float(table[view]),
            COVERAGE_K * float(table[f"u_{view}"]) if known else nan,
        )
        for view in names
        if _exists(view, float(table[view]))
    }
    return Converted(
        values=values,
        units={one.column: one.unit for one in SYMBOLS.values()},
        heading=f"{_nature(float(x))} at {format_quantity(frequency_hz, 'Hz', DIGITS)}",
    )


def _nature(x: float) -> str:
    """What the sign of the reactance says."""
    if x == 0:
        return "purely resistive"
    return "capacitive" if x < 0 else "inductive"


def _exists(view: str, value: float) -> bool:
    """A negative capacitance or inductance is not shown: the reactance is of the other kind."""
    return isfinite(value) and not (view in ("cs_f", "cp_f", "ls_h", "lp_h") and value <= 0)


def _frequency(text: str | None, problems: Problems) -> float:
    if text is None:
        wanted = "the frequency of the pair, such as '1 kHz'"
        _note(problems, "frequency-missing", "--frequency", wanted, "none")
        return nan
    frequency_hz = _value(text, "Hz", "--frequency", problems)
    if frequency_hz <= 0:
        _note(problems, "frequency-not-positive", "--frequency", "more than 0 Hz", f"'{text}'")
    return frequency_hz


def _pair(
    given: Sequence[str], problems: Problems
) -> tuple[str, tuple[float, float], tuple[float, float]]:
    found: dict[str, tuple[float, float]] = {}
    before = len(problems)
    for item in given:
        written, equals, text = item.partition("=")
        symbol = _symbol(written.strip()) if equals else ""
        if not symbol:
            _note(problems, "unknown-quantity", item, _wanted(written, equals), f"'{item}'")
        elif symbol in found:
            _note(problems, "quantity-twice", item, f"{symbol} once", "it twice")
        else:
            found[symbol] = _with_uncertainty(text, symbol, item, problems)
    for name in PAIRS:
        one, two = name.split("-")
        if set(found) == {one, two}:
            return name, found[one], found[two]
    if len(problems) == before:
        expected = f"one of the pairs {', '.join(PAIRS)}"
        _note(problems, "no-such-pair", "pair", expected, f"'{' '.join(given)}'")
    return "R-X", (nan, nan), (nan, nan)


def _symbol(written: str) -> str:
    """The symbol that was meant: as the trade writes it, in any case, or a table's column."""
    plain = written.lower()
    by_name = {one.lower(): one for one in GIVEN} | {SYMBOLS[one].column: one for one in GIVEN}
    return by_name.get(plain) or _OTHER_NAMES.get(plain, "")


def _wanted(written: str, equals: str) -> str:
    asked = _ASKED_BACK.get(written.strip().lower(), "") if equals else ""
    return asked or f"NAME=VALUE with a name of {', '.join(GIVEN)}"


def _with_uncertainty(text: str, symbol: str, item: str, problems: Problems) -> tuple[float, float]:
    """The value and its standard uncertainty: half of what stands behind ``±`` or ``+-``."""
    unit = SYMBOLS[symbol].unit
    value_text, sign, u_text = text.replace("+-", "±").replace("+/-", "±").partition("±")
    value = _value(value_text, unit, item, problems)
    if symbol in _NEVER_NEGATIVE and value < 0:
        _note(problems, "negative-value", item, "a magnitude", f"'{value_text.strip()}'")
    if not sign:
        return value, 0.0
    u_text = u_text.strip()
    if u_text.endswith("%") and unit != "1":
        u = abs(value) * _value(u_text, "1", item, problems) / COVERAGE_K
    elif u_text.endswith("%"):
        expected = "the uncertainty of a plain number as a plain number, not in percent"
        _note(problems, "wrong-value", item, expected, f"'{u_text}'")
        return value, nan
    else:
        u = _value(u_text, unit, item, problems) / COVERAGE_K
    if u < 0:
        _note(problems, "negative-uncertainty", item, "0 or more behind ±", f"'{u_text}'")
    return value, u


def _value(text: str, unit: str, key: str, problems: Problems) -> float:
    try:
        return parse_quantity(text, unit)
    except UnitError as error:
        _note(problems, "wrong-value", key, error.expected, error.found)
        return nan


def _marking(text: str, kind: str | None) -> Converted:
    kinds = [kind.value for kind in Kind]
    if kind is None or kind.lower() not in kinds:
        expected = f"{', '.join(kinds[:-1])} or {kinds[-1]}, for a marking is read by kind"
        raise BadInput((_problem("kind-missing", "--kind", expected, kind or "none"),))
    kind = kind.lower()
    try:
        marking = read_marking(text, kind)
    except UnitError as error:
        ambiguous = isinstance(error, MarkingAmbiguous)
        id = "ambiguous-marking" if ambiguous else "unreadable-marking"  # noqa: A001
        raise BadInput((_problem(id, "marking", error.expected, error.found),)) from error
    said = {
        "nominal": (marking.nominal, Kind(kind).unit),
        "tolerance_low": (marking.tolerance_low, "1"),
        "tolerance_high": (marking.tolerance_high, "1"),
        "rated_voltage": (marking.voltage_v, "V"),
    }
    return Converted(
        values={name: (value, nan) for name, (value, _) in said.items() if value is not None},
        units={name: unit for name, (_, unit) in said.items()},
        heading=f"{text.strip()} on {'an' if kind[0] in 'aeiou' else 'a'} {kind}",
    )


def _note(problems: Problems, id: str, key: str, expected: str, found: str) -> None:  # noqa: A002
    problems.add(id=id, file=FILE, key=key, expected=expected, found=found)


def _problem(id: str, key: str, expected: str, found: str) -> Problem:  # noqa: A002
    return Problem(id=id, file=FILE, key=key, expected=expected, found=found)
