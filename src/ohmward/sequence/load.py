"""Reads a sequence file and finds everything that is wrong within it."""

from collections.abc import Mapping
from pathlib import Path
from typing import Any, TypeVar

from ohmward.errors import Problems
from ohmward.sequence.check import check_sequence
from ohmward.sequence.model import (
    STAGE_TABLES,
    LimitTable,
    Sequence,
    SequenceHead,
)
from ohmward.sequence.tables import StageTable, Table
from ohmward.setup.toml import read_toml, salvage, validate
from ohmward.terms.kind import Kind

T = TypeVar("T", bound=Table)

# What stands for a key of the head that is missing or wrong while the rest is looked at.
_STAND_INS = {
    "format": 1,
    "name": "-",
    "purpose": "-",
    "follows": "-",
    "kinds": [kind.value for kind in Kind],
}


def load_sequence(path: Path, problems: Problems) -> Sequence | None:
    """The sequence, with every problem noted; None where nothing can be made of the file.

    With problems noted, what is returned is what could be saved of the file: enough to look
    for more problems with bench and parts in the same go, never to be run.
    """
    data = read_toml(path, problems)
    if data is None:
        return None
    sequence = validate(Sequence, data, path, problems)
    if sequence is None:
        sequence = _saved(data)
    else:
        for tables in (sequence.stage, sequence.limit):
            for place, table in enumerate(tables, start=1):
                table.placed(place)
    if sequence is not None:
        check_sequence(sequence, _stage_names(data), path, problems)
    return sequence


def _saved(data: Mapping[str, Any]) -> Sequence | None:
    """What is right in a file with something wrong in it; each table keeps its place."""
    rest = {key: value for key, value in data.items() if key not in {"stage", "limit"}}
    head = salvage(SequenceHead, rest, _STAND_INS)
    if head is None:
        return None
    stages: list[StageTable] = []
    for place, table in _tables(data, "stage"):
        model = STAGE_TABLES.get(str(table.get("kind")))
        if model is not None:
            stages += _table(model, table, place)
    limits = [
        limit
        for place, table in _tables(data, "limit")
        for limit in _table(LimitTable, table, place)
    ]
    known: dict[str, Any] = {name: getattr(head, name) for name in SequenceHead.model_fields}
    known |= {"stage": tuple(stages), "limit": tuple(limits)}
    return Sequence.model_construct(**known)


def _tables(data: Mapping[str, Any], key: str) -> list[tuple[int, dict[str, Any]]]:
    found = data.get(key)
    listed = found if isinstance(found, list) else []
    return [
        (place, table) for place, table in enumerate(listed, start=1) if isinstance(table, dict)
    ]


def _table(model: type[T], table: dict[str, Any], place: int) -> list[T]:
    unseen = Problems()
    whole = validate(model, table, "", unseen)
    if whole is not None:
        return [whole.placed(place)]
    saved = salvage(model, table)
    return [] if saved is None else [saved.placed(place, whole=False)]


def _stage_names(data: Mapping[str, Any]) -> tuple[str, ...]:
    """The names that stages have in the file, also of stages with something wrong in them."""
    return tuple(str(table.get("name", "")) for _, table in _tables(data, "stage"))
