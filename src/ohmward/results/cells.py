"""Readings of one point of one part, averaged: what a quantity is computed from.

Repeats share the meter's systematic error, so its uncertainty (type B) is that of one reading;
the scatter of the mean (type A, JCGM 100:2008, 4.2) falls with their number and is kept apart.
"""

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from ohmward.metrology.accuracy import half_widths
from ohmward.metrology.arrays import FloatArray, correlation_of
from ohmward.metrology.uncertain import Covariance, Stated, UncertainImpedance
from ohmward.results.derive import Columns, ok_readings
from ohmward.terms.accuracy import ImpedanceAccuracy
from ohmward.terms.condition import Point


@dataclass(frozen=True, kw_only=True, slots=True)
class Cell:
    """The mean of the good readings of one point, in ohm, with both covariances.

    ``type_b`` and ``type_a`` are (u_R, u_X, r_RX); ``type_a`` is zero for a single reading.
    ``time_s`` is the mean instant in seconds since 1970, UTC.
    ``good`` of ``taken`` readings entered; ``left_out`` counts the others by status.
    """

    part_id: str
    stage: str
    index: int
    point: Point
    r: float
    x: float
    type_b: Covariance
    type_a: Covariance
    good: int
    taken: int
    left_out: tuple[tuple[str, int], ...] = ()
    range: str = ""
    integration: str = ""
    instrument: str = ""
    temperature_c: float = float("nan")
    time_s: float = float("nan")
    stated: Stated | None = None

    @property
    def impedance(self) -> complex:
        """The mean as a complex number."""
        return complex(self.r, self.x)

    def uncertain(self) -> UncertainImpedance:
        """The mean with its causes of error.

        What type B holds beyond the stated accuracy (resolution, compensation) counts as
        normal, and so does all of it where the accuracy is not known here.
        """
        plain = UncertainImpedance(
            frequency_hz=self.point.frequency_hz, r=self.r, x=self.x, stated=self.stated
        )
        return UncertainImpedance(
            frequency_hz=self.point.frequency_hz,
            r=self.r,
            x=self.x,
            stated=self.stated,
            normal={"resolution and compensation": without(self.type_b, plain.stated_covariance())},
            repeat=self.type_a,
            degrees=self.good - 1 if self.good > 1 else float("inf"),
        )

    def covariance(self) -> Covariance:
        """Type A and type B together."""
        (ar, ax, ac), (br, bx, bc) = self.type_a, self.type_b
        u_r, u_x = float(np.hypot(ar, br)), float(np.hypot(ax, bx))
        shared = np.asarray(ac * ar * ax + bc * br * bx)
        return u_r, u_x, float(correlation_of(shared, np.asarray(u_r), np.asarray(u_x)))


def without(whole: Covariance, part: Covariance) -> Covariance:
    """What is left of a covariance when an independent part is taken off; never below zero.

    Below a millionth of the whole it is rounding, and nothing is left.
    """
    left = []
    for one, other in zip(whole[:2], part[:2], strict=True):
        variance = one * one - other * other
        left.append(variance**0.5 if variance > 1e-6 * one * one else 0.0)
    u_r, u_x = left
    if u_r * u_x == 0:
        return u_r, u_x, 0.0
    shared = whole[2] * whole[0] * whole[1] - part[2] * part[0] * part[1]
    return u_r, u_x, max(-1.0, min(1.0, shared / (u_r * u_x)))


def cells_of(
    readings: Columns,
    impedance: Mapping[str, NDArray[np.generic]],
    accuracies: Mapping[str, ImpedanceAccuracy] | None = None,
    cable_m: Mapping[str, float] | None = None,
) -> dict[tuple[str, str], list[Cell]]:
    """The cells of every part and stage, in the order of their points.

    ``readings`` are the journal's columns (``point`` is the index of the point in its stage),
    ``impedance`` the rows that `derive_impedance` made of them, in the same order.
    ``accuracies`` and ``cable_m``, as there, say what part of type B is rectangular.
    """
    count = len(readings["reading"])
    if count == 0:
        return {}
    codes, keys = _group_codes(readings)
    order = np.argsort(codes, kind="stable")
    starts = np.flatnonzero(np.diff(codes[order], prepend=-1))
    means = _Means(readings, impedance, codes, len(keys))
    cells: dict[tuple[str, str], list[Cell]] = {}
    for group, (part_id, stage, index) in enumerate(keys):
        end = starts[group + 1] if group + 1 < len(starts) else count
        rows = order[starts[group] : end]
        cell = means.cell(group, rows, part_id, stage, index)
        if accuracies and cell.good and cell.instrument in accuracies:
            cable = (cable_m or {}).get(cell.instrument, 0.0)
            cell = replace(cell, stated=_stated(cell, accuracies[cell.instrument], cable))
        cells.setdefault((part_id, stage), []).append(cell)
    return cells


