"""What a sequence becomes: points in order, stages in order, limits, time, hash."""

from itertools import pairwise
from pathlib import Path
from tempfile import TemporaryDirectory

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.sequence.given import (
    CAPACITORS,
    DRIVERS,
    HEAD,
    SWEEP,
    bench,
    capacitor,
    inductor,
    make,
    resistor,
)

from ohmward.sequence.model import FrequencyRange
from ohmward.terms.kind import Polarity

LIMIT = """
[[limit]]
stage = "sweep"
quantity = "capacitance_f"
at = { frequency = "1 kHz" }
min = "-10 %"
max = "+10 %"
source = "test"
"""


def _list(values: list[float], unit: str) -> str:
    return "[" + ", ".join(f'"{value!r} {unit}"' for value in values) + "]"


frequencies = st.lists(st.integers(20, 2_000_000).map(float), min_size=1, max_size=6, unique=True)
levels = st.lists(st.integers(5, 2000).map(lambda n: n / 1000), min_size=1, max_size=4, unique=True)
biases = st.lists(st.integers(0, 40).map(float), min_size=1, max_size=4, unique=True)


@settings(max_examples=60, deadline=None)
@given(frequencies, levels, biases, st.booleans(), st.integers(1, 5))
def test_points_are_the_product_in_the_order_written(
    asked_hz: list[float],
    asked_v: list[float],
    asked_bias: list[float],
    closure: bool,
    repeats: int,
) -> None:
    text = f"""{HEAD}
[[stage]]
kind = "sweep"
name = "sweep"
frequency = {_list(asked_hz, "Hz")}
level = {_list(asked_v, "V")}
bias = {_list(asked_bias, "V")}
closure = {str(closure).lower()}
repeats = {repeats}
"""
    with TemporaryDirectory() as folder:
        (stage,) = make(Path(folder), text).good.stages
    count = len(asked_hz) * len(asked_v) * len(asked_bias)
    assert len(stage.points) == count + closure
    assert stage.readings == (count + closure) * repeats
    expected = [(b, v, f) for b in asked_bias for v in asked_v for f in asked_hz]
    found = [(p.bias_v, p.level_v, p.frequency_hz) for p in stage.points]
    assert found[:count] == expected
    if closure:
        assert stage.points[-1] == stage.points[0]


@given(
    st.floats(20, 1e5, allow_nan=False),
    st.floats(1.01, 1e4),
    st.integers(1, 50),
)
def test_a_range_is_evenly_spaced_and_keeps_both_ends(
    start: float, ratio: float, per_decade: int
) -> None:
    grid = FrequencyRange(start=start, stop=start * ratio, per_decade=per_decade).unroll()
    assert grid[0] == pytest.approx(start, rel=1e-5)
    assert grid[-1] == pytest.approx(start * ratio, rel=1e-5)
    assert list(grid) == sorted(set(grid))
    steps = [after / before for before, after in pairwise(grid)]
    widest = 10 ** (1 / per_decade)
    assert all(step == pytest.approx(widest, rel=2e-5) for step in steps[:-1])
    assert all(step <= widest * (1 + 2e-5) for step in steps[-1:])


def test_a_range_of_whole_decades_meets_the_round_frequencies() -> None:
    grid = FrequencyRange(start=100.0, stop=1e6, per_decade=10).unroll()
    assert len(grid) == 41
    assert {1e2, 1e3, 1e4, 1e5, 1e6} <= set(grid)


def test_parts_one_after_another_each_with_its_stages_in_order(tmp_path: Path) -> None:
    second = SWEEP.replace('"sweep"\nfreq', '"again"\nfreq')
    parts = (capacitor("C1"), capacitor("C2", position="P2"))
    brief = make(tmp_path, HEAD + SWEEP + second, *parts).good
    found = [(stage.number, stage.part.part_id, stage.stage) for stage in brief.stages]
    assert found == [
        (1, "C1", "sweep"),
        (2, "C1", "again"),
        (3, "C2", "sweep"),
        (4, "C2", "again"),
    ]


