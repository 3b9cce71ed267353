"""What is decided of a quantity, and of a part."""

from collections.abc import Iterable
from enum import StrEnum


class Decision(StrEnum):
    """``undecided``: the uncertainty straddles the limit; ``invalid``: not to be trusted."""

    ACCEPT = "accept"
    REJECT = "reject"
    UNDECIDED = "undecided"
    INVALID = "invalid"
    REPORTED = "reported"  # no limit was asked for: a value, not a judgement

    @staticmethod
    def of_part(decisions: Iterable["Decision"]) -> "Decision":
        """The part's decision from those of its quantities.

        A proven breach rejects, whatever else was not measured; without one, anything invalid
        makes the part invalid, then anything undecided makes it undecided. Nothing judged at
        all is invalid: a part that was not measured is never accepted.
        """
        found = set(decisions)
        for decision in (Decision.REJECT, Decision.INVALID, Decision.UNDECIDED, Decision.ACCEPT):
            if decision in found:
                return decision
        return Decision.INVALID
