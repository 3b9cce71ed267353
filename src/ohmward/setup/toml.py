"""Reads a TOML file and checks it against a model; everything wrong becomes a Problem.

``read_toml`` never raises for what a file holds, ``validate`` never for what a model refuses.
``salvage`` gives the model of what is right in a partly wrong file, so that checks across
keys can still report what they find in the same go.
"""

import difflib
import tomllib
from collections.abc import Mapping, Sequence
from copy import deepcopy
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel, ValidationError

from ohmward.errors import Problems
from ohmward.setup.fields import known_keys
from ohmward.setup.files import read_bytes
from ohmward.setup.quantities import WRITTEN

FORMAT = 1
LONGEST_SHOWN = 60

M = TypeVar("M", bound=BaseModel)
Location = tuple[int | str, ...]


def read_toml(path: Path, problems: Problems) -> dict[str, Any] | None:
    """The file's table, or None with a problem noted: missing, not UTF-8, not TOML."""
    raw = read_bytes(path, problems)
    if raw is None:
        return None
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        found = f"byte 0x{error.object[error.start]:02X} at offset {error.start}"
        problems.add(id="not-utf8", file=path, key="-", expected="UTF-8 text", found=found)
        return None
    try:
        return tomllib.loads(text)
    except (ValueError, RecursionError) as error:
        found = shown(str(error) or type(error).__name__, 200)
        problems.add(id="toml-syntax", file=path, key="-", expected="valid TOML", found=found)
        return None


def load(model: type[M], path: Path, problems: Problems) -> M | None:
    """Read the file and validate it: the model, or None with every problem noted."""
    data = read_toml(path, problems)
    return None if data is None else validate(model, data, path, problems)


def validate(model: type[M], data: Mapping[str, Any], file: object, problems: Problems) -> M | None:
    """The model made of the table, or None with every problem noted under its dotted key."""
    if not _format_is_known(model, data, file, problems):
        return None
    try:
        return model.model_validate(data, context=WRITTEN)
    except ValidationError as error:
        _note(error, model, data, file, problems)
        return None


def salvage(
    model: type[M], data: Mapping[str, Any], stand_ins: Mapping[str, Any] | None = None
) -> M | None:
    """The model of the parts of the table that are right, or None where too little is.

    What is refused is left out, and where that leaves a gap, the table around it too; a
    top key that must be there is replaced by its stand-in. Only checks that cannot be misled
    by what is missing may look at the result.
    """
    spare = dict(stand_ins or {})
    rest: Any = deepcopy(dict(data))
    for _ in range(200):
        try:
            return model.model_validate(rest, context=WRITTEN)
        except ValidationError as error:
            first = error.errors(include_url=False, include_input=False)[0]
            where = _path_in(rest, first["loc"])
            if first["type"] == "missing" and where and _at(rest, where) is None:
                where = where[:-1]
            if len(where) <= 1 and first["loc"] and first["loc"][0] in spare:
                top = first["loc"][0]
                rest[top] = spare.pop(top)
            elif where:
                _remove(rest, where)
            else:
                return None
    return None


def dotted(location: Sequence[int | str]) -> str:
    """The key as a person would look for it: ``stage[2].frequency``; lists count from 1."""
    text = ""
    for step in location:
        if isinstance(step, int):
            text += f"[{step + 1}]"
        else:
            text += f".{step}" if text else step
    return text or "-"


def shown(value: object, longest: int = LONGEST_SHOWN) -> str:
    """What was found, short enough for a line."""
    if isinstance(value, bool):
        text = str(value).lower()
    elif isinstance(value, str):
        text = f"'{value}'" if longest == LONGEST_SHOWN else value
    elif isinstance(value, Mapping):
        text = "a table"
    elif isinstance(value, list | tuple):
        text = f"a list of {len(value)}"
    elif value is None:
        text = "nothing"
    else:
        text = str(value)
    return text if len(text) <= longest else text[: longest - 1] + "…"


def nearest(word: str, known: Sequence[str]) -> str:
    """The known word that was probably meant, or ''."""
    close = difflib.get_close_matches(word.lower(), [name.lower() for name in known], n=1)
    return next((name for name in known if close and name.lower() == close[0]), "")


def one_of(found: str, known: Sequence[str]) -> str:
    """What was expected where one of some names must stand, the nearest one first."""
    near = nearest(found, known)
    if near:
        return f"'{near}'" if len(known) == 1 else f"'{near}' or another of {', '.join(known)}"
    return f"one of {', '.join(known)}" if known else "none"


def _format_is_known(
    model: type[BaseModel], data: Mapping[str, Any], file: object, problems: Problems
) -> bool:
    """A file of a later format is refused as a whole: its other keys mean something else."""
    found = data.get("format", FORMAT)
    if "format" not in model.model_fields or (found == FORMAT and not isinstance(found, bool)):
        return True
    problems.add(
        id="unknown-format", file=file, key="format", expected=str(FORMAT), found=shown(found)
    )
    return False


