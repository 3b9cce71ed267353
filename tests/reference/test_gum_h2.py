"""JCGM 100:2008, Annex H.2: simultaneous resistance and reactance, with their correlations."""

import numpy as np
import pytest

from ohmward.metrology.immittance import covariance_of_pair, impedance_of_pair, views

VOLTAGE_V = np.array([5.007, 4.994, 5.005, 4.990, 4.999])
CURRENT_A = np.array([19.663, 19.639, 19.640, 19.685, 19.678]) * 1e-3
PHASE_RAD = np.array([1.0456, 1.0438, 1.0468, 1.0428, 1.0433])


def _means() -> tuple[np.ndarray, np.ndarray]:
    readings = np.stack([VOLTAGE_V, CURRENT_A, PHASE_RAD])
    return readings.mean(axis=1), np.cov(readings) / 5


def _magnitude_and_phase() -> tuple[float, float, float, float, float]:
    """|Z| = V/I and φ with u and correlation, from the covariance of the three means."""
    (v, i, phi), covariance = _means()
    jacobian = np.array([[1 / i, -v / i**2, 0], [0, 0, 1]])
    spread = jacobian @ covariance @ jacobian.T
    u_z, u_phi = np.sqrt(np.diag(spread))
    return v / i, phi, u_z, u_phi, spread[0, 1] / (u_z * u_phi)


def test_the_published_standard_uncertainties_of_the_inputs() -> None:
    _, covariance = _means()
    u = np.sqrt(np.diag(covariance))
    correlation = covariance / np.outer(u, u)
    assert u == pytest.approx([0.0032, 0.0095e-3, 0.00075], rel=0.02)
    assert correlation[0, 1] == pytest.approx(-0.36, abs=0.005)
    assert correlation[0, 2] == pytest.approx(0.86, abs=0.005)
    assert correlation[1, 2] == pytest.approx(-0.65, abs=0.005)


def test_resistance_reactance_and_their_correlation() -> None:
    z, phi, u_z, u_phi, rho = _magnitude_and_phase()
    r, x = impedance_of_pair("Z-theta", z, phi, 1000.0)
    u_r, u_x, r_rx = covariance_of_pair("Z-theta", z, phi, 1000.0, u_z, u_phi, rho)
    assert float(r) == pytest.approx(127.732, abs=0.0005)
    assert float(x) == pytest.approx(219.847, abs=0.0005)
    assert float(u_r) == pytest.approx(0.071, abs=0.0005)
    # the means give 0.2956, the five results one by one 0.2955; published 0.295
    assert float(u_x) == pytest.approx(0.295, abs=0.001)
    assert float(r_rx) == pytest.approx(-0.588, abs=0.0005)


def test_magnitude_and_its_correlations_come_back_from_r_and_x() -> None:
    z, phi, u_z, u_phi, rho = _magnitude_and_phase()
    r, x = impedance_of_pair("Z-theta", z, phi, 1000.0)
    u_r, u_x, r_rx = covariance_of_pair("Z-theta", z, phi, 1000.0, u_z, u_phi, rho)
    found = views(1000.0, r, x, u_r, u_x, r_rx, ("impedance_ohm", "phase_rad"))
    assert float(found["impedance_ohm"]) == pytest.approx(254.260, abs=0.0005)
    assert float(found["u_impedance_ohm"]) == pytest.approx(0.236, abs=0.0005)
    assert float(found["u_phase_rad"]) == pytest.approx(u_phi, rel=1e-9)
    # cov(R, |Z|) = (R·u²(R) + X·cov(R,X))/|Z|, and so for X: r(R,Z) −0.485, r(X,Z) 0.993
    shared = r_rx * u_r * u_x
    u_found = found["u_impedance_ohm"]
    r_rz = (r * u_r**2 + x * shared) / z / (u_r * u_found)
    r_xz = (r * shared + x * u_x**2) / z / (u_x * u_found)
    assert float(r_rz) == pytest.approx(-0.485, abs=0.0005)
    assert float(r_xz) == pytest.approx(0.993, abs=0.0005)


def test_a_propagation_that_drops_the_correlations_fails_this_check() -> None:
    z, phi, *_ = _magnitude_and_phase()
    (v, i, _), covariance = _means()
    variance = np.diag(covariance)
    u_z = np.hypot(np.sqrt(variance[0]) / i, v / i**2 * np.sqrt(variance[1]))
    u_r, *_ = covariance_of_pair("Z-theta", z, phi, 1000.0, u_z, np.sqrt(variance[2]), 0.0)
    # published beside the example's values: 0.1945 instead of 0.071
    assert float(u_r) == pytest.approx(0.1945, abs=0.0005)
    assert float(u_r) != pytest.approx(0.071, abs=0.0005)


def test_repeated_readings_of_one_point_give_the_same_type_a() -> None:
    """The five readings as five repeats through the tables: mean, u and correlation."""
    from tests.results.lot import readings_of

    from ohmward.results.cells import cells_of
    from ohmward.results.derive import derive_impedance

    rows = [
        {"pair": "Z-theta", "first": v / i, "second": phi, "repeat": n}
        for n, (v, i, phi) in enumerate(zip(VOLTAGE_V, CURRENT_A, PHASE_RAD, strict=True))
    ]
    readings = readings_of(rows)
    ((cell,),) = cells_of(readings, derive_impedance(readings, (), {})).values()
    assert cell.r == pytest.approx(127.732, abs=0.0005)
    assert cell.x == pytest.approx(219.847, abs=0.0005)
    assert cell.type_a == pytest.approx((0.071, 0.295, -0.588), abs=0.001)
