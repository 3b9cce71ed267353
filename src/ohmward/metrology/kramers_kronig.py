"""Self-check of a sweep: does one linear, causal, unchanging part lie behind all its points?

Linear Kramers–Kronig test (M. Schönleber, P. Klotz, E. Ivers-Tiffée 2014,
doi 10.1016/j.electacta.2014.01.034): the impedance is fitted, linearly, by a chain that obeys the
relations whatever its coefficients,

    Z(w) = R0 + Σ R_k/(1 + jw·τ_k) + jw·L + 1/(jw·C)

with fixed τ_k, so many to the decade, from half a decade below 1/w_max to half a decade above
1/w_min. What no such chain can follow, a step between two points, is no property of the part.
A part with a parallel resonance is fitted by the same chain in admittance.
"""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike

from ohmward.metrology.arrays import ComplexArray, FloatArray, check_frequency
from ohmward.metrology.errors import BadCovariance, ShapeMismatch, TooFewPoints

BRANCHES_PER_DECADE = 3
EXTRA_DECADES = 0.5
OWN_BRANCHES = 2
FALSE_ALARMS = 0.01
# of the 1 % half is kept back, because the part's own branches were chosen by the same data
STEP_ALARMS = 0.005


def time_constants(frequency_hz: FloatArray) -> FloatArray:
    """τ_k in seconds, log spaced over the sweep and half a decade to each side."""
    w = 2 * np.pi * np.asarray(frequency_hz, dtype=np.float64)
    low = -np.log10(w.max()) - EXTRA_DECADES
    high = -np.log10(w.min()) + EXTRA_DECADES
    count = int(np.ceil((high - low) * BRANCHES_PER_DECADE)) + 1
    return np.logspace(low, high, count)


def mu(coefficients: ArrayLike) -> float:
    """μ = 1 − Σ|R_k<0|/Σ R_k≥0, the authors' measure of over-fitting; near 0 is over-fitted."""
    r = np.asarray(coefficients, dtype=np.float64)
    return float(1 - np.abs(r[r < 0]).sum() / r[r >= 0].sum())


@dataclass(frozen=True, kw_only=True, slots=True)
class Check:
    """The outcome: residuals in units of their uncertainty, and the likeliest step.

    ``residual_real`` and ``residual_imag`` are (measured − fitted) over u, per point in the
    order given. ``step_after_hz`` and ``step_before_hz`` are the two frequencies with the step
    between them, ``step`` its relative size (complex), ``score`` the drop in χ² that it
    explains; ``found`` says that chance would do so in less than one sweep of a hundred.
    ``consistent`` says that the residuals as a whole are no larger than chance makes them.
    """

    residual_real: FloatArray
    residual_imag: FloatArray
    form: str
    chi_square: float
    degrees: int
    consistent: bool
    found: bool
    score: float
    step: complex
    step_after_hz: float
    step_before_hz: float


def check_sweep(frequency_hz: ArrayLike, z: ArrayLike, u_rel: ArrayLike) -> Check:
    """Test a sweep of one part at one level and bias; ``u_rel`` is the repeatability u(|Z|)/|Z|.

    Repeatability, not accuracy: a wrong gain is no step. It holds for the real and imaginary
    part of z, each relative to |z|. Any order of frequencies; NaN points are left out (their
    residuals are NaN). The step statistic is the drop in χ² when all points above a frequency
    may be multiplied by one complex factor, largest over all places for it; its bound is that
    of χ² with 2 degrees of freedom at 1 % shared among the places.
    Raises TooFewPoints below 4 more equations than coefficients, ShapeMismatch, BadFrequency,
    BadCovariance.
    """
    f_all, z_all, u_all = _checked(frequency_hz, z, u_rel)
    good = np.isfinite(f_all) & np.isfinite(z_all) & np.isfinite(u_all)
    order = np.flatnonzero(good)[np.argsort(f_all[good], kind="stable")]
    f, values, u = f_all[order], z_all[order], u_all[order]
    fit = _fitted("impedance", f, values, u)
    if fit.chi_square > _chi_square_bound(fit.degrees, FALSE_ALARMS):
        other = _fitted("admittance", f, 1 / values, u)
        fit = min(fit, other, key=lambda tried: tried.chi_square - tried.drop)
    # a misfit that is still there with the step allowed for is the chain's own: then no step
    # can be told from it, and none is claimed
    explained = fit.chi_square - fit.drop <= _chi_square_bound(fit.degrees - 2, 0.001)
    places = max(f.size - 1, 1)
    real, imag = (np.full(f_all.shape, np.nan) for _ in range(2))
    real[order], imag[order] = fit.residual[: f.size], fit.residual[f.size :]
    return Check(
        residual_real=real,
        residual_imag=imag,
        form=fit.form,
        chi_square=fit.chi_square,
        degrees=fit.degrees,
        consistent=fit.chi_square <= _chi_square_bound(fit.degrees, FALSE_ALARMS),
        found=explained and fit.drop > _chi_square_bound(2, STEP_ALARMS / places),
        score=fit.drop,
        step=fit.step if fit.form == "impedance" else 1 / (1 + fit.step) - 1,
        step_after_hz=float(f[fit.place]),
        step_before_hz=float(f[fit.place + 1]),
    )


