"""``convert`` against closed forms and published relations; and what it asks back."""

from cmath import phase
from itertools import combinations
from math import degrees, pi

import pytest
from hypothesis import given
from hypothesis import strategies as st
from tests.cli.told import Ohmward

from ohmward.api import convert

# Computed from the definitions (series and parallel relations as in ASTM D150 and bridge
# handbooks), to the digits given; PF of D = 0.1 from the table D, Cs/Cp, Rp/Rs, PF there.
TABLE = [
    (
        ["Cs=1 uF", "D=0.1"],
        "1 kHz",
        {
            "rs_ohm": 15.9154943092,
            "reactance_ohm": -159.154943092,
            "impedance_ohm": 159.948738256,
            "cp_f": 0.990099009901e-6,
            "rp_ohm": 1607.46492523,
            "power_factor": 0.0995037190210,
        },
    ),
    (
        ["Cp=100 nF", "Rp=1 Mohm"],
        "1 kHz",
        {"d": 0.00159154943092, "cs_f": 100.000253303e-9, "rs_ohm": 2.53302317484},
    ),
    (
        ["Ls=1 mH", "Rs=10 ohm"],
        "10 kHz",
        {"q": 6.28318530718, "lp_h": 1.02533029591e-3, "rp_ohm": 404.784176044},
    ),
    # D = 1: Cs = 2·Cp, Rp = 2·Rs, PF = 1/√2; D = 0.01: Cs/Cp 1.0001, Rp/Rs 10001
    (["Cs=2 uF", "D=1"], "50 Hz", {"cp_f": 1e-6, "power_factor": 0.7071067811865}),
    (["Cp=1 uF", "D=0.01"], "50 Hz", {"cs_f": 1.0001e-6, "power_factor": 0.0099995000375}),
]

PAIRS_OF_A_CAPACITOR = ("R-X", "Z-theta", "G-B", "Cs-D", "Cs-Rs", "Cp-D", "Cp-Rp", "Cp-G")


@pytest.mark.parametrize(("pair", "frequency", "expected"), TABLE)
def test_the_immittance_table(
    ohmward: Ohmward, pair: list[str], frequency: str, expected: dict[str, float]
) -> None:
    told = ohmward("convert", *pair, "--frequency", frequency, "--json")
    assert told.code == 0
    for name, value in expected.items():
        assert told.json[name]["value"] == pytest.approx(value, rel=2e-12)


def test_the_angle_is_shown_in_degrees(ohmward: Ohmward) -> None:
    """θ of Cs 1 µF, D 0.1 at 1 kHz: −84.2894068625°, computed."""
    told = ohmward("convert", "Cs=1uF", "D=0.1", "--frequency", "1kHz")
    assert "-84.28941°" in told.out
    assert "capacitive at 1 kHz" in told.out
    told = ohmward("convert", "Cs=1uF", "D=0.1", "--frequency", "1kHz", "--json")
    assert degrees(told.json["phase_rad"]["value"]) == pytest.approx(-84.2894068625, rel=1e-11)


@given(
    r=st.floats(1e-3, 1e6),
    x=st.floats(1e-3, 1e6),
    sign=st.sampled_from([-1, 1]),
    frequency_hz=st.floats(20, 2e6),
)
def test_complex_arithmetic_says_the_same(
    r: float, x: float, sign: int, frequency_hz: float
) -> None:
    z = complex(r, sign * x)
    y = 1 / z
    found = convert(
        [f"R={z.real!r} ohm", f"X={z.imag!r} ohm"], frequency=f"{frequency_hz!r} Hz", kind=None
    ).values
    w = 2 * pi * frequency_hz
    expected = {
        "impedance_ohm": abs(z),
        "phase_rad": phase(z),
        "conductance_s": y.real,
        "susceptance_s": y.imag,
        "rs_ohm": z.real,
        "rp_ohm": 1 / y.real,
        "power_factor": z.real / abs(z),
        **(
            {"cs_f": -1 / (w * z.imag), "cp_f": y.imag / w}
            if sign < 0
            else {"ls_h": z.imag / w, "lp_h": -1 / (w * y.imag)}
        ),
    }
    for name, value in expected.items():
        assert found[name][0] == pytest.approx(value, rel=1e-9)
    assert ("ls_h" in found) == (sign > 0)


