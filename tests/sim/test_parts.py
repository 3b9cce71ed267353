"""Simulated parts: what is published of their dielectrics, and what each fault must show."""

import math
from collections.abc import Callable
from pathlib import Path

import pytest

from ohmward.sim.draw import SWEEP_FAULTS
from ohmward.sim.parts import FAULTS, PhysicalPart, UnknownFault
from ohmward.sim.physical import PartTruth, PhysicalFileError, read_model, read_physical

SIMULATORS = Path(__file__).parents[2] / "simulators"


def make(
    model: str, nominal: float, *, fault: str = "", seed: int = 1, tolerance: float = 0.1
) -> PhysicalPart:
    return PhysicalPart(
        part_id="X1",
        model=read_model(SIMULATORS / "parts" / f"{model}.toml"),
        truth=PartTruth(model=model, fault=fault),
        nominal=nominal,
        tolerance=tolerance,
        rated_v=50.0,
        rated_a=0.5,
        seed=seed,
    )


# values.md, typical behaviour by dielectric: largest D in % at 1, 10 and 100 kHz
PUBLISHED_D = {
    "film-pp": (0.05, 0.08, 0.25),
    "film-pet": (0.8, 1.5, 3.0),
    "ceramic-c0g": (0.1, 0.1, 0.1),
}


@pytest.mark.parametrize("model", PUBLISHED_D)
def test_dissipation_factor_follows_the_published_table(model: str) -> None:
    for frequency_hz, most_pct in zip((1e3, 1e4, 1e5), PUBLISHED_D[model], strict=True):
        for seed in range(10):
            d_pct = 100 * make(model, 10e-9, seed=seed).truth("d", frequency_hz=frequency_hz)
            assert 0.25 * most_pct < d_pct < most_pct


def test_class_2_loses_less_than_its_limit_and_falls_with_voltage() -> None:
    part = make("ceramic-x7r", 100e-9)
    assert 0.005 < part.truth("d", frequency_hz=1e3) < 0.025  # values.md: 2.5 % at most
    changes = [
        part.truth("capacitance_change", frequency_hz=1e3, bias_v=volts)
        for volts in (0.0, 10.0, 25.0, 50.0)
    ]
    assert changes[0] == 0.0
    assert changes == sorted(changes, reverse=True)
    assert changes[-1] < -0.1
    first = make("ceramic-c0g", 1e-9)
    assert first.truth("capacitance_change", frequency_hz=1e3, bias_v=50.0) == 0.0


def test_electrolytic_loses_less_than_makers_allow() -> None:
    # values.md: tan δ at 120 Hz, 50 V: .12 at most
    for seed in range(20):
        assert make("aluminium-electrolytic", 100e-6, seed=seed).truth("d", frequency_hz=120) < 0.12


@pytest.mark.parametrize("model", ["film-pp", "ceramic-x7r", "aluminium-electrolytic"])
def test_good_parts_are_within_tolerance_and_no_two_alike(model: str) -> None:
    values = [make(model, 1e-6, seed=s).truth("cs_f", frequency_hz=1e3) for s in range(200)]
    assert all(0.9e-6 < value < 1.1e-6 for value in values)
    assert len(set(values)) == len(values)
    mean = sum(values) / len(values)
    assert mean == pytest.approx(1e-6, rel=0.01)
    deviation = math.sqrt(sum((value - mean) ** 2 for value in values) / len(values))
    assert 0.1 < deviation / (0.1 * 1e-6) < 0.35


def test_series_and_parallel_views_agree_with_each_other() -> None:
    # values.md: Cs = Cp(1 + D²), Rp = Rs(1 + 1/D²); Lp = Ls(1 + 1/Q²), D = 1/Q
    part = make("aluminium-electrolytic", 100e-6)
    cs, cp, rs, rp, d, q = (
        part.truth(name, frequency_hz=5e3)
        for name in ("cs_f", "cp_f", "rs_ohm", "rp_ohm", "d", "q")
    )
    assert cs == pytest.approx(cp * (1 + d * d), rel=1e-12)
    assert rp == pytest.approx(rs * (1 + 1 / (d * d)), rel=1e-12)
    assert d * q == pytest.approx(1.0, rel=1e-12)
    coil = make("choke-ferrite", 1e-3)
    ls, lp, q = (coil.truth(name, frequency_hz=5e3) for name in ("ls_h", "lp_h", "q"))
    assert lp == pytest.approx(ls * (1 + 1 / (q * q)), rel=1e-12)


def test_self_resonance_is_where_the_reactance_changes_sign() -> None:
    part = make("film-pp", 1e-6)
    found_hz = part.truth("self_resonance_hz")
    c = part.truth("cs_f", frequency_hz=1e5)
    assert found_hz == pytest.approx(1 / (2 * math.pi * math.sqrt(18e-9 * c)), rel=5e-3)
    assert part.impedance(0.99 * found_hz).imag < 0 < part.impedance(1.01 * found_hz).imag
    coil = make("choke-ferrite", 1e-3)
    found_hz = coil.truth("self_resonance_hz")
    assert coil.impedance(0.9 * found_hz).imag > 0 > coil.impedance(1.1 * found_hz).imag


Shows = Callable[[PhysicalPart, PhysicalPart], bool]


def quantity(name: str, frequency_hz: float) -> Callable[[PhysicalPart], float]:
    return lambda part: part.truth(name, frequency_hz=frequency_hz)


