"""Between a compensation file and metrology: what was read becomes a file, a file is applied."""

from collections.abc import Sequence
from dataclasses import dataclass
from math import inf, pi

import numpy as np
from numpy.typing import NDArray

from ohmward.metrology.accuracy import add_independent, impedance_uncertainty
from ohmward.metrology.arrays import FloatArray, correlation_of
from ohmward.metrology.compensation import Compensation, Known, asymmetry, is_symmetric
from ohmward.metrology.errors import CompensationMismatch
from ohmward.setup.compensation_file import (
    Admittances,
    CompensatedPosition,
    CompensationFile,
    KnownStandards,
    Values,
)
from ohmward.setup.standards_file import Standards
from ohmward.terms.accuracy import ImpedanceAccuracy

# an open that the meter cannot see at all counts as none, with what the meter states for one
BEYOND_OHM = 1e14
LEAST_APART = 0.1  # a short above this share of the open's impedance is none
MOST_OFF = 0.2  # a load further from its value than this share is another one
COVERAGE_K = 2.0  # of the expanded uncertainties in a standards file


@dataclass(frozen=True, kw_only=True, slots=True)
class Meter:
    """What is needed to state the uncertainty of a reading of a standard."""

    accuracy: ImpedanceAccuracy
    level_v: float
    integration: str
    cable_m: float


def compensations_of(file: CompensationFile) -> dict[str, Compensation]:
    """The compensation of each position of a file."""
    return {place.name: _compensation(file, place) for place in file.positions}


def _compensation(file: CompensationFile, place: CompensatedPosition) -> Compensation:
    own = file.standards.open
    return Compensation(
        frequency_hz=np.array(file.frequency_hz),
        open_ohm=_known(place.open),
        short_ohm=_known(place.short),
        load_ohm=None if place.load is None else _known(place.load),
        open_s=Known.of(
            np.array(own.conductance_s) + 1j * np.array(own.susceptance_s),
            np.array(own.u_conductance_s),
            np.array(own.u_susceptance_s),
        ),
        short_standard_ohm=_known(file.standards.short),
        load_standard_ohm=None if file.standards.load is None else _known(file.standards.load),
        contact_ohm=(file.contact_resistance_ohm, file.contact_reactance_ohm),
        instrument=file.identity,
        cable_m=file.cable_m,
        positions=frozenset({place.name}),
        taken_s=file.taken.timestamp(),
    )


def _known(values: Values) -> Known:
    return Known.of(
        np.array(values.resistance_ohm) + 1j * np.array(values.reactance_ohm),
        np.array(values.u_resistance_ohm),
        np.array(values.u_reactance_ohm),
        np.array(values.correlation),
    )


def values_of(known: Known) -> Values:
    """The lists that a file holds."""
    return Values(
        resistance_ohm=_listed(known.value.real),
        reactance_ohm=_listed(known.value.imag),
        u_resistance_ohm=_listed(known.u_real),
        u_reactance_ohm=_listed(known.u_imag),
        correlation=_listed(known.correlation),
    )


def _listed(values: FloatArray) -> tuple[float, ...]:
    return tuple(float(value) for value in values)


def standards_at(standards: Standards, frequency_hz: Sequence[float]) -> KnownStandards:
    """What the standards are at these frequencies: Y = jωC, Z = R + jωL, u = U/2."""
    w = 2 * pi * np.array(frequency_hz)
    own, short, load = standards.open, standards.short, standards.load
    nothing = np.zeros_like(w)
    return KnownStandards(
        name=standards.name,
        open=Admittances(
            conductance_s=_listed(nothing),
            susceptance_s=_listed(w * own.capacitance_f),
            u_conductance_s=_listed(nothing),
            u_susceptance_s=_listed(w * own.u_capacitance_f / COVERAGE_K),
        ),
        short=values_of(
            Known.of(
                short.resistance_ohm + 1j * w * short.inductance_h,
                short.u_resistance_ohm / COVERAGE_K,
                w * short.u_inductance_h / COVERAGE_K,
            )
        ),
        load=None
        if load is None
        else values_of(
            Known.of(
                load.resistance_ohm + 1j * w * load.inductance_h,
                load.u_resistance_ohm / COVERAGE_K,
                w * load.u_inductance_h / COVERAGE_K,
            )
        ),
    )