def test_every_pair_leads_to_the_same_answer(ohmward: Ohmward) -> None:
    """1 µF with D 0.1 again, from each pair of what it is: the way there must not matter."""
    first = convert(["Cs=1 uF", "D=0.1"], frequency="1 kHz", kind=None)
    symbols = {"R": "resistance_ohm", "X": "reactance_ohm", "Z": "impedance_ohm"}
    symbols |= {"theta": "phase_rad", "G": "conductance_s", "B": "susceptance_s", "Cs": "cs_f"}
    symbols |= {"Cp": "cp_f", "Rs": "rs_ohm", "Rp": "rp_ohm", "D": "d"}
    units = {"ohm": "ohm", "rad": "rad", "S": "S", "F": "F", "1": ""}
    known = {frozenset(pair.split("-")) for pair in PAIRS_OF_A_CAPACITOR}
    for pair in combinations(symbols, 2):
        given = [
            f"{name}={first.values[symbols[name]][0]!r} {units[first.units[symbols[name]]]}"
            for name in pair
        ]
        if frozenset(pair) not in known:
            told = ohmward("convert", *given, "--frequency", "1 kHz", "--json")
            assert told.ids() == {"no-such-pair"}
            continue
        again = convert(given, frequency="1 kHz", kind=None)
        for name, (value, _) in first.values.items():
            assert again.values[name][0] == pytest.approx(value, rel=1e-12)


def test_an_uncertainty_is_carried_over_and_rounded_to(ohmward: Ohmward) -> None:
    """Closed form: Rs = D/(wCs), so (u(Rs)/Rs)² = (u(C)/C)² + (u(D)/D)²."""
    arguments = ("convert", "Cs=1 uF ± 1 %", "D=0.1 +- 0.001", "--frequency", "1 kHz")
    found = ohmward(*arguments, "--json").json
    assert found["cs_f"]["u_expanded"] == pytest.approx(0.01e-6)
    assert found["d"]["u_expanded"] == pytest.approx(0.001)
    assert found["rs_ohm"]["u_expanded"] == pytest.approx(15.9154943092 * (2 * 0.01**2) ** 0.5)
    shown = ohmward(*arguments).out
    assert "15.92 Ω ± 0.23 Ω (k = 2)" in shown
    assert "1.000 µF ± 0.010 µF (k = 2)" in shown


def test_the_derivatives_of_admittance_and_power_factor() -> None:
    """Against differences: a small change of R or X changes G, B and PF as it was said."""
    base, step = {"R": 3.0, "X": -7.0}, 1e-6
    for changed in base:
        given = [
            f"{name}={value!r} ohm" + (" ± 1 mohm" if name == changed else "")
            for name, value in base.items()
        ]
        said = convert(given, frequency="1 kHz", kind=None).values
        moved = {**base, changed: base[changed] + step}
        after = convert(
            [f"{name}={value!r} ohm" for name, value in moved.items()],
            frequency="1 kHz",
            kind=None,
        ).values
        for name in ("conductance_s", "susceptance_s", "power_factor"):
            slope = abs(after[name][0] - said[name][0]) / step
            assert said[name][1] == pytest.approx(slope * 1e-3, rel=1e-4)