cs, rs, d = quantity("cs_f", 1e3), quantity("rs_ohm", 1e5), quantity("d", 1e3)
ls, q, z = quantity("ls_h", 1e4), quantity("q", 1e4), quantity("impedance_ohm", 1e3)
CASES: list[tuple[str, str, float, Shows]] = [
    ("film-pet", "low", 1e-7, lambda bad, good: cs(bad) < 0.7 * cs(good)),
    ("choke-ferrite", "low", 1e-3, lambda bad, good: ls(bad) < 0.7 * ls(good)),
    ("resistor-film", "low", 1e4, lambda bad, good: z(bad) < 0.7 * z(good)),
    (
        "aluminium-electrolytic",
        "dried out",
        1e-4,
        lambda bad, good: cs(bad) < 0.6 * cs(good) and rs(bad) > 5 * rs(good),
    ),
    ("film-pp", "shorted", 1e-7, lambda bad, good: abs(bad.impedance(1e3)) < 1.0),
    ("resistor-film", "open", 1e4, lambda bad, good: z(bad) > 1e6),
    (
        "choke-ferrite",
        "shorted turn",
        1e-3,
        lambda bad, good: ls(bad) < 0.8 * ls(good) and q(bad) < q(good),
    ),
]


@pytest.mark.parametrize(("model", "fault", "nominal", "shows"), CASES)
def test_a_sweep_sees_the_fault(model: str, fault: str, nominal: float, shows: Shows) -> None:
    for seed in range(20):
        bad, good = (make(model, nominal, fault=each, seed=seed) for each in (fault, ""))
        assert bad.fault == fault
        assert shows(bad, good)


def test_every_fault_of_a_sweep_is_shown() -> None:
    shown = {fault for _, fault, _, _ in CASES} | {"wrong dielectric"}
    assert shown == set(SWEEP_FAULTS)


def test_wrong_dielectric_is_seen_in_loss_and_under_bias() -> None:
    class_2 = make("ceramic-x7r", 1e-9, fault="wrong dielectric", tolerance=0.05)
    assert d(class_2) > 5 * 0.001  # values.md: class 1 stays below 0.1 %
    assert class_2.truth("capacitance_change", frequency_hz=1e3, bias_v=40.0) < -0.05


@pytest.mark.parametrize(
    "fault", [fault for fault in FAULTS if fault and fault not in SWEEP_FAULTS]
)
def test_what_only_voltage_brings_out_is_hidden_from_a_sweep(fault: str) -> None:
    bad, good = (make("film-pet", 1e-7, fault=each) for each in (fault, ""))
    assert cs(bad) == pytest.approx(cs(good), rel=0.1)
    assert d(bad) == pytest.approx(d(good), rel=0.3, abs=1e-3)


def test_saturation_takes_inductance_away() -> None:
    coil = make("choke-ferrite", 1e-3)
    changes = [
        coil.truth("inductance_change", frequency_hz=1e4, bias_a=amperes)
        for amperes in (0.0, 0.2, 0.5, 0.7)
    ]
    assert changes == sorted(changes, reverse=True)
    # its make says: 30 % less at 1.4 times the rated 0.5 A
    assert changes[-1] == pytest.approx(-0.3, abs=0.01)


def test_temperature_moves_copper_and_film() -> None:
    coil = make("choke-ferrite", 1e-3)
    cold, warm = (
        coil.truth("rs_ohm", frequency_hz=20.0, temperature_c=celsius) for celsius in (20.0, 30.0)
    )
    assert warm / cold == pytest.approx(1.0393, rel=1e-3)  # annealed copper, 0.393 %/K, from memory
    part = make("resistor-film", 1e4)
    assert part.truth("resistance_ohm", frequency_hz=20.0, temperature_c=120.0) / part.truth(
        "resistance_ohm", frequency_hz=20.0
    ) == pytest.approx(1.005, rel=1e-4)


def test_a_fault_that_a_kind_cannot_have_is_refused() -> None:
    with pytest.raises(UnknownFault, match="dried out"):
        make("resistor-film", 1e4, fault="dried out")
    with pytest.raises(UnknownFault, match="haunted"):
        make("film-pp", 1e-7, fault="haunted")


def test_every_part_of_the_depot_has_a_truth_that_can_be_drawn() -> None:
    depot = read_physical(SIMULATORS / "depot-physics.toml")
    faults = {truth.fault for truth in depot.parts.values()}
    assert set(SWEEP_FAULTS) <= faults
    for truth in depot.parts.values():
        model = read_model(SIMULATORS / "parts" / f"{truth.model}.toml")
        assert model.kind in FAULTS[truth.fault]


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("format = 2\n", "format = 1"),
        ("format = 1\nparts = 3\n", "unknown parts"),
        ('format = 1\n[part.A]\nmodel = "x"\nfautl = "low"\n', "part.A: unknown fautl"),
        ("format = 1\n[part.A]\nfault = 'low'\n", "model"),
        ("format = 1\n[high_voltage]\nrail = 1\n", "unknown rail"),
        (
            'format = 1\n[high_voltage]\nsupply = { channel = "1", relay = "reed" }\n',
            "there is no relay 'reed'",
        ),
        ("format = 1\n[high_voltage]\n", "supply"),
        ("format =", "physical"),
    ],
)
def test_a_bad_physical_file_is_told_by_its_key(text: str, says: str, tmp_path: Path) -> None:
    path = tmp_path / "physical.toml"
    path.write_text(text)
    with pytest.raises(PhysicalFileError, match=says):
        read_physical(path)
