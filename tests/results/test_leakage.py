"""Leakage from readings: what is taken off, what it is worth, and what may be judged.

Held against the sums themselves: I = reading − divider − background, u² = Σ(c·u)² (JCGM
100:2008, 5.1.2) with u = half-width/√3 (4.3.7), R = V/I, and t^−n for absorption.
"""

from collections.abc import Sequence
from math import hypot, inf, nan, sqrt

import numpy as np
import pytest

from ohmward.results.forming import Forming, FormingRule, Step, replayed
from ohmward.results.judged import Rule
from ohmward.results.leakage import Path, Reading, net_budget
from ohmward.results.under_voltage import Given, Outcome, PlannedHold, judge_one
from ohmward.terms.accuracy import RangeAccuracy, ScalarAccuracy
from ohmward.terms.decision import Decision
from ohmward.terms.limit import Limit

METER = ScalarAccuracy(
    distribution="rectangular",
    ranges=(
        RangeAccuracy(full_scale=2e-7, reading_rel=2e-3, offset=5e-11),
        RangeAccuracy(full_scale=2e-6, reading_rel=2e-3, offset=5e-10),
    ),
)
GOOD = Outcome(reached=True, connection="agrees", bypass_shown=True, stopped="")


def reading(**changed: float) -> Reading:
    figures = {
        "current_a": 500e-9,
        "divider_a": 400e-9,
        "background_a": nan,
        "range_a": 2e-6,
        "voltage_v": 400.0,
        "since_voltage_s": 60.0,
        "capacitance_f": 1e-6,
    }
    return Reading(**{**figures, **changed}, position="1")


def test_divider_and_background_are_taken_off() -> None:
    path = Path(series_ohm={"1": 1e4})
    assert net_budget(reading(), METER, path).value == pytest.approx(100e-9)
    assert net_budget(reading(background_a=20e-9), METER, path).value == pytest.approx(80e-9)


def test_the_uncertainty_is_the_root_of_its_squares() -> None:
    path = Path(divider_rel=5e-3, insulation_ohm=2e12, drift_v_per_s=1e-4, series_ohm={"1": 1e4})
    budget = net_budget(reading(), METER, path)
    gain, offset = 2e-3 * 500e-9, 5e-10
    divider, fixture, drift = 5e-3 * 400e-9, 400.0 / 2e12, 1e-6 * 1e-4
    moment = 0.95 * 100e-9 * 0.25 / 60.0
    whole = hypot(gain, offset, divider, fixture, drift, moment) / sqrt(3.0)
    assert budget.u == pytest.approx(whole, rel=1e-6)
    names = [part.source.name for part in budget.contributions]
    assert {"current meter, gain", "current meter, offset", "background", "supply drift"} <= {
        *names
    }


def given(
    times: Sequence[float],
    current: Sequence[float],
    *,
    outcome: Outcome = GOOD,
    lasts_s: float = 600.0,
    u: float = 1e-10,
) -> Given:
    count = len(times)
    return Given(
        plan=PlannedHold(
            part_id="C1",
            stage="held",
            kind="leakage",
            voltage_v=400.0,
            times_s=(60.0,),
            lasts_s=lasts_s,
        ),
        outcomes=(outcome,),
        rows={
            "since_voltage_s": np.array(times),
            "current_a": np.array(current),
            "u_current_a": np.full(count, u),
            "voltage_v": np.full(count, 400.0),
            "voltage_set_v": np.full(count, 400.0),
            "elapsed_s": np.array(times),
        },
        capacitance=(1e-6, 1e-9),
        voltage_error_v=lambda volts: 0.0,
        rule=Rule(),
    )


def limit(
    quantity: str, low: float | None = None, high: float | None = None, at: float = 60.0
) -> Limit:
    return Limit(
        part_id="C1",
        stage="held",
        quantity=quantity,
        minimum=low,
        maximum=high,
        source="the tests",
        since_voltage_s=at,
    )


STEADY = (10.0, 30.0, 60.0, 120.0, 600.0), (1e-7,) * 5


def test_insulation_is_voltage_over_current_and_time_constant_that_times_capacitance() -> None:
    found = judge_one(limit("insulation_ohm", low=1e9), given(*STEADY))
    assert found.decision is Decision.ACCEPT
    assert found.value == pytest.approx(4e9)
    assert judge_one(limit("insulation_time_s", low=1e3), given(*STEADY)).value == pytest.approx(
        4e3
    )
    assert judge_one(limit("leakage_a", high=9e-8), given(*STEADY)).decision is Decision.REJECT


