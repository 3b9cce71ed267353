"""One impedance with everything that is known of its errors, and intervals for what it shows.

JCGM 100 (first order, k from effective degrees of freedom) where its conditions hold, JCGM 101
(Monte Carlo) where they do not: see `needs_monte_carlo`. The samples are evenly spread points
(`samples`), not random ones: the same input gives the same digits.
"""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from functools import lru_cache
from math import atan2, cos, hypot, inf, isfinite, isinf, isnan, nan, sin, sqrt

import numpy as np

from ohmward.metrology.accuracy import add_independent, divisor
from ohmward.metrology.arrays import FloatArray
from ohmward.metrology.coverage import coverage_factor, effective_degrees
from ohmward.metrology.immittance import View, gradients, propagate
from ohmward.metrology.samples import normal_points, uniform_points

Covariance = tuple[float, float, float]
NOTHING: Covariance = (0.0, 0.0, 0.0)

# 2.3 % in each tail is then counted to within about 0.1 %
SAMPLES = 10_000
RULES_FROM = 0.5


@dataclass(frozen=True, kw_only=True, slots=True)
class Stated:
    """Half-widths of the instrument's stated errors at one point: fractions and radian.

    ``distribution`` as in terms.ImpedanceAccuracy; the frequency's is rectangular.
    """

    magnitude_rel: float
    phase_rad: float
    frequency_rel: float = 0.0
    distribution: str = "rectangular"


@dataclass(frozen=True, kw_only=True, slots=True)
class UncertainImpedance:
    """Z = r + jx (ohm) at a frequency, with independent causes of error.

    ``stated`` are the instrument's; ``normal`` further ones by name, each (u_R, u_X, r_RX);
    ``repeat`` is that of the mean of repeated readings with its ``degrees`` of freedom.
    """

    frequency_hz: float
    r: float
    x: float
    stated: Stated | None = None
    normal: Mapping[str, Covariance] = field(default_factory=dict)
    repeat: Covariance = NOTHING
    degrees: float = inf

    def stated_covariance(self) -> Covariance:
        """(u_R, u_X, r_RX) of the stated errors alone."""
        if self.stated is None:
            return NOTHING
        z, theta = hypot(self.r, self.x), atan2(self.x, self.r)
        scale = 1 / divisor(self.stated.distribution)
        u_m, u_t = z * self.stated.magnitude_rel * scale, z * self.stated.phase_rad * scale
        u_f = abs(self.x) * self.stated.frequency_rel / sqrt(3)
        c, s = cos(theta), sin(theta)
        u_r, u_x = hypot(c * u_m, s * u_t), hypot(s * u_m, c * u_t, u_f)
        shared = c * s * (u_m**2 - u_t**2)
        return u_r, u_x, shared / (u_r * u_x) if u_r * u_x > 0 else 0.0

    def covariance(self) -> Covariance:
        """(u_R, u_X, r_RX) of everything together."""
        parts = (self.stated_covariance(), *self.normal.values(), self.repeat)
        arrays = [tuple(np.asarray(number) for number in part) for part in parts]
        u_r, u_x, rho = add_independent(*[(a, b, c) for a, b, c in arrays])
        return float(u_r), float(u_x), float(rho)

    def view(self, name: str) -> View:
        """A view of Z with its derivatives (not finite where it does not exist)."""
        return gradients(self.frequency_hz, self.r, self.x, (name,))[name]


@dataclass(frozen=True, kw_only=True, slots=True)
class Interval:
    """A value with u, U and k; ``samples`` where it came from Monte Carlo.

    ``k`` is U/u, NaN where a distribution so far from normal has no such factor.
    """

    value: float
    u: float
    u_expanded: float
    k: float
    low: float
    high: float
    samples: FloatArray | None = None


def spread(view: View, covariance: Covariance) -> float:
    """u of a view by first order."""
    u_r, u_x, rho = (np.asarray(number) for number in covariance)
    return float(propagate(view, u_r, u_x, rho))