def _checked(
    frequency_hz: ArrayLike, z: ArrayLike, u_rel: ArrayLike
) -> tuple[FloatArray, ComplexArray, FloatArray]:
    f = np.asarray(frequency_hz, dtype=np.float64)
    values = np.asarray(z, dtype=np.complex128)
    if f.ndim != 1 or f.shape != values.shape:
        raise ShapeMismatch("a sweep is one frequency and one impedance per point")
    check_frequency(f)
    try:
        u = np.array(np.broadcast_to(np.asarray(u_rel, dtype=np.float64), f.shape))
    except ValueError as error:
        raise ShapeMismatch("the repeatability does not have the shape of the sweep") from error
    if np.any(u <= 0):
        raise BadCovariance("the repeatability must be above zero")
    return f, values, u


@dataclass(frozen=True, kw_only=True, slots=True)
class _Fitted:
    """One form's fit, and the likeliest step in it."""

    form: str
    residual: FloatArray
    chi_square: float
    degrees: int
    drop: float
    place: int
    step: complex


@dataclass(frozen=True, kw_only=True, slots=True)
class _Grid:
    """What depends on the frequencies alone, and is the same for every part of a lot."""

    w: FloatArray
    plain: ComplexArray
    branches: ComplexArray
    candidate_tau_s: FloatArray
    candidates: ComplexArray


@lru_cache(maxsize=32)
def _grid(frequencies: bytes) -> _Grid:
    """R, L and C terms, the fixed branches, and the τ that a part's own branches may have.

    Those are eight to the decade, a decade and a half beyond the sweep to each side. L and C are
    in units that make their terms of the order of one in mid-band.
    """
    f = np.frombuffer(frequencies, dtype=np.float64)
    w = 2 * np.pi * f
    low, high = w.min(), w.max()
    middle = np.sqrt(low * high)
    tau = np.geomspace(0.03 / high, 30 / low, 8 * int(np.log10(high / low) + 4))
    return _Grid(
        w=w,
        plain=np.stack([np.ones_like(w) + 0j, 1j * w / middle, middle / (1j * w)]),
        branches=_branch(w, time_constants(f)[:, None]),
        candidate_tau_s=tau,
        candidates=_branch(w, tau[:, None]),
    )


def _branch(w: FloatArray, tau_s: ArrayLike) -> ComplexArray:
    return np.asarray(1 / (1 + 1j * w * np.asarray(tau_s)), dtype=np.complex128)


def _rows(terms: ComplexArray, weight: FloatArray) -> FloatArray:
    """Weighted complex terms, shape (terms, n), as real rows of length 2n."""
    weighted = terms * weight
    return np.concatenate([weighted.real, weighted.imag], axis=-1)


