"""Draws the two safety tables as state diagrams in text, for DEVELOPERS.md; pure."""

from collections import defaultdict
from collections.abc import Iterable

from ohmward.safety.rules import (
    POSITION,
    SOURCE,
    Action,
    Event,
    PositionEvent,
    PositionState,
    SourceEvent,
    SourceState,
    State,
    Step,
    Table,
)

BEGIN = "<!-- safety tables: drawn from src/ohmward/safety/rules.py, begin -->"
END = "<!-- safety tables: end -->"
_TRIPS = frozenset(
    {SourceEvent.TRIP.value, SourceEvent.TRIP_INDUCTOR.value, PositionEvent.TRIP.value}
)


def draw(table: Table[State, Event]) -> str:
    """One table as a mermaid state diagram; the trips, which every state has, stand below it."""
    arrows: dict[tuple[str, str], list[str]] = defaultdict(list)
    trips: dict[tuple[str, str, tuple[Action, ...]], list[str]] = defaultdict(list)
    for (state, event), step in table.pairs.items():
        if event.value in _TRIPS:
            trips[event.value, step.state.value, step.actions].append(state.value)
        else:
            arrows[state.value, step.state.value].append(_labelled(event.value, step))
    states: list[str] = [each.value for each in type(table.start)]
    lines: list[str] = ["stateDiagram-v2"]
    lines += [f'    state "{each}" as {_name(each)}' for each in states]
    lines.append(f"    [*] --> {_name(table.start.value)}")
    for (start, end), labels in arrows.items():
        lines += [f"    {_name(start)} --> {_name(end)} : {label}" for label in labels]
    lines += [f"    {_name(end.value)} --> [*]" for end in (table.proven, table.unproven)]
    text = ["```mermaid", *lines, "```", ""]
    for (trip, target, actions), states in trips.items():
        text.append(f"- *{trip}* from {_listed(states)} → **{target}**: {_listed(actions)}")
    return "\n".join(text)


def section() -> str:
    """Everything between the two markers in DEVELOPERS.md, markers included."""
    return "\n".join(
        [
            BEGIN,
            "",
            "A pair that is in neither table trips. The two ends swallow every event; only a",
            "live reading takes a proof back.",
            "",
            f"### The {SOURCE.name}",
            "",
            draw(SOURCE),
            "",
            f"### A {POSITION.name}",
            "",
            draw(POSITION),
            "",
            END,
        ]
    )


def replaced(page: str) -> str:
    """The page with the section between its markers drawn anew; ValueError without markers."""
    begin, end = page.index(BEGIN), page.index(END)
    return page[:begin] + section() + page[end + len(END) :]


def _labelled(event: str, step: Step[SourceState] | Step[PositionState]) -> str:
    return f"{event} / {_listed(step.actions)}" if step.actions else event


def _listed(words: Iterable[str]) -> str:
    return ", ".join(str(word) for word in words) or "nothing more to do"


def _name(state: str) -> str:
    return state.replace(", ", "_").replace(" ", "_")
