"""Limits that state a temperature, an age or the working voltage of their value."""

from datetime import UTC, datetime
from pathlib import Path

import pytest
from tests.sequence.given import CAPACITORS, capacitor, make

SWEEP = """
[[stage]]
kind = "sweep"
name = "sweep"
frequency = "1 kHz"
level = "1 V"
bias = ["0 V", "10 V", "20 V"]
"""


def limit(quantity: str, at: str, bounds: str = 'min = "-20 %"') -> str:
    return f"""
[[limit]]
stage = "sweep"
quantity = "{quantity}"
at = {{ {at} }}
{bounds}
source = "the test"
"""


def test_a_reference_temperature_and_age_reach_the_limit(tmp_path: Path) -> None:
    heated = datetime(2026, 1, 1, tzinfo=UTC)
    part = capacitor(dielectric="X7R", rated_v=50.0, last_heated=heated)
    at = 'bias = "0 V", reference_temperature = "20 degC", reference_age = "1000 h"'
    (found,) = make(tmp_path, CAPACITORS + SWEEP + limit("cp_f", at), part).good.limits
    assert (found.reference_temperature_c, found.reference_age_s) == (20.0, 3.6e6)


@pytest.mark.parametrize(
    ("quantity", "part", "problem"),
    [
        ("d", capacitor(dielectric="PP", rated_v=50.0), "limit-not-correctable"),
        ("cp_f", capacitor(dielectric="", rated_v=50.0), "no-coefficient"),
        ("cp_f", capacitor(dielectric="aluminium", rated_v=50.0), "no-coefficient"),
    ],
)
def test_a_value_that_nobody_can_carry_there_is_refused(
    tmp_path: Path, quantity: str, part: object, problem: str
) -> None:
    at = 'bias = "0 V", reference_temperature = "20 degC"'
    bounds = "max = 0.1" if quantity == "d" else 'min = "-20 %"'
    found = make(tmp_path, CAPACITORS + SWEEP + limit(quantity, at, bounds), part)
    assert problem in found.ids


def test_an_age_needs_the_last_heating_and_no_voltage_since(tmp_path: Path) -> None:
    text = CAPACITORS + SWEEP + limit("cp_f", 'bias = "0 V", reference_age = "1000 h"')
    unknown = capacitor(dielectric="X7R", rated_v=50.0)
    assert "age-unknown" in make(tmp_path, text, unknown).ids
    upset = capacitor(
        dielectric="X7R",
        rated_v=50.0,
        last_heated=datetime(2025, 1, 1, tzinfo=UTC),
        last_energised=datetime(2025, 2, 1, tzinfo=UTC),
    )
    assert "age-unknown" in make(tmp_path, text, upset).ids


def test_a_limit_at_the_working_voltage_lies_between_measured_biases(tmp_path: Path) -> None:
    part = capacitor(dielectric="X7R", rated_v=50.0, working_v=12.0)
    text = limit("capacitance_change", 'bias = "working voltage"', 'min = "-30 %"')
    brief = make(tmp_path, CAPACITORS + SWEEP + text, part).good
    (found,) = brief.limits
    assert found.bias_v == 12.0
    beyond = capacitor(dielectric="X7R", rated_v=50.0, working_v=30.0)
    brief = make(tmp_path, CAPACITORS + SWEEP + text, beyond).good
    assert brief.limits == ()
    assert len(brief.cannot_reach) == 1


def test_a_stage_may_measure_at_the_working_voltage_itself(tmp_path: Path) -> None:
    sweep = SWEEP.replace('["0 V", "10 V", "20 V"]', '["0 V", "working voltage"]')
    text = limit("capacitance_change", 'bias = "working voltage"', 'min = "-30 %"')
    part = capacitor(dielectric="X7R", rated_v=50.0, working_v=12.0)
    brief = make(tmp_path, CAPACITORS + sweep + text, part).good
    assert {point.bias_v for point in brief.stages[0].points} == {0.0, 12.0}
    # the meter ends at 40 V: left out, and said so
    high = capacitor(dielectric="X7R", rated_v=400.0, working_v=300.0)
    brief = make(tmp_path, CAPACITORS + sweep + text, high).good
    assert {point.bias_v for point in brief.stages[0].points} == {0.0}
    assert any("working voltage" in left.what for left in brief.cannot_reach)


def test_a_part_without_a_working_voltage_is_asked_back(tmp_path: Path) -> None:
    sweep = SWEEP.replace('["0 V", "10 V", "20 V"]', '["0 V", "working voltage"]')
    part = capacitor(dielectric="X7R", rated_v=50.0)
    assert "rating-missing" in make(tmp_path, CAPACITORS + sweep, part).ids