def _fitted(form: str, f: FloatArray, values: ComplexArray, u: FloatArray) -> _Fitted:
    """Project the chain out of the weighted values; what is left is the residual."""
    grid = _grid(np.ascontiguousarray(f).tobytes())
    terms = len(grid.plain) + OWN_BRANCHES + len(grid.branches)
    degrees = 2 * f.size - terms
    if degrees < 4:
        raise TooFewPoints(
            f"{f.size} points over this range are too few for {terms} terms; "
            f"{(terms + 5) // 2} would do"
        )
    weight = 1 / (np.abs(values) * u)
    unit = values * weight
    rest = np.concatenate([unit.real, unit.imag])
    space, _ = np.linalg.qr(_rows(grid.plain, weight).T)
    candidates = _rows(grid.candidates, weight)
    rest = rest - space @ (space.T @ rest)
    for _ in range(OWN_BRANCHES):
        tau = _own_corner(grid, candidates, space, rest)
        column = _rows(_branch(grid.w, tau), weight)
        column -= space @ (space.T @ column)
        column /= np.sqrt(column @ column)
        rest = rest - column * (column @ rest)
        space = np.column_stack([space, column])
    fixed = _rows(grid.branches, weight).T
    fixed = fixed / np.sqrt(np.einsum("ij,ij->j", fixed, fixed))
    space, _ = np.linalg.qr(np.column_stack([space, fixed]))
    rest = rest - space @ (space.T @ rest)
    drop, place, step = _likeliest_step(unit, space, rest)
    return _Fitted(
        form=form,
        residual=rest,
        chi_square=float(rest @ rest),
        degrees=degrees,
        drop=drop,
        place=place,
        step=step,
    )


def _own_corner(grid: _Grid, candidates: FloatArray, space: FloatArray, rest: FloatArray) -> float:
    """The τ of the branch that explains most of what is left: a corner of the part itself.

    A part has a corner or two (L/R of a winding, R·C of a leak) that lie between the grid's
    points; with those taken off, what the grid has to follow is smooth.
    """
    along = candidates @ space
    size = np.einsum("ij,ij->i", candidates, candidates)
    size = size - np.einsum("ij,ij->i", along, along)
    gain = (candidates @ rest) ** 2 / np.where(size > 1e-10 * size.max(), size, np.inf)
    best = int(np.argmax(gain))
    tau = grid.candidate_tau_s
    if not 0 < best < tau.size - 1:
        return float(tau[best])
    low, middle, high = gain[best - 1 : best + 2]
    bend = low - 2 * middle + high
    shift = 0.5 * (low - high) / bend if bend < 0 else 0.0
    return float(tau[best] * (tau[1] / tau[0]) ** shift)


def _after(values: FloatArray) -> FloatArray:
    """Sums over all points beyond each point, along the first axis, the last one left out."""
    return np.asarray(np.cumsum(values[::-1], axis=0)[-2::-1], dtype=np.float64)


def _likeliest_step(
    unit: ComplexArray, space: FloatArray, rest: FloatArray
) -> tuple[float, int, complex]:
    """The χ² drop, place (index of the point before it) and size of the best single step.

    For a step after point i all later values are multiplied by 1 + s: with the chain projected
    out, s is a fit of two real numbers to the residuals. With a the weighted values beyond i,
    b the same turned by 90° and P the projection: a·a = b·b, a·b = 0 before, and Pa, Pb are
    running sums, so that all places cost no more than one.
    """
    n = unit.size
    re, im = unit.real[:, None], unit.imag[:, None]
    along_a = _after(re * space[:n] + im * space[n:])
    along_b = _after(re * space[n:] - im * space[:n])
    whole = _after(np.abs(unit) ** 2)
    aa = whole - np.einsum("ij,ij->i", along_a, along_a)
    bb = whole - np.einsum("ij,ij->i", along_b, along_b)
    ab = -np.einsum("ij,ij->i", along_a, along_b)
    ra = _after(unit.real * rest[:n] + unit.imag * rest[n:])
    rb = _after(unit.real * rest[n:] - unit.imag * rest[:n])
    determinant = aa * bb - ab * ab
    # next to the ends the chain can follow any step: there is nothing to find there
    determinant[determinant < 1e-6 * np.abs(unit).max() ** 4] = np.inf
    s_real = (bb * ra - ab * rb) / determinant
    s_imag = (aa * rb - ab * ra) / determinant
    drop = s_real * ra + s_imag * rb
    place = int(np.argmax(drop))
    return float(drop[place]), place, complex(s_real[place], s_imag[place])


@lru_cache(maxsize=256)
def _chi_square_bound(degrees: int, probability: float) -> float:
    """The value that χ² with these degrees of freedom exceeds with this probability."""
    from scipy.special import chdtri

    return float(chdtri(degrees, probability))
