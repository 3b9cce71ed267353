"""Type B uncertainty of an impedance reading, from what the instrument's manual states."""

from math import sqrt

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ohmward.metrology.arrays import FloatArray, correlation_of, together
from ohmward.metrology.errors import AccuracyHole
from ohmward.metrology.immittance import covariance_of_pair
from ohmward.terms.accuracy import ImpedanceAccuracy

# JCGM 100:2008, 4.3.7 (rectangular half-width) and 4.3.3 (an expanded value with k = 2)
DIVISORS = {"rectangular": sqrt(3), "normal": 2.0}


def half_widths(
    accuracy: ImpedanceAccuracy,
    *,
    frequency_hz: ArrayLike,
    magnitude_ohm: ArrayLike,
    level_v: ArrayLike,
    integration: ArrayLike,
    cable_m: float = 0.0,
    temperature_c: ArrayLike = np.nan,
    holes: str = "raise",
    nearest_band: bool = False,
) -> tuple[FloatArray, FloatArray]:
    """δ|Z|/|Z| (a fraction) and δθ (rad) as half-widths, by the formula of ImpedanceAccuracy.

    The first band that contains (f, |Z|) counts, borders included; a level above none of the
    level factors, an integration setting that a table of them does not name, and a point in
    no band are holes: AccuracyHole is raised, or with ``holes="nan"`` the point is NaN. An
    unknown temperature (NaN) is taken to be inside the stated range, because the fixture's room
    is the one that the bench was calibrated in unless a thermometer says otherwise.
    """
    f, z, level, temperature = together(frequency_hz, magnitude_ohm, level_v, temperature_c)
    in_band = np.clip(z, *_span(accuracy)) if nearest_band and accuracy.bands else z
    basic_magnitude, basic_phase = _bands(accuracy, f, in_band)
    factor = (
        _level_factor(accuracy, level)
        * _integration_factor(accuracy, np.broadcast_to(np.asarray(integration), f.shape))
        * (1 + accuracy.cable_factor_per_m * cable_m)
        * _temperature_factor(accuracy, temperature)
    )
    with np.errstate(divide="ignore", invalid="ignore"):
        residuals = accuracy.short_ohm / z if accuracy.short_ohm else np.zeros_like(z)
        residuals = residuals + accuracy.open_s * z
        magnitude = (basic_magnitude + residuals) * factor
        phase = (basic_phase + residuals) * factor
    if holes == "raise":
        _refuse_holes(magnitude, f, z, level)
    return magnitude, phase


def _refuse_holes(found: FloatArray, f: FloatArray, z: FloatArray, level: FloatArray) -> None:
    hole = np.isnan(found) & np.isfinite(f) & np.isfinite(z) & np.isfinite(level)
    if np.any(hole):
        where = tuple(np.argwhere(hole)[0])
        raise AccuracyHole(
            f"the accuracy table says nothing at {f[where]:g} Hz, {z[where]:g} ohm, "
            f"{level[where]:g} V with this integration setting"
        )


def _span(accuracy: ImpedanceAccuracy) -> tuple[float, float]:
    """The least and the greatest |Z| that any band covers."""
    return (
        min(band.impedance_min_ohm for band in accuracy.bands),
        max(band.impedance_max_ohm for band in accuracy.bands),
    )


def _bands(
    accuracy: ImpedanceAccuracy, f: FloatArray, z: FloatArray
) -> tuple[FloatArray, FloatArray]:
    magnitude, phase = np.full(f.shape, np.nan), np.full(f.shape, np.nan)
    for band in reversed(accuracy.bands):  # so that the first one listed has the last word
        inside = (
            (f >= band.frequency_min_hz)
            & (f <= band.frequency_max_hz)
            & (z >= band.impedance_min_ohm)
            & (z <= band.impedance_max_ohm)
        )
        magnitude[inside] = band.magnitude_rel
        phase[inside] = band.phase_rad
    return magnitude, phase


def _level_factor(accuracy: ImpedanceAccuracy, level: FloatArray) -> FloatArray:
    if not accuracy.level_factors:
        return np.ones_like(level)
    factor = np.full(level.shape, np.nan)
    # a level regulated to 0.9998 V is meant to be the 1 V that the table begins at
    for step in sorted(accuracy.level_factors, key=lambda step: step.level_min_v):
        factor[level >= step.level_min_v * 0.98] = step.factor
    return factor


