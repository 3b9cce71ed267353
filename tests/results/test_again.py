"""Looking at a run again: the budget behind a value, and what other limits would decide."""

from math import sqrt

import pytest
from tests.results.lot import flat_accuracy, limit_on, part_of, readings_of

from ohmward.results.budgets import NoBudget, budgets
from ohmward.results.compare import changes
from ohmward.results.derive import derive_impedance
from ohmward.results.judge import judge
from ohmward.terms.accuracy import LevelFactor
from ohmward.terms.decision import Decision
from ohmward.terms.kind import Kind

ACCURACY = {"meter": flat_accuracy(1e-3, 1e-3, distribution="rectangular")}
ROW = {"pair": "Cs-D", "first": 1e-7, "second": 1e-3, "first_resolution": 1e-10}


def test_the_budget_is_that_of_the_judged_value() -> None:
    readings = readings_of([ROW])
    table = derive_impedance(readings, [part_of()], ACCURACY)
    (found,) = budgets(readings, table, "P1", "cs_f", ACCURACY)
    budget = found.budget
    assert (found.stage, found.point.frequency_hz) == ("sweep", 1000.0)
    assert budget.u == pytest.approx(float(table["u_cs_f"][0]), rel=1e-6)
    by_name = {part.source.name: part.source.contribution for part in budget.contributions}
    # by hand: 0.1 % rectangular of C, and a last digit of 0.1 nF
    assert by_name["accuracy of the magnitude"] == pytest.approx(1e-10 / sqrt(3), rel=1e-5)
    assert by_name["resolution and compensation"] == pytest.approx(1e-10 / sqrt(12), rel=1e-5)


def test_a_level_that_collapses_at_a_low_impedance_is_judged_by_the_one_that_was_set() -> None:
    factors = (LevelFactor(level_min_v=0.5, factor=1.0), LevelFactor(level_min_v=0.01, factor=15.0))
    accuracy = {
        "meter": flat_accuracy(1e-3, 1e-3, distribution="rectangular", level_factors=factors)
    }
    readings = readings_of([{"first": 1.0, "second": 0.01, "level_v": 0.01}])
    part = part_of(Kind.RESISTOR, 1.0)
    table = derive_impedance(readings, [part], accuracy)
    (found,) = budgets(readings, table, "P1", "rs_ohm", accuracy)
    # by hand: 0.1 % rectangular of 1 ohm, not fifteen times that
    assert found.budget.u == pytest.approx(1e-3 / sqrt(3), rel=1e-3)
    assert found.interval.u == pytest.approx(float(table["u_rs_ohm"][0]), rel=1e-6)


def test_what_has_no_budget_is_refused_by_name() -> None:
    readings = readings_of([ROW | {"status": "overload"}])
    table = derive_impedance(readings, [part_of()], ACCURACY)
    for quantity in ("cs_f", "self_resonance_hz", "capacitance_change", "colour"):
        with pytest.raises(NoBudget):
            budgets(readings, table, "P1", quantity, ACCURACY)


def test_other_limits_show_what_changes_and_nothing_else() -> None:
    readings = readings_of([ROW])
    table = derive_impedance(readings, [part_of()], ACCURACY)

    def rows(*limits: object) -> list[dict[str, object]]:
        return judge(readings, table, [part_of()], limits, accuracies=ACCURACY)

    loose = rows(limit_on("cs_f", 95e-9, 105e-9), limit_on("d", maximum=0.01))
    tight = rows(limit_on("cs_f", 101e-9, 105e-9), limit_on("d", maximum=0.01))
    assert changes(loose, loose) == []
    (change,) = changes(loose, tight)
    assert (change.quantity, change.before, change.after) == (
        "cs_f",
        Decision.ACCEPT,
        Decision.REJECT,
    )
    assert "101 nF" in change.reason
    (gone,) = changes(loose, loose[:1])
    assert (gone.quantity, gone.before, gone.after) == ("d", Decision.ACCEPT, None)


def test_two_limits_at_one_condition_share_a_row_and_both_must_hold() -> None:
    readings = readings_of([ROW])
    table = derive_impedance(readings, [part_of()], ACCURACY)
    first = limit_on("cs_f", 95e-9, 105e-9, source="one")
    both = [first, limit_on("cs_f", None, 101e-9, frequency_hz=1e3, source="other")]
    other = [first, limit_on("cs_f", 101e-9, 102e-9, source="other")]
    before = judge(readings, table, [part_of()], both)
    (row,) = [row for row in before if row["quantity"] == "cs_f"]
    assert (row["limit_min"], row["limit_max"]) == (95e-9, 101e-9)
    assert (row["limit_source"], row["decision"]) == ("one and other", Decision.ACCEPT)
    (change,) = changes(before, judge(readings, table, [part_of()], other))
    assert (change.before, change.after) == (Decision.ACCEPT, Decision.REJECT)
    assert "101 nF" in change.reason
    assert "95 nF" in change.reason
