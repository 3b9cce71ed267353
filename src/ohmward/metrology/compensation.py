"""Open, short and load compensation of a fixture, with the uncertainty of all that went into it.

Between meter and part the fixture is a two-port: what the meter shows is Zm = (A·Z + B)/(C·Z + D).
Three known standards fix it. With K the cross-ratio of what was measured,

    K = (Zm − Zs)(Zsm − Zo) / [(Zm − Zo)(Zsm − Zs)]

(Zo, Zs, Zsm: open, short and load as measured) the part is, for a load standard L, an open of
admittance Y and a short of impedance S,

    Z = [K·(L − S) + S·(1 − L·Y)] / [(1 − L·Y) + K·(L − S)·Y]

which is Z = K·L for ideal ones: the open/short/load form of the bridge handbooks. Without a load
the fixture must be symmetric (A = D), and Z = (Zs − Zm)/(Zm − Zo)·Zo; for a residual in series
and a stray in parallel that is off by a fraction of the order of |Zs/Zo|, which is carried as an
uncertainty. Impedances in ohm, admittances in siemens, arrays over frequency.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ohmward.metrology.arrays import (
    ComplexArray,
    FloatArray,
    check_covariance,
    check_frequency,
    correlation_of,
)
from ohmward.metrology.errors import CompensationMismatch, ShapeMismatch

# Between two frequencies that are further apart nothing is interpolated.
MOST_APART = 10.0


@dataclass(frozen=True, kw_only=True, slots=True)
class Known:
    """Complex values over frequency with u(real), u(imaginary) and their correlation."""

    value: ComplexArray
    u_real: FloatArray
    u_imag: FloatArray
    correlation: FloatArray

    @classmethod
    def of(
        cls,
        value: ArrayLike,
        u_real: ArrayLike = 0.0,
        u_imag: ArrayLike = 0.0,
        correlation: ArrayLike = 0.0,
    ) -> "Known":
        """Values of any shapes that broadcast; raises ShapeMismatch, BadCovariance."""
        complex_value = np.asarray(value, dtype=np.complex128)
        try:
            parts = [
                np.array(np.broadcast_to(np.asarray(part, dtype=np.float64), complex_value.shape))
                for part in (u_real, u_imag, correlation)
            ]
        except ValueError as error:
            raise ShapeMismatch("an uncertainty does not have the shape of its value") from error
        check_covariance(*parts)
        return cls(value=complex_value, u_real=parts[0], u_imag=parts[1], correlation=parts[2])

    def with_contact(self, contact_ohm: tuple[float, float]) -> "Known":
        """The same with the scatter of a contact, u of resistance and reactance in ohm, added."""
        shared = self.correlation * self.u_real * self.u_imag
        u_real = np.hypot(self.u_real, contact_ohm[0])
        u_imag = np.hypot(self.u_imag, contact_ohm[1])
        return replace(
            self,
            u_real=u_real,
            u_imag=u_imag,
            correlation=correlation_of(shared, u_real, u_imag),
        )

    def interpolated(self, at: FloatArray, frequency_hz: FloatArray) -> "Known":
        """Over log f; between two points, t of the way, ±t(1 − t)·|change| is added.

        That bound is nothing at a point that was measured and a quarter of the change midway: a
        curve that bends more between two points is one that was measured too coarsely.
        """
        log_at, log_f = np.log(at), np.log(frequency_hz)
        right = np.clip(np.searchsorted(log_f, log_at), 1, max(log_f.size - 1, 1))
        left = right - 1
        t = (log_at - log_f[left]) / (log_f[right] - log_f[left])
        bend = t * (1 - t) / np.sqrt(3)
        change = self.value[right] - self.value[left]

        def between(values: FloatArray) -> FloatArray:
            return np.asarray((1 - t) * values[left] + t * values[right], dtype=np.float64)

        return Known(
            value=(1 - t) * self.value[left] + t * self.value[right],
            u_real=np.hypot(between(self.u_real), bend * np.abs(change.real)),
            u_imag=np.hypot(between(self.u_imag), bend * np.abs(change.imag)),
            correlation=between(self.correlation),
        )


@dataclass(frozen=True, kw_only=True, slots=True)
class Compensation:
    """What was measured of a fixture, with what standards, and where and when it holds.

    ``open_ohm``, ``short_ohm`` and ``load_ohm`` are as measured, contact scatter not included:
    ``contact_ohm`` is u(R), u(X) of one contact, and enters short, load and the part itself.
    ``open_s``, ``short_standard_ohm`` and ``load_standard_ohm`` say what the standards are.
    ``taken_s`` is a time in seconds since 1970, UTC. ``positions`` that it holds for.
    """

    frequency_hz: FloatArray
    open_ohm: Known
    short_ohm: Known
    load_ohm: Known | None = None
    open_s: Known | None = None
    short_standard_ohm: Known | None = None
    load_standard_ohm: Known | None = None
    contact_ohm: tuple[float, float] = (0.0, 0.0)
    instrument: str = ""
    cable_m: float = 0.0
    positions: frozenset[str] = field(default_factory=frozenset)
    taken_s: float = float("nan")

    def __post_init__(self) -> None:
        check_frequency(self.frequency_hz)
        if np.any(np.diff(self.frequency_hz) <= 0):
            raise CompensationMismatch("the frequencies of a compensation must rise")
        if (self.load_ohm is None) != (self.load_standard_ohm is None):
            raise CompensationMismatch("a load needs both its value and its reading")
        for known in self._all().values():
            if known.value.shape != self.frequency_hz.shape:
                raise ShapeMismatch("a standard must have a value at every frequency")

    def _all(self) -> dict[str, Known]:
        named = {
            "open": self.open_ohm,
            "short": self.short_ohm,
            "load": self.load_ohm,
            "open standard": self.open_s,
            "short standard": self.short_standard_ohm,
            "load standard": self.load_standard_ohm,
        }
        return {name: known for name, known in named.items() if known is not None}

    @property
    def has_load(self) -> bool:
        """Whether the exact open/short/load form is used."""
        return self.load_ohm is not None

    def is_exact(self, frequency_hz: FloatArray) -> NDArray[np.bool_]:
        """Which frequencies were measured themselves."""
        f = np.asarray(frequency_hz, dtype=np.float64)
        apart = np.abs(self.frequency_hz - f[..., None])
        return np.asarray(np.any(apart <= 1e-9 * f[..., None], axis=-1), dtype=np.bool_)

    def _refuse_gaps(self, f: FloatArray) -> None:
        wide = self.frequency_hz[1:] > MOST_APART * self.frequency_hz[:-1] * (1 + 1e-9)
        for low, high in zip(
            self.frequency_hz[:-1][wide], self.frequency_hz[1:][wide], strict=True
        ):
            inside = f[(f > low * (1 + 1e-9)) & (f < high * (1 - 1e-9))]
            if inside.size:
                raise CompensationMismatch(
                    f"compensated at {low:g} Hz and {high:g} Hz, too far apart to say what is "
                    f"between, but wanted at {inside.flat[0]:g} Hz"
                )

    def at(self, frequency_hz: FloatArray) -> dict[str, Known]:
        """Everything known at these frequencies; raises CompensationMismatch beyond the ends.

        An open is interpolated as an admittance, which changes smoothly where its impedance
        does not. Frequencies that were measured are met exactly; between neighbours that are
        more than a decade apart nothing is interpolated.
        """
        f = np.asarray(frequency_hz, dtype=np.float64)
        low, high = self.frequency_hz[0] * (1 - 1e-9), self.frequency_hz[-1] * (1 + 1e-9)
        if np.any((f < low) | (f > high)):
            outside = f[(f < low) | (f > high)].flat[0]
            raise CompensationMismatch(
                f"compensated from {low:g} Hz to {high:g} Hz, but wanted at {outside:g} Hz"
            )
        self._refuse_gaps(f)
        last = self.frequency_hz.size - 1
        index = np.minimum(np.searchsorted(self.frequency_hz, f * (1 - 1e-9)), last)
        exact = np.isclose(self.frequency_hz[index], f, rtol=1e-9)
        found = {}
        for name, known in self._all().items():
            taken = Known(
                value=known.value[index],
                u_real=known.u_real[index],
                u_imag=known.u_imag[index],
                correlation=known.correlation[index],
            )
            if not np.all(exact):
                turned = _inverse(known) if name == "open" else known
                between = turned.interpolated(f, self.frequency_hz)
                taken = _where(exact, taken, _inverse(between) if name == "open" else between)
            found[name] = taken
        return found


def _where(exact: NDArray[np.bool_], one: Known, other: Known) -> Known:
    return Known(
        value=np.where(exact, one.value, other.value),
        u_real=np.where(exact, one.u_real, other.u_real),
        u_imag=np.where(exact, one.u_imag, other.u_imag),
        correlation=np.where(exact, one.correlation, other.correlation),
    )


def _inverse(known: Known) -> Known:
    return _combined({"one": known}, {"one": -1 / known.value**2}, 1 / known.value)


def _combined(
    inputs: Mapping[str, Known], slopes: Mapping[str, ComplexArray], value: ComplexArray
) -> Known:
    """First-order propagation of an analytic function: each slope is dZ/dinput, complex.

    Multiplication by a + jb is the matrix [[a, −b], [b, a]] on (real, imaginary).
    """
    rr, ii, ri = (np.zeros(value.shape) for _ in range(3))
    for name, slope in slopes.items():
        known = inputs[name]
        a, b = slope.real, slope.imag
        vr, vi = known.u_real**2, known.u_imag**2
        vc = known.correlation * known.u_real * known.u_imag
        rr += a * a * vr + b * b * vi - 2 * a * b * vc
        ii += b * b * vr + a * a * vi + 2 * a * b * vc
        ri += a * b * (vr - vi) + (a * a - b * b) * vc
    u_real, u_imag = np.sqrt(np.maximum(rr, 0)), np.sqrt(np.maximum(ii, 0))
    return Known(
        value=value, u_real=u_real, u_imag=u_imag, correlation=correlation_of(ri, u_real, u_imag)
    )


def compensate(
    compensation: Compensation, frequency_hz: ArrayLike, measured: Known
) -> dict[str, Known]:
    """The part behind the fixture: ``{"part": …}`` and each contribution by its name.

    ``measured`` is what the meter showed, with its uncertainty; the frequencies have its shape.
    Each contribution is a Known of value 0 that holds only its own part of the covariance:
    they add up to the part's. Raises CompensationMismatch beyond the compensated frequencies.
    """
    f = np.asarray(frequency_hz, dtype=np.float64)
    if f.shape != measured.value.shape:
        raise ShapeMismatch("one frequency for each reading")
    inputs = compensation.at(f)
    inputs["part as measured"] = measured
    value, slopes = _load_form(inputs) if compensation.has_load else _open_short_form(inputs)
    zero = np.zeros_like(value)
    contact = Known.of(zero, *compensation.contact_ohm)
    for name in ("short", "load"):
        if name in slopes:
            inputs[f"contact of the {name}"] = contact
            slopes[f"contact of the {name}"] = _contact_slope(name, inputs, slopes)
    inputs["contact of the part"] = contact
    slopes["contact of the part"] = np.ones_like(value)
    if not compensation.has_load:
        # the form is exact for a symmetric fixture only; nobody has shown that it is one
        error = np.abs(value * inputs["short"].value / inputs["open"].value) / np.sqrt(3)
        inputs["asymmetry"] = Known.of(zero, error, error)
        slopes["asymmetry"] = np.ones_like(value)
    found = {name: _combined(inputs, {name: slope}, zero) for name, slope in slopes.items()}
    return {"part": _combined(inputs, slopes, value), **found}


def _contact_slope(
    name: str, inputs: Mapping[str, Known], slopes: Mapping[str, ComplexArray]
) -> ComplexArray:
    """A contact is in series with the standard, and reaches the reading through the fixture.

    dZm/dZ = (A·D − B·C)/(C·Z + D)² = (Zo − Zm)²/[(D/C)·(Zo − Zs)], with D/C = Zo for a
    symmetric fixture and L·(Zsm − Zo)/(Zs − Zsm) where a load has shown it.
    """
    zo, zs, at = inputs["open"].value, inputs["short"].value, inputs[name].value
    scale = zo
    if "load" in inputs:
        zl = inputs["load"].value
        scale = inputs["load standard"].value * (zl - zo) / (zs - zl)
    through = (zo - at) ** 2 / (scale * (zo - zs))
    return np.asarray(slopes[name] * through, dtype=np.complex128)


def _open_short_form(
    inputs: Mapping[str, Known],
) -> tuple[ComplexArray, dict[str, ComplexArray]]:
    zm = inputs["part as measured"].value
    zo, zs = inputs["open"].value, inputs["short"].value
    away = zm - zo
    value = (zs - zm) / away * zo
    return value, {
        "part as measured": zo * (zo - zs) / away**2,
        "open": (zs - zm) * zm / away**2,
        "short": zo / away,
    }


def _load_form(inputs: Mapping[str, Known]) -> tuple[ComplexArray, dict[str, ComplexArray]]:
    zm, zo, zs, zl = (inputs[n].value for n in ("part as measured", "open", "short", "load"))
    zero = np.zeros_like(zm)
    load = inputs["load standard"].value
    y = inputs["open standard"].value if "open standard" in inputs else zero
    s = inputs["short standard"].value if "short standard" in inputs else zero
    k = (zm - zs) * (zl - zo) / ((zm - zo) * (zl - zs))
    span, rest = load - s, 1 - load * y
    top, bottom = k * span + s * rest, rest + k * span * y
    value = top / bottom
    by_k = (span - value * span * y) / bottom
    slopes = {
        # d ln K of each reading, times K·dZ/dK
        "part as measured": by_k * k * (1 / (zm - zs) - 1 / (zm - zo)),
        "short": by_k * k * (1 / (zl - zs) - 1 / (zm - zs)),
        "open": by_k * k * (1 / (zm - zo) - 1 / (zl - zo)),
        "load": by_k * k * (1 / (zl - zo) - 1 / (zl - zs)),
        "load standard": ((k - s * y) - value * (k * y - y)) / bottom,
    }
    if "open standard" in inputs:
        slopes["open standard"] = (-s * load - value * (k * span - load)) / bottom
    if "short standard" in inputs:
        slopes["short standard"] = ((rest - k) + value * k * y) / bottom
    return value, slopes


def asymmetry(compensation: Compensation) -> ComplexArray:
    """(D/C)/(A/C) − 1 of the fixture, from its load: the relative error of the open/short form.

    Raises CompensationMismatch without a load: then nothing is known of it.
    """
    if compensation.load_ohm is None or compensation.load_standard_ohm is None:
        raise CompensationMismatch("only a load shows whether a fixture is symmetric")
    inputs = compensation.at(compensation.frequency_hz)
    measured = Known.of(compensation.load_ohm.value)
    plain, _ = _open_short_form({**inputs, "part as measured": measured})
    return np.asarray(compensation.load_standard_ohm.value / plain - 1, dtype=np.complex128)


def is_symmetric(compensation: Compensation) -> NDArray[np.bool_]:
    """Whether the load, put through the open/short form, comes out as what it is within 2u.

    One truth value for each frequency; what this compares is the whole fixture, standards and
    contacts included. Raises CompensationMismatch without a load.
    """
    if compensation.load_ohm is None or compensation.load_standard_ohm is None:
        raise CompensationMismatch("only a load shows whether a fixture is symmetric")
    bare = replace(compensation, load_ohm=None, load_standard_ohm=None)
    found = compensate(bare, bare.frequency_hz, compensation.load_ohm)
    part, doubt, known = found["part"], found["asymmetry"], compensation.load_standard_ohm
    difference = part.value - known.value
    u_real = np.sqrt(part.u_real**2 - doubt.u_real**2 + known.u_real**2)
    u_imag = np.sqrt(part.u_imag**2 - doubt.u_imag**2 + known.u_imag**2)
    return (np.abs(difference.real) <= 2 * u_real) & (np.abs(difference.imag) <= 2 * u_imag)


def is_trustworthy(
    compensation: Compensation, frequency_hz: ArrayLike, z: ArrayLike
) -> NDArray[np.bool_]:
    """Open |Z| above 100 times the part's and short |Z| below a hundredth (common practice)."""
    known = compensation.at(np.asarray(frequency_hz, dtype=np.float64))
    size = np.abs(np.asarray(z, dtype=np.complex128))
    return (np.abs(known["open"].value) > 100 * size) & (np.abs(known["short"].value) < size / 100)


