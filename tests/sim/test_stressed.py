"""What voltage brings out in a part: leakage by cause, forming, breakdown, healing, venting."""

import math

import pytest
from tests.sim.bench_path import close, kinds, made, open_, wait, wired

from ohmward.sim.circuit import Circuit
from ohmward.sim.parts import PhysicalPart

HV = ("supply", "bypass", "A.connect")


def under(
    part: PhysicalPart, volts: float, *, limit_a: float = 10e-3, slew: float = 100.0
) -> Circuit:
    """The part at A, its voltage on the way up and the current meter in the return."""
    circuit = Circuit(wired(), {"A": part}, temperature_c=25.0)
    close(circuit, *HV)
    open_(circuit, "bypass")
    circuit.set_supply(volts, limit_a, True, slew)
    return circuit


def leakage(part: PhysicalPart, volts: float, seconds: float) -> float:
    circuit = under(part, volts)
    wait(circuit, volts / 100.0 + seconds)
    return circuit.meter_current()


# ---- leakage


@pytest.mark.slow
@pytest.mark.parametrize(
    ("model", "rated_v", "tau_s"),
    # values.md, typical behaviour: τ at 25 °C in MΩ·µF, which is seconds
    [
        ("film-pp", 400.0, 1e5),
        ("film-pet", 400.0, 1e4),
        ("ceramic-c0g", 100.0, 1e4),
        ("ceramic-x7r", 50.0, 1e3),
    ],
)
def test_insulation_is_the_published_time_constant(
    model: str, rated_v: float, tau_s: float
) -> None:
    found = [leakage(made(model, 100e-9, rated_v, seed=seed), rated_v, 1e6) for seed in range(8)]
    expected = 100e-9 * rated_v / tau_s
    assert all(0.5 * expected < each < 2.0 * expected for each in found)


def test_leakage_rises_tenfold_from_25_to_85_degrees() -> None:
    # values.md: τ 25/85 °C, 10000/1000 for PET
    def at(celsius: float) -> float:
        circuit = under(made("film-pet", 100e-9, 400.0), 400.0)
        circuit.set_temperature(celsius)
        wait(circuit, 1e6)
        return circuit.meter_current()

    assert at(85.0) / at(25.0) == pytest.approx(10.0, rel=0.01)


def test_absorption_current_falls_as_one_over_time() -> None:
    circuit = under(made("film-pet", 1e-6, 400.0), 400.0, slew=math.inf)
    wait(circuit, 10.0)
    early = circuit.meter_current()
    wait(circuit, 90.0)
    late = circuit.meter_current()
    wait(circuit, 1e6)
    settled = circuit.meter_current()
    assert (early - settled) / (late - settled) == pytest.approx(10.0, rel=0.03)


def test_a_part_leaky_only_at_rated_voltage_is_good_at_a_tenth_of_it() -> None:
    good, bad = (made("film-pet", 100e-9, 400.0, fault=fault) for fault in ("", "leaky at voltage"))
    assert leakage(bad, 40.0, 60.0) == pytest.approx(leakage(good, 40.0, 60.0), rel=0.01)
    bad, good = (made("film-pet", 100e-9, 400.0, fault=fault) for fault in ("leaky at voltage", ""))
    assert leakage(bad, 400.0, 60.0) > 20 * leakage(good, 400.0, 60.0)


def test_charge_drawn_by_a_class_2_part_is_the_integral_of_its_falling_capacitance() -> None:
    part = made("ceramic-x7r", 1e-6, 50.0)
    circuit = under(part, 50.0, slew=1.0)
    charge_c, last_a, every_s = 0.0, circuit.meter_current(), 0.25
    for _ in range(220):
        wait(circuit, every_s)
        now_a = circuit.meter_current()
        charge_c += 0.5 * (last_a + now_a) * every_s
        last_a = now_a
    # C(V) as a meter with bias reads it at 20 Hz, summed over the voltage; absorption comes on top
    steps = [part.truth("cs_f", frequency_hz=20.0, bias_v=0.5 + k) for k in range(50)]
    assert 0.99 * sum(steps) < charge_c < 1.1 * sum(steps)
    assert sum(steps) < 0.95 * 50 * steps[0]


# ---- forming


def electrolytic(fault: str = "", seed: int = 4) -> PhysicalPart:
    return made("aluminium-electrolytic", 47e-6, 450.0, fault=fault, seed=seed)


@pytest.mark.slow
def test_a_good_electrolytic_leaks_far_below_makers_limits() -> None:
    # values.md: above 100 V, at 5 min, CV > 1000: 0.02·CV + 25 µA (C in µF)
    limit_a = (0.02 * 47 * 450 + 25) * 1e-6
    for seed in range(5):
        assert leakage(electrolytic(seed=seed), 450.0, 300.0) < 0.3 * limit_a


