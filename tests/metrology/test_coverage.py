"""Intervals hold the truth as often as they say, over instruments drawn anew for every part.

Each part is measured five times by an instrument of its own, whose errors of magnitude and phase
are drawn from the distributions that the budget states; the readings scatter besides. The bounds
of the project, 93.5 % to 96.5 %, are for intervals of 95 %; they hold for 2,000 parts a cell
(`soak`), where the binomial spread is 0.5 %; with 200 a spread of three times 1.5 % is allowed.
"""

from collections.abc import Iterator
from dataclasses import dataclass, field
from math import cos, hypot, pi, sin, sqrt

import numpy as np
import pytest

from ohmward.metrology.coverage import coverage_factor, effective_degrees
from ohmward.metrology.errors import BadCovariance
from ohmward.metrology.immittance import gradients
from ohmward.metrology.uncertain import (
    Stated,
    UncertainImpedance,
    draw,
    first_order,
    is_curved,
    monte_carlo,
    needs_monte_carlo,
    sampled,
)

FREQUENCY_HZ = 1000.0
K_95 = 1.959964
REPEATS = 5
NOISE = 2e-4
DECADES = range(-1, 8)
# angle of a sound part, and what is judged of each kind
KINDS = {
    "capacitor": (-pi / 2 + 0.02, ("cs_f", "cp_f", "d", "rs_ohm")),
    "inductor": (pi / 2 - 0.05, ("ls_h", "lp_h", "q", "rs_ohm")),
    "resistor": (0.01, ("resistance_ohm", "impedance_ohm", "phase_rad")),
}
STATED_AT = 1.0, 0.001, 1e-9  # basic half-width in 1e-3, short in ohm, open in siemens


def _half_widths(size: float) -> Stated:
    basic, short, opened = STATED_AT
    rest = short / size + opened * size
    return Stated(magnitude_rel=1e-3 * basic + rest, phase_rad=0.8e-3 * basic + rest)


def _measured(truth: complex, stated: Stated, rng: np.random.Generator) -> UncertainImpedance:
    """Five readings of one instrument, as their mean with its scatter."""
    gain = 1 + stated.magnitude_rel * rng.uniform(-1, 1)
    angle = stated.phase_rad * rng.uniform(-1, 1)
    noise = NOISE * (rng.normal(size=REPEATS) + 1j * rng.normal(size=REPEATS))
    readings = truth * gain * np.exp(1j * angle) * (1 + noise)
    pair = np.stack([readings.real, readings.imag])
    covariance = np.cov(pair) / REPEATS
    u_r, u_x = np.sqrt(np.diag(covariance))
    return UncertainImpedance(
        frequency_hz=FREQUENCY_HZ,
        r=float(pair[0].mean()),
        x=float(pair[1].mean()),
        stated=stated,
        repeat=(float(u_r), float(u_x), float(covariance[0, 1] / (u_r * u_x))),
        degrees=REPEATS - 1,
    )


@dataclass
class Tally:
    """How often the truth was inside, and how large the errors were in units of u."""

    parts: int = 0
    held: int = 0
    straight: int = 0
    held_first_order: int = 0
    squares: float = 0.0
    widths: list[float] = field(default_factory=list)

    def add(self, other: "Tally") -> None:
        self.parts += other.parts
        self.held += other.held
        self.straight += other.straight
        self.held_first_order += other.held_first_order
        self.squares += other.squares
        self.widths += other.widths


def _tallies(parts: int, samples: int, decades: range) -> Iterator[tuple[str, str, int, Tally]]:
    """One tally for each kind, quantity and decade of |Z|."""
    for kind, (angle, quantities) in KINDS.items():
        for decade in decades:
            rng = np.random.default_rng([ord(kind[0]), decade + 5])
            found = {name: Tally() for name in quantities}
            for _ in range(parts):
                size = 10 ** (decade + rng.uniform())
                truth = size * complex(cos(angle), sin(angle))
                z = _measured(truth, _half_widths(size), rng)
                true_views = gradients(FREQUENCY_HZ, truth.real, truth.imag, quantities)
                r, x = draw(z, samples)
                for name, tally in found.items():
                    _count(tally, name, z, r, x, float(true_views[name].value))
            for name, tally in found.items():
                yield kind, name, decade, tally


def _count(
    tally: Tally,
    name: str,
    z: UncertainImpedance,
    r: np.ndarray,
    x: np.ndarray,
    truth: float,
) -> None:
    plain = first_order(name, z, K_95)
    samples = sampled(name, z, r, x)
    low, high = np.quantile(samples, (0.025, 0.975), method="inverted_cdf")
    tally.parts += 1
    tally.held += bool(low <= truth <= high)
    if is_curved(name, z, z.covariance()):
        return  # first order is not used there, and has no claim to hold
    tally.straight += 1
    tally.held_first_order += bool(plain.low <= truth <= plain.high)
    tally.squares += ((plain.value - truth) / plain.u) ** 2
    tally.widths.append(2 * plain.u_expanded / float(high - low))


