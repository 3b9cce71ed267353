"""Networks of R, L and C against closed forms and published figures."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.sim.network import OPEN, C, L, Network, Parallel, R, Series, netlist


def at(network: Network, frequency_hz: float) -> complex:
    return network.impedance(2j * math.pi * frequency_hz)


def test_capacitor_beside_its_leakage() -> None:
    # values.md, immittance: 100 nF ∥ 1 MΩ at 1 kHz
    z = at(Parallel(C(100e-9), R(1e6)), 1e3)
    assert z.real / -z.imag == pytest.approx(0.00159154943092, rel=1e-9)
    assert z.real == pytest.approx(2.53302317484, rel=1e-9)
    assert -1 / (2e3 * math.pi * z.imag) == pytest.approx(100.000253303e-9, rel=1e-9)


def test_coil_with_its_winding() -> None:
    # values.md, immittance: 1 mH + 10 Ω at 10 kHz
    z = at(Series(L(1e-3), R(10.0)), 10e3)
    assert z.imag / z.real == pytest.approx(6.28318530718, rel=1e-9)
    y = 1 / z
    assert 1 / y.real == pytest.approx(404.784176044, rel=1e-9)
    assert -1 / (y.imag * 2 * math.pi * 10e3) == pytest.approx(1.02533029591e-3, rel=1e-9)


@pytest.mark.parametrize(
    ("farad", "henry", "resonance_hz"),
    [(1e-9, 700e-12, 190226541.30), (1e-9, 10e-6, 1591549.43), (100e-9, 1e-9, 15915494.31)],
)
def test_self_resonance(farad: float, henry: float, resonance_hz: float) -> None:
    # values.md, immittance: self-resonance
    series = Series(C(farad), L(henry))
    assert at(series, 0.999 * resonance_hz).imag < 0 < at(series, 1.001 * resonance_hz).imag
    assert abs(at(series, resonance_hz)) < 1e-6 * math.sqrt(henry / farad)


def test_open_and_short() -> None:
    assert C(1e-9).impedance(0j) == OPEN
    assert Parallel(C(1e-9), R(5.0)).impedance(0j) == 5.0
    assert at(Parallel(R(0.0), C(1e-9)), 1e3) == 0j
    assert Parallel(C(1e-9)).impedance(0j) == OPEN


ohms = st.floats(1e-3, 1e9)
leaves = st.one_of(ohms.map(R), st.floats(1e-12, 1e-3).map(C), st.floats(1e-9, 1.0).map(L))
networks: st.SearchStrategy[Network] = st.recursive(
    leaves,
    lambda inner: st.one_of(
        st.lists(inner, min_size=1, max_size=3).map(lambda some: Series(*some)),
        st.lists(inner, min_size=1, max_size=3).map(lambda some: Parallel(*some)),
    ),
    max_leaves=12,
)


@given(networks, st.floats(20.0, 2e6))
def test_no_network_gives_power_away(network: Network, frequency_hz: float) -> None:
    z = at(network, frequency_hz)
    assert z.real >= -1e-9 * abs(z)
    assert z.conjugate() == pytest.approx(at(network, -frequency_hz), rel=1e-9)


@given(networks)
def test_a_netlist_names_each_element_once_and_joins_both_ends(network: Network) -> None:
    lines = [line.split() for line in netlist(network)]
    names = [line[0] for line in lines]
    assert len(set(names)) == len(names)
    nodes = [node for line in lines for node in line[1:3]]
    assert "1" in nodes
    assert "0" in nodes
    assert all(nodes.count(node) > 1 for node in nodes if node not in ("1", "0"))
