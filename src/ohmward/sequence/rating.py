"""What a part may be given: bias and level against its rating, its polarity and its kind."""

from dataclasses import dataclass
from math import sqrt

from ohmward.sequence.notes import Notes
from ohmward.sequence.values import Bias
from ohmward.terms.kind import Kind, Polarity
from ohmward.terms.part import Part
from ohmward.units.values import format_quantity

SLACK = 1e-9


@dataclass(frozen=True, kw_only=True, slots=True)
class Stress:
    """A bias on a part, in V or in A, with the largest level of its stage."""

    bias_v: float
    bias_a: float
    level_v: float

    @property
    def peak_v(self) -> float:
        """|bias| + √2·level."""
        return abs(self.bias_v) + sqrt(2.0) * self.level_v


@dataclass(frozen=True, kw_only=True, slots=True)
class Allowance:
    """How far parts may be stressed: a share of their rating, and the bench's own ceiling."""

    share: float
    ceiling_v: float | None = None
    ceiling_a: float | None = None
    ceiling_level_v: float | None = None


def resolve_bias(bias: Bias, part: Part, key: str, notes: Notes) -> tuple[float, float] | None:
    """(volts, amperes) of a bias as written for this part; None with a problem noted.

    A share is of the rated current for an inductor, of the DC rating for anything else. The
    working voltage is the part's own, as the parts list says.
    """
    if bias.unit == "1" and part.kind is Kind.INDUCTOR:
        if part.rated_a is None:
            _rating_missing(part, notes, "rated_current")
            return None
        return 0.0, bias.value * part.rated_a
    if bias.unit == "1":
        if part.rated_v is None:
            _rating_missing(part, notes, "rated_voltage")
            return None
        return bias.value * part.rated_v, 0.0
    if bias.unit == "working" and part.kind is not Kind.INDUCTOR:
        if part.working_v is None:
            _rating_missing(part, notes, "working_voltage")
            return None
        return part.working_v, 0.0
    if bias.value == 0:
        return 0.0, 0.0
    wrong = {
        ("working", Kind.INDUCTOR): "a current",
        ("V", Kind.INDUCTOR): "a current",
        ("A", Kind.CAPACITOR): "a voltage",
    }
    wanted = wrong.get((bias.unit, part.kind))
    if wanted is not None:
        notes.sequence(
            "bias-wrong-for-kind",
            key,
            expected=f"{wanted} for the {part.kind} {part.part_id}",
            found=str(bias),
        )
        return None
    return (bias.value, 0.0) if bias.unit == "V" else (0.0, bias.value)


def resolve_current(current: Bias, part: Part, notes: Notes) -> float | None:
    """Amperes of a direct current as written, a share being of the rated current."""
    if current.unit == "A":
        return current.value
    if part.rated_a is None:
        _rating_missing(part, notes, "rated_current")
        return None
    return current.value * part.rated_a


def check_ratings_of_current(
    amperes: float, part: Part, key: str, notes: Notes, share: float
) -> None:
    """Note where a direct current is too much for the part: its rated current, its power."""
    allowance = Allowance(share=share)
    stress = Stress(bias_v=0.0, bias_a=amperes, level_v=0.0)
    _check_current(stress, part, key, notes, allowance)
    if part.kind is Kind.RESISTOR:
        _check_power(stress, part, key, notes, allowance)


def check_stress(stress: Stress, part: Part, key: str, notes: Notes, allowance: Allowance) -> None:
    """Note every way in which this is too much for the part or for the bench."""
    _check_ceilings(stress, key, notes, allowance)
    if stress.bias_a:
        _check_current(stress, part, key, notes, allowance)
    else:
        _check_voltage(stress, part, key, notes, allowance)
    if part.kind is Kind.RESISTOR:
        _check_power(stress, part, key, notes, allowance)


def _check_voltage(
    stress: Stress, part: Part, key: str, notes: Notes, allowance: Allowance
) -> None:
    if part.kind is Kind.INDUCTOR:
        return
    lowest_v = stress.bias_v - sqrt(2.0) * stress.level_v
    if part.polarity is Polarity.POLAR and lowest_v < -part.reverse_v * (1 + SLACK) - SLACK:
        least = sqrt(2.0) * stress.level_v - part.reverse_v
        notes.sequence(
            "bias-reverse",
            key,
            expected=f"at least {_volts(least)} of bias at a level of {_volts(stress.level_v)}, "
            f"or a smaller level: {part.part_id} is polar",
            found=f"{_volts(stress.bias_v)}, which reaches {_volts(lowest_v)}",
        )
    if part.rated_v is not None:
        _check_peak(stress, key, notes, allowance, part)
    elif stress.bias_v and part.kind is Kind.CAPACITOR:
        _rating_missing(part, notes, "rated_voltage")
    elif part.rated_ac_v is not None and stress.level_v > part.rated_ac_v * allowance.share:
        notes.sequence(
            "level-beyond-rating",
            key,
            expected=f"at most {_volts(part.rated_ac_v * allowance.share)} AC on {part.part_id}",
            found=_volts(stress.level_v),
        )


