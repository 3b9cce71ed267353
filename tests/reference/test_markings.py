"""Markings and preferred values against their standards and the PyPI package `eseries`."""

import eseries
import pytest

from ohmward.units.markings import read_marking
from ohmward.units.series import SERIES, series_values

# IEC 60063 as the package `eseries` (PyPI) holds it; that package lists one decade from 100
# (or 10), so values are compared as mantissas.
PACKAGE = {name: getattr(eseries, name) for name in SERIES}


@pytest.mark.parametrize("name", SERIES)
def test_series_agree_with_the_package(name: str) -> None:
    theirs = [float(value) for value in eseries.series(PACKAGE[name])]
    assert series_values(name) == pytest.approx([value / theirs[0] for value in theirs], rel=1e-12)


def test_e24_was_rounded_by_hand() -> None:
    # IEC 60063: these eight differ from 10^(i/24) rounded to two digits
    by_formula = [round(10 ** (index / 24), 1) for index in range(24)]
    differ = {
        round(value * 10)
        for value, formula in zip(series_values("E24"), by_formula, strict=True)
        if value != formula
    }
    assert differ == {27, 30, 33, 36, 39, 43, 47, 82}


def test_e192_has_920_where_the_formula_has_919() -> None:
    assert round(100 * 10 ** (185 / 192)) == 919
    assert series_values("E192")[185] == 9.20


# IEC 60062 examples and digit codes; third digits 8 and 9 are from memory.
@pytest.mark.parametrize(
    ("marking", "kind", "nominal"),
    [
        ("4K7", "resistor", 4700.0),
        ("470R", "resistor", 470.0),
        ("R47", "resistor", 0.47),
        ("1M0", "resistor", 1e6),
        ("10G", "resistor", 10e9),
        ("1002", "resistor", 10e3),
        ("4n7", "capacitor", 4.7e-9),
        ("n47", "capacitor", 0.47e-9),
        ("33p2", "capacitor", 33.2e-12),
        ("0u1", "capacitor", 0.1e-6),
        ("4µ7", "capacitor", 4.7e-6),
        ("104", "capacitor", 100e-9),
        ("229", "capacitor", 2.2e-12),
        ("478", "capacitor", 0.47e-12),
        ("101", "inductor", 100e-6),
        ("4R7", "inductor", 4.7e-6),
        ("R10", "inductor", 0.1e-6),
        ("4N7", "inductor", 4.7e-9),
    ],
)
def test_values_of_iec_60062(marking: str, kind: str, nominal: float) -> None:
    assert read_marking(marking, kind).nominal == pytest.approx(nominal, rel=1e-12)


# IEC 60062 tolerance letters, in percent
@pytest.mark.parametrize(
    ("letter", "percent"),
    [("B", 0.1), ("C", 0.25), ("D", 0.5), ("F", 1), ("G", 2), ("J", 5), ("K", 10), ("M", 20)],
)
def test_tolerance_letters_of_iec_60062(letter: str, percent: float) -> None:
    for marking, kind in ((f"4K7{letter}", "resistor"), (f"104{letter}", "capacitor")):
        read = read_marking(marking, kind)
        assert (read.tolerance_low, read.tolerance_high) == pytest.approx(
            (-percent / 100, percent / 100)
        )


# IEC 60062: below 10 pF the letters C and D are ± 0.25 pF and ± 0.5 pF
@pytest.mark.parametrize(("marking", "farads"), [("5p6C", 0.25e-12), ("5p6D", 0.5e-12)])
def test_tolerance_letters_below_ten_picofarads(marking: str, farads: float) -> None:
    read = read_marking(marking, "capacitor")
    assert read.tolerance_high == pytest.approx(farads / 5.6e-12)
    assert read.tolerance_low == pytest.approx(-farads / 5.6e-12)


@pytest.mark.parametrize("name", ["E24", "E96"])
def test_every_preferred_value_survives_its_letter_code(name: str) -> None:
    theirs = [float(value) for value in eseries.series(PACKAGE[name])]
    for value in theirs:
        mantissa = value / theirs[0]
        whole, _, part = f"{mantissa:.2f}".partition(".")
        assert read_marking(f"{whole}K{part}", "resistor").nominal == pytest.approx(mantissa * 1e3)
        assert read_marking(f"{whole}n{part}", "capacitor").nominal == pytest.approx(
            mantissa * 1e-9
        )
