"""Rows of results.csv: decisions and their reasons."""

from math import isnan
from typing import Any

import numpy as np
import pytest
from tests.results.lot import flat_accuracy, limit_on, part_of, readings_of

from ohmward.results.derive import derive_impedance
from ohmward.results.judge import judge, part_decisions
from ohmward.terms.decision import Decision
from ohmward.terms.kind import Kind
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part

ACCURACY = {"meter": flat_accuracy(1e-3, 1e-3)}
Row = dict[str, Any]


def _rows(
    rows: list[Row], *limits: Limit, part: Part | None = None, closures: tuple[str, ...] = ()
) -> list[Row]:
    part = part or part_of()
    readings = readings_of(rows)
    table = derive_impedance(readings, [part], ACCURACY)
    return judge(readings, table, [part], limits, closures=closures)


def _capacitor(capacitance_f: float, d: float = 0.01, frequency_hz: float = 1e3) -> Row:
    return {
        "pair": "Cs-D",
        "first": capacitance_f,
        "second": d,
        "frequency_hz": frequency_hz,
        "first_resolution": 0.0,
    }


# U = 2u = 0.1 % of C: the guard band of a ±5 % limit ends 0.1 nF inside 105 nF
@pytest.mark.parametrize(
    ("capacitance_f", "decision"),
    [
        (100e-9, Decision.ACCEPT),
        (104.85e-9, Decision.ACCEPT),
        (104.95e-9, Decision.UNDECIDED),
        (105.05e-9, Decision.UNDECIDED),
        (105.2e-9, Decision.REJECT),
        (94e-9, Decision.REJECT),
    ],
)
def test_a_limit_with_its_guard_band(capacitance_f: float, decision: Decision) -> None:
    (row, *_) = _rows(
        [_capacitor(capacitance_f)],
        limit_on("cs_f", 95e-9, 105e-9, frequency_hz=1e3, source="±5 % of nominal"),
    )
    assert row["decision"] is decision
    assert row["value"] == pytest.approx(capacitance_f, rel=1e-12)
    assert row["u_expanded"] == pytest.approx(1e-3 * capacitance_f, rel=1e-3)
    assert row["coverage_k"] == pytest.approx(2.0)
    assert (row["frequency_hz"], row["level_v"], row["unit"]) == (1e3, 1.0, "F")
    for word in ("cs_f", "105 nF", "±5 % of nominal", "1 kHz"):
        assert word in row["reason"]


def test_repeats_are_averaged_and_only_their_scatter_falls() -> None:
    rng = np.random.default_rng(3)
    scatter = 5e-3 * rng.normal(size=100)
    rows = [_capacitor(1e-7 * (1 + e)) | {"repeat": n} for n, e in enumerate(scatter)]
    (row, *_) = _rows(rows, limit_on("cs_f", 95e-9, 105e-9))
    type_a = np.std(scatter, ddof=1) / 10
    assert row["value"] == pytest.approx(1e-7 * (1 + scatter.mean()), rel=1e-4)
    assert row["u_expanded"] / row["coverage_k"] == pytest.approx(
        1e-7 * np.hypot(5e-4, type_a), rel=0.01
    )


def test_few_repeats_widen_the_coverage_factor() -> None:
    """Two readings that scatter widely: one degree of freedom, Student's t is 13.97.

    C goes with 1/X, which widens so broad an interval by some more.
    """
    rows = [_capacitor(c) | {"repeat": n} for n, c in enumerate((98e-9, 102e-9))]
    (row, *_) = _rows(rows, limit_on("cs_f", 95e-9, 105e-9))
    assert 13.9 < row["coverage_k"] < 16
    assert row["decision"] is Decision.UNDECIDED


def test_bad_readings_enter_nothing_and_are_told() -> None:
    rows = [_capacitor(1e-7) | {"repeat": n} for n in range(3)]
    rows[1] |= {"first": 5e-7, "status": "overload"}
    (row, *_) = _rows(rows, limit_on("cs_f", 95e-9, 105e-9))
    assert row["decision"] is Decision.ACCEPT
    assert "1 of 3 readings left out: 1 overload" in row["reason"]


