"""What settles faster than a clock can tell: it comes to the same end at whatever hour."""

import math

import pytest
from tests.sim.bench_path import DISCHARGE_OHM, close, ideal, wait, wired

from ohmward.sim.circuit import Circuit

BLEEDER_OHM, OUTPUT_F, LIMIT_A = 10e6, 10e-9, 1e-3


@pytest.mark.parametrize("hour_s", [0.0, 3600.0, 3 * 3600.0, 40 * 3600.0])
def test_a_supply_that_is_overloaded_in_an_instant_gives_its_limit(hour_s: float) -> None:
    # 400 V through a contact of 0.1 Ω onto an empty rail pass 1 mA within 1e-13 s: after an hour
    # the last digit of a time in seconds is worth 5e-13 s
    circuit = Circuit(wired(), {"A": ideal(1e-6)}, seed=1)
    circuit.advance(hour_s)
    close(circuit, "A.discharge", "bypass")
    circuit.set_supply(400.0, LIMIT_A, True)
    wait(circuit, 1.0)
    assert circuit.supply_way == "voltage"
    close(circuit, "supply")
    wait(circuit, 1.0)
    assert circuit.supply_way == "current"
    load_ohm = 1 / (1 / DISCHARGE_OHM + 1 / BLEEDER_OHM)  # the discharge lies across the rail
    assert circuit.supply_voltage() == pytest.approx(LIMIT_A * load_ohm, rel=1e-4)


@pytest.mark.parametrize("hour_s", [0.0, 3600.0, 40 * 3600.0])
def test_a_supply_with_nothing_connected_comes_up_at_its_limit(hour_s: float) -> None:
    circuit = Circuit(wired(), {"A": ideal(1e-6)}, seed=1)
    circuit.advance(hour_s)
    circuit.set_supply(200.0, LIMIT_A, True)
    wait(circuit, 1e-3)
    assert circuit.supply_way == "current"
    # its own 10 nF and bleeder: V = I·R·(1 − e^(−t/RC))
    rising_v = -LIMIT_A * BLEEDER_OHM * math.expm1(-1e-3 / (BLEEDER_OHM * OUTPUT_F))
    assert circuit.supply_voltage() == pytest.approx(rising_v, rel=1e-6)
    wait(circuit, 1.0)
    assert circuit.supply_way == "voltage"
    assert circuit.supply_voltage() == pytest.approx(200.0, rel=1e-6)