# IEC 60062: letter and digit codes, tolerance letters
@pytest.mark.parametrize(
    ("marking", "kind", "nominal", "low", "high"),
    [
        ("104K", "capacitor", 100e-9, -0.1, 0.1),
        ("4n7", "capacitor", 4.7e-9, None, None),
        ("33p2", "capacitor", 33.2e-12, None, None),
        ("4n7Z", "capacitor", 4.7e-9, -0.2, 0.8),
        ("4K7", "resistor", 4700.0, None, None),
        ("R47", "resistor", 0.47, None, None),
        ("100RF", "resistor", 100.0, -0.01, 0.01),
    ],
)
def test_markings(
    ohmward: Ohmward,
    marking: str,
    kind: str,
    nominal: float,
    low: float | None,
    high: float | None,
) -> None:
    found = ohmward("convert", marking, "--kind", kind, "--json").json
    assert found["nominal"]["value"] == pytest.approx(nominal)
    assert found.get("tolerance_low", {}).get("value") == low
    assert found.get("tolerance_high", {}).get("value") == high


def test_a_marking_is_told_as_people_write_it(ohmward: Ohmward) -> None:
    assert ohmward("convert", "104K", "--kind", "capacitor").out.split("\n")[:3] == [
        "104K on a capacitor",
        "nominal    100 nF",
        "tolerance  ±10 %",
    ]
    assert "-20 % to +80 %" in ohmward("convert", "4n7Z", "--kind", "capacitor").out


@pytest.mark.parametrize(
    ("arguments", "ids"),
    [
        (["Cs=1 uF", "D=0.1"], {"frequency-missing"}),
        (["Cs=1 uF", "D=0.1", "--frequency", "0 Hz"], {"frequency-not-positive"}),
        (["Cs=1 uF", "D=0.1", "--frequency", "-1 kHz"], {"frequency-not-positive"}),
        (["Cs=1 uF", "D=0.1", "--frequency", "1 V"], {"wrong-value"}),
        (["Cs=1", "D=x"], {"frequency-missing", "wrong-value"}),
        (["Cs=1 MFD", "D=0.1", "--frequency", "1 kHz"], {"wrong-value"}),
        (["C=1 uF", "D=0.1", "--frequency", "1 kHz"], {"unknown-quantity"}),
        (["Cs=1 uF", "bogus", "--frequency", "1 kHz"], {"unknown-quantity"}),
        (["Cs=1 uF", "Cs=2 uF", "--frequency", "1 kHz"], {"quantity-twice"}),
        (["Cs=1 uF", "X=3 ohm", "--frequency", "1 kHz"], {"no-such-pair"}),
        (["Cs=1 uF", "--frequency", "1 kHz"], {"no-such-pair"}),
        (["Cs=1 uF ± -1 nF", "D=0.1", "--frequency", "1 kHz"], {"negative-uncertainty"}),
        (["Cs=1 uF ±", "D=0.1", "--frequency", "1 kHz"], {"wrong-value"}),
        (["Cs=1 uF", "D=0.1 ± 1 %", "--frequency", "1 kHz"], {"wrong-value"}),
        (["Z=-5 ohm", "theta=1 rad", "--frequency", "1 kHz"], {"negative-value"}),
        (["Cs=0 F", "D=0.1", "--frequency", "1 kHz"], {"no-impedance"}),
        (["G=0 S", "B=0 S", "--frequency", "1 kHz"], {"no-impedance"}),
        (["104K"], {"kind-missing"}),
        (["104K", "--kind", "valve"], {"kind-missing"}),
        (["104K", "--kind", "resistor"], {"ambiguous-marking"}),
        (["nonsense", "--kind", "resistor"], {"unreadable-marking"}),
        (["", "--kind", "resistor"], {"unreadable-marking"}),
        ([], {"usage"}),
        (["--bogus"], {"usage"}),
    ],
)
def test_what_is_wrong_or_unclear(ohmward: Ohmward, arguments: list[str], ids: set[str]) -> None:
    assert ohmward("convert", *arguments, "--json").ids() == ids
    told = ohmward("convert", *arguments)
    assert told.code == 2
    assert told.out == ""
    assert told.err


def test_all_problems_come_in_one_go(ohmward: Ohmward) -> None:
    told = ohmward("convert", "Cs=1 MFD", "Q=y", "bogus=1", "--frequency", "fast", "--json")
    assert [problem["key"] for problem in told.problems] == [
        "--frequency",
        "Cs=1 MFD",
        "Q=y",
        "bogus=1",
    ]
