"""Budgets: contributions against another library's, and a published one."""

from math import atan2, hypot, inf, nan, sqrt

import GTC
import pytest

from ohmward.metrology.budget import (
    LeakageInput,
    Source,
    budget_of,
    impedance_budget,
    leakage_budget,
)
from ohmward.metrology.coverage import coverage_factor
from ohmward.metrology.errors import BadCovariance
from ohmward.metrology.uncertain import Stated, UncertainImpedance

Z = UncertainImpedance(
    frequency_hz=1e3,
    r=20.0,
    x=-1500.0,
    stated=Stated(magnitude_rel=1e-3, phase_rad=5e-4, frequency_rel=1e-4),
    normal={"resolution": (0.01, 0.02, 0.0), "load standard": (0.1, 0.3, 0.5)},
    repeat=(0.05, 0.04, -0.6),
    degrees=4,
)


@pytest.mark.parametrize("name", ["cs_f", "cp_f", "d", "rp_ohm", "impedance_ohm", "phase_rad"])
def test_contributions_agree_with_gtc(name: str) -> None:
    """The same causes as uncertain numbers of another library, one by one and together."""
    size, theta = hypot(Z.r, Z.x), atan2(Z.x, Z.r)
    z = GTC.ureal(size, size * 1e-3 / sqrt(3))
    phase = GTC.ureal(theta, 5e-4 / sqrt(3))
    f = GTC.ureal(1e3, 1e3 * 1e-4 / sqrt(3))
    r, x = z * GTC.cos(phase), z * GTC.sin(phase) * f / 1e3
    extra = []
    for u_r, u_x, rho in (*Z.normal.values(), Z.repeat):
        one, other = (
            GTC.ureal(0, u_r, independent=False),
            GTC.ureal(0, u_x, independent=False),
        )
        GTC.set_correlation(rho, one, other)
        extra.append((one, other))
        r, x = r + one, x + other
    w = 2 * GTC.constant(3.141592653589793) * 1e3
    m = r * r + x * x
    y = {
        "cs_f": -1 / (w * x),
        "cp_f": -x / (w * m),
        "d": r / -x,
        "rp_ohm": m / r,
        "impedance_ohm": m**0.5,
        "phase_rad": GTC.atan2(x, r),
    }[name]
    found = impedance_budget(name, "1", Z)
    assert found.u == pytest.approx(GTC.uncertainty(y), rel=1e-9)
    assert sum(part.share for part in found.contributions) == pytest.approx(1.0)
    by_name = {part.source.name: part.source.contribution for part in found.contributions}
    for cause, number in (
        ("accuracy of the magnitude", z),
        ("accuracy of the phase", phase),
        ("frequency", f),
    ):
        if cause in by_name:
            expected = abs(GTC.rp.u_component(y, number))
            assert by_name[cause] == pytest.approx(expected, rel=1e-9, abs=1e-12 * found.u)
    shares = [part.share for part in found.contributions]
    assert shares == sorted(shares, reverse=True)


def test_the_end_gauge_of_the_guide() -> None:
    """JCGM 100:2008, H.1, table H.1: six contributions in nm, u_c 32 nm, ν_eff 16, U99 93 nm."""
    sources = (
        Source(name="standard", u=25, unit="nm", sensitivity=1, degrees=18),
        Source(name="difference", u=9.7, unit="nm", sensitivity=1, degrees=25.6),
        Source(name="expansion", u=2.9, unit="nm", sensitivity=1, degrees=50),
        Source(name="temperature", u=16.6, unit="nm", sensitivity=1, degrees=2),
    )
    found = budget_of(50000838, "nm", sources)
    assert found.u == pytest.approx(32, abs=0.5)
    assert int(found.degrees) == 16
    # k of a normal distribution for 99 % is 2.5758; the guide cuts ν to 16 and takes t99 = 2.92
    # of u rounded to 32 nm, which is 93 nm
    assert coverage_factor(int(found.degrees), 2.5758293) == pytest.approx(2.92, abs=0.005)
    assert found.u * 2.92 == pytest.approx(93, abs=1)


def test_leakage_sources_against_their_laws() -> None:
    given = LeakageInput(
        current_a=10e-9,
        background_a=1e-9,
        reading_rel=0.01,
        offset_a=50e-12,
        distribution="rectangular",
        u_background_a=20e-12,
        capacitance_f=1e-6,
        u_rate_v_per_s=1e-4,
        charging_a=0.5e-9,
        charging_over_tau=6.0,
        series_rel=0.02,
        exponent=0.9,
        since_voltage_s=60.0,
        time_s=5.0,
        u_reading_a=30e-12,
        degrees=9,
    )
    found = leakage_budget(given)
    assert found.value == pytest.approx(8.5e-9)
    by_name = {part.source.name: part.source.contribution for part in found.contributions}
    # 1 mV/s on 1 µF is 1 nA (calculated), so 0.1 mV/s is 0.1 nA
    assert by_name["supply drift"] == pytest.approx(100e-12)
    # 60 ± 5 s at n = 0.9: n·δt/t of the current
    assert by_name["moment of reading"] == pytest.approx(0.9 * 5 / 60 * 8.5e-9 / sqrt(3))
    assert by_name["current meter, gain"] == pytest.approx(0.01 * 10e-9 / sqrt(3))
    assert by_name["charging current"] == pytest.approx(0.5e-9 * 6 * 0.02 / sqrt(3))
    assert found.u == pytest.approx(hypot(*by_name.values()))


def test_what_is_no_uncertainty_is_refused() -> None:
    for u in (-1.0, nan, inf):
        with pytest.raises(BadCovariance):
            budget_of(1.0, "1", [Source(name="odd", u=u, unit="1", sensitivity=1.0)])
