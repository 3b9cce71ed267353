"""What a command said when it was run as typed."""

import json
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True, kw_only=True)
class Told:
    """The exit code, and what went to standard output and standard error."""

    code: int
    out: str
    err: str

    @property
    def json(self) -> Any:
        """What standard output holds, as JSON."""
        return json.loads(self.out)

    @property
    def problems(self) -> list[dict[str, str]]:
        """The problems that ``--json`` printed, each of the five strings and nothing else."""
        assert self.code == 2, self
        assert set(self.json) == {"problems"}
        found: list[dict[str, str]] = self.json["problems"]
        for problem in found:
            assert set(problem) == {"id", "file", "key", "expected", "found"}
            assert all(isinstance(text, str) and text for text in problem.values()), problem
        return found

    def ids(self) -> set[str]:
        """The problems' identifiers."""
        return {problem["id"] for problem in self.problems}


Ohmward = Callable[..., Told]