def _stated(cell: Cell, accuracy: ImpedanceAccuracy, cable_m: float) -> Stated | None:
    """The stated half-widths at a cell; None where there are none."""
    magnitude, phase = half_widths(
        accuracy,
        frequency_hz=cell.point.frequency_hz,
        magnitude_ohm=max(abs(cell.impedance), 1e-15),
        level_v=cell.point.level_v,  # the one that is set, as manuals count it
        integration=cell.integration,
        cable_m=cable_m,
        temperature_c=cell.temperature_c,
        holes="nan",
    )
    if np.isnan(magnitude) or np.isnan(phase):
        return None
    return Stated(
        magnitude_rel=float(magnitude),
        phase_rad=float(phase),
        frequency_rel=accuracy.frequency_rel,
        distribution=accuracy.distribution,
    )


def _group_codes(readings: Columns) -> tuple[NDArray[np.intp], list[tuple[str, str, int]]]:
    """A number for every (part, stage, point), in the order of part, stage and point."""
    parts, part_codes = _codes(readings["part_id"])
    stages, stage_codes = _codes(readings["stage"])
    index = np.asarray(readings["point"], dtype=np.intp)
    width = int(index.max()) + 1
    combined = (part_codes * len(stages) + stage_codes) * width + index
    found, codes = np.unique(combined, return_inverse=True)
    keys = [
        (
            parts[number // width // len(stages)],
            stages[number // width % len(stages)],
            number % width,
        )
        for number in found.tolist()
    ]
    return codes, keys


def _codes(column: NDArray[np.generic]) -> tuple[list[str], NDArray[np.intp]]:
    values = column.tolist()
    names = list(dict.fromkeys(values))
    number = {name: code for code, name in enumerate(names)}
    return names, np.fromiter((number[value] for value in values), np.intp, len(values))


class _Means:
    """Means and scatters of all groups at once; one cell is then a matter of picking."""

    def __init__(
        self,
        readings: Columns,
        impedance: Mapping[str, NDArray[np.generic]],
        codes: NDArray[np.intp],
        groups: int,
    ) -> None:
        self.readings = readings
        self.r = np.asarray(impedance["resistance_ohm"], dtype=np.float64)
        self.x = np.asarray(impedance["reactance_ohm"], dtype=np.float64)
        self.ok = ok_readings(readings) & np.isfinite(self.r) & np.isfinite(self.x)
        u_r = np.asarray(impedance["u_resistance_ohm"], dtype=np.float64)
        u_x = np.asarray(impedance["u_reactance_ohm"], dtype=np.float64)
        rho = np.asarray(impedance["r_rx"], dtype=np.float64)
        self.codes, self.groups = codes, groups
        self.good = np.bincount(codes, weights=self.ok, minlength=groups)
        self.mean_r, self.mean_x = self._mean(self.r), self._mean(self.x)
        self.b = (
            np.sqrt(self._mean(u_r**2)),
            np.sqrt(self._mean(u_x**2)),
            self._mean(rho * u_r * u_x),
        )
        dr, dx = self.r - self.mean_r[codes], self.x - self.mean_x[codes]
        # s²/n with s² = Σd²/(n − 1), JCGM 100:2008 eq. (5); undefined for one reading: zero
        with np.errstate(divide="ignore", invalid="ignore"):
            shrink = np.where(self.good > 1, 1 / (self.good - 1), 0.0)
        self.a = (
            np.sqrt(self._mean(dr * dr) * shrink),
            np.sqrt(self._mean(dx * dx) * shrink),
            self._mean(dr * dx) * shrink,
        )
        self.temperature = self._mean(np.asarray(readings["temperature_c"], dtype=np.float64))
        self.time = self._mean(_seconds(readings["time_utc"]))

    def _mean(self, values: FloatArray) -> FloatArray:
        weights = np.where(self.ok, values, 0.0)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.bincount(self.codes, weights=weights, minlength=self.groups) / self.good

    def cell(
        self, group: int, rows: NDArray[np.intp], part_id: str, stage: str, index: int
    ) -> Cell:
        """One cell; ``rows`` are its readings."""
        first = int(rows[0])
        bad = rows[~self.ok[rows]]
        left_out = Counter(str(status) for status in self.readings["status"][bad].tolist())
        return Cell(
            part_id=part_id,
            stage=stage,
            index=index,
            point=Point(
                frequency_hz=float(self.readings["frequency_hz"][first]),
                level_v=float(self.readings["level_set_v"][first]),
                bias_v=float(self.readings["bias_set_v"][first]),
                bias_a=float(self.readings["bias_set_a"][first]),
            ),
            r=float(self.mean_r[group]),
            x=float(self.mean_x[group]),
            type_b=_covariance(self.b, group),
            type_a=_covariance(self.a, group),
            good=int(self.good[group]),
            taken=len(rows),
            left_out=tuple(sorted(left_out.items())),
            range=str(self.readings["range"][first]),
            integration=str(self.readings["integration"][first]),
            instrument=str(self.readings["instrument"][first]),
            temperature_c=float(self.temperature[group]),
            time_s=float(self.time[group]),
        )


def _seconds(instants: NDArray[np.generic]) -> FloatArray:
    """Instants as seconds since 1970."""
    whole: FloatArray = instants.astype("datetime64[us]").astype(np.int64) / 1e6
    return whole


def _covariance(parts: tuple[FloatArray, FloatArray, FloatArray], group: int) -> Covariance:
    u_r, u_x = parts[0][group], parts[1][group]
    return float(u_r), float(u_x), float(correlation_of(parts[2][group], u_r, u_x))
