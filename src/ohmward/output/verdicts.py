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
    """One verdict per part, in the parts' order; ``results`` are rows of results.csv.

    The reason is that of the rows that decided: for an accepted part their number.
    """
    found = []
    for part in parts:
        rows = [row for row in results if row["part_id"] == part.part_id]
        judged = [row for row in rows if row["decision"] != Decision.REPORTED]
        decision = Decision.of_part(Decision(str(row["decision"])) for row in judged)
        deciding = [str(row["reason"]) for row in judged if row["decision"] == decision]
        if decision is Decision.ACCEPT:
            reason = f"within all {len(judged)} limits" if len(judged) > 1 else "within its limit"
        elif not deciding:
            reason = "nothing about this part was measured and judged"
        else:
            more = f" (and {len(deciding) - 1} more)" if len(deciding) > 1 else ""
            reason = deciding[0] + more
        found.append(PartVerdict(part=part, decision=decision, reason=reason))
    return found
