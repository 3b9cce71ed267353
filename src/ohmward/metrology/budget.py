"""An uncertainty budget: what contributes how much to the uncertainty of one value.

y = f(x1, x2, …): each contribution is |c_i|·u(x_i) with the sensitivity c_i = ∂f/∂x_i, its share
(c_i·u_i)²/u²(y); contributions are independent of each other, correlated inputs being one
contribution together (JCGM 100:2008, 5.1 and 8).
"""

from collections.abc import Iterable
from dataclasses import dataclass
from math import hypot, inf, isfinite, nan, sqrt

from ohmward.metrology.accuracy import divisor
from ohmward.metrology.coverage import coverage_factor, effective_degrees
from ohmward.metrology.errors import BadCovariance
from ohmward.metrology.immittance import View
from ohmward.metrology.uncertain import Stated, UncertainImpedance, spread


@dataclass(frozen=True, kw_only=True, slots=True)
class Source:
    """One cause of uncertainty: an input with u in ``unit``, and the result's sensitivity to it.

    ``degrees`` of freedom are infinite for what a manual states. ``distribution`` is
    ``rectangular``, ``normal`` or ``t``.
    """

    name: str
    u: float
    unit: str
    sensitivity: float
    distribution: str = "normal"
    degrees: float = inf

    @property
    def contribution(self) -> float:
        """|c|·u in the unit of the result."""
        return abs(self.sensitivity) * self.u


@dataclass(frozen=True, kw_only=True, slots=True)
class Contribution:
    """A source with its share of the variance (a fraction; they add up to one)."""

    source: Source
    share: float


@dataclass(frozen=True, kw_only=True, slots=True)
class Budget:
    """A value, its combined and expanded uncertainty, and the contributions, greatest first."""

    value: float
    unit: str
    u: float
    degrees: float
    k: float
    u_expanded: float
    contributions: tuple[Contribution, ...]


def budget_of(value: float, unit: str, sources: Iterable[Source], k_normal: float = 2.0) -> Budget:
    """Combine independent sources; raises BadCovariance for a negative or missing u."""
    listed = list(sources)
    for source in listed:
        if not (isfinite(source.u) and source.u >= 0 and isfinite(source.sensitivity)):
            raise BadCovariance(f"{source.name}: u = {source.u:g} is no standard uncertainty")
    u = hypot(*(source.contribution for source in listed))
    degrees = effective_degrees(u, ((source.contribution, source.degrees) for source in listed))
    k = coverage_factor(degrees, k_normal)
    shares = (
        Contribution(source=source, share=(source.contribution / u) ** 2 if u else 0.0)
        for source in listed
    )
    return Budget(
        value=value,
        unit=unit,
        u=u,
        degrees=degrees,
        k=k,
        u_expanded=k * u,
        contributions=tuple(sorted(shares, key=lambda part: -part.share)),
    )


def impedance_budget(name: str, unit: str, z: UncertainImpedance, k_normal: float = 2.0) -> Budget:
    """The budget of one view of an impedance: magnitude, phase, frequency, and what else there is.

    With a = ∂y/∂R, b = ∂y/∂X: ∂y/∂|Z| = a·cos θ + b·sin θ, ∂y/∂θ = b·R − a·X and, as a
    reactance goes with frequency, ∂y/∂f = b·X/f. The causes of ``z.normal`` and the repeats have
    R and X correlated: each is one contribution, in the unit of the result.
    """
    view = z.view(name)
    sources = [] if z.stated is None else _stated_sources(view, z, z.stated)
    sources += [
        Source(name=cause, u=spread(view, covariance), unit=unit, sensitivity=1.0)
        for cause, covariance in z.normal.items()
    ]
    sources.append(_repeats(spread(view, z.repeat), unit, z.degrees))
    value = float(view.value) if isfinite(float(view.value)) else nan
    return budget_of(value, unit, (s for s in sources if s.u > 0), k_normal)