def test_what_was_not_measured_is_invalid_and_never_rejected() -> None:
    overloaded = _capacitor(5e-7) | {"status": "overload"}
    limit = limit_on("cs_f", 95e-9, 105e-9, frequency_hz=1e3)
    missing = limit_on("cs_f", 95e-9, 105e-9, frequency_hz=10e3)
    other_stage = limit_on("cs_f", 95e-9, 105e-9, stage="hot")
    rows = _rows([overloaded], limit, missing, other_stage)[:3]
    assert [row["decision"] for row in rows] == [Decision.INVALID] * 3
    assert all(isnan(row["value"]) for row in rows)
    assert "overload" in rows[0]["reason"]
    assert "10 kHz" in rows[1]["reason"]
    assert "'hot'" in rows[2]["reason"]


def test_a_limit_without_a_condition_is_decided_at_its_worst_point() -> None:
    rows = [
        _capacitor(1e-7, d, f) | {"point": n}
        for n, (d, f) in enumerate([(0.01, 1e3), (0.08, 1e4), (0.02, 1e5)])
    ]
    (row, *_) = _rows(rows, limit_on("d", maximum=0.05))
    assert row["decision"] is Decision.REJECT
    assert row["frequency_hz"] == 1e4


def test_a_short_is_rejected_for_its_capacitance_even_where_x_is_noise() -> None:
    """1/X has no normal distribution about X = 0, and a shorted part is no question of one."""
    accuracy = {"meter": flat_accuracy(1e-3, 1e-3, short_ohm=0.01)}
    limit = limit_on("capacitance_f", 95e-9, 105e-9)
    for r, x in ((0.02, 0.001), (0.001, 0.0), (0.05, -0.004)):
        readings = readings_of([{"first": r, "second": x}])
        table = derive_impedance(readings, [part_of()], accuracy)
        (row, *_) = judge(readings, table, [part_of()], [limit])
        assert row["decision"] is Decision.REJECT, (r, x)


def test_a_loss_too_small_to_see_is_not_a_negative_parallel_resistance() -> None:
    """R = −0.2 ± 0.8 ohm of a film capacitor: whatever it is, Rp is above 100 kohm."""
    (row, *_) = _rows([{"first": -0.2, "second": -1591.5}], limit_on("rp_ohm", minimum=100e3))
    assert row["decision"] is Decision.ACCEPT


def test_a_resistance_far_below_zero_is_nobodys_part() -> None:
    (row, *_) = _rows([{"first": -8.0, "second": -1591.5}], limit_on("cs_f", 95e-9, 105e-9))
    assert row["decision"] is Decision.INVALID
    assert "no passive part" in row["reason"]


def test_the_fitting_model_follows_the_impedance_and_is_named() -> None:
    high = _rows([_capacitor(1e-7, 0.3, 1e3)])[0]
    low = _rows([_capacitor(1e-7, 0.3, 1e4)])[0]
    assert high["value"] == pytest.approx(1e-7 / 1.09, rel=1e-9)
    assert "parallel" in high["reason"]
    assert low["value"] == pytest.approx(1e-7, rel=1e-9)
    assert "series" in low["reason"]


def _bias_sweep(values: list[tuple[float, float]], **more: Any) -> list[Row]:
    return [
        _capacitor(c) | {"bias_set_v": bias, "point": n} | more
        for n, (bias, c) in enumerate(values)
    ]


def test_a_change_over_bias_is_known_better_than_either_value() -> None:
    rows = _bias_sweep([(0.0, 100e-9), (10.0, 80e-9)])
    (row, *_) = _rows(rows, limit_on("capacitance_change", minimum=-0.3, bias_v=10.0))
    assert row["value"] == pytest.approx(-0.2, rel=1e-9)
    uncorrelated = 0.8 * 5e-4 * np.sqrt(2)
    assert 0.1 * uncorrelated < row["u_expanded"] / 2 < 0.5 * uncorrelated
    assert row["decision"] is Decision.ACCEPT
    rows[1]["range"] = "another"
    (row, *_) = _rows(rows, limit_on("capacitance_change", minimum=-0.3, bias_v=10.0))
    assert row["u_expanded"] / 2 == pytest.approx(uncorrelated, rel=1e-3)


