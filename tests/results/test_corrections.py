"""Values carried to a limit's temperature, age or bias, held against the published laws."""

from datetime import UTC, datetime, timedelta
from math import log10, sqrt

import numpy as np
import pytest
from tests.results.lot import flat_accuracy, limit_on, part_of, readings_of

from ohmward.results.derive import derive_impedance
from ohmward.results.judge import judge
from ohmward.terms.decision import Decision
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part

ACCURACY = {"meter": flat_accuracy(2e-4, 2e-4)}
MEASURED = datetime(2024, 1, 1, tzinfo=UTC)  # the instant of the readings in `lot`
C = {"pair": "Cs-D", "first": 1e-7, "second": 1e-4}


def part(dielectric: str, heated: datetime | None = None) -> Part:
    plain = part_of()
    return Part(
        part_id=plain.part_id,
        position=plain.position,
        kind=plain.kind,
        nominal=plain.nominal,
        dielectric=dielectric,
        last_heated=heated,
    )


def rows(limit: Limit, of: Part, **reading: object) -> list[dict[str, object]]:
    readings = readings_of([{**C, **reading}])
    table = derive_impedance(readings, [of], ACCURACY)
    found = judge(readings, table, [of], [limit], accuracies=ACCURACY)
    return [row for row in found if row["quantity"] == limit.quantity]


def test_a_film_is_carried_to_its_reference_temperature_and_stays_beside_it() -> None:
    limit = limit_on("cs_f", 99e-9, 101e-9, reference_temperature_c=20.0)
    carried, measured = rows(limit, part("PP"), temperature_c=30.0)
    # polypropylene, about -250 ppm/K (common practice): 10 K colder is 0.25 % more
    assert carried["value"] == pytest.approx(1e-7 * 1.0025, rel=2e-5)
    assert (carried["reference_temperature_c"], carried["decision"]) == (20.0, Decision.ACCEPT)
    assert "from 30 °C to 20 °C" in str(carried["reason"])
    assert measured["value"] == pytest.approx(1e-7, rel=1e-9)
    assert measured["decision"] == Decision.REPORTED
    assert np.isnan(measured["reference_temperature_c"])  # type: ignore[arg-type]
    # by hand: 150 ppm/K rectangular over 10 K, and 250 and 150/sqrt(3) ppm/K times 1 K
    own = float(measured["u_expanded"]) / float(measured["coverage_k"])  # type: ignore[arg-type]
    by_k = np.hypot(250e-6, 150e-6 / sqrt(3))
    wanted = np.hypot(own / 1e-7, np.hypot(150e-6 * 10 / sqrt(3), by_k))
    u = float(carried["u_expanded"]) / float(carried["coverage_k"])  # type: ignore[arg-type]
    assert u / 1e-7 == pytest.approx(wanted, rel=0.01)


def test_the_correction_decides_where_the_value_alone_would_not() -> None:
    inside = limit_on("cs_f", 98e-9, 100.1e-9)
    (plain,) = rows(inside, part("PP"), temperature_c=60.0)
    assert plain["decision"] == Decision.ACCEPT
    at_20 = limit_on("cs_f", 98e-9, 100.1e-9, reference_temperature_c=20.0)
    carried, _ = rows(at_20, part("PP"), temperature_c=60.0)
    assert carried["decision"] in (Decision.UNDECIDED, Decision.REJECT)


def test_class_2_is_carried_to_a_thousand_hours() -> None:
    hours = 10.0
    of = part("X7R", MEASURED - timedelta(hours=hours))
    limit = limit_on("cs_f", 80e-9, 120e-9, reference_age_s=3.6e6)
    carried, measured = rows(limit, of)
    # EIA-198, at the middle of X7R's 1.5 to 4 % per decade-hour
    rate = 0.0275
    assert carried["value"] == pytest.approx(
        1e-7 * (1 - 3 * rate) / (1 - rate * log10(hours)), rel=1e-9
    )
    assert (carried["decision"], measured["decision"]) == (Decision.ACCEPT, Decision.REPORTED)


@pytest.mark.parametrize(
    ("limit", "of", "reading", "why"),
    [
        ({"reference_temperature_c": 20.0}, "PP", {"temperature_c": np.nan}, "no temperature"),
        ({"reference_temperature_c": 20.0}, "unheard", {}, "no temperature coefficient"),
        ({"reference_age_s": 3.6e6}, "X7R", {}, "not known when it was last heated"),
    ],
)
def test_what_cannot_be_carried_is_invalid_and_never_rejected(
    limit: dict[str, float], of: str, reading: dict[str, float], why: str
) -> None:
    found = rows(limit_on("cs_f", 200e-9, 300e-9, **limit), part(of), **reading)[0]
    assert found["decision"] == Decision.INVALID
    assert why in str(found["reason"])


def test_a_part_heated_after_its_reading_is_invalid() -> None:
    of = part("X7R", MEASURED + timedelta(hours=1))
    found = rows(limit_on("cs_f", 80e-9, 120e-9, reference_age_s=3.6e6), of)[0]
    assert found["decision"] == Decision.INVALID
    assert "before its last heating" in str(found["reason"])


def biased(at: float) -> list[dict[str, object]]:
    """A part that loses 4 % at 10 V and 12 % at 20 V, judged at a bias between or beyond."""
    points = [(0.0, 1.0), (10.0, 0.96), (20.0, 0.88)]
    readings = readings_of(
        [
            {**C, "point": number, "bias_set_v": bias, "first": 1e-7 * share}
            for number, (bias, share) in enumerate(points)
        ]
    )
    table = derive_impedance(readings, [part_of()], ACCURACY)
    limit = limit_on("capacitance_change", -0.1, None, bias_v=at)
    found = judge(readings, table, [part_of()], [limit], accuracies=ACCURACY)
    return [row for row in found if row["decision"] != Decision.REPORTED]


def test_the_loss_at_a_working_voltage_between_two_biases() -> None:
    (row,) = biased(15.0)
    # half way between -4 % and -12 %, and the curve between them may bend by a quarter of the step
    assert row["value"] == pytest.approx(-0.08, abs=1e-9)
    assert row["bias_v"] == 15.0
    bend = 0.25 * 0.08 / sqrt(3)
    u = float(row["u_expanded"]) / float(row["coverage_k"])  # type: ignore[arg-type]
    assert u >= bend
    assert u == pytest.approx(bend, rel=0.05)
    assert "between biases that were measured" in str(row["reason"])


def test_a_working_voltage_beyond_the_sweep_is_not_extrapolated() -> None:
    (row,) = biased(25.0)
    assert row["decision"] == Decision.INVALID
    assert "asked for at 25" in str(row["reason"])


def test_a_working_voltage_that_was_measured_is_taken_as_it_is() -> None:
    (row,) = biased(10.0)
    assert row["value"] == pytest.approx(-0.04, abs=1e-9)
    assert row["decision"] == Decision.ACCEPT