def _stated_sources(view: View, z: UncertainImpedance, stated: Stated) -> list[Source]:
    a, b = float(view.by_r), float(view.by_x)
    size = hypot(z.r, z.x)
    c, s = (z.r / size, z.x / size) if size else (1.0, 0.0)
    scale = 1 / divisor(stated.distribution)
    return [
        Source(
            name="accuracy of the magnitude",
            u=size * stated.magnitude_rel * scale,
            unit="ohm",
            sensitivity=a * c + b * s,
            distribution=stated.distribution,
        ),
        Source(
            name="accuracy of the phase",
            u=stated.phase_rad * scale,
            unit="rad",
            sensitivity=b * z.r - a * z.x,
            distribution=stated.distribution,
        ),
        Source(
            name="frequency",
            u=z.frequency_hz * stated.frequency_rel / sqrt(3),
            unit="Hz",
            sensitivity=b * z.x / z.frequency_hz,
            distribution="rectangular",
        ),
    ]


def _repeats(u: float, unit: str, degrees: float) -> Source:
    return Source(
        name="repeatability",
        u=u,
        unit=unit,
        sensitivity=1.0,
        distribution="normal" if degrees == inf else "t",
        degrees=degrees,
    )


@dataclass(frozen=True, kw_only=True, slots=True)
class LeakageInput:
    """What a leakage reading depends on, besides the part; SI units, all as the bench has them.

    Half-widths: ``reading_rel`` and ``offset_a`` of the current meter's range, ``time_s`` of
    the moment of reading, ``series_rel`` of the series resistance times C. Standard
    uncertainties: ``u_background_a``, ``u_rate_v_per_s`` of the supply's drift, ``u_reading_a``
    of the mean reading with its ``degrees``. ``exponent`` is n of the absorption at that moment.
    """

    current_a: float
    background_a: float
    reading_rel: float
    offset_a: float
    distribution: str
    u_background_a: float
    capacitance_f: float
    u_rate_v_per_s: float
    charging_a: float
    charging_over_tau: float
    series_rel: float
    exponent: float
    since_voltage_s: float
    time_s: float
    u_reading_a: float
    degrees: float = inf


def leakage_budget(given: LeakageInput, k_normal: float = 2.0) -> Budget:
    """The budget of I = reading − background − C·dV/dt − (V/R)·e^(−t/RC), in ampere.

    Ammeter gain and offset, background, supply drift times C, charging current and the moment
    of reading: absorption falls as t^−n, so that δt moves the current by n·I·δt/t. The charging
    current moves by t/RC − 1 times a relative change of R and by t/RC times one of C; the
    greater is taken (``charging_over_tau`` is t/RC).
    """
    net = given.current_a - given.background_a - given.charging_a
    sources = (*_current_meter(given), *_circumstances(given, net))
    return budget_of(net, "A", (source for source in sources if source.u > 0), k_normal)


def _current_meter(given: LeakageInput) -> tuple[Source, ...]:
    scale = 1 / divisor(given.distribution)
    return (
        Source(
            name="current meter, gain",
            u=given.reading_rel * scale,
            unit="1",
            sensitivity=given.current_a,
            distribution=given.distribution,
        ),
        Source(
            name="current meter, offset",
            u=given.offset_a * scale,
            unit="A",
            sensitivity=1.0,
            distribution=given.distribution,
        ),
        Source(name="background", u=given.u_background_a, unit="A", sensitivity=-1.0),
        _repeats(given.u_reading_a, "A", given.degrees),
    )


def _circumstances(given: LeakageInput, net_a: float) -> tuple[Source, ...]:
    root = sqrt(3)
    return (
        Source(
            name="supply drift",
            u=given.u_rate_v_per_s,
            unit="V/s",
            sensitivity=-given.capacitance_f,
        ),
        Source(
            name="charging current",
            u=given.series_rel / root,
            unit="1",
            sensitivity=-given.charging_a * max(given.charging_over_tau, 1.0),
            distribution="rectangular",
        ),
        Source(
            name="moment of reading",
            u=given.time_s / root,
            unit="s",
            sensitivity=-given.exponent * net_a / given.since_voltage_s,
            distribution="rectangular",
        ),
    )
