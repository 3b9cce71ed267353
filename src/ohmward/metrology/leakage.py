"""Leakage current over time: absorption, what remains, and what only looks like leakage.

    I(t) = A·t^−n + I_leak + C·dV/dt + (V/R)·e^(−t/RC)

A·t^−n is dielectric absorption (Curie–von Schweidler, n from 0.8 to 1.1), C·dV/dt what a
drifting supply feeds, the last term the charging current through the series resistance. t is in
seconds since the voltage was reached, currents in ampere.
"""

from dataclasses import dataclass
from math import erfc, inf, isfinite, sqrt

import numpy as np
from numpy.typing import ArrayLike

from ohmward.metrology.arrays import FloatArray, together
from ohmward.metrology.errors import BadCovariance, MetrologyError, TooFewPoints
from ohmward.metrology.fit import Fit, least_squares

# the published range of n is 0.8 to 1.1: where the readings do not tell n, this does
EXPONENT = (0.95, 0.15)
_EXPONENTS = (0.6, 0.8, 0.95, 1.1, 1.3)


class BadTime(MetrologyError):
    """A time is not after the moment at which the voltage was reached."""


def absorption_current(t_s: ArrayLike, amplitude_a: ArrayLike, exponent: ArrayLike) -> FloatArray:
    """A·t^−n in ampere; A is the current at 1 s."""
    t, amplitude, n = together(t_s, amplitude_a, exponent)
    current: FloatArray = amplitude * t**-n
    return current


def charging_current(
    t_s: ArrayLike, voltage_v: float, resistance_ohm: float, capacitance_f: float
) -> FloatArray:
    """(V/R)·e^(−t/RC) in ampere: what still flows into a capacitor through its resistor."""
    t = np.asarray(t_s, dtype=np.float64)
    decay: FloatArray = np.exp(-t / (resistance_ohm * capacitance_f))
    current: FloatArray = voltage_v / resistance_ohm * decay
    return current


def drift_current(capacitance_f: ArrayLike, rate_v_per_s: ArrayLike) -> FloatArray:
    """C·dV/dt in ampere: false leakage from a supply that moves."""
    capacitance, rate = together(capacitance_f, rate_v_per_s)
    return np.asarray(capacitance * rate)