def test_stages_go_to_the_parts_that_they_are_for(tmp_path: Path) -> None:
    text = f"""{HEAD}
[[stage]]
kind = "sweep"
name = "small"
parts = {{ kind = "capacitor", up_to = "1 nF" }}
frequency = "1 MHz"
level = "1 V"
[[stage]]
kind = "sweep"
name = "large"
parts = {{ above = "1 nF", dielectric = ["C0G", "PP"] }}
frequency = "1 kHz"
level = "1 V"
[[stage]]
kind = "sweep"
name = "coil"
parts = {{ kind = "inductor" }}
frequency = "1 kHz"
level = "1 V"
"""
    brief = make(
        tmp_path,
        text,
        capacitor("C1", 1000e-12, position="P1"),
        capacitor("C2", 1001e-12, position="P2", dielectric="NP0"),
        capacitor("C3", 1e-6, position="P3", dielectric="X7R"),
        inductor("L1", position="P4"),
    ).good
    assert [(s.part.part_id, s.stage) for s in brief.stages] == [
        ("C1", "small"),
        ("C2", "large"),
        ("L1", "coil"),
    ]
    assert [part.part_id for part in brief.parts] == ["C1", "C2", "L1"]
    assert any("C3" in warning for warning in brief.warnings)


def test_shares_of_the_rating_come_out_part_by_part(tmp_path: Path) -> None:
    text = HEAD + SWEEP + 'bias = ["0 V", "25 % of rating"]\n'
    brief = make(
        tmp_path,
        text,
        capacitor("C1", rated_v=16.0),
        inductor("L1", rated_a=0.2),
    ).good
    one, two = brief.stages
    assert {point.bias_v for point in one.points} == {0.0, 4.0}
    assert {point.bias_a for point in two.points} == {0.0, 0.05}
    assert {point.bias_v for point in two.points} == {0.0}


def test_a_share_beyond_the_meter_is_left_out_and_said(tmp_path: Path) -> None:
    text = HEAD + SWEEP + 'bias = ["0 V", "20 % of rating"]\n'
    brief = make(
        tmp_path, text, capacitor("C1", rated_v=400.0), capacitor("C2", position="P2")
    ).good
    assert {p.bias_v for p in brief.stages[0].points} == {0.0}
    assert {p.bias_v for p in brief.stages[1].points} == {0.0, 20.0}
    (left,) = brief.cannot_reach
    assert (left.part_ids, left.stage) == (("C1",), "sweep")
    assert "80 V" in left.what
    assert "40 V" in left.reason


def test_a_limit_at_a_bias_that_is_left_out_is_said_too(tmp_path: Path) -> None:
    text = (
        CAPACITORS
        + SWEEP
        + 'bias = ["0 V", "20 % of rating"]\n'
        + LIMIT.replace('"1 kHz" }', '"1 kHz", bias = "20 % of rating" }')
    )
    brief = make(tmp_path, text, capacitor("C1", rated_v=400.0)).good
    assert brief.limits == ()
    assert any("capacitance_f" in left.what for left in brief.cannot_reach)


def test_a_clipped_range_ends_at_the_meter(tmp_path: Path) -> None:
    text = HEAD + SWEEP.replace(
        '["1 kHz", "10 kHz"]', '{ from = "1 kHz", to = "10 MHz", per_decade = 1, clip = true }'
    )
    brief = make(tmp_path, text).good
    assert [p.frequency_hz for p in brief.stages[0].points] == [1e3, 1e4, 1e5, 1e6]
    (left,) = brief.cannot_reach
    assert "10 MHz" in left.what


def test_limits_are_resolved_for_each_part(tmp_path: Path) -> None:
    text = f"""{CAPACITORS}{SWEEP}{LIMIT}
[[limit]]
stage = "sweep"
quantity = "capacitance_f"
at = {{ frequency = "10 kHz", level = "1 V", bias = "0 V" }}
rule = "marked-tolerance"
times = 1.5
source = "marking"
[[limit]]
stage = "sweep"
quantity = "d"
at = {{ frequency = "1 kHz" }}
max = "0.8 %"
source = "test"
"""
    part = capacitor("C1", 1e-6, tolerance_low=-0.2, tolerance_high=0.8)
    relative, marked, loss = make(tmp_path, text, part).good.limits
    assert (relative.minimum, relative.maximum) == pytest.approx((0.9e-6, 1.1e-6))
    assert (relative.frequency_hz, relative.level_v, relative.bias_v) == (1e3, None, None)
    assert (marked.minimum, marked.maximum) == pytest.approx((0.7e-6, 2.2e-6))
    assert (marked.frequency_hz, marked.level_v, marked.bias_v, marked.bias_a) == (1e4, 1, 0, 0)
    assert (loss.minimum, loss.maximum) == (None, pytest.approx(0.008))
    assert marked.source == "marking"


