"""Where problems of a brief are noted: in the sequence, the bench or the parts list."""

from dataclasses import dataclass, field
from pathlib import Path

from ohmward.errors import Problems
from ohmward.terms.part import Part


@dataclass(frozen=True, kw_only=True, slots=True)
class Notes:
    """The problems of one brief with the files in which a person mends them, and its warnings."""

    problems: Problems
    sequence_file: Path
    bench_file: Path
    parts_file: Path
    warnings: list[str] = field(default_factory=list)

    def sequence(self, problem_id: str, key: str, *, expected: str, found: str) -> None:
        """Note a problem of the sequence file."""
        self.problems.add(
            id=problem_id, file=self.sequence_file, key=key, expected=expected, found=found
        )

    def bench(self, problem_id: str, key: str, *, expected: str, found: str) -> None:
        """Note a problem of the bench file."""
        self.problems.add(
            id=problem_id, file=self.bench_file, key=key, expected=expected, found=found
        )

    def cell(self, problem_id: str, part: Part, column: str, *, expected: str, found: str) -> None:
        """Note a problem of one cell of the parts list."""
        where = f"row {part.row}" if part.row else part.part_id
        self.problems.add(
            id=problem_id,
            file=self.parts_file,
            key=f"{where}, {column}",
            expected=expected,
            found=f"{part.part_id}: {found}",
        )

    def warn(self, text: str) -> None:
        """Note something worth knowing that stops nobody; the same text once."""
        if text not in self.warnings:
            self.warnings.append(text)