def first_order(name: str, z: UncertainImpedance, k_normal: float = 2.0) -> Interval:
    """JCGM 100: y ± k·u, k from the effective degrees of freedom (Annex G)."""
    view = z.view(name)
    value, u = float(view.value), spread(view, z.covariance())
    u_a = spread(view, z.repeat)
    k = coverage_factor(effective_degrees(u, ((u_a, z.degrees),)), k_normal)
    return Interval(value=value, u=u, u_expanded=k * u, k=k, low=value - k * u, high=value + k * u)


def monte_carlo(
    name: str, z: UncertainImpedance, k_normal: float = 2.0, *, count: int = SAMPLES
) -> Interval:
    """JCGM 101: the probabilistically symmetric interval (7.7) of the sampled view.

    A part is passive: a sample below 0 ohm is noise about a resistance too small to see, and
    stands for an infinite Rp or Q, not for a negative one.
    """
    from scipy.special import ndtr

    view = z.view(name)
    value = float(view.value) if np.isfinite(view.value) else nan
    u = nan if isnan(value) else spread(view, z.covariance())
    samples = sampled(name, z, *draw(z, count))
    tail = float(ndtr(-k_normal))
    low, high = (
        float(edge) for edge in np.quantile(samples, (tail, 1 - tail), method="inverted_cdf")
    )
    half = (high - low) / 2
    if isinf(low) or isinf(high):
        half = nan
    k = half / u if u > 0 else nan
    # far from the factor of a bell curve the two are not related, and no factor is printed
    if not 1 <= k <= 1.2 * coverage_factor(z.degrees, k_normal):
        k = nan
    return Interval(value=value, u=u, u_expanded=half, k=k, low=low, high=high, samples=samples)


def interval(name: str, z: UncertainImpedance, k_normal: float = 2.0) -> Interval:
    """By first order where that is sound, by Monte Carlo where it is not."""
    if needs_monte_carlo(name, z):
        return monte_carlo(name, z, k_normal)
    return first_order(name, z, k_normal)


def sampled(name: str, z: UncertainImpedance, r: FloatArray, x: FloatArray) -> FloatArray:
    """The view at sampled R and X."""
    value = gradients(z.frequency_hz, r, x, (name,))[name].value
    return np.where(r <= 0, np.inf, value) if name in ("rp_ohm", "q") else value


def draw(z: UncertainImpedance, count: int = SAMPLES) -> tuple[FloatArray, FloatArray]:
    """Samples of R and X, each cause by its own distribution (JCGM 101:2008, 6.4).

    Rectangular or normal stated errors of |Z|, θ and f; normal ones; and for a mean of n
    readings a scaled t with n − 1 degrees of freedom, its two parts sharing one scale.
    """
    point = iter(range(12))
    r, x = np.full(count, z.r), np.full(count, z.x)
    if z.stated is not None:
        r, x = _stated_samples(z, z.stated, count, point)
    others = [part for part in z.normal.values() if part[0] > 0 or part[1] > 0]
    if others:
        arrays = [tuple(np.asarray(number) for number in part) for part in others]
        total = add_independent(*[(a, b, c) for a, b, c in arrays])
        _add(r, x, tuple(float(number) for number in total), _normal(count, point), 1.0)
    if z.repeat[0] > 0 or z.repeat[1] > 0:
        two = _normal(count, point)
        scale = 1.0 if isinf(z.degrees) else _scale_of_t(z.degrees, count, next(point))
        _add(r, x, z.repeat, two, scale)
    return r, x


@lru_cache(maxsize=16)
def _scale_of_t(degrees: float, count: int, dimension: int) -> FloatArray:
    """√(ν/χ²) of each sample: what makes normal deviates those of a t; not to be written to."""
    from scipy.special import chdtri

    chance = uniform_points(count, 12)[dimension]
    scale: FloatArray = np.sqrt(degrees / chdtri(degrees, chance))
    scale.setflags(write=False)
    return scale


