"""One row for one value: limits that meet at one quantity and condition are held in one row.

Two limits may say something of the same value: a minimum from one source and a maximum from
another, or a limit on every point whose worst point is that of a limit on this one. All of them
must hold, so that the row has the narrower bounds, every source, and the worse decision.
"""

from collections.abc import Iterable
from math import isnan, nan

from ohmward.results.columns import RESULT_KEY
from ohmward.terms.decision import Decision

Row = dict[str, object]

SEVERITY = (
    Decision.REJECT,
    Decision.INVALID,
    Decision.UNDECIDED,
    Decision.ACCEPT,
    Decision.REPORTED,
)


def key_of(row: Row) -> tuple[str, ...]:
    """What tells a row from every other one; NaN is not equal to itself, its text is."""
    return tuple(str(row[name]) for name in RESULT_KEY)


def merged(rows: Iterable[Row]) -> list[Row]:
    """The rows, each key once, in the order in which keys first appear."""
    groups: dict[tuple[str, ...], list[Row]] = {}
    for row in rows:
        groups.setdefault(key_of(row), []).append(row)
    return [group[0] if len(group) == 1 else _one(group) for group in groups.values()]


def _one(group: list[Row]) -> Row:
    ordered = sorted(group, key=lambda row: SEVERITY.index(Decision(str(row["decision"]))))
    judged = [row for row in ordered if row["decision"] != Decision.REPORTED]
    if not judged:
        return ordered[0]
    return {
        **judged[0],
        "limit_min": max(_numbers(judged, "limit_min"), default=nan),
        "limit_max": min(_numbers(judged, "limit_max"), default=nan),
        "limit_source": " and ".join(_once(row["limit_source"] for row in group)),
        "reason": "; ".join(_once(row["reason"] for row in judged)),
    }


def _numbers(rows: Iterable[Row], name: str) -> list[float]:
    return [value for row in rows if isinstance(value := row[name], float) and not isnan(value)]


def _once(texts: Iterable[object]) -> list[str]:
    return [text for text in dict.fromkeys(str(text) for text in texts) if text]
