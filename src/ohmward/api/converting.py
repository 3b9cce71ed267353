"""The calculator: a pair at a frequency becomes every other quantity; a marking, a value."""

from collections.abc import Sequence
from dataclasses import dataclass
from math import isfinite, nan

import numpy as np

from ohmward.errors import BadInput, Problem, Problems
from ohmward.metrology.immittance import PAIRS, covariance_of_pair, impedance_of_pair, views
from ohmward.terms.kind import Kind
from ohmward.units.markings import MarkingAmbiguous, read_marking
from ohmward.units.values import UnitError, format_quantity, parse_quantity

COVERAGE_K = 2.0
DIGITS = 10

# The symbol that the trade writes, the table's column, the unit in which a person gives it.
SYMBOLS = {
    "R": ("resistance_ohm", "ohm"),
    "X": ("reactance_ohm", "ohm"),
    "Z": ("impedance_ohm", "ohm"),
    "theta": ("phase_rad", "rad"),
    "G": ("conductance_s", "S"),
    "B": ("susceptance_s", "S"),
    "Cs": ("cs_f", "F"),
    "Cp": ("cp_f", "F"),
    "Ls": ("ls_h", "H"),
    "Lp": ("lp_h", "H"),
    "Rs": ("rs_ohm", "ohm"),
    "Rp": ("rp_ohm", "ohm"),
    "D": ("d", "1"),
    "Q": ("q", "1"),
}
SHOWN = ("R", "X", "Z", "theta", "Cs", "Cp", "Ls", "Lp", "Rs", "Rp", "D", "Q")


@dataclass(frozen=True, kw_only=True, slots=True)
class Converted:
    """Quantities by symbol: value in SI units and expanded uncertainty (k = 2) or NaN."""

    values: dict[str, tuple[float, float]]
    units: dict[str, str]

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
        """One line per quantity, as a person reads it."""
        lines = []
        for name, (value, u) in self.values.items():
            unit = self.units[name]
            text = f"{name:<16}{format_quantity(value, unit, DIGITS)}"
            if isfinite(u):
                text += f" ± {format_quantity(u, unit, 2)} (k = 2)"
            lines.append(text)
        return lines


def convert(given: Sequence[str], *, frequency: str | None, kind: str | None) -> Converted:
    """Convert a pair (``["Cs=1 uF", "D=0.1"]`` at a frequency) or one marking.

    A value may carry ``± U``, its expanded uncertainty for k = 2 in its own unit or in percent;
    the two are then taken as uncorrelated. Raises BadInput with every problem.
    """
    problems = Problems()
    if len(given) == 1 and "=" not in given[0]:
        return _marking(given[0], kind)
    if frequency is None:
        _note(problems, "frequency-missing", "--frequency", 'such as "1 kHz"', "none")
    frequency_hz = nan if frequency is None else _value(frequency, "Hz", "--frequency", problems)
    if frequency is not None and not frequency_hz > 0:
        _note(problems, "frequency-not-positive", "--frequency", "more than 0 Hz", frequency)
    pair = _pair(given, problems)
    problems.raise_if_any()
    (name, (first, u_first), (second, u_second)) = pair
    r, x = impedance_of_pair(name, first, second, frequency_hz)
    u_r, u_x, r_rx = covariance_of_pair(name, first, second, frequency_hz, u_first, u_second)
    if not np.isfinite(r):
        _note(problems, "no-impedance", "pair", "values that some impedance has", " ".join(given))
        problems.raise_if_any()
    names = tuple(SYMBOLS[symbol][0] for symbol in SHOWN)
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
    return Converted(values=values, units={SYMBOLS[s][0]: SYMBOLS[s][1] for s in SHOWN})


def _exists(view: str, value: float) -> bool:
    """A negative capacitance or inductance is not shown: the reactance is of the other kind."""
    return isfinite(value) and not (view in ("cs_f", "cp_f", "ls_h", "lp_h") and value <= 0)


def _pair(
    given: Sequence[str], problems: Problems
) -> tuple[str, tuple[float, float], tuple[float, float]]:
    found: dict[str, tuple[float, float]] = {}
    for item in given:
        symbol, equals, text = item.partition("=")
        by_column = {column: name for name, (column, _) in SYMBOLS.items()}
        symbol = by_column.get(symbol.strip(), symbol.strip())
        if not equals or symbol not in SYMBOLS:
            known = ", ".join(SYMBOLS)
            _note(problems, "unknown-quantity", item, f"NAME=VALUE with a name of {known}", item)
            continue
        found[symbol] = _with_uncertainty(text, SYMBOLS[symbol][1], item, problems)
    for name in PAIRS:
        one, two = name.split("-")
        if set(found) == {one, two}:
            return name, found[one], found[two]
    if not len(problems):
        _note(problems, "no-such-pair", "pair", f"one of {', '.join(PAIRS)}", " ".join(given))
    return "R-X", (nan, nan), (nan, nan)


def _with_uncertainty(text: str, unit: str, item: str, problems: Problems) -> tuple[float, float]:
    """The value and its standard uncertainty: half of what stands behind ``±`` or ``+-``."""
    value_text, _, u_text = text.replace("+-", "±").partition("±")
    value = _value(value_text, unit, item, problems)
    u_text = u_text.strip()
    if not u_text:
        return value, 0.0
    if u_text.endswith("%"):
        return value, abs(value) * _value(u_text[:-1], "1", item, problems) / 100 / COVERAGE_K
    return value, _value(u_text, unit, item, problems) / COVERAGE_K


def _value(text: str, unit: str, key: str, problems: Problems) -> float:
    try:
        return parse_quantity(text, unit)
    except UnitError as error:
        _note(problems, "wrong-value", key, error.expected, error.found)
        return nan


def _marking(text: str, kind: str | None) -> Converted:
    kinds = [kind.value for kind in Kind]
    if kind not in kinds:
        expected = f"--kind with {', '.join(kinds)}: a marking is read by kind"
        raise BadInput((_problem("kind-missing", "--kind", expected, kind or "none"),))
    try:
        marking = read_marking(text, kind)
    except UnitError as error:
        ambiguous = isinstance(error, MarkingAmbiguous)
        id = "ambiguous-marking" if ambiguous else "unreadable-marking"  # noqa: A001
        raise BadInput((_problem(id, "marking", error.expected, error.found),)) from error
    values = {"nominal": (marking.nominal, nan)}
    units = {"nominal": Kind(kind).unit, "tolerance_low": "1", "tolerance_high": "1"}
    for name in ("tolerance_low", "tolerance_high"):
        tolerance = getattr(marking, name)
        if tolerance is not None:
            values[name] = (tolerance, nan)
    return Converted(values=values, units=units)


def _note(problems: Problems, id: str, key: str, expected: str, found: str) -> None:  # noqa: A002
    problems.add(id=id, file="command line", key=key, expected=expected, found=found)


def _problem(id: str, key: str, expected: str, found: str) -> Problem:  # noqa: A002
    return Problem(id=id, file="command line", key=key, expected=expected, found=found)