def _note(
    error: ValidationError,
    model: type[BaseModel],
    data: Mapping[str, Any],
    file: object,
    problems: Problems,
) -> None:
    gathered: dict[tuple[str, str, str], list[str]] = {}
    items = [(item, _path_in(data, item["loc"])) for item in error.errors(include_url=False)]
    for item, where in items:
        if isinstance(item["input"], list | dict) and any(
            len(deeper) > len(where) and deeper[: len(where)] == where for _, deeper in items
        ):
            continue  # a union wanted one value, but what is wrong is inside the list
        if item["type"] == "too_short" and len(item["input"]) >= item["ctx"]["min_length"]:
            continue  # pydantic counts only the items that are right
        kind, expected, found = _told(item, model, data, where)
        if item["type"] in _TAGS and isinstance(item["ctx"].get("discriminator"), str):
            word = item["ctx"]["discriminator"].strip("'")
            where = (*where, word) if word.isidentifier() else where
        wanted = gathered.setdefault((kind, dotted(where), found), [])
        if expected not in wanted:
            wanted.append(expected)  # the members of a union each say what they wanted
    for (kind, key, found), wanted in gathered.items():
        problems.add(id=kind, file=file, key=key, expected=" or ".join(wanted), found=found)


def _told(
    item: Any, model: type[BaseModel], data: Mapping[str, Any], where: Location
) -> tuple[str, str, str]:
    """Problem id, expected and found of one of pydantic's errors."""
    kind, context = item["type"], item.get("ctx", {})
    if kind == "ohmward":
        found = context["found"]
        return context["id"], context["expected"], found if isinstance(found, str) else shown(found)
    if kind == "extra_forbidden":
        return (
            "unknown-key",
            one_of(str(where[-1]), known_keys(model, where[:-1], data)),
            shown(str(where[-1])),
        )
    if kind == "missing":
        return "missing-key", "this key", "nothing"
    found = shown(item["input"])
    if kind in {"literal_error", "enum"}:
        return "unknown-word", context["expected"], found
    if kind in _TYPES:
        return "wrong-type", _TYPES[kind], found
    if kind in _TAGS:
        tag = context["discriminator"]
        expected = f"{tag} to be one of {context['expected_tags']}" if "tag" in context else tag
        return "unknown-word", expected, shown(context.get("tag"))
    if kind == "too_short":
        return "empty-list", f"{context['min_length']} or more", found
    if kind == "value_error":
        return "wrong-value", str(context.get("error", item["msg"])), found
    return "wrong-value", item["msg"].removeprefix("Input should be "), found


_TAGS = frozenset({"union_tag_invalid", "union_tag_not_found"})
_TYPES = {
    "string_type": "text in quotes",
    "int_type": "a whole number",
    "int_parsing": "a whole number",
    "int_from_float": "a whole number",
    "float_type": "a number",
    "float_parsing": "a number",
    "finite_number": "a finite number",
    "bool_type": "true or false",
    "bool_parsing": "true or false",
    "list_type": "a list",
    "tuple_type": "a list",
    "set_type": "a list",
    "frozen_set_type": "a list",
    "dict_type": "a table",
    "model_type": "a table",
    "model_attributes_type": "a table",
    "dataclass_type": "a table",
    "date_type": "a date such as 2026-01-31",
    "date_parsing": "a date such as 2026-01-31",
    "date_from_datetime_parsing": "a date such as 2026-01-31",
    "date_from_datetime_inexact": "a date such as 2026-01-31",
    "datetime_type": "a date and time such as 2026-01-31T12:00:00Z",
    "datetime_parsing": "a date and time such as 2026-01-31T12:00:00Z",
}


def _path_in(data: Any, location: Sequence[int | str]) -> Location:
    """The location without the steps that are not in the file, such as a union's members."""
    path: list[int | str] = []
    here = data
    for index, step in enumerate(location):
        last = index == len(location) - 1
        if isinstance(here, Mapping) and step in here:
            here = here[str(step)]
        elif isinstance(here, list) and isinstance(step, int) and step < len(here):
            here = here[step]
        elif not (last and isinstance(here, Mapping) and isinstance(step, str)) or "[" in step:
            continue  # a member of a union, or "[key]"
        path.append(step)
    return tuple(path)


def _at(data: Any, path: Location) -> Any:
    here = data
    for step in path:
        if isinstance(here, Mapping):
            here = here.get(step)
        elif isinstance(here, list) and isinstance(step, int) and step < len(here):
            here = here[step]
        else:
            return None
    return here


def _remove(data: Any, path: Location) -> None:
    parent = _at(data, path[:-1])
    if isinstance(parent, dict):
        parent.pop(path[-1], None)
    elif isinstance(parent, list) and isinstance(path[-1], int):
        del parent[path[-1]]
