"""What a run tells whoever watches it while it works."""

from typing import Protocol

from ohmward.sequence.brief import Brief, PlannedStage


class Watcher(Protocol):
    """Told of progress; must return at once and never raise."""

    def begun(self, brief: Brief, *, behind_s: float) -> None:
        """The run begins, or is taken up again with ``behind_s`` of its planned time done."""

    def stage(self, stage: PlannedStage) -> None:
        """A stage of a part begins."""

    def reading(self, stage: PlannedStage, *, done: int, of: int) -> None:
        """One more reading of the stage is taken."""

    def note(self, text: str) -> None:
        """Something a person should know now."""


class Silent:
    """Watches without a word."""

    def begun(self, brief: Brief, *, behind_s: float) -> None:
        """Say nothing."""

    def stage(self, stage: PlannedStage) -> None:
        """Say nothing."""

    def reading(self, stage: PlannedStage, *, done: int, of: int) -> None:
        """Say nothing."""

    def note(self, text: str) -> None:
        """Say nothing."""
