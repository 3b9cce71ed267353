"""Circuits in their modes against closed forms, and against scipy's matrix exponential."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.linalg import expm

from ohmward.sim import dielectric
from ohmward.sim.modes import Coil, Course, Edge, Modes, Resistor, Store


def course(modes: Modes, state: list[float], *, fed: float = 0.0, rising: float = 0.0) -> Course:
    """From a state, with a current into the first store."""
    size = len(modes.names)
    first = np.eye(size)[0]
    return Course(modes, np.array(state), fed * first, rising * first, 0.0)


def test_one_capacitor_through_one_resistor() -> None:
    modes = Modes([Resistor("a", "0", 100e3)], [Store("c", "a", "0", 47e-6)])
    falls = course(modes, [450.0])
    assert falls.at(4.7)[0] == pytest.approx(450.0 / math.e, rel=1e-12)
    # values.md, hazard thresholds: 100 kΩ, 47 µF, 450 → 60 V takes 9.4700 s
    edge = Edge("safe", "", np.array([-1.0]), 60.0)
    found = falls.first([edge], 1e6)
    assert found is not None
    assert found[0] == pytest.approx(9.4700, abs=5e-5)


def test_charge_goes_over_from_one_capacitor_to_another() -> None:
    modes = Modes(
        [Resistor("a", "b", 1e3)], [Store("a", "a", "0", 1e-6), Store("b", "b", "0", 3e-6)]
    )
    end = course(modes, [400.0, 0.0]).at(3600.0)
    assert end == pytest.approx([100.0, 100.0], rel=1e-12)


def test_a_floating_capacitor_keeps_its_charge_for_ever() -> None:
    modes = Modes(
        [Resistor("a", "0", 1e3), Resistor("b", "0", 1e3)],
        [Store("a", "a", "b", 1e-6), Store("c", "c", "0", 1e-9)],
    )
    assert course(modes, [0.0, 400.0]).at(1e7)[1] == pytest.approx(400.0, rel=1e-9)


def test_ten_decades_do_not_blur_a_small_leakage() -> None:
    """0.1 Ω beside 100 pF has 10 ps, the leakage has days: both must come out right."""
    modes = Modes(
        [
            Resistor("s", "r", 0.1),
            Resistor("r", "p", 10e3),
            Resistor("p", "m", 1e12),
            Resistor("m", "0", 1e3),
        ],
        [
            Store("s", "s", "0", 10e-9),
            Store("r", "r", "0", 100e-12),
            Store("p", "p", "m", 100e-9),
        ],
    )
    whole_f = 10e-9 + 100e-12 + 100e-9
    assert min(modes.rates) == pytest.approx(1 / (1e12 * whole_f), rel=1e-6)
    day_s = 86400.0
    falls = course(modes, [400.0, 400.0, 400.0])
    assert falls.at(day_s)[2] == pytest.approx(400 * math.exp(-day_s / (1e12 * whole_f)), rel=1e-6)
    # what s and r give back flows through m, and so only that is seen in the return
    through_a = modes.node("m") @ falls.at(day_s) / 1e3
    expected_a = falls.at(day_s)[2] / 1e12 * (10.1e-9 / whole_f)
    assert through_a == pytest.approx(expected_a, rel=1e-3)


def test_a_ramp_through_a_resistor() -> None:
    # dV/dt = S into R and C: V = S·(t − τ·(1 − e^(−t/τ)))
    ohm, farad, slope = 1e3, 1e-6, 100.0
    modes = Modes([Resistor("a", "0", ohm)], [Store("a", "a", "0", farad)])
    rises = course(modes, [0.0], rising=slope / ohm)
    for t in (1e-9, 1e-6, 1e-3, 1.0, 1e3):
        tau = ohm * farad
        exact = slope * (t + tau * math.expm1(-t / tau))
        if t < 1e-4 * tau:
            exact = slope * t * t / (2 * tau)
        assert rises.at(t)[0] == pytest.approx(exact, rel=1e-4)


def test_a_coil_rings_with_a_capacitor() -> None:
    henry, farad = 1e-3, 1e-9
    modes = Modes(
        [Resistor("a", "b", 1e-3), Resistor("b", "0", 1e9)],
        [Store("c", "a", "0", farad)],
        [Coil("l", "b", "0", henry)],
    )
    w = 1 / math.sqrt(henry * farad)
    rings = course(modes, [1.0, 0.0])
    for turns in (0.1, 0.25, 0.5, 1.0):
        phase = 2 * math.pi * turns
        state = rings.at(phase / w)
        assert state[0] == pytest.approx(math.cos(phase), abs=1e-4)
        assert state[1] == pytest.approx(math.sin(phase) * math.sqrt(farad / henry), abs=1e-7)


@st.composite
def chains(draw: st.DrawFn) -> tuple[list[float], list[float], list[float], float]:
    """A chain of nodes, each with a capacitor to ground and a resistor to the next."""
    size = draw(st.integers(2, 5))
    ohms = draw(st.lists(st.floats(1e2, 1e5), min_size=size, max_size=size))
    farads = draw(st.lists(st.floats(1e-8, 1e-5), min_size=size, max_size=size))
    volts = draw(st.lists(st.floats(-100, 100), min_size=size, max_size=size))
    return ohms, farads, volts, draw(st.floats(1e-4, 1.0))


@given(chains())
@settings(max_examples=60)
def test_any_chain_as_the_matrix_exponential_has_it(
    chain: tuple[list[float], list[float], list[float], float],
) -> None:
    ohms, farads, volts, t = chain
    size = len(ohms)
    names = [f"n{k}" for k in range(size)] + ["0"]
    modes = Modes(
        [Resistor(names[k], names[k + 1], ohms[k]) for k in range(size)],
        [Store(names[k], names[k], "0", farads[k]) for k in range(size)],
    )
    conductance = np.zeros((size, size))
    for k, ohm in enumerate(ohms):
        ends = [end for end in (k, k + 1) if end < size]
        for a in ends:
            for b in ends:
                conductance[a, b] += (1 if a == b else -1) / ohm
    exact = expm(-conductance / np.array(farads)[:, None] * t) @ np.array(volts)
    assert course(modes, volts).at(t) == pytest.approx(exact, rel=1e-8, abs=1e-6)


@given(chains(), st.integers(2, 20))
@settings(max_examples=60)
def test_an_hour_in_one_piece_is_an_hour_in_many(
    chain: tuple[list[float], list[float], list[float], float], pieces: int
) -> None:
    ohms, farads, volts, t = chain
    names = [f"n{k}" for k in range(len(ohms))] + ["0"]
    modes = Modes(
        [Resistor(names[k], names[k + 1], ohm) for k, ohm in enumerate(ohms)],
        [Store(names[k], names[k], "0", farad) for k, farad in enumerate(farads)],
    )
    state = volts
    for _ in range(pieces):
        state = list(course(modes, state, fed=1e-6, rising=0.0).at(t / pieces))
    whole = course(modes, volts, fed=1e-6).at(t)
    assert state == pytest.approx(whole, rel=1e-9, abs=1e-7)


@pytest.mark.parametrize("share", [5e-4, 2e-3, 1.5e-2])
def test_absorption_comes_back_by_the_makers_method(share: float) -> None:
    # values.md, typical behaviour: charge 15 min, short 10 s, read after 15 min
    farad = 1e-7
    branches = dielectric.slow(share, 1.0, farad)
    names = [f"b{k}" for k in range(len(branches))]
    inner = [Resistor("c", name, branch.ohm) for name, branch in zip(names, branches, strict=True)]
    stores = [
        Store("c", "c", "0", farad),
        *(Store(n, n, "0", branch.farad) for n, branch in zip(names, branches, strict=True)),
    ]
    driven = Modes([*inner, Resistor("c", "0", 1.0)], stores)
    alone = Modes([*inner, Resistor("c", "0", 1e17)], stores)
    charged = course(driven, [0.0] * len(stores), fed=100.0).at(900.0)
    shorted = course(driven, list(charged)).at(10.0)
    back_v = course(alone, list(shorted)).at(900.0)[0]
    # the share is exact for a small absorption; a large one shares its charge with itself
    assert back_v / 100.0 == pytest.approx(share, rel=0.01 + 4 * share)


@pytest.mark.parametrize("exponent", [0.8, 0.9, 1.0])
def test_charging_current_falls_as_curie_and_von_schweidler_say(exponent: float) -> None:
    branches = dielectric.slow(2e-3, exponent, 1e-7)

    def amperes(t: float) -> float:
        return sum(math.exp(-t / (b.ohm * b.farad)) / b.ohm for b in branches)

    # values.md, leakage over time: R(10 min)/R(1 min) = 10^n, 6.3096 at .8
    assert amperes(60.0) / amperes(600.0) == pytest.approx(10**exponent, rel=0.01)
    assert amperes(30.0) / amperes(60.0) == pytest.approx(2**exponent, rel=0.01)