def test_a_change_keeps_one_model_while_the_impedance_crosses_one_kilohm() -> None:
    """|Z| goes from 796 to 1592 ohm: a change of model would add D² = 9 % to the change."""
    rows = _bias_sweep([(0.0, 200e-9), (10.0, 100e-9)])
    for row in rows:
        row["second"] = 0.3
    found = [row for row in _rows(rows) if row["quantity"] == "capacitance_change"]
    assert found[0]["value"] == pytest.approx(-0.5, rel=1e-9)
    assert found[0]["bias_v"] == 10.0


def test_drift_at_the_closure_point_makes_the_stage_invalid_and_says_why() -> None:
    rows = [
        _capacitor(c, frequency_hz=f) | {"point": n}
        for n, (c, f) in enumerate([(100e-9, 1e3), (99e-9, 1e4), (100.5e-9, 1e3)])
    ]
    limit = limit_on("cs_f", 90e-9, 110e-9, frequency_hz=1e4)
    assert _rows(rows, limit)[0]["decision"] is Decision.ACCEPT
    (row, *rest) = _rows(rows, limit, closures=("sweep",))
    assert row["decision"] is Decision.INVALID
    assert "drifted" in row["reason"]
    assert all(isnan(other["value"]) for other in rest)
    # what the meter can repeat to is no drift
    rows[2]["first"] = 100.02e-9
    assert _rows(rows, limit, closures=("sweep",))[0]["decision"] is Decision.ACCEPT
    rows[2]["status"] = "overload"
    assert _rows(rows, limit, closures=("sweep",))[0]["decision"] is Decision.INVALID


def _resonant(frequencies_hz: list[float]) -> list[Row]:
    """100 nF with 10 nH: 5.0329 MHz."""
    rows = []
    for n, f in enumerate(frequencies_hz):
        w = 2 * np.pi * f
        z = 0.05 + 1j * (w * 10e-9 - 1 / (w * 1e-7))
        rows.append({"first": z.real, "second": z.imag, "frequency_hz": f, "point": n})
    return rows


WIDE = [1e6, 2e6, 4e6, 8e6, 16e6]


@pytest.mark.parametrize(
    ("frequencies_hz", "minimum", "maximum", "decision", "words"),
    [
        (WIDE, 4e6, None, Decision.ACCEPT, "5.03"),
        (WIDE, 6e6, None, Decision.REJECT, "5.03"),
        (WIDE[:3], 3e6, None, Decision.ACCEPT, "above 4 MHz"),
        (WIDE[:3], 6e6, None, Decision.UNDECIDED, "above 4 MHz"),
        (WIDE[:3], None, 3e6, Decision.REJECT, "above 4 MHz"),
        (WIDE[3:], 9e6, None, Decision.REJECT, "below 8 MHz"),
        (WIDE[3:], 4e6, None, Decision.UNDECIDED, "below 8 MHz"),
        (WIDE[3:], None, 9e6, Decision.ACCEPT, "below 8 MHz"),
        (WIDE[:1], 4e6, None, Decision.INVALID, "two frequencies"),
    ],
)
def test_self_resonance(
    frequencies_hz: list[float],
    minimum: float | None,
    maximum: float | None,
    decision: Decision,
    words: str,
) -> None:
    limit = limit_on("self_resonance_hz", minimum, maximum)
    (row, *_) = _rows(_resonant(frequencies_hz), limit)
    assert row["decision"] is decision
    assert words in row["reason"]
    if len(frequencies_hz) == 5:
        assert row["value"] == pytest.approx(5.0329e6, rel=1e-4)