@pytest.mark.slow
def test_a_badly_formed_one_recovers_under_voltage_and_reads_high_until_then() -> None:
    part, good = electrolytic("badly formed"), electrolytic()
    before_f = part.truth("cs_f", frequency_hz=120.0)
    assert before_f > 1.05 * good.truth("cs_f", frequency_hz=120.0)
    circuit = under(part, 450.0, limit_a=1e-3)
    currents, formed = [], []
    for _ in range(24):
        wait(circuit, 600.0)
        currents.append(circuit.meter_current())
        state = circuit.part_state("A")
        assert state is not None
        formed.append(state.formed_v)
    assert formed == sorted(formed)
    assert currents == sorted(currents, reverse=True)
    assert currents[-1] < 0.3 * (0.02 * 47 * 450 + 25) * 1e-6
    assert part.truth("cs_f", frequency_hz=120.0) < before_f
    assert circuit.events == []


@pytest.mark.slow
def test_an_unrecoverable_one_does_not_recover() -> None:
    circuit = under(electrolytic("unrecoverable"), 450.0, limit_a=10e-3)
    wait(circuit, 600.0)
    early = circuit.meter_current()
    wait(circuit, 7200.0)
    assert circuit.meter_current() > 0.8 * early
    assert circuit.meter_current() > 5 * (0.02 * 47 * 450 + 25) * 1e-6


@pytest.mark.slow
def test_too_much_power_vents_a_part() -> None:
    part = electrolytic("unrecoverable")
    circuit = Circuit(wired(series_ohm=1e3), {"A": part})
    close(circuit, *HV)
    circuit.set_supply(450.0, 50e-3, True, 100.0)
    wait(circuit, 3600.0)
    assert kinds(circuit) == ["vented"]
    state = circuit.part_state("A")
    assert state is not None
    assert state.vented
    assert part.truth("cs_f", frequency_hz=120.0) < 20e-6


@pytest.mark.slow
def test_forming_does_not_hang_on_when_it_is_looked_at() -> None:
    def run(looks: int) -> float:
        circuit = under(electrolytic("badly formed"), 450.0, limit_a=1e-3)
        for _ in range(looks):
            wait(circuit, 3600.0 / looks)
            circuit.part_state("A")
        return circuit.meter_current()

    assert run(60) == pytest.approx(run(1), rel=0.03)


# ---- giving way


def test_breakdown_below_proof_shorts_the_part_for_good() -> None:
    part = made("film-pet", 100e-9, 400.0, fault="breaks down")
    circuit = under(part, 400.0)
    wait(circuit, 60.0)
    assert circuit.events == [], "at its rated voltage it stands"
    circuit.set_supply(640.0, 10e-3, True, 100.0)
    wait(circuit, 10.0)
    (event,) = circuit.events
    assert event.kind == "breakdown"
    assert 1.0 < float(event.detail.split()[2]) / 400.0 < 1.3
    assert circuit.voltage("A") < 1.0
    assert abs(part.impedance(1e3)) < 100.0


@pytest.mark.slow
def test_a_good_film_stands_its_proof() -> None:
    # values.md: proof of 200–500 V ceramics is 1.3 U + 100, films 1.6 U by their makers
    for seed in range(20):
        circuit = under(made("film-pp", 100e-9, 400.0, seed=seed), 640.0, slew=500.0)
        wait(circuit, 62.0)
        assert circuit.events == []


def test_weak_spots_clear_themselves_one_after_another() -> None:
    part = made("film-pp", 1e-6, 400.0, clears=(1.1, 1.3))
    before_f = part.truth("cs_f", frequency_hz=1e3)
    circuit = under(part, 600.0)
    wait(circuit, 60.0)
    assert kinds(circuit) == ["cleared itself", "cleared itself"]
    found = [float(event.detail.split()[2]) for event in circuit.events]
    assert found == pytest.approx([440.0, 520.0], rel=1e-3)
    assert circuit.voltage("A") == pytest.approx(600.0, rel=1e-3)
    lost = 1 - part.truth("cs_f", frequency_hz=1e3) / before_f
    assert 0 < lost < 1e-3
    again = under(part, 600.0)
    wait(again, 60.0)
    assert again.events == [], "what has cleared stays clear"


def test_harm_at_a_given_instant() -> None:
    circuit = under(made("film-pp", 100e-9, 400.0), 400.0)
    wait(circuit, 10.0)
    circuit.harm("A", "breakdown")
    wait(circuit, 1.0)
    assert kinds(circuit) == ["breakdown"]
    assert circuit.supply_way == "current"
    with pytest.raises(ValueError, match="haunting"):
        circuit.harm("A", "haunting")


def test_a_lost_contact_passes_a_sweep_and_draws_no_charge() -> None:
    part = made("film-pp", 1e-6, 400.0, fault="lost contact")
    assert part.truth("cs_f", frequency_hz=1e3) == pytest.approx(1e-6, rel=0.1)
    circuit = under(part, 400.0)
    wait(circuit, 60.0)
    assert abs(circuit.voltage("A")) < 1.0
    assert abs(circuit.meter_current()) < 1e-9
