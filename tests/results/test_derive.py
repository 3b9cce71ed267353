"""Rows of impedance.csv from the journal's columns."""

import numpy as np
import pytest
from tests.results.lot import flat_accuracy, part_of, readings_of

from ohmward.metrology.compensation import Compensation, Known
from ohmward.output.columns import IMPEDANCE, RESULTS
from ohmward.results.columns import IMPEDANCE_COLUMNS, RESULT_COLUMNS
from ohmward.results.derive import derive_impedance
from ohmward.terms.kind import Kind
from ohmward.terms.status import Status

ACCURACY = {"meter": flat_accuracy(1e-3, 1e-3)}
# 100 nF with D = 0.01 at 1 kHz, worked by hand: X = −1/(2π·1e3·1e-7), R = 0.01·|X|
X = -1591.5494309189535
R = 15.915494309189535


def test_the_columns_are_those_of_the_written_tables() -> None:
    assert IMPEDANCE.names == IMPEDANCE_COLUMNS
    assert RESULTS.names == RESULT_COLUMNS


@pytest.mark.parametrize(
    ("pair", "first", "second"),
    [
        ("R-X", R, X),
        ("Cs-D", 1e-7, 0.01),
        ("Cp-D", 1e-7 / 1.0001, 0.01),
        ("Cs-Rs", 1e-7, R),
        ("Z-theta", np.hypot(R, X), np.arctan2(X, R)),
    ],
)
def test_every_pair_leads_to_the_same_row(pair: str, first: float, second: float) -> None:
    readings = readings_of([{"pair": pair, "first": first, "second": second}])
    row = derive_impedance(readings, [part_of()], ACCURACY, run_id="r", simulated=True)
    assert tuple(row) == IMPEDANCE_COLUMNS
    assert row["resistance_ohm"][0] == pytest.approx(R, rel=1e-9)
    assert row["reactance_ohm"][0] == pytest.approx(X, rel=1e-12)
    assert row["cs_f"][0] == pytest.approx(1e-7, rel=1e-12)
    assert row["d"][0] == pytest.approx(0.01, rel=1e-9)
    assert row["run_id"][0] == "r"
    assert row["simulated"][0]
    # normal: u is half of the stated 0.1 % of |Z| and 1 mrad
    assert row["u_impedance_ohm"][0] == pytest.approx(np.hypot(R, X) * 5e-4, rel=1e-6)
    assert row["u_phase_rad"][0] == pytest.approx(5e-4, rel=1e-6)


def test_a_kind_has_only_its_own_views() -> None:
    kinds = list(Kind)
    readings = readings_of([{"part_id": kind.value, "first": R, "second": X} for kind in kinds])
    parts = [part_of(kind, part_id=kind.value) for kind in kinds]
    table = derive_impedance(readings, parts, ACCURACY)
    for row, kind in enumerate(kinds):
        has_c = np.isfinite(table["cs_f"][row]) and np.isfinite(table["u_cp_f"][row])
        has_l = np.isfinite(table["lp_h"][row]) and np.isfinite(table["u_ls_h"][row])
        assert (has_c, has_l) == (kind is Kind.CAPACITOR, kind is Kind.INDUCTOR)
        assert np.isfinite(table["d"][row])


@pytest.mark.parametrize("status", [status for status in Status if status is not Status.OK])
def test_a_reading_that_is_not_ok_is_kept_and_gives_no_number(status: Status) -> None:
    readings = readings_of([{"first": R, "second": X, "status": status.value}, {"second": X}])
    table = derive_impedance(readings, [part_of()], ACCURACY)
    assert table["status"][0] == status.value
    derived = [name for name in IMPEDANCE_COLUMNS if name.startswith("u_") or name in ("d", "cs_f")]
    assert all(np.isnan(table[name][0]) for name in (*derived, "resistance_ohm", "r_rx"))
    assert all(np.isfinite(table[name][1]) for name in ("d", "cs_f", "u_cs_f"))


def test_a_missing_or_silent_accuracy_leaves_the_value_without_uncertainty() -> None:
    readings = readings_of([{"first": R, "second": X, "instrument": "other"}])
    table = derive_impedance(readings, [part_of()], ACCURACY)
    assert table["cs_f"][0] == pytest.approx(1e-7)
    assert np.isnan(table["u_cs_f"][0])
    readings = readings_of([{"first": R, "second": X, "frequency_hz": 0.1}])
    assert np.isnan(derive_impedance(readings, [part_of()], ACCURACY)["u_d"][0])


def test_the_level_that_is_set_counts_as_manuals_have_it() -> None:
    """An accuracy table's level is that of the source, before it sags (common practice)."""
    from ohmward.terms.accuracy import LevelFactor

    factors = (LevelFactor(level_min_v=0.5, factor=1.0), LevelFactor(level_min_v=0.1, factor=4.0))
    accuracy = {"meter": flat_accuracy(1e-3, 1e-3, level_factors=factors)}
    rows = [
        {"first": R, "second": X, "level_set_v": level, "level_v": 0.01} for level in (1.0, 0.2)
    ]
    u = derive_impedance(readings_of(rows), [part_of()], accuracy)["u_impedance_ohm"]
    assert u[1] == pytest.approx(4 * u[0])


def test_a_compensated_position_shows_the_part_and_not_the_fixture() -> None:
    """A fixture of 0.5 ohm in series and 1 nF across, measured open and short."""
    f = np.array([1e3, 1e4])
    y = 2j * np.pi * f * 1e-9
    part = R + 1j * X * 1e3 / f
    seen = 0.5 + 1 / (y + 1 / part)
    compensation = Compensation(
        frequency_hz=f,
        open_ohm=Known.of(0.5 + 1 / y),
        short_ohm=Known.of(np.full(2, 0.5 + 0j)),
        load_ohm=Known.of(0.5 + 1 / (y + 1e-3)),
        load_standard_ohm=Known.of(np.full(2, 1000.0 + 0j)),
        contact_ohm=(0.01, 0.0),
    )
    rows = [
        {"first": z.real, "second": z.imag, "frequency_hz": at}
        for z, at in zip(seen, f, strict=True)
    ]
    readings = readings_of([*rows, rows[0] | {"position": "2"}])
    found = derive_impedance(readings, [part_of()], {}, compensations={"1": compensation})
    assert found["resistance_ohm"][:2] == pytest.approx(part.real, rel=1e-9)
    assert found["reactance_ohm"][:2] == pytest.approx(part.imag, rel=1e-9)
    assert found["reactance_ohm"][2] == pytest.approx(seen[0].imag)
    exact = {"meter": flat_accuracy(0.0, 0.0)}
    found = derive_impedance(readings, [part_of()], exact, compensations={"1": compensation})
    # the contact of the part itself, and that of the short that was taken off
    assert found["u_resistance_ohm"][:2] == pytest.approx(0.01 * np.sqrt(2), rel=0.02)