def test_main_quantities_are_reported_where_nothing_judges_them() -> None:
    rows = _rows([_capacitor(1e-7)], limit_on("cs_f", 95e-9, 105e-9, frequency_hz=1e3))
    found = {row["quantity"]: row["decision"] for row in rows}
    assert found == {
        "cs_f": Decision.ACCEPT,
        "d": Decision.REPORTED,
        "rs_ohm": Decision.REPORTED,
    }
    resistor = part_of(Kind.RESISTOR, 100.0)
    rows = _rows([{"first": 100.0, "second": 0.5}], part=resistor)
    assert [row["quantity"] for row in rows] == ["resistance_ohm", "reactance_ohm"]
    inductor = part_of(Kind.INDUCTOR, 1e-3)
    rows = _rows([{"pair": "Ls-Rs", "first": 1e-3, "second": 1.0}], part=inductor)
    assert [row["quantity"] for row in rows] == ["inductance_h", "q", "rs_ohm"]


def test_part_decisions_take_the_worst_and_an_unmeasured_part_is_invalid() -> None:
    good, bad = part_of(), part_of(part_id="P2")
    rows = _rows(
        [_capacitor(1e-7)],
        limit_on("cs_f", 95e-9, 105e-9),
        limit_on("d", maximum=0.001),
        limit_on("rs_ohm", maximum=1e3, frequency_hz=5e3),
    )
    assert part_decisions(rows, [good, bad]) == {
        "P1": Decision.REJECT,
        "P2": Decision.INVALID,
    }
    rows = _rows([_capacitor(1e-7)], limit_on("cs_f", 95e-9, 105e-9))
    assert part_decisions(rows, [good])["P1"] is Decision.ACCEPT


def test_no_readings_at_all_give_invalid_rows() -> None:
    readings = {name: column[:0] for name, column in readings_of([{}]).items()}
    table = derive_impedance(readings, [part_of()], ACCURACY)
    (row,) = judge(readings, table, [part_of()], [limit_on("cs_f", 95e-9)])
    assert row["decision"] is Decision.INVALID


def test_a_meter_without_a_stated_accuracy_decides_nothing() -> None:
    readings = readings_of([_capacitor(1e-7)])
    table = derive_impedance(readings, [part_of()], {})
    (row, *rest) = judge(readings, table, [part_of()], [limit_on("cs_f", 95e-9, 105e-9)])
    assert row["decision"] is Decision.INVALID
    assert "states no accuracy" in row["reason"]
    assert row["value"] == pytest.approx(1e-7)
    assert all(isnan(other["u_expanded"]) for other in rest)


def _inductor_over_bias(currents_a: list[float]) -> list[Row]:
    """1 mH at no bias, L = L0/(1 + (I/0.8 A)²): down by 20 % at 0.4 A."""
    return [
        {
            "pair": "Ls-Rs",
            "first": 1e-3 / (1 + (current / 0.8) ** 2),
            "second": 0.5,
            "bias_set_a": current,
            "point": n,
            "frequency_hz": 1e4,
        }
        for n, current in enumerate(currents_a)
    ]


STEPS = [0.0, 0.1, 0.2, 0.3, 0.35, 0.45, 0.5, 0.6]


@pytest.mark.parametrize(
    ("currents_a", "minimum", "maximum", "decision"),
    [
        (STEPS, 0.35, None, Decision.ACCEPT),
        (STEPS, 0.5, None, Decision.REJECT),
        (STEPS, 0.401, None, Decision.UNDECIDED),
        (STEPS[:4], 0.2, None, Decision.ACCEPT),
        (STEPS[:4], 0.35, None, Decision.UNDECIDED),
        (STEPS[:4], None, 0.25, Decision.REJECT),
        (STEPS[:1], 0.2, None, Decision.INVALID),
    ],
)
def test_saturation_current(
    currents_a: list[float], minimum: float | None, maximum: float | None, decision: Decision
) -> None:
    limit = limit_on("saturation_current_20pct_a", minimum, maximum)
    rows = _rows(_inductor_over_bias(currents_a), limit, part=part_of(Kind.INDUCTOR, 1e-3))
    assert rows[0]["decision"] is decision
    if len(currents_a) == len(STEPS):
        assert abs(rows[0]["value"] - 0.4) <= rows[0]["u_expanded"]
        assert rows[0]["unit"] == "A"


