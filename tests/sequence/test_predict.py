"""What a bench cannot decide, against what its accuracy says by hand."""

from math import sqrt
from pathlib import Path

import pytest
from tests.sequence.given import (
    CAPACITORS,
    DRIVERS,
    HEAD,
    SWEEP,
    bench,
    capacitor,
    make,
    resistor,
)

from ohmward.sequence.model import DecisionTable
from ohmward.sequence.predict import MeterAccuracy, cannot_decide
from ohmward.terms.accuracy import AccuracyBand, ImpedanceAccuracy, LevelFactor
from ohmward.terms.part import Part

PLAIN = 'integration = "long"\n'


def flat(magnitude: float, phase_rad: float, **more: object) -> ImpedanceAccuracy:
    """The same accuracy everywhere, half-widths of rectangular distributions."""
    band = AccuracyBand(
        frequency_min_hz=1.0,
        frequency_max_hz=1e7,
        impedance_min_ohm=1e-3,
        impedance_max_ohm=1e9,
        magnitude_rel=magnitude,
        phase_rad=phase_rad,
    )
    return ImpedanceAccuracy(distribution="rectangular", bands=(band,), **more)  # type: ignore[arg-type]


def doubts(
    folder: Path,
    accuracy: ImpedanceAccuracy | None,
    limit: str,
    part: Part,
    *,
    stage: str = SWEEP,
    **decision: float,
) -> tuple[str, ...]:
    """The reasons why a limit on this part cannot be decided with this accuracy."""
    head = CAPACITORS if part.kind == "capacitor" else HEAD
    text = f'{head}{stage}{PLAIN}[[limit]]\nstage = "sweep"\nsource = "test"\n{limit}'
    brief = make(folder, text, part).good
    meter = MeterAccuracy(accuracy=accuracy, cable_m=0.0)
    found = cannot_decide(brief.limits, brief.stages, meter, DecisionTable(**decision))
    return tuple(doubt.reason for doubt in found)


def d_at_most(limit: float) -> str:
    return f'quantity = "d"\nat = {{ frequency = "1 kHz" }}\nmax = {limit}\n'


def test_a_dissipation_below_the_phase_uncertainty_cannot_be_decided(tmp_path: Path) -> None:
    # For small D, u(D) is u(θ) = a/√3 of a rectangular half-width a: U = 2·0.5 mrad/√3 = 0.577e-3
    accuracy = flat(1e-4, 0.5e-3)
    expanded = 2 * 0.5e-3 / sqrt(3)
    assert doubts(tmp_path, accuracy, d_at_most(expanded * 0.98), capacitor())
    assert not doubts(tmp_path, accuracy, d_at_most(expanded * 1.02), capacitor())


def test_the_guard_band_and_the_coverage_count(tmp_path: Path) -> None:
    accuracy, limit = flat(1e-4, 0.5e-3), d_at_most(0.5e-3)
    assert doubts(tmp_path, accuracy, limit, capacitor())
    assert not doubts(tmp_path, accuracy, limit, capacitor(), guard=0.5)
    assert not doubts(tmp_path, accuracy, limit, capacitor(), coverage=1.0)


@pytest.mark.parametrize(("tolerance", "decided"), [(0.0025, True), (0.0022, False)])
def test_a_tolerance_must_be_wider_than_the_uncertainty(
    tolerance: float, decided: bool, tmp_path: Path
) -> None:
    # U = 2 · 0.2 %/√3 = 0.231 % of R
    part = resistor(position="P1", tolerance_low=-tolerance, tolerance_high=tolerance)
    limit = 'quantity = "resistance_ohm"\nrule = "marked-tolerance"\n'
    limit += 'parts = { kind = "resistor" }\nat = { frequency = "1 kHz" }\n'
    text = f"{HEAD}{SWEEP}".replace('["1 kHz", "10 kHz"]', '"1 kHz"')
    stage = text.removeprefix(HEAD) + 'parts = { kind = "resistor" }\n'
    found = doubts(tmp_path, flat(2e-3, 2e-3), limit, part, stage=stage)
    assert (not found) is decided


def test_a_q_that_the_meter_cannot_tell_from_infinite(tmp_path: Path) -> None:
    # Q ≥ 1000 is D ≤ 0.001: decidable with U(D) = 0.58e-3, not with U(D) = 1.2e-3
    limit = 'quantity = "q"\nat = { frequency = "1 kHz" }\nmin = 1000\n'
    assert not doubts(tmp_path, flat(1e-4, 0.5e-3), limit, capacitor())
    assert doubts(tmp_path, flat(1e-4, 1.0e-3), limit, capacitor())


def test_the_level_that_is_set_counts(tmp_path: Path) -> None:
    # manuals state accuracy by the level that is set, whatever the part leaves of it
    steps = (LevelFactor(level_min_v=0.5, factor=1.0), LevelFactor(level_min_v=0.01, factor=50.0))
    accuracy = flat(1e-4, 1e-4, level_factors=steps)
    low = SWEEP.replace('"1 V"', '"0.1 V"')
    assert not doubts(tmp_path, accuracy, d_at_most(0.005), capacitor())
    assert doubts(tmp_path, accuracy, d_at_most(0.005), capacitor(), stage=low)


def test_a_hole_in_the_accuracy_is_said(tmp_path: Path) -> None:
    steps = (LevelFactor(level_min_v=2.0, factor=1.0),)
    accuracy = flat(1e-4, 1e-4, level_factors=steps)
    for missing in (accuracy, None):
        (reason,) = doubts(tmp_path, missing, d_at_most(0.1), capacitor())
        assert "states no accuracy" in reason


@pytest.mark.parametrize(
    ("bound", "decided"),
    [('min = "5 kHz"', True), ('min = "1 MHz"', False), ('max = "1 MHz"', False)],
)
def test_a_self_resonance_beyond_the_sweep(bound: str, decided: bool, tmp_path: Path) -> None:
    limit = f'quantity = "self_resonance_hz"\n{bound}\n'
    found = doubts(tmp_path, flat(1e-4, 1e-4), limit, capacitor())
    assert (not found) is decided


def test_a_change_with_bias_profits_from_one_meter(tmp_path: Path) -> None:
    # u(C)/C = 1 %/√3; what two readings share falls out, so that ±2 % is decidable
    stage = SWEEP + 'bias = ["0 V", "5 V"]\n'
    limit = 'quantity = "capacitance_change"\nat = { frequency = "1 kHz", bias = "5 V" }\n'
    limit += 'min = "-2 %"\nmax = "2 %"\n'
    assert not doubts(tmp_path, flat(1e-2, 1e-4), limit, capacitor(), stage=stage)
    assert doubts(tmp_path, flat(1e-1, 1e-4), limit, capacitor(), stage=stage)


def test_the_shipped_meter_says_so_of_a_very_good_capacitor(tmp_path: Path) -> None:
    # its manual: 0.5 mrad at 1 kHz with long integration; D ≤ 0.0005 is finer than 0.58e-3
    text = f'{CAPACITORS}{SWEEP}{PLAIN}[[limit]]\nstage = "sweep"\nsource = "test"\n'
    brief = make(tmp_path, text + d_at_most(0.0005)).good
    (doubt,) = brief.cannot_decide
    assert doubt.limit.part_id == "C1"
    assert doubt.expanded_uncertainty == pytest.approx(2 * 0.5e-3 / sqrt(3), rel=0.02)
    assert not make(tmp_path, text + d_at_most(0.001)).good.cannot_decide
    assert bench().instruments["meter"].cable_m == 0.0
    assert DRIVERS["meter"].impedance_accuracy is not None
