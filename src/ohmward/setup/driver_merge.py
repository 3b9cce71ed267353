"""Lays a driver file over the one that it extends, and fills its constants in."""

from collections.abc import Mapping
from copy import deepcopy
from pathlib import Path
from typing import Any

from ohmward.errors import Problems
from ohmward.setup.resources import shipped
from ohmward.setup.toml import read_toml

MOST_EXTENDS = 8


def find_driver(name_or_path: str, beside: Path) -> Path:
    """A shipped driver by its bare name, anything else as a path relative to ``beside``."""
    if name_or_path.endswith(".toml") or "/" in name_or_path or "\\" in name_or_path:
        return beside / name_or_path
    return shipped("drivers") / f"{name_or_path}.toml"


def merged_driver(path: Path, problems: Problems, seen: tuple[Path, ...]) -> dict[str, Any] | None:
    """The file's tables laid over those of what it extends."""
    own = read_toml(path, problems)
    if own is None:
        return None
    base_name = own.get("extends", "")
    if not isinstance(base_name, str) or not base_name:
        return own
    seen = (*seen, path.resolve())
    base_path = find_driver(base_name, path.parent)
    if base_path.resolve() in seen or len(seen) > MOST_EXTENDS:
        problems.add(
            id="driver-extends-itself",
            file=path,
            key="extends",
            expected="a driver that does not lead back to this one",
            found=base_name,
        )
        return None
    base = merged_driver(base_path, problems, seen)
    if base is None:
        return None
    return _laid_over(_without(base, own.get("without"), path, problems), own)


def _without(base: dict[str, Any], keys: Any, path: Path, problems: Problems) -> dict[str, Any]:
    """The base less the dotted keys that a variation does not take over."""
    for dotted in keys if isinstance(keys, list) else ():
        *tables, last = str(dotted).split(".")
        base = deepcopy(base)
        here: Any = base
        for table in tables:
            here = here.get(table) if isinstance(here, dict) else None
        if isinstance(here, dict) and last in here:
            del here[last]
        else:
            problems.add(
                id="driver-name-leads-nowhere",
                file=path,
                key="without",
                expected="a key of the driver that this one extends",
                found=dotted,
            )
    return base


def _laid_over(base: Mapping[str, Any], own: Mapping[str, Any]) -> dict[str, Any]:
    """Tables are merged key by key; anything else, lists included, is replaced."""
    merged = dict(base)
    for key, value in own.items():
        under = merged.get(key)
        if isinstance(value, dict) and isinstance(under, dict):
            merged[key] = _laid_over(under, value)
        else:
            merged[key] = value
    return merged


def fill_constants(value: Any, constants: Any) -> Any:
    """Put the driver's constants into every text; placeholders of other names stay."""
    if not isinstance(constants, dict) or not constants:
        return value
    if isinstance(value, str):
        for name, text in constants.items():
            value = value.replace(f"{{{name}}}", str(text))
        return value
    if isinstance(value, dict):
        return {
            key: inner if key == "constants" else fill_constants(inner, constants)
            for key, inner in value.items()
        }
    if isinstance(value, list):
        return [fill_constants(inner, constants) for inner in value]
    return value
