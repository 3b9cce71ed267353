"""Hashes of a brief: the same for the same work, whatever the files look like."""

import hashlib
import json
from collections.abc import Mapping
from typing import Any

from pydantic import BaseModel

from ohmward.sequence.brief import as_plain
from ohmward.sequence.model import Sequence
from ohmward.setup.bench import Bench
from ohmward.setup.compensation_file import CompensationFile
from ohmward.setup.driver import Driver
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part

NOT_DONE = {"purpose"}  # words for people; what a bench does is the same without them


def hash_of(content: Any) -> str:
    """SHA-256 of content in types that JSON has: keys sorted, shortest exact numbers, UTF-8."""
    text = json.dumps(content, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
    return hashlib.sha256(text.encode()).hexdigest()


def input_hashes(
    sequence: Sequence,
    bench: Bench,
    drivers: Mapping[str, Driver],
    parts: tuple[Part, ...],
    limits: tuple[Limit, ...],
    compensation: CompensationFile | None = None,
) -> dict[str, str]:
    """A hash for each input, from what was read of it: units, comments and spaces make none.

    ``limits`` stands for the rules that are built in: a sequence whose rule has changed since
    decides otherwise, and so is another one.
    """
    corrected = {} if compensation is None else {"compensation": _model(compensation, set())}
    return {
        **{name: hash_of(content) for name, content in corrected.items()},
        "sequence": hash_of(_model(sequence, NOT_DONE)),
        "bench": hash_of(_model(bench, set())),
        "drivers": hash_of({name: driver.digest for name, driver in drivers.items()}),
        "parts": hash_of([_part(part) for part in parts]),
        "limits": hash_of(as_plain(limits)),
    }


def brief_hash(hashes: Mapping[str, str]) -> str:
    """The hash of all inputs together."""
    return hash_of(dict(hashes))


def _model(model: BaseModel, without: set[str]) -> Any:
    return model.model_dump(mode="json", exclude=without)


def _part(part: Part) -> Any:
    """A part without the row that it stood in: a list sorted otherwise is told by its order."""
    return {key: value for key, value in as_plain(part).items() if key != "row"}