@pytest.mark.parametrize(
    "outcome",
    [
        Outcome(reached=False, connection="agrees", bypass_shown=True, stopped=""),
        Outcome(reached=True, connection="absent", bypass_shown=True, stopped=""),
        Outcome(reached=True, connection="unresolved", bypass_shown=True, stopped=""),
        Outcome(reached=True, connection="agrees", bypass_shown=False, stopped=""),
        Outcome(reached=True, connection="agrees", bypass_shown=True, stopped="a contact is lost"),
    ],
)
@pytest.mark.parametrize("quantity", ["leakage_a", "insulation_ohm", "polarization_index"])
def test_nothing_of_a_hold_that_does_not_count_is_decided(outcome: Outcome, quantity: str) -> None:
    found = judge_one(limit(quantity, low=0.0, high=inf), given(*STEADY, outcome=outcome))
    assert found.decision is Decision.INVALID
    assert found.reason


def test_a_current_that_cannot_be_told_from_none_bounds_the_insulation() -> None:
    near_zero = given(STEADY[0], (-1e-11,) * 5)
    found = judge_one(limit("insulation_ohm", low=1e9), near_zero)
    assert found.decision is Decision.ACCEPT
    assert np.isnan(found.value)
    assert "above" in found.reason


def test_between_readings_the_fit_of_the_curve_is_read() -> None:
    times = (10.0, 15.0, 22.0, 33.0, 45.0, 80.0, 120.0, 200.0, 400.0, 600.0)

    def truth(t: float) -> float:
        return float(2e-6 * t**-0.95 + 5e-8)

    curve = given(times, [truth(t) for t in times], u=1e-10)
    found = judge_one(limit("leakage_a", high=1e-6), curve)
    assert found.value == pytest.approx(truth(60.0), rel=0.01)
    assert "fit" in found.reason
    index = judge_one(limit("polarization_index", low=1.0), curve)
    assert index.value == pytest.approx(truth(60.0) / truth(600.0), rel=0.02)


def test_nothing_is_read_beyond_the_last_reading() -> None:
    found = judge_one(limit("leakage_a", high=1.0, at=3000.0), given(*STEADY))
    assert found.decision is Decision.INVALID


def test_a_part_that_was_cut_short_is_rejected_by_what_it_leaked_or_not_judged() -> None:
    rising = given((10.0, 20.0, 30.0), (1e-8, 1e-8, 5e-6))
    assert judge_one(limit("leakage_a", high=1e-6), rising).decision is Decision.REJECT
    assert judge_one(limit("leakage_a", high=1e-4), rising).decision is Decision.INVALID


RULE = FormingRule(
    voltages_v=(100.0, 200.0), hold_s=20.0, next_below_a=1e-5, rise_rel=0.25, budget_s=300.0
)


def test_the_next_voltage_follows_only_a_falling_leakage_below_its_limit() -> None:
    forming = Forming(RULE)

    def take(t: float, volts: float, amperes: float, since: float) -> Step:
        return forming.take(elapsed_s=t, since_voltage_s=since, voltage_v=volts, net_a=amperes)

    assert take(10.0, 100.0, 9e-6, 10.0) is Step.WAIT  # too early
    assert take(20.0, 100.0, 2e-5, 20.0) is Step.RISES
    forming = Forming(RULE)
    assert take(10.0, 100.0, 3e-5, 10.0) is Step.WAIT
    assert take(20.0, 100.0, 2e-5, 20.0) is Step.WAIT  # falling, and not yet below
    assert take(30.0, 100.0, 9e-6, 30.0) is Step.NEXT
    assert forming.after(100.0) == 200.0
    assert take(40.0, 200.0, 2e-5, 5.0) is Step.WAIT
    assert take(60.0, 200.0, 9e-6, 25.0) is Step.DONE
    assert forming.formed_v == 200.0


def test_forming_ends_with_its_time() -> None:
    rows = [(float(t), float(t), 100.0, 5e-5) for t in range(10, 400, 10)]
    assert replayed(RULE, rows[:20]) == (None, Step.WAIT)
    assert replayed(RULE, rows[:30])[1] is Step.SPENT