def _integration_factor(
    accuracy: ImpedanceAccuracy, integration: NDArray[np.generic]
) -> FloatArray:
    if not accuracy.integration_factors:
        return np.ones(integration.shape)
    factor = np.full(integration.shape, np.nan)
    for name, value in accuracy.integration_factors:
        factor[integration == name] = value
    return factor


def _temperature_factor(accuracy: ImpedanceAccuracy, temperature: FloatArray) -> FloatArray:
    outside = np.maximum(
        np.maximum(
            accuracy.temperature_min_c - temperature, temperature - accuracy.temperature_max_c
        ),
        0.0,
    )
    return 1 + accuracy.temperature_factor_per_k * np.nan_to_num(outside, nan=0.0)


def divisor(distribution: str) -> float:
    """From a stated half-width to a standard uncertainty: √3 for rectangular, 2 for normal."""
    try:
        return DIVISORS[distribution]
    except KeyError:
        known = ", ".join(DIVISORS)
        raise AccuracyHole(
            f"accuracy is stated as one of {known}, not as {distribution!r}"
        ) from None


def impedance_uncertainty(
    accuracy: ImpedanceAccuracy,
    *,
    frequency_hz: ArrayLike,
    r: ArrayLike,
    x: ArrayLike,
    level_v: ArrayLike,
    integration: ArrayLike,
    cable_m: float = 0.0,
    temperature_c: ArrayLike = np.nan,
    holes: str = "raise",
    nearest_band: bool = False,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """u(R), u(X) in ohm and r(R,X) of single readings, from the stated accuracy.

    |Z| and θ are independent; with c = cos θ, s = sin θ, u_m = u(|Z|) and u_t = |Z|·u(θ):
    u²(R) = (c·u_m)² + (s·u_t)², u²(X) = (s·u_m)² + (c·u_t)², cov = c·s·(u_m² − u_t²).
    The frequency's own half-width moves a reactance in proportion: u²(X) += (X·u_f/f)², and so
    reaches every C and L that is computed from it. Errors as `half_widths`.
    """
    f, r_, x_ = together(frequency_hz, r, x)
    # at exactly 0 ohm the residuals are all there is, and they are finite in ohm
    z = np.maximum(np.hypot(r_, x_), 1e-15)
    magnitude, phase = half_widths(
        accuracy,
        frequency_hz=f,
        magnitude_ohm=z,
        level_v=level_v,
        integration=integration,
        cable_m=cable_m,
        temperature_c=temperature_c,
        holes=holes,
        nearest_band=nearest_band,
    )
    scale = 1 / divisor(accuracy.distribution)
    with np.errstate(invalid="ignore"):
        angle = np.arctan2(x_, r_)
        c, s = np.cos(angle), np.sin(angle)
        u_m, u_t = z * magnitude * scale, z * phase * scale
        u_f = np.abs(x_) * accuracy.frequency_rel / sqrt(3)
        u_r = np.hypot(c * u_m, s * u_t)
        u_x = np.sqrt((s * u_m) ** 2 + (c * u_t) ** 2 + u_f**2)
        covariance = c * s * (u_m**2 - u_t**2)
    return u_r, u_x, correlation_of(covariance, u_r, u_x)


def add_resolution(
    uncertainty: tuple[FloatArray, FloatArray, FloatArray],
    *,
    pair: str,
    first: ArrayLike,
    second: ArrayLike,
    first_resolution: ArrayLike,
    second_resolution: ArrayLike,
    frequency_hz: ArrayLike,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """The uncertainty (u_R, u_X, r_RX) with the resolution of the pair that was sent added.

    Each number sent carries δ/√12 for its last digit δ (JCGM 100:2008, F.2.2.1), independent
    of each other and of the accuracy, carried to R and X by the pair's Jacobian.
    """
    one, two = together(first_resolution, second_resolution)
    fine = covariance_of_pair(pair, first, second, frequency_hz, one / sqrt(12), two / sqrt(12))
    return add_independent(uncertainty, fine)


def add_independent(
    *parts: tuple[FloatArray, FloatArray, FloatArray],
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """The sum of independent covariances, each given as (u_R, u_X, r_RX)."""
    variance_r = sum(u_r * u_r for u_r, _, _ in parts)
    variance_x = sum(u_x * u_x for _, u_x, _ in parts)
    covariance = sum(rho * u_r * u_x for u_r, u_x, rho in parts)
    u_r, u_x, together_ = (np.asarray(part) for part in (variance_r, variance_x, covariance))
    u_r, u_x = np.sqrt(u_r), np.sqrt(u_x)
    return u_r, u_x, correlation_of(together_, u_r, u_x)