def _check(parts: int, samples: int, slack: float, decades: range = DECADES) -> None:
    whole: dict[tuple[str, str], Tally] = {}
    print("\nkind      quantity        decade   MC %   GUM %  GUM/MC  rms(e/u)")
    for kind, name, decade, tally in _tallies(parts, samples, decades):
        share = tally.held / parts
        print(f"{kind:10}{name:16}{decade:4}   {100 * share:6.2f}", end="")
        assert 0.935 - slack <= share <= 0.965 + slack, (kind, name, decade)
        if tally.straight < parts / 2:
            print("   curved")
            continue
        first, rms = tally.held_first_order / tally.straight, sqrt(tally.squares / tally.straight)
        width = float(np.median(tally.widths))
        print(f" {100 * first:6.2f}  {width:6.3f}  {rms:6.3f}")
        assert first >= 0.935 - slack, (kind, name, decade)
        assert width <= 1.25, (kind, name, decade)
        assert 0.85 - slack <= rms <= 1.15 + slack, (kind, name, decade)
        whole.setdefault((kind, name), Tally()).add(tally)
    for (kind, name), tally in whole.items():
        # five decades or more together have less than half of the binomial spread
        share = tally.held / tally.parts
        assert 0.935 - slack / 2 <= share <= 0.965 + slack / 2, (kind, name)
        assert tally.held_first_order / tally.straight >= 0.935, (kind, name)
        assert 0.85 <= sqrt(tally.squares / tally.straight) <= 1.15, (kind, name)


@pytest.mark.slow
def test_intervals_hold_the_truth_as_often_as_they_say() -> None:
    """200 parts a cell: three binomial standard deviations of 0.0147 are allowed for."""
    _check(200, 1000, 0.045, DECADES[::2])


@pytest.mark.soak
def test_intervals_hold_the_truth_as_often_as_they_say_with_many_parts() -> None:
    _check(2000, 5000, 0.0)


def test_one_rectangular_error_makes_first_order_too_wide() -> None:
    """U of a rectangular ±δ is 0.9545·δ, not 2δ/√3 (JCGM 101:2008, 9.2)."""
    z = UncertainImpedance(
        frequency_hz=1e3, r=100.0, x=0.0, stated=Stated(magnitude_rel=1e-3, phase_rad=0.0)
    )
    assert needs_monte_carlo("resistance_ohm", z)
    assert first_order("resistance_ohm", z).u_expanded == pytest.approx(0.2 / sqrt(3))
    found = monte_carlo("resistance_ohm", z)
    assert found.u_expanded == pytest.approx(0.0954500, rel=1e-3)
    assert found.k == pytest.approx(0.9545 * sqrt(3), rel=1e-3)


def test_a_normal_error_needs_none_and_both_agree() -> None:
    z = UncertainImpedance(
        frequency_hz=1e3, r=100.0, x=-2000.0, normal={"calibration": (0.5, 1.0, 0.4)}
    )
    assert not needs_monte_carlo("cs_f", z)
    one, other = first_order("cs_f", z), monte_carlo("cs_f", z)
    assert other.u_expanded == pytest.approx(one.u_expanded, rel=2e-3)
    assert other.low == pytest.approx(one.low, rel=1e-5)


def test_few_repeats_follow_students_t() -> None:
    """JCGM 101:2008, 6.4.9: the mean of n readings is a scaled t with n − 1 degrees."""
    z = UncertainImpedance(frequency_hz=1e3, r=100.0, x=50.0, repeat=(0.01, 0.02, 0.0), degrees=4)
    assert monte_carlo("resistance_ohm", z).u_expanded == pytest.approx(0.01 * 2.869, rel=1.5e-2)
    assert first_order("resistance_ohm", z).k == pytest.approx(2.869, abs=1e-3)


def test_a_value_below_three_u_needs_monte_carlo() -> None:
    z = UncertainImpedance(frequency_hz=1e3, r=0.5, x=-1000.0, normal={"all": (0.4, 0.4, 0.0)})
    assert needs_monte_carlo("d", z)
    assert not needs_monte_carlo("cs_f", z)


# Student's t for 95.45 %, JCGM 100:2008, table G.2
@pytest.mark.parametrize(
    ("degrees", "k"), [(1, 13.97), (2, 4.53), (5, 2.65), (10, 2.28), (50, 2.05), (np.inf, 2.0)]
)
def test_coverage_factors_of_the_guide(degrees: float, k: float) -> None:
    assert coverage_factor(degrees) == pytest.approx(k, abs=0.006)


def test_effective_degrees_of_the_guides_example() -> None:
    """JCGM 100:2008, H.1.6: end gauge, ν_eff = 16 from these four contributions (nm)."""
    parts = ((25.0, 18.0), (9.7, 25.6), (2.9, 50.0), (16.6, 2.0))
    u = hypot(*(part[0] for part in parts))
    assert int(effective_degrees(u, parts)) == 16
    assert effective_degrees(1.0, ((0.0, 0.0), (0.5, np.inf))) == np.inf


def test_an_estimate_without_degrees_of_freedom_is_none() -> None:
    with pytest.raises(BadCovariance):
        effective_degrees(1.0, ((0.5, 0.0),))
