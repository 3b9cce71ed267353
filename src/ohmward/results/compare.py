"""Two judgements of one run side by side: what other limits, or another rule, change."""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

from ohmward.terms.decision import Decision

_KEY = ("part_id", "stage", "quantity", "frequency_hz", "level_v", "bias_v", "bias_a")


@dataclass(frozen=True, kw_only=True, slots=True)
class Change:
    """One judged quantity before and after; None where it was not judged."""

    part_id: str
    stage: str
    quantity: str
    before: Decision | None
    after: Decision | None
    reason: str


def changes(
    before: Iterable[Mapping[str, object]], after: Iterable[Mapping[str, object]]
) -> list[Change]:
    """What differs between two lists of rows of results.csv, in the order of the first.

    Rows belong together by part, stage, quantity and condition; where one condition has several
    limits, in their order. What is only reported is no judgement.
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
                )
            )
    return found


def _by_key(rows: Iterable[Mapping[str, object]]) -> dict[tuple[str, ...], Mapping[str, object]]:
    found: dict[tuple[str, ...], Mapping[str, object]] = {}
    for row in rows:
        if row["decision"] == Decision.REPORTED:
            continue
        # NaN is not equal to itself, its text is
        key = tuple(str(row[name]) for name in _KEY)
        number = 0
        while (*key, str(number)) in found:
            number += 1
        found[(*key, str(number))] = row
    return found
