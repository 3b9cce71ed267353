"""The decision on each part, drawn together from its rows in results.csv."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from ohmward.terms.decision import Decision
from ohmward.terms.part import Part


@dataclass(frozen=True, kw_only=True, slots=True)
class PartVerdict:
    """A part's decision and, in a sentence or two, why."""

    part: Part
    decision: Decision
    reason: str


def verdicts(parts: Sequence[Part], results: Sequence[Mapping[str, object]]) -> list[PartVerdict]:
    """One verdict per part, in the parts' order; ``results`` are rows of results.csv."""
    found = []
    for part in parts:
        decision, reason = verdict_of([row for row in results if row["part_id"] == part.part_id])
        found.append(PartVerdict(part=part, decision=decision, reason=reason))
    return found


def verdict_of(rows: Sequence[Mapping[str, object]]) -> tuple[Decision, str]:
    """A part's decision and the reason, from its own rows of results.csv.

    The reason is that of the rows that decided: for an accepted part their number.
    """
    judged = [row for row in rows if row["decision"] != Decision.REPORTED]
    decision = Decision.of_part(Decision(str(row["decision"])) for row in judged)
    deciding = [str(row["reason"]) for row in judged if row["decision"] == decision]
    if decision is Decision.ACCEPT:
        return decision, f"within all {len(judged)} limits" if len(
            judged
        ) > 1 else "within its limit"
    if not deciding:
        return decision, "nothing about this part was measured and judged"
    more = f" (and {len(deciding) - 1} more)" if len(deciding) > 1 else ""
    return decision, deciding[0] + more