@dataclass(frozen=True, kw_only=True, slots=True)
class LeakageFit:
    """A fit of I(t): the parameters with their covariance, in this order.

    ``amplitude_a`` (A, at 1 s), ``exponent`` (n), ``leak_a`` (I_leak), ``charge_a`` (the
    charging current at t = 0; fixed at 0 where it was not in the fit, with no covariance).
    """

    amplitude_a: float
    exponent: float
    leak_a: float
    charge_a: float
    charge_tau_s: float
    covariance: FloatArray
    sum_of_squares: float
    degrees: int
    first_s: float
    last_s: float

    def u(self) -> FloatArray:
        """Standard uncertainties of the four parameters."""
        return np.sqrt(np.diag(self.covariance))

    def gradient(self, t_s: FloatArray) -> FloatArray:
        """∂I(t)/∂(A, n, I_leak, charge), shape (len(t), 4)."""
        power = t_s**-self.exponent
        charge = np.exp(-t_s / self.charge_tau_s) if isfinite(self.charge_tau_s) else t_s * 0
        return np.stack(
            [power, -self.amplitude_a * np.log(t_s) * power, np.ones_like(t_s), charge], axis=-1
        )

    def current_at(self, t_s: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """I(t) without supply drift, and its standard uncertainty from the fit, in ampere."""
        t = np.asarray(t_s, dtype=np.float64)
        slope = self.gradient(t)
        value = self.amplitude_a * slope[..., 0] + self.leak_a + self.charge_a * slope[..., 3]
        variance = np.einsum("...i,ij,...j->...", slope, self.covariance, slope)
        return value, np.sqrt(np.maximum(variance, 0.0))

    def polarization_index(
        self, early_s: float = 60.0, late_s: float = 600.0
    ) -> tuple[float, float]:
        """R(late)/R(early) = I(early)/I(late) with its uncertainty, both ends correlated."""
        times = np.array([early_s, late_s])
        (i1, i2), slope = self.current_at(times)[0], self.gradient(times)
        ratio = i1 / i2
        by = slope[0] / i2 - ratio / i2 * slope[1]
        return float(ratio), float(np.sqrt(max(by @ self.covariance @ by, 0.0)))


def fit_leakage(
    t_s: ArrayLike,
    current_a: ArrayLike,
    u_current_a: ArrayLike,
    *,
    drift_a: ArrayLike = 0.0,
    charge_tau_s: float | None = None,
) -> LeakageFit:
    """Fit A, n and I_leak to readings; with ``charge_tau_s`` (R·C) also the charging current.

    ``u_current_a`` is the random part of each reading (what is common to all, such as the
    meter's gain, is no matter of a fit and is added to its result); ``drift_a`` is C·dV/dt at
    each reading and is taken off. NaN readings are left out. Where the readings scatter more
    than ``u_current_a`` says, the covariance is widened by it. Raises TooFewPoints, BadTime,
    BadCovariance, NotConverged.
    """
    t, current, u, drift = together(t_s, current_a, u_current_a, drift_a)
    keep = np.isfinite(t) & np.isfinite(current) & np.isfinite(u) & np.isfinite(drift)
    t, y, u = t[keep], current[keep] - drift[keep], u[keep]
    parameters = 3 if charge_tau_s is None else 4
    if t.size <= parameters:
        raise TooFewPoints(f"{parameters} parameters need more than {t.size} readings")
    if np.any(t <= 0):
        raise BadTime("every reading must come after the voltage was reached")
    if np.any(u <= 0):
        raise BadCovariance("every reading needs an uncertainty above zero")
    centre = float(np.exp(np.log(t).mean()))
    model = _Model(t, y, u, centre, inf if charge_tau_s is None else charge_tau_s)
    return _named(model, least_squares(model.residuals, model.jacobian, model.start()), t)


class _Model:
    """I(t) in ampere over its readings' scale, with A taken at the middle of log t.

    There A and n are all but independent, which is what makes the fit short.
    """

    def __init__(
        self, t: FloatArray, y: FloatArray, u: FloatArray, centre: float, tau: float
    ) -> None:
        self.scale = float(np.max(np.abs(y))) or 1.0
        self.weight = self.scale / u
        self.log_t = np.log(t / centre)
        self.target = y / u
        self.centre, self.tau = centre, tau
        columns = [self.weight] if tau == inf else [self.weight, self.weight * np.exp(-t / tau)]
        self.fixed = np.stack(columns, axis=-1)
        self._at = np.nan
        self._power = self.weight
        self.size = t.size

    def power(self, exponent: float) -> FloatArray:
        # residuals and Jacobian are asked for at the same point, one after the other
        if exponent != self._at:
            self._at, self._power = exponent, self.weight * np.exp(-exponent * self.log_t)
        return self._power

    def start(self) -> FloatArray:
        """The best of a few exponents: for a given n the rest is linear."""
        best, found = inf, None
        for exponent in _EXPONENTS:
            basis = np.column_stack([self.power(exponent), self.fixed])
            normal = basis.T @ basis
            try:
                linear = np.linalg.solve(normal, basis.T @ self.target)
            except np.linalg.LinAlgError:
                continue
            rest = self.target - basis @ linear
            misfit = float(rest @ rest) + ((exponent - EXPONENT[0]) / EXPONENT[1]) ** 2
            if misfit < best:
                best, found = misfit, np.concatenate([linear[:1], [exponent], linear[1:]])
        if found is None:
            found = np.array([1.0, EXPONENT[0], 0.0, 0.0][: 2 + self.fixed.shape[1]])
        return found

    def residuals(self, b: FloatArray) -> FloatArray:
        out = np.empty(self.size + 1)
        out[:-1] = b[0] * self.power(b[1]) + self.fixed @ b[2:] - self.target
        out[-1] = (b[1] - EXPONENT[0]) / EXPONENT[1]
        return out

    def jacobian(self, b: FloatArray) -> FloatArray:
        out = np.zeros((self.size + 1, b.size))
        power = self.power(b[1])
        out[:-1, 0] = power
        out[:-1, 1] = -b[0] * self.log_t * power
        out[:-1, 2:] = self.fixed
        out[-1, 1] = 1 / EXPONENT[1]
        return out


def _named(model: _Model, fit: Fit, t: FloatArray) -> LeakageFit:
    """The fit in ampere, with A carried from the middle of log t to 1 s."""
    a, n = float(fit.values[0]) * model.scale, float(fit.values[1])
    move = model.centre**n
    count = fit.values.size
    turn = np.zeros((4, count))
    turn[0, 0], turn[0, 1] = move * model.scale, a * move * np.log(model.centre)
    turn[1, 1] = 1.0
    turn[2, 2] = model.scale
    if count == 4:
        turn[3, 3] = model.scale
    degrees = t.size - count
    widen = max(1.0, fit.sum_of_squares / degrees)
    return LeakageFit(
        amplitude_a=a * move,
        exponent=n,
        leak_a=float(fit.values[2]) * model.scale,
        charge_a=float(fit.values[3]) * model.scale if count == 4 else 0.0,
        charge_tau_s=model.tau,
        covariance=widen * turn @ fit.covariance @ turn.T,
        sum_of_squares=fit.sum_of_squares,
        degrees=degrees,
        first_s=float(t.min()),
        last_s=float(t.max()),
    )


@dataclass(frozen=True, kw_only=True, slots=True)
class Trend:
    """The slope of the last readings: ``rising`` when it is above 3 times its uncertainty."""

    slope_a_per_s: float
    u_slope_a_per_s: float
    rising: bool


def trend(
    t_s: ArrayLike, current_a: ArrayLike, u_current_a: ArrayLike, *, readings: int = 10
) -> Trend:
    """A straight line through the last ``readings`` readings, weighted.

    A sound part's current falls; one that rises is on its way to a breakdown. Raises
    TooFewPoints below 4 readings.
    """
    t, y, u = (array[-readings:] for array in together(t_s, current_a, u_current_a))
    keep = np.isfinite(t) & np.isfinite(y) & np.isfinite(u)
    t, y, u = t[keep], y[keep], u[keep]
    if t.size < 4:
        raise TooFewPoints("a trend needs 4 readings")
    w = 1 / u**2
    centred = t - np.sum(w * t) / np.sum(w)
    spread = float(np.sum(w * centred**2))
    slope = float(np.sum(w * centred * y)) / spread
    rest = y - np.sum(w * y) / np.sum(w) - slope * centred
    widen = max(1.0, float(np.sum(w * rest**2)) / (t.size - 2))
    u_slope = sqrt(widen / spread)
    return Trend(slope_a_per_s=slope, u_slope_a_per_s=u_slope, rising=slope > 3 * u_slope)


@dataclass(frozen=True, kw_only=True, slots=True)
class EarlyEnd:
    """Whether a soak may end, the risk that its end would have said otherwise, and why."""

    may_end: bool
    risk: float
    reason: str


def early_end(
    fit: LeakageFit,
    found: Trend,
    *,
    at_s: float,
    limit_a: float,
    u_common_a: float,
    risk: float,
) -> EarlyEnd:
    """Whether I(at_s) will be below the limit, but for a probability of at most ``risk``.

    ``u_common_a`` is what the fit does not see: gain, offset, background. The rule refuses
    where the current rises, where the readings are no such curve (χ² above 2 per degree of
    freedom), and to look ahead by more than four times the time that has passed.
    """
    value, u_fit = (float(part) for part in fit.current_at(at_s))
    u = sqrt(u_fit**2 + u_common_a**2)
    wrong = 0.5 * erfc((limit_a - value) / (u * sqrt(2))) if u > 0 else float(value > limit_a)
    if found.rising:
        return EarlyEnd(may_end=False, risk=wrong, reason="the current is rising")
    if fit.sum_of_squares > 2 * fit.degrees:
        return EarlyEnd(may_end=False, risk=wrong, reason="the readings do not follow the curve")
    if at_s > 4 * fit.last_s:
        return EarlyEnd(may_end=False, risk=wrong, reason="too early to look that far ahead")
    if wrong > risk:
        return EarlyEnd(may_end=False, risk=wrong, reason="the risk is above the one allowed")
    return EarlyEnd(may_end=True, risk=wrong, reason="below its limit at the end, within the risk")


def charging_is_negligible(
    t_s: float, *, voltage_v: float, resistance_ohm: float, capacitance_f: float, limit_a: float
) -> bool:
    """Whether the charging current at ``t_s`` is below 1 % of the limit; else it must be fitted."""
    charge = charging_current(t_s, voltage_v, resistance_ohm, capacitance_f)
    return bool(charge < 0.01 * limit_a)