def _stated_samples(
    z: UncertainImpedance, stated: Stated, count: int, point: Iterator[int]
) -> tuple[FloatArray, FloatArray]:
    def half_width() -> FloatArray:
        row: FloatArray = 2 * uniform_points(count, 12)[next(point)] - 1
        return row

    def half_expanded() -> FloatArray:
        # an expanded value with k = 2 is two standard deviations of a normal error
        row: FloatArray = normal_points(count, 12)[next(point)] / 2
        return row

    error = half_width if stated.distribution == "rectangular" else half_expanded
    magnitude = hypot(z.r, z.x) * (1 + stated.magnitude_rel * error())
    theta = atan2(z.x, z.r) + stated.phase_rad * error()
    x = magnitude * np.sin(theta) * (1 + stated.frequency_rel * half_width())
    return magnitude * np.cos(theta), x


def _normal(count: int, point: Iterator[int]) -> tuple[FloatArray, FloatArray]:
    rows = normal_points(count, 12)
    return rows[next(point)], rows[next(point)]


def _add(
    r: FloatArray,
    x: FloatArray,
    covariance: tuple[float, ...],
    two: tuple[FloatArray, FloatArray],
    scale: FloatArray | float,
) -> None:
    u_r, u_x, rho = covariance
    r += u_r * two[0] * scale
    x += u_x * (rho * two[0] + sqrt(max(1 - rho * rho, 0.0)) * two[1]) * scale


def needs_monte_carlo(name: str, z: UncertainImpedance) -> bool:
    """Whether first order would not do.

    Where the view is curved within ±2u; where the value is below 3u; where one rectangular
    error makes up half of the variance; and where few repeats of correlated R and X make up a
    twentieth of it, for which effective degrees of freedom have no formula (JCGM 100, G.4.1).
    """
    view = z.view(name)
    covariance = z.covariance()
    u = spread(view, covariance)
    if u == 0:
        return False
    value = float(view.value)
    if not (isfinite(value) and isfinite(u)) or abs(value) < 3 * u:
        return True
    few = not isinf(z.degrees) and spread(view, z.repeat) ** 2 > 0.05 * u * u
    return few or _one_rules(name, z, u) or is_curved(name, z, covariance)


def _one_rules(name: str, z: UncertainImpedance, u: float) -> bool:
    if z.stated is None or z.stated.distribution != "rectangular":
        return False
    view = z.view(name)
    a, b = float(view.by_r), float(view.by_x)
    size, theta = hypot(z.r, z.x), atan2(z.x, z.r)
    parts = (
        (a * cos(theta) + b * sin(theta)) * size * z.stated.magnitude_rel,
        (b * z.r - a * z.x) * z.stated.phase_rad,
        b * z.x * z.stated.frequency_rel,
    )
    return any(part * part / 3 > RULES_FROM * u * u for part in parts)


def is_curved(name: str, z: UncertainImpedance, covariance: Covariance) -> bool:
    """Whether a straight line misses the view by over a tenth of 2u, anywhere within ±2u."""
    view = z.view(name)
    if not np.isfinite([view.value, view.by_r, view.by_x]).all():
        return True
    u_r, u_x, _ = covariance
    dr = 2 * u_r * np.array([1, -1, 0, 0, 1, 1, -1, -1])
    dx = 2 * u_x * np.array([0, 0, 1, -1, 1, -1, 1, -1])
    around = gradients(z.frequency_hz, z.r + dr, z.x + dx, (name,))[name].value
    if not np.all(np.isfinite(around)):
        return True
    straight = view.value + view.by_r * dr + view.by_x * dx
    scale = np.hypot(view.by_r * 2 * u_r, view.by_x * 2 * u_x)
    return bool(np.any(np.abs(around - straight) > 0.1 * scale))
