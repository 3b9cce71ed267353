"""Two judgements of one run side by side: what other limits, or another rule, change."""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from math import isnan, nan

from ohmward.terms.decision import Decision
from ohmward.units.values import format_quantity

# a bias of zero is not worth a word
_ALWAYS = frozenset({"frequency_hz", "level_v", "reference_temperature_c"})
_CONDITIONS = {
    "frequency_hz": "Hz",
    "level_v": "V",
    "bias_v": "V",
    "bias_a": "A",
    "voltage_v": "V",
    "since_voltage_s": "s",
    "reference_temperature_c": "degC",
    "reference_age_s": "s",
}
_KEY = ("part_id", "stage", "quantity", *_CONDITIONS)


@dataclass(frozen=True, kw_only=True, slots=True)
class Change:
    """One judged quantity before and after; None where it was not judged."""

    part_id: str
    stage: str
    quantity: str
    before: Decision | None
    after: Decision | None
    reason: str
    condition: str = ""


def changes(
    before: Iterable[Mapping[str, object]], after: Iterable[Mapping[str, object]]
) -> list[Change]:
    """What differs between two lists of rows of results.csv, in the order of the first.

    Rows belong together by part, stage, quantity and condition: each of these has one row. What
    is only reported is no judgement.
    """
    old, new = _by_key(before), _by_key(after)
    found = []
    for key in dict.fromkeys((*old, *new)):
        was, now = old.get(key), new.get(key)
        decided = [None if row is None else Decision(str(row["decision"])) for row in (was, now)]
        if decided[0] is not decided[1]:
            row = now or was or {}
            found.append(
                Change(
                    part_id=str(row["part_id"]),
                    stage=str(row["stage"]),
                    quantity=str(row["quantity"]),
                    before=decided[0],
                    after=decided[1],
                    reason=str(row["reason"]),
                    condition=_condition(row),
                )
            )
    return found


def _condition(row: Mapping[str, object]) -> str:
    """Where a row's value is, for a table: ``1 kHz, 10 V``."""
    said = []
    for name, unit in _CONDITIONS.items():
        value = row.get(name)
        if isinstance(value, float) and not isnan(value) and (value or name in _ALWAYS):
            said.append(format_quantity(value, unit, 4))
    return ", ".join(said)


def _by_key(
    rows: Iterable[Mapping[str, object]],
) -> dict[tuple[str, ...], Mapping[str, object]]:
    return {
        # NaN is not equal to itself, its text is
        tuple(str(row.get(name, nan)) for name in _KEY): row
        for row in rows
        if row["decision"] != Decision.REPORTED
    }
