"""What can be said of a stage under direct voltage by itself: whether its keys fit each other."""

from collections.abc import Iterable
from itertools import pairwise
from typing import Protocol

from ohmward.sequence.direct import (
    AbsorptionStage,
    DirectStage,
    InsulationStage,
    LeakageStage,
    OneVoltageStage,
    ProofStage,
    ReformStage,
)
from ohmward.sequence.rules_direct import DIRECT_RULES
from ohmward.sequence.voltages import VOLTAGE_RULES
from ohmward.setup.toml import one_of
from ohmward.terms.kind import Kind
from ohmward.units.values import format_quantity

REFORM_RULES = tuple(
    rule.name
    for rule in DIRECT_RULES
    if rule.quantities == {"leakage_a"} and rule.name != "leakage-by-dielectric"
)


class Note(Protocol):
    """Notes one problem of the sequence file."""

    def __call__(self, problem_id: str, key: str, /, *, expected: str, found: object) -> None:
        """Note it."""


def check_direct(stage: DirectStage, key: str, kinds: Iterable[Kind], note: Note) -> None:
    """Note everything that is wrong with one stage under direct voltage or current."""
    let_in = frozenset(stage.parts.kind or kinds) & frozenset(kinds)
    others = sorted(let_in - stage.for_kinds)
    if others and stage.whole:
        note(
            "stage-other-kind",
            f"{key}.parts",
            expected=f"a filter that lets in {' and '.join(sorted(stage.for_kinds))} only",
            found=f"{' and '.join(others)} as well",
        )
    if stage.ramp_time is not None and "ramp" in stage.model_fields_set:
        note(
            "stage-says-two-ramps",
            key,
            expected="either 'ramp' or 'ramp_time'",
            found="both",
        )
    if isinstance(stage, OneVoltageStage):
        _one_voltage(stage, key, note)
    if isinstance(stage, LeakageStage | InsulationStage | AbsorptionStage):
        _times(stage, key, note)
    if isinstance(stage, ReformStage):
        _reform(stage, key, note)


def _one_voltage(stage: OneVoltageStage, key: str, note: Note) -> None:
    if stage.voltage is not None and stage.rule is not None:
        note(
            "stage-says-two-voltages",
            key,
            expected="either 'voltage' or 'rule'",
            found=f"{stage.voltage} and '{stage.rule}'",
        )
    name = stage.voltage_rule
    if stage.voltage is None and not name and stage.whole:
        note("stage-without-voltage", key, expected="'voltage' or 'rule'", found="neither")
    if name and name not in VOLTAGE_RULES:
        note(
            "stage-unknown-rule",
            f"{key}.rule",
            expected=one_of(name, list(VOLTAGE_RULES)),
            found=name,
        )
    highest = stage.rating_allowed if isinstance(stage, ProofStage) else None
    share = stage.voltage
    if share is not None and share.unit == "1" and share.value > (highest or 1.0) * (1 + 1e-9):
        allowed = f"at most {100 * (highest or 1.0):g} % of rating"
        if isinstance(stage, ProofStage):
            allowed += ", or a higher 'rating_allowed'"
        note("out-of-range", f"{key}.voltage", expected=allowed, found=share)


def _times(stage: LeakageStage | InsulationStage | AbsorptionStage, key: str, note: Note) -> None:
    times = stage.read_at_s
    if any(after <= before for before, after in pairwise(times)):
        note("times-not-rising", f"{key}.read_at", expected="times that rise", found=_said(times))
    if isinstance(stage, LeakageStage) and max(times) > stage.soak:
        note(
            "read-after-soak",
            f"{key}.read_at",
            expected=f"times within the soak of {format_quantity(stage.soak, 's')}",
            found=_said(times),
        )


def _reform(stage: ReformStage, key: str, note: Note) -> None:
    steps = stage.voltages
    if any(a.unit == b.unit and b.value <= a.value for a, b in pairwise(steps)):
        note(
            "voltages-not-rising",
            f"{key}.voltages",
            expected="voltages that rise",
            found=", ".join(map(str, steps)),
        )
    if any(one.unit == "1" and one.value > 1.0 + 1e-9 for one in steps):
        note(
            "out-of-range",
            f"{key}.voltages",
            expected="at most 100 % of rating",
            found=", ".join(map(str, steps)),
        )
    if stage.leakage_rule not in REFORM_RULES:
        note(
            "stage-unknown-rule",
            f"{key}.leakage_rule",
            expected=one_of(stage.leakage_rule, list(REFORM_RULES)),
            found=stage.leakage_rule,
        )
    if stage.current_limit is None and stage.whole:
        note(
            "reform-unlimited",
            f"{key}.current_limit",
            expected="the current above which a part is stopped",
            found="nothing",
        )
    if stage.budget < stage.hold * len(steps):
        note(
            "budget-too-short",
            f"{key}.budget",
            expected=f"at least {format_quantity(stage.hold * len(steps), 's')}: "
            f"{len(steps)} voltages of {format_quantity(stage.hold, 's')}",
            found=format_quantity(stage.budget, "s"),
        )


def _said(times: tuple[float, ...]) -> str:
    return ", ".join(format_quantity(time, "s") for time in times)