def seen(readings: NDArray[np.complex128], frequency_hz: Sequence[float], meter: Meter) -> Known:
    """A standard as the meter showed it, from readings of shape (insertions, repeats, points).

    Infinite readings are of an open beyond the meter's reach. u holds the meter's accuracy there
    and the scatter of the mean within an insertion: that of contacts is kept apart
    (`contact_of`). Raises CompensationMismatch where the driver states no accuracy.
    """
    f = np.array(frequency_hz)
    beyond = ~np.all(np.isfinite(readings), axis=(0, 1))
    readings = np.where(beyond, BEYOND_OHM, readings)
    mean = readings.mean(axis=(0, 1))
    accuracy = impedance_uncertainty(
        meter.accuracy,
        frequency_hz=f,
        r=mean.real,
        x=mean.imag,
        level_v=meter.level_v,
        integration=meter.integration,
        cable_m=meter.cable_m,
        holes="nan",
        nearest_band=True,
    )
    if np.any(np.isnan(accuracy[0])):
        hole = f[np.isnan(accuracy[0])][0]
        raise CompensationMismatch(
            f"the meter's driver states no accuracy at {hole:g} Hz and {meter.level_v:g} V: "
            "a compensation needs it for its own uncertainty"
        )
    return Known.of(mean, *add_independent(accuracy, _scatter(readings)))


def _scatter(readings: NDArray[np.complex128]) -> tuple[FloatArray, FloatArray, FloatArray]:
    """(u_R, u_X, r_RX) of the mean, JCGM 100:2008, 4.2.3; zero for single readings."""
    insertions, repeats, points = readings.shape
    if repeats == 1:
        zero = np.zeros(points)
        return zero, zero, zero
    away = readings - readings.mean(axis=1, keepdims=True)
    shrink = 1 / (insertions * (repeats - 1) * insertions * repeats)
    u_r = np.sqrt(np.sum(away.real**2, axis=(0, 1)) * shrink)
    u_x = np.sqrt(np.sum(away.imag**2, axis=(0, 1)) * shrink)
    shared = np.sum(away.real * away.imag, axis=(0, 1)) * shrink
    return u_r, u_x, correlation_of(shared, u_r, u_x)


def contact_of(insertions: Sequence[NDArray[np.complex128]]) -> tuple[float, float]:
    """u(R), u(X) in ohm of one contact, from the short put in several times at each position.

    ``insertions`` holds, for each position, means of shape (insertions, points). Pooled over
    positions (n − 1 degrees of freedom each); of the frequencies the one with the largest
    scatter counts, because an inductance that moves shows at the highest. (0, 0) for single ones.
    """
    squares_r: FloatArray | float = 0.0
    squares_x: FloatArray | float = 0.0
    degrees = 0
    for means in insertions:
        away = means - means.mean(axis=0)
        squares_r = squares_r + np.sum(away.real**2, axis=0)
        squares_x = squares_x + np.sum(away.imag**2, axis=0)
        degrees += means.shape[0] - 1
    if degrees == 0:
        return 0.0, 0.0
    return (
        float(np.sqrt(np.max(squares_r) / degrees)),
        float(np.sqrt(np.max(squares_x) / degrees)),
    )


def symmetric(file: CompensationFile, name: str) -> tuple[bool, ...]:
    """By frequency, whether the fixture is symmetric at a position as far as its load can tell."""
    found = is_symmetric(compensations_of(file)[name])
    return tuple(bool(one) for one in found)


def refuse_implausible(file: CompensationFile) -> None:
    """Raise CompensationMismatch where a standard cannot have been in its position.

    A short that is not far below the open is none; a load that comes out by open and short more
    than a fifth off its value is another one, or none.
    """
    for name, compensation in compensations_of(file).items():
        f = compensation.frequency_hz
        away = np.abs(compensation.open_ohm.value)
        missing = np.abs(compensation.short_ohm.value) > LEAST_APART * away
        if np.any(missing):
            raise CompensationMismatch(
                f"position {name}: at {f[missing][0]:g} Hz the short showed "
                f"{abs(compensation.short_ohm.value[missing][0]):.3g} ohm, hardly less than the "
                "open: was it in? Nothing was kept"
            )
        if not compensation.has_load:
            continue
        off = np.abs(asymmetry(compensation))
        strange = ~(off <= MOST_OFF)
        if np.any(strange):
            raise CompensationMismatch(
                f"position {name}: at {f[strange][0]:g} Hz the load came out "
                f"{100 * off[strange][0]:.0f} % away from its value: is it the one in the "
                "standards file, and was it in? Nothing was kept"
            )


def age_s(file: CompensationFile, now_s: float) -> float:
    """How old a compensation is; infinite where it lies in the future, for then nobody knows."""
    age = now_s - file.taken.timestamp()
    return age if age >= 0 else inf
