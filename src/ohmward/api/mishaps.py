"""Faults that a person asks for in a dry run: PART=KIND@STAGE+TIME, and when they befall it."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import trio

from ohmward.errors import Problems
from ohmward.run.watcher import Watcher
from ohmward.sequence.brief import Brief, PlannedStage
from ohmward.sim.bench import SimulatedBench
from ohmward.sim.mishaps import MISHAPS, befall
from ohmward.units.values import UnitError, parse_quantity

FORM = "PART=KIND@STAGE+TIME"


@dataclass(frozen=True, kw_only=True, slots=True)
class Mishap:
    """One fault: what befalls which part, how long after its stage has begun."""

    part_id: str
    kind: str
    stage: str
    after_s: float


def fault_kinds() -> Mapping[str, str]:
    """Every kind of fault with what it is."""
    return {kind: meaning for kind, (meaning, _) in MISHAPS.items()}


def read_mishaps(texts: Sequence[str], brief: Brief, bench: SimulatedBench) -> tuple[Mishap, ...]:
    """Read faults as a person writes them; raises BadInput naming everything that is wrong."""
    problems = Problems()
    found = [_read(text, brief, problems) for text in texts]
    if texts and not hasattr(bench.circuit, "engine"):
        _wrong(problems, texts[0], "a bench with high voltage", "one without")
    problems.raise_if_any()
    return tuple(one for one in found if one is not None)


def _read(text: str, brief: Brief, problems: Problems) -> Mishap | None:
    part_id, equals, rest = text.partition("=")
    kind, at, rest = rest.partition("@")
    stage, plus, after = rest.rpartition("+")
    if not (equals and at and plus):
        _wrong(problems, text, f"{FORM}, such as C3=short@leakage+60s", text)
        return None
    before = len(problems)
    if kind not in MISHAPS:
        _wrong(problems, text, f"a kind that 'dryrun --faults' lists: {', '.join(MISHAPS)}", kind)
    stages = {one.stage for one in brief.stages if one.part.part_id == part_id}
    if not stages:
        _wrong(problems, text, "a part of this lot that is measured", part_id)
    elif stage not in stages:
        _wrong(problems, text, f"a stage of {part_id}: {', '.join(sorted(stages))}", stage)
    try:
        after_s = parse_quantity(after, "s")
    except UnitError as error:
        _wrong(problems, text, error.expected, error.found)
        return None
    if after_s < 0.0:
        _wrong(problems, text, "a time of 0 s or more", after)
    if len(problems) > before:
        return None
    return Mishap(part_id=part_id, kind=kind, stage=stage, after_s=after_s)


def _wrong(problems: Problems, text: str, expected: str, found: object) -> None:
    problems.add(
        id="fault-unusable",
        file="command line",
        key=f"--fault {text}",
        expected=expected,
        found=found,
    )


class Fated:
    """Watches a run for the stages in which something is to go wrong, and lets it."""

    def __init__(
        self,
        watcher: Watcher,
        bench: SimulatedBench,
        mishaps: Sequence[Mishap],
        nursery: trio.Nursery,
    ) -> None:
        self._watcher = watcher
        self._bench = bench
        self._mishaps = mishaps
        self._nursery = nursery

    def begun(self, brief: Brief, *, behind_s: float) -> None:
        """Pass it on."""
        self._watcher.begun(brief, behind_s=behind_s)

    def stage(self, stage: PlannedStage) -> None:
        """Pass it on; what is to befall this part in this stage is on its way from now."""
        self._watcher.stage(stage)
        for mishap in self._mishaps:
            if (mishap.part_id, mishap.stage) == (stage.part.part_id, stage.stage):
                self._nursery.start_soon(self._wait_and_befall, mishap, stage)

    async def _wait_and_befall(self, mishap: Mishap, stage: PlannedStage) -> None:
        await trio.sleep(mishap.after_s)
        befall(self._bench, mishap.kind, stage.part.position, trio.current_time())

    def reading(self, stage: PlannedStage, *, done: int, of: int) -> None:
        """Pass it on."""
        self._watcher.reading(stage, done=done, of=of)

    def note(self, text: str) -> None:
        """Pass it on."""
        self._watcher.note(text)