def _check_ceilings(stress: Stress, key: str, notes: Notes, allowance: Allowance) -> None:
    """The bench's own ceilings on DC voltage, DC current and AC level."""
    for problem_id, ceiling, asked, unit in (
        ("bias-beyond-bench", allowance.ceiling_v, abs(stress.bias_v), "V"),
        ("bias-beyond-bench", allowance.ceiling_a, abs(stress.bias_a), "A"),
        ("level-beyond-bench", allowance.ceiling_level_v, stress.level_v, "V"),
    ):
        if ceiling is not None and asked > ceiling * (1 + SLACK):
            notes.sequence(
                problem_id,
                key,
                expected=f"at most {format_quantity(ceiling, unit)}, the bench's own ceiling",
                found=format_quantity(asked, unit),
            )


def _check_peak(stress: Stress, key: str, notes: Notes, allowance: Allowance, part: Part) -> None:
    allowed_v = (part.rated_v or 0.0) * allowance.share
    if stress.peak_v <= allowed_v * (1 + SLACK):
        return
    share = "" if allowance.share == 1 else f" ({allowance.share * 100:g} % of its rating)"
    notes.sequence(
        "bias-beyond-rating" if stress.bias_v else "level-beyond-rating",
        key,
        expected=f"at most {_volts(allowed_v)} on {part.part_id}{share}",
        found=_peak_text(stress),
    )


def _check_current(
    stress: Stress, part: Part, key: str, notes: Notes, allowance: Allowance
) -> None:
    if part.rated_a is None and part.kind is Kind.INDUCTOR:
        _rating_missing(part, notes, "rated_current")
    elif part.rated_a is not None and abs(stress.bias_a) > part.rated_a * allowance.share * (
        1 + SLACK
    ):
        notes.sequence(
            "bias-beyond-rating",
            key,
            expected=f"at most {_amperes(part.rated_a * allowance.share)} through {part.part_id}",
            found=_amperes(stress.bias_a),
        )


def _check_power(stress: Stress, part: Part, key: str, notes: Notes, allowance: Allowance) -> None:
    """P = U²/R or I²·R of the bias alone: the level's share is small through the meter's source."""
    power_w = stress.bias_v**2 / part.nominal + stress.bias_a**2 * part.nominal
    if not power_w:
        return
    if part.rated_w is None:
        _rating_missing(part, notes, "rated_power")
    elif power_w > part.rated_w * allowance.share * (1 + SLACK):
        notes.sequence(
            "bias-beyond-rating",
            key,
            expected=f"at most {format_quantity(part.rated_w * allowance.share, 'W')} "
            f"in {part.part_id}",
            found=format_quantity(power_w, "W"),
        )


def _rating_missing(part: Part, notes: Notes, column: str) -> None:
    if column == "rated_voltage" and part.rated_ac_v is not None:
        notes.cell(
            "rating-ac-as-dc",
            part,
            column,
            expected="a DC rating, because the sequence asks for a bias",
            found=f"an AC rating of {_volts(part.rated_ac_v)}, which says nothing of DC",
        )
        return
    example = {"rated_current": "0.5 A", "rated_power": "0.25 W"}.get(column, "63 V")
    what = "working voltage" if column == "working_voltage" else "rating"
    notes.cell(
        "rating-missing",
        part,
        column,
        expected=f"a {what} such as '{example}', because the sequence asks for a bias",
        found="nothing",
    )


def _peak_text(stress: Stress) -> str:
    if not stress.bias_v:
        return f"√2·{_volts(stress.level_v)} = {_volts(stress.peak_v)}"
    return f"{_volts(stress.bias_v)} + √2·{_volts(stress.level_v)} = {_volts(stress.peak_v)}"


def _volts(value: float) -> str:
    return format_quantity(value, "V", 4)


def _amperes(value: float) -> str:
    return format_quantity(value, "A", 4)
