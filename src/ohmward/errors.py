"""Everything that ohmward raises, and the exit code that a command then ends with.

    OhmwardError                1    our own fault
    ├── BadInput                2    what a person wrote is wrong; carries every problem
    ├── NotAuthorised           2    the run energises and nobody authorised it
    ├── SafetyTrip              3    the warden tripped; the safe state is proven
    ├── LinkError               4    a link failed beyond its budget
    │   ├── LinkTimeout              no (whole) reply by the deadline
    │   ├── LinkLost                 the peer is gone
    │   ├── ReplyMalformed           a reply came that cannot be what was asked for
    │   ├── WrongIdentity            something else answers at this address
    │   └── InstrumentRefused        the instrument reported an error of its own
    ├── NotProvenSafe           5    the safe state could NOT be proven
    ├── BenchHeld               6    the bench is held by another run, or not proven safe
    └── Stopped               130    a person or the system asked to stop

Exit code 0 means finished, whatever was decided.
"""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True, kw_only=True, slots=True)
class Problem:
    """One thing wrong with what a person wrote: where, what was expected, what was found.

    ``id`` is stable (kebab-case, never reworded); ``file`` and ``key`` say where:
    a dotted key for TOML (``stage[2].frequency``), ``row 7, rated_voltage`` for CSV.
    """

    id: str
    file: str
    key: str
    expected: str
    found: str

    def __str__(self) -> str:
        return f"{self.file}: {self.key}: expected {self.expected}, found {self.found} [{self.id}]"

    def as_dict(self) -> dict[str, str]:
        """The problem as the five strings that ``--json`` prints."""
        return {
            "id": self.id,
            "file": self.file,
            "key": self.key,
            "expected": self.expected,
            "found": self.found,
        }


class Problems:
    """Collects every problem of one command, so that a person mends them all in one go."""

    def __init__(self) -> None:
        self._found: list[Problem] = []

    def add(self, *, id: str, file: object, key: str, expected: str, found: object) -> None:  # noqa: A002
        """Note one problem; the same one twice is kept once."""
        said = str(found) or "nothing"
        problem = Problem(id=id, file=str(file), key=key, expected=expected, found=said)
        if problem not in self._found:
            self._found.append(problem)

    def __len__(self) -> int:
        return len(self._found)

    def __iter__(self) -> Iterator[Problem]:
        return iter(self._found)

    def raise_if_any(self) -> None:
        """Raise BadInput with all problems noted so far, or return."""
        if self._found:
            raise BadInput(tuple(self._found))


class OhmwardError(Exception):
    """Root of the tree; by itself it means that ohmward is at fault.

    ``outcome`` is what a run left behind that this error ended early: its folder and decisions.
    """

    exit_code = 1
    outcome: Any = None


class BadInput(OhmwardError):
    """What a person wrote is wrong; ``problems`` holds all of it."""

    exit_code = 2

    def __init__(self, problems: tuple[Problem, ...]) -> None:
        super().__init__("\n".join(str(problem) for problem in problems))
        self.problems = problems

    def as_dict(self) -> dict[str, Any]:
        """The shape that ``--json`` prints."""
        return {"problems": [problem.as_dict() for problem in self.problems]}


class NotAuthorised(OhmwardError):
    """The run energises above the hazard threshold and nobody authorised it."""

    exit_code = 2


class SafetyTrip(OhmwardError):
    """The warden tripped, and the safe state is proven."""

    exit_code = 3


class LinkError(OhmwardError):
    """A link failed; raised out of a run only when its budget is spent."""

    exit_code = 4

    def __init__(self, message: str, *, address: str = "") -> None:
        super().__init__(f"{address}: {message}" if address else message)
        self.address = address


class LinkTimeout(LinkError):
    """No whole reply came by the deadline."""


class LinkLost(LinkError):
    """The peer is gone or could not be reached."""


class ReplyMalformed(LinkError):
    """A reply came that cannot be an answer to what was asked."""


class WrongIdentity(LinkError):
    """Something else than expected answers at this address; nothing more is sent to it."""


class InstrumentRefused(LinkError):
    """The instrument reported an error of its own, or did not take a setting."""


class NotProvenSafe(OhmwardError):
    """The safe state could not be proven: a person must act."""

    exit_code = 5


class BenchHeld(OhmwardError):
    """The bench is held by another run, or its last run has no proven end."""

    exit_code = 6


class Stopped(OhmwardError):
    """A person or the system asked to stop, and the run ended in order."""

    exit_code = 130