def check_applies(
    compensation: Compensation,
    *,
    instrument: str,
    cable_m: float,
    position: str,
    now_s: float,
    at_most_s: float | None,
    own_correction_on: bool,
) -> None:
    """Refuse a compensation that does not belong to this measurement: CompensationMismatch.

    ``at_most_s`` is how old it may be (None: any age); ``own_correction_on`` says that the meter
    corrects for a fixture itself, and nothing is to be corrected twice.
    """
    if own_correction_on:
        raise CompensationMismatch("the meter's own correction is on: it would correct twice")
    if compensation.instrument != instrument:
        raise CompensationMismatch(
            f"taken with {compensation.instrument!r}, not with {instrument!r}"
        )
    if compensation.cable_m != cable_m:
        raise CompensationMismatch(
            f"taken with {compensation.cable_m:g} m of cable, not with {cable_m:g} m"
        )
    if position not in compensation.positions:
        known = ", ".join(sorted(compensation.positions)) or "none"
        raise CompensationMismatch(f"taken for position {known}, not for {position!r}")
    age_s = now_s - compensation.taken_s
    if at_most_s is not None and not 0 <= age_s <= at_most_s:
        raise CompensationMismatch(f"taken {age_s:.0f} s ago, may be {at_most_s:.0f} s old at most")
