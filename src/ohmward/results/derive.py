"""From what the meter sent to the rows of impedance.csv: every view, with its uncertainty."""

from collections.abc import Iterable, Mapping

import numpy as np
from numpy.typing import NDArray

from ohmward.metrology.accuracy import add_resolution, impedance_uncertainty
from ohmward.metrology.arrays import FloatArray
from ohmward.metrology.compensation import Compensation, Known, compensate
from ohmward.metrology.immittance import VIEWS, impedance_of_pair, views
from ohmward.results.columns import IMPEDANCE_COLUMNS
from ohmward.terms.accuracy import ImpedanceAccuracy
from ohmward.terms.part import Part
from ohmward.terms.quantity import QUANTITIES
from ohmward.terms.status import Status

Columns = Mapping[str, NDArray[np.generic]]


def derive_impedance(
    readings: Columns,
    parts: Iterable[Part],
    accuracies: Mapping[str, ImpedanceAccuracy],
    *,
    run_id: str = "",
    simulated: bool = False,
    cable_m: Mapping[str, float] | None = None,
    compensations: Mapping[str, Compensation] | None = None,
) -> dict[str, NDArray[np.generic]]:
    """The columns of impedance.csv, in order, one element per reading of the journal.

    ``readings`` holds the journal's columns as arrays of one length; ``accuracies`` and
    ``cable_m`` are keyed by the bench's name of the instrument. A reading whose status is not
    ``ok`` has NaN in every derived column. A view that the part's kind does not have is NaN.
    Where the instrument states no accuracy, or none for this point, values stand and their
    uncertainties are NaN: nothing can be decided with them. ``compensations`` are by position;
    the meter's own uncertainty is carried through each in full, although a load takes some of
    it away. Raises CompensationMismatch where a frequency was not compensated.
    """
    count = len(readings["reading"])
    ok = ok_readings(readings)
    f = _floats(readings, "frequency_hz")
    r, x = np.full(count, np.nan), np.full(count, np.nan)
    u_r, u_x, rho = (np.full(count, np.nan) for _ in range(3))
    for where, pair in _each(readings["pair"], ok):
        one, two = _floats(readings, "first")[where], _floats(readings, "second")[where]
        r[where], x[where] = impedance_of_pair(pair, one, two, f[where])
    for where, instrument in _each(readings["instrument"], ok):
        if instrument in accuracies:
            cable = (cable_m or {}).get(instrument, 0.0)
            u_r[where], u_x[where], rho[where] = _type_b(
                readings, where, accuracies[instrument], cable, r[where], x[where]
            )
    for where, position in _each(readings["position"], ok):
        if compensations and position in compensations:
            shown = Known.of(r[where] + 1j * x[where], u_r[where], u_x[where], rho[where])
            part = compensate(compensations[position], f[where], shown)["part"]
            r[where], x[where] = part.value.real, part.value.imag
            u_r[where], u_x[where], rho[where] = part.u_real, part.u_imag, part.correlation
    derived: dict[str, NDArray[np.generic]] = {
        "resistance_ohm": r,
        "reactance_ohm": x,
        "u_resistance_ohm": u_r,
        "u_reactance_ohm": u_x,
        "r_rx": rho,
    }
    derived.update(_views_by_kind(readings, parts, f, (r, x, u_r, u_x, rho)))
    derived["run_id"] = np.full(count, run_id, dtype=object)
    derived["simulated"] = np.full(count, simulated)
    return {
        name: derived[name] if name in derived else readings[name] for name in IMPEDANCE_COLUMNS
    }


def ok_readings(readings: Columns) -> NDArray[np.bool_]:
    """Which readings may enter a derived quantity."""
    return np.asarray(readings["status"] == Status.OK.value, dtype=np.bool_)


def _floats(readings: Columns, name: str) -> FloatArray:
    return np.asarray(readings[name], dtype=np.float64)


def _each(
    column: NDArray[np.generic], ok: NDArray[np.bool_]
) -> Iterable[tuple[NDArray[np.intp], str]]:
    """The indices of the good readings, by what the column says there."""
    for value in sorted(set(column[ok].tolist())):
        yield np.flatnonzero(ok & (column == value)), str(value)


def _type_b(
    readings: Columns,
    where: NDArray[np.intp],
    accuracy: ImpedanceAccuracy,
    cable_m: float,
    r: FloatArray,
    x: FloatArray,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Accuracy and resolution of the readings at ``where``; NaN where the table has a hole."""
    f = _floats(readings, "frequency_hz")[where]
    stated = impedance_uncertainty(
        accuracy,
        frequency_hz=f,
        r=r,
        x=x,
        level_v=_floats(readings, "level_set_v")[where],  # as manuals count it
        integration=readings["integration"][where],
        cable_m=cable_m,
        temperature_c=_floats(readings, "temperature_c")[where],
        holes="nan",
    )
    u_r, u_x, rho = (np.array(part) for part in stated)
    pairs = readings["pair"][where]
    for pair in sorted(set(pairs.tolist())):
        here = np.flatnonzero(pairs == pair)
        sent = where[here]
        u_r[here], u_x[here], rho[here] = add_resolution(
            (u_r[here], u_x[here], rho[here]),
            pair=str(pair),
            first=_floats(readings, "first")[sent],
            second=_floats(readings, "second")[sent],
            first_resolution=_floats(readings, "first_resolution")[sent],
            second_resolution=_floats(readings, "second_resolution")[sent],
            frequency_hz=f[here],
        )
    return u_r, u_x, rho


def _views_by_kind(
    readings: Columns,
    parts: Iterable[Part],
    f: FloatArray,
    impedance: tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray],
) -> dict[str, FloatArray]:
    """All views, blank where the kind of the part lacks one: nonsense is not a number."""
    r, x, u_r, u_x, rho = impedance
    table = views(f, r, x, u_r, u_x, rho)
    kinds = {part.part_id: part.kind for part in parts}
    of_row = np.array([kinds.get(part_id) for part_id in readings["part_id"].tolist()], object)
    for view in VIEWS:
        lacking = [kind for kind in set(kinds.values()) if kind not in QUANTITIES[view].kinds]
        for kind in lacking:
            blank = of_row == kind
            table[view][blank] = np.nan
            table[f"u_{view}"][blank] = np.nan
    return table