def _sweep(step: float, ranges: tuple[str, str] = ("1", "1")) -> list[Row]:
    """100 nF with its lead, 20 Hz to 2 MHz; from 6.3 kHz on everything reads ``step`` more."""
    rows = []
    for n, f in enumerate(np.geomspace(20.0, 2e6, 51)):
        w = 2 * np.pi * f
        z = 0.05 + 1j * (w * 10e-9 - 1 / (w * 1e-7))
        z *= 1 + step * (n >= 25)
        plain = {"first": z.real, "second": z.imag, "frequency_hz": f, "point": n}
        rows.append(plain | {"range": ranges[n >= 25]})
    return rows


def test_a_step_in_a_sweep_makes_it_invalid_unless_the_meter_changed_its_range() -> None:
    limit = limit_on("self_resonance_hz", minimum=4e6)
    assert _rows(_sweep(0.0), limit)[0]["decision"] is Decision.UNDECIDED
    (row, *rest) = _rows(_sweep(0.005), limit)
    assert row["decision"] is Decision.INVALID
    assert "step of 0.5 %" in row["reason"]
    assert all(isnan(other["value"]) for other in rest)
    assert _rows(_sweep(0.005, ("1", "2")), limit)[0]["decision"] is Decision.UNDECIDED


def test_the_stated_distribution_decides_where_one_rectangular_error_rules() -> None:
    """±0.1 % rectangular: 95.45 % of it is ±0.09545 %, where first order says ±0.115 %."""
    accuracy = {"meter": flat_accuracy(1e-3, 1e-5, distribution="rectangular")}
    readings = readings_of([_capacitor(100e-9)])
    table = derive_impedance(readings, [part_of()], accuracy)
    limit = limit_on("cs_f", 95e-9, 105e-9)
    (plain, *_) = judge(readings, table, [part_of()], [limit])
    (stated, *_) = judge(readings, table, [part_of()], [limit], accuracies=accuracy)
    assert plain["u_expanded"] == pytest.approx(0.2e-9 / np.sqrt(3), rel=1e-3)
    assert stated["u_expanded"] == pytest.approx(0.09545e-9, rel=2e-3)
    assert stated["coverage_k"] == pytest.approx(0.9545 * np.sqrt(3), rel=2e-3)


@pytest.mark.slow
def test_false_acceptance_stays_below_its_bound_for_parts_across_a_limit() -> None:
    """500 parts spread evenly over ±3U about a limit, each with an instrument of its own."""
    rng = np.random.default_rng(8)
    count, half = 500, 1e-3
    accuracy = {"meter": flat_accuracy(half, half, distribution="rectangular")}
    true = 100e-9 * (1 + 3 * half * rng.uniform(-1, 1, count))
    shown = true * (1 + half * rng.uniform(-1, 1, count))
    parts = [part_of(part_id=f"P{n}") for n in range(count)]
    readings = readings_of([_capacitor(c) | {"part_id": f"P{n}"} for n, c in enumerate(shown)])
    table = derive_impedance(readings, parts, accuracy)
    limits = [limit_on("cs_f", maximum=100e-9, part_id=part.part_id) for part in parts]
    rows = judge(readings, table, parts, limits, accuracies=accuracy)
    judged = [row for row in rows if row["quantity"] == "cs_f"]
    assert len(judged) == count
    bad = [row for row, c in zip(judged, true, strict=True) if c > 100e-9]
    false = sum(row["decision"] is Decision.ACCEPT for row in bad)
    assert false <= 0.025 * len(bad)
    far = [
        row for row, c in zip(judged, true, strict=True) if abs(c - 100e-9) >= 2 * row["u_expanded"]
    ]
    assert len(far) > 100
    assert sum(row["decision"] is Decision.UNDECIDED for row in far) <= 0.05 * len(far)