def test_a_rule_brings_its_own_frequency(tmp_path: Path) -> None:
    # class 1: 1 MHz up to 1 nF, else 1 kHz (IEC 60384-21 as quoted by makers)
    text = f"""{CAPACITORS}
[[stage]]
kind = "sweep"
name = "sweep"
frequency = ["1 kHz", "1 MHz"]
level = "1 V"
[[limit]]
stage = "sweep"
quantity = "q"
rule = "class-1-q"
source = "test"
"""
    brief = make(
        tmp_path,
        text,
        capacitor("C1", 100e-12, dielectric="C0G"),
        capacitor("C2", 10e-9, dielectric="C0G", position="P2"),
    ).good
    assert [limit.frequency_hz for limit in brief.limits] == [1e6, 1e3]


def test_time_is_settling_dwell_readings_and_intervals(tmp_path: Path) -> None:
    # 2 points of 0.25 s (long), 5 s dwell, 3 repeats every 2 s: 2 · (5 + 2 · 2 + 0.25), and
    # 10 ms twice for relays whose driver does not say how long they take.
    text = HEAD + SWEEP + 'dwell = "5 s"\nrepeats = 3\ninterval = "2 s"\nintegration = "long"\n'
    brief = make(tmp_path, text).good
    meter = DRIVERS["meter"]
    timing = meter.timing
    settling_s = 2 * timing.settling + timing.settling_periods * (1 / 1e3 + 1 / 1e4)
    assert brief.duration_s == pytest.approx(settling_s + 2 * (5 + 4 + 0.25) + 0.02)
    by_hand = make(tmp_path, text, on=bench("by hand")).good
    assert by_hand.duration_s == pytest.approx(brief.duration_s - 0.02)


def test_low_frequencies_take_their_periods(tmp_path: Path) -> None:
    # at 20 Hz the shipped meter's two periods are longer than its 60 ms
    text = HEAD + SWEEP.replace('["1 kHz", "10 kHz"]', '"20 Hz"')
    brief = make(tmp_path, text, on=bench("by hand")).good
    timing = DRIVERS["meter"].timing
    periods = timing.settling_periods + 2
    assert brief.duration_s == pytest.approx(timing.settling + periods / 20)


def test_a_day_soak_is_a_reading_a_second(tmp_path: Path) -> None:
    text = HEAD + SWEEP.replace('["1 kHz", "10 kHz"]', '"1 kHz"')
    brief = make(tmp_path, text + 'repeats = 86_400\ninterval = "1 s"\n').good
    assert brief.readings == 86_400
    assert brief.duration_s == pytest.approx(86_400, abs=2)


def test_cautions_speak_of_charge_interlock_and_large_parts(tmp_path: Path) -> None:
    large = capacitor("C9", 470e-6, rated_v=450.0, dielectric="aluminium", polarity=Polarity.POLAR)
    text = HEAD + SWEEP.replace('"1 V"', '"0.5 V"') + 'bias = "1 V"\n'
    cautions = " ".join(make(tmp_path, text, large).good.cautions)
    assert "no interlock" in cautions
    assert "Discharge every capacitor" in cautions
    assert "C9 (48 J)" in cautions  # ½ · 470 µF · (450 V)² = 47.6 J
    plain = " ".join(make(tmp_path, HEAD + SWEEP, resistor(position="P1")).good.cautions)
    assert "no interlock" in plain
    assert "capacitor" not in plain


def test_a_sweep_at_a_harmless_bias_does_not_energise(tmp_path: Path) -> None:
    assert make(tmp_path, HEAD + SWEEP + 'bias = "40 V"\n').good.energising == ()


def test_a_meter_with_a_hazardous_bias_energises(tmp_path: Path) -> None:
    # IEC 61010-1: hazardous live above 60 V DC (from memory): 59 V + √2 · 1 V passes it
    meter = DRIVERS["meter"]
    bias = meter.setting["bias_voltage"].model_copy(update={"maximum": 200.0})
    strong = meter.model_copy(update={"setting": {**meter.setting, "bias_voltage": bias}})
    drivers = {**DRIVERS, "meter": strong}
    for volts, energising in (("58 V", ()), ("59 V", ("sweep",))):
        text = HEAD + SWEEP + f'bias = "{volts}"\n'
        assert make(tmp_path, text, drivers=drivers).good.energising == energising


def test_an_idle_limit_and_an_unjudged_part_are_said(tmp_path: Path) -> None:
    text = CAPACITORS + SWEEP + LIMIT.replace("source", 'parts = { dielectric = "PET" }\nsource')
    warnings = make(tmp_path, text).good.warnings
    assert any("limit 1" in warning for warning in warnings)
    assert any("judged by no limit" in warning and "C1" in warning for warning in warnings)
