"""Rows of leakage.csv: what flows through a part under voltage, and how well that is known.

I = reading − divider − background. Its uncertainty is made of the current meter's gain and
offset on its range, what is not known of divider and fixture, the charging current that is left,
the supply's drift times C, and the moment of reading.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from math import exp, hypot, inf, isnan, nan, sqrt
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ohmward.metrology.budget import Budget, LeakageInput, leakage_budget
from ohmward.metrology.leakage import EXPONENT
from ohmward.terms.accuracy import RangeAccuracy, ScalarAccuracy
from ohmward.terms.status import Status

Columns = Mapping[str, NDArray[Any]]

_KEPT = (
    *("reading", "part_id", "position", "stage", "time_utc", "elapsed_s", "since_voltage_s"),
    *("voltage_set_v", "voltage_v", "background_a", "status", "temperature_c", "humidity_pct"),
    "instrument",
)
MOMENT_S = 0.25  # half-width of the instant at which the part had its voltage, and of the reading
WITHIN = 0.01  # the part's voltage counts as reached from there on


@dataclass(frozen=True, kw_only=True, slots=True)
class Path:
    """What a bench states of its high-voltage path; 0 or infinite where it states nothing.

    ``divider_rel`` is a half-width, ``insulation_ohm`` that of the fixture, ``drift_v_per_s``
    the supply's, ``series_ohm`` the resistor of each position.
    """

    divider_rel: float = 0.0
    insulation_ohm: float = inf
    drift_v_per_s: float = 0.0
    series_ohm: Mapping[str, float]


@dataclass(frozen=True, kw_only=True, slots=True)
class Reading:
    """One row of the journal's leakage table, as far as the current depends on it."""

    current_a: float
    divider_a: float
    background_a: float
    range_a: float
    voltage_v: float
    since_voltage_s: float
    position: str
    capacitance_f: float


def net_budget(seen: Reading, accuracy: ScalarAccuracy, path: Path) -> Budget:
    """The part's own current with its uncertainty, in ampere."""
    on = range_of(accuracy, seen.range_a)
    divider_a = seen.divider_a * path.divider_rel
    fixture_a = abs(seen.voltage_v) / path.insulation_ohm if isnan(seen.background_a) else 0.0
    charging_a = _charging_a(seen, path.series_ohm.get(seen.position, 0.0))
    background_a = 0.0 if isnan(seen.background_a) else seen.background_a
    return leakage_budget(
        LeakageInput(
            current_a=seen.current_a,
            background_a=seen.divider_a + background_a,
            reading_rel=on.reading_rel,
            offset_a=on.offset,
            distribution=accuracy.distribution,
            u_background_a=hypot(divider_a, fixture_a, charging_a) / sqrt(3.0),
            capacitance_f=seen.capacitance_f,
            u_rate_v_per_s=path.drift_v_per_s / sqrt(3.0),
            charging_a=0.0,
            charging_over_tau=0.0,
            series_rel=0.0,
            exponent=EXPONENT[0],
            since_voltage_s=max(seen.since_voltage_s, MOMENT_S),
            time_s=MOMENT_S,
            u_reading_a=0.0,
        )
    )


def range_of(accuracy: ScalarAccuracy, range_a: float) -> RangeAccuracy:
    """The stated accuracy of the range that a reading was taken on; the next higher one."""
    fits = (one for one in accuracy.ranges if one.full_scale >= 0.999 * range_a)
    return next(fits, accuracy.ranges[-1])


def _charging_a(seen: Reading, series_ohm: float) -> float:
    """0.01·(V/R)·e^(−t/RC): what may still charge the part since it was within 1 % (A)."""
    if series_ohm <= 0.0 or seen.capacitance_f <= 0.0:
        return 0.0
    left = exp(-seen.since_voltage_s / (series_ohm * seen.capacitance_f))
    return WITHIN * abs(seen.voltage_v) / series_ohm * left


def derive_leakage(
    readings: Columns,
    *,
    accuracies: Mapping[str, ScalarAccuracy],
    path: Path,
    capacitance_f: Mapping[str, float],
    run_id: str = "",
    simulated: bool = False,
) -> dict[str, NDArray[Any]]:
    """The columns of leakage.csv from the journal's, in its order.

    ``readings`` are LEAKAGE_COLUMNS of the journal with part_id, position and the stage's name
    instead of its number; ``capacitance_f`` gives each part's, as far as it is known.
    """
    count = len(readings["reading"])
    good = np.array([status == Status.OK for status in readings["status"]], dtype=np.bool_)
    good &= np.isfinite(readings["current_a"])
    current, spread = np.full(count, nan), np.full(count, nan)
    for row in np.flatnonzero(good):
        accuracy = accuracies.get(str(readings["instrument"][row]))
        seen = reading_at(readings, int(row), capacitance_f)
        if accuracy is None:
            taken = seen.divider_a + (0.0 if isnan(seen.background_a) else seen.background_a)
            current[row] = seen.current_a - taken
            continue
        budget = net_budget(seen, accuracy, path)
        current[row], spread[row] = budget.value, budget.u
    with np.errstate(divide="ignore", invalid="ignore"):
        insulation = np.where(current > 0, readings["voltage_v"] / current, nan)
    return {
        **{name: readings[name] for name in _KEPT},
        "run_id": np.full(count, run_id, dtype=object),
        "current_a": current,
        "u_current_a": spread,
        "insulation_ohm": insulation,
        "range": np.array([_range(range_a) for range_a in readings["range_a"]], dtype=object),
        "simulated": np.full(count, simulated),
    }


def reading_at(readings: Columns, row: int, capacitance_f: Mapping[str, float]) -> Reading:
    """One row of the journal's columns."""

    def number(name: str) -> float:
        return float(readings[name][row])

    return Reading(
        current_a=number("current_a"),
        divider_a=number("divider_a"),
        background_a=number("background_a"),
        range_a=number("range_a"),
        voltage_v=number("voltage_v"),
        since_voltage_s=number("since_voltage_s"),
        position=str(readings["position"][row]),
        capacitance_f=capacitance_f.get(str(readings["part_id"][row]), 0.0),
    )


def _range(range_a: float) -> str:
    return "" if isnan(range_a) else f"{range_a:g}"
