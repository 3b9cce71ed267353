"""Series and parallel views against values computed from their definitions (as in ASTM D150)."""

import numpy as np
import pytest

from ohmward.metrology.immittance import impedance_of_pair, views


def _views(pair: str, first: float, second: float, frequency_hz: float) -> dict[str, float]:
    r, x = impedance_of_pair(pair, first, second, frequency_hz)
    table = views(frequency_hz, r, x, 0.0, 0.0, 0.0)
    return {name: float(value) for name, value in table.items()} | {
        "resistance_ohm": float(r),
        "reactance_ohm": float(x),
    }


# D, Cs/Cp, Rp/Rs, power factor: calculated from Cs = Cp(1+D²), Rp = Rs(1+1/D²), PF = D/√(1+D²)
@pytest.mark.parametrize(
    ("d", "series_over_parallel", "parallel_over_series", "power_factor"),
    [
        (0.01, 1.0001, 10001, 0.0099995000375),
        (0.1, 1.01, 101, 0.0995037190210),
        (1.0, 2.0, 2.0, 0.7071067811865),
    ],
)
def test_series_and_parallel_models_of_a_capacitor(
    d: float, series_over_parallel: float, parallel_over_series: float, power_factor: float
) -> None:
    found = _views("Cs-D", 1e-6, d, 1000.0)
    assert found["cs_f"] / found["cp_f"] == pytest.approx(series_over_parallel, rel=1e-12)
    assert found["rp_ohm"] / found["rs_ohm"] == pytest.approx(parallel_over_series, rel=1e-12)
    assert np.cos(found["phase_rad"]) == pytest.approx(power_factor, rel=1e-11)
    assert found["q"] == pytest.approx(1 / d, rel=1e-12)


# calculated from the definitions; twelve digits printed, the last one rounded
PUBLISHED = [
    (
        ("Cs-D", 1e-6, 0.1, 1e3),
        {
            "rs_ohm": 15.9154943092,
            "reactance_ohm": -159.154943092,
            "impedance_ohm": 159.948738256,
            "phase_rad": np.deg2rad(-84.2894068625),
            "cp_f": 0.990099009901e-6,
            "rp_ohm": 1607.46492523,
        },
    ),
    (
        ("Cp-Rp", 100e-9, 1e6, 1e3),
        {"d": 0.00159154943092, "cs_f": 100.000253303e-9, "rs_ohm": 2.53302317484},
    ),
    (
        ("Ls-Rs", 1e-3, 10.0, 1e4),
        {"q": 6.28318530718, "lp_h": 1.02533029591e-3, "rp_ohm": 404.784176044},
    ),
]


@pytest.mark.parametrize(("sent", "expected"), PUBLISHED)
def test_the_worked_examples(
    sent: tuple[str, float, float, float], expected: dict[str, float]
) -> None:
    found = _views(*sent)
    for name, value in expected.items():
        assert found[name] == pytest.approx(value, rel=1e-11), name


# 1/(2π√(LC)), calculated
@pytest.mark.parametrize(
    ("capacitance_f", "inductance_h", "resonance_hz"),
    [
        (1e-9, 700e-12, 190226541.30),
        (1e-9, 10e-6, 1591549.43),
        (100e-9, 1e-9, 15915494.31),
    ],
)
@pytest.mark.parametrize("connection", ["series", "parallel"])
def test_self_resonance_of_one_l_and_one_c(
    capacitance_f: float, inductance_h: float, resonance_hz: float, connection: str
) -> None:
    from ohmward.metrology.resonance import self_resonance

    f = resonance_hz * np.geomspace(0.01, 50, 12)
    w = 2 * np.pi * f
    z_l, z_c = 1j * w * inductance_h, 1 / (1j * w * capacitance_f)
    z = z_l + z_c if connection == "series" else z_l * z_c / (z_l + z_c)
    u = 1e-4 * np.abs(z)
    found = self_resonance(f, z.real, z.imag, u, u, 0.0)
    assert found.frequency_hz == pytest.approx(resonance_hz, rel=1e-9)
    assert found.first_sign == (-1 if connection == "series" else 1)
    assert 0 < found.u_hz < 1e-3 * resonance_hz
