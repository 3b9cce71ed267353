"""Readings of one point of one part, averaged: what a quantity is computed from.

Repeats share the meter's systematic error, so its uncertainty (type B) is that of one reading;
the scatter of the mean (type A, JCGM 100:2008, 4.2) falls with their number and is kept apart.
"""

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ohmward.metrology.arrays import FloatArray, correlation_of
from ohmward.results.derive import Columns, ok_readings
from ohmward.terms.condition import Point

Covariance = tuple[float, float, float]


@dataclass(frozen=True, kw_only=True, slots=True)
class Cell:
    """The mean of the good readings of one point, in ohm, with both covariances.

    ``type_b`` and ``type_a`` are (u_R, u_X, r_RX); ``type_a`` is zero for a single reading.
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
    level_v: float = float("nan")
    temperature_c: float = float("nan")

    @property
    def impedance(self) -> complex:
        """The mean as a complex number."""
        return complex(self.r, self.x)

    def covariance(self) -> Covariance:
        """Type A and type B together."""
        (ar, ax, ac), (br, bx, bc) = self.type_a, self.type_b
        u_r, u_x = float(np.hypot(ar, br)), float(np.hypot(ax, bx))
        shared = np.asarray(ac * ar * ax + bc * br * bx)
        return u_r, u_x, float(correlation_of(shared, np.asarray(u_r), np.asarray(u_x)))


def cells_of(
    readings: Columns, impedance: Mapping[str, NDArray[np.generic]]
) -> dict[tuple[str, str], list[Cell]]:
    """The cells of every part and stage, in the order of their points.

    ``readings`` are the journal's columns (``point`` is the index of the point in its stage),
    ``impedance`` the rows that `derive_impedance` made of them, in the same order.
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
        cells.setdefault((part_id, stage), []).append(cell)
    return cells


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
        self.level = self._mean(_level(readings))
        self.temperature = self._mean(np.asarray(readings["temperature_c"], dtype=np.float64))

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
            level_v=float(self.level[group]),
            temperature_c=float(self.temperature[group]),
        )


def _level(readings: Columns) -> FloatArray:
    level = np.asarray(readings["level_v"], dtype=np.float64)
    return np.where(np.isfinite(level), level, np.asarray(readings["level_set_v"], np.float64))


def _covariance(parts: tuple[FloatArray, FloatArray, FloatArray], group: int) -> Covariance:
    u_r, u_x = parts[0][group], parts[1][group]
    return float(u_r), float(u_x), float(correlation_of(parts[2][group], u_r, u_x))
