"""Finds which keys a model knows at a place in a file, to name the nearest one."""

from collections.abc import Mapping, Sequence
from types import UnionType
from typing import Annotated, Any, Union, get_args, get_origin

from pydantic import BaseModel

_UNIONS = (Union, UnionType)


def keys_of(model: type[BaseModel]) -> list[str]:
    """The keys that a table of this model may have: TOML names, so aliases first."""
    return [field.alias or name for name, field in model.model_fields.items()]


def known_keys(
    model: type[BaseModel], location: Sequence[int | str], data: Mapping[str, Any]
) -> list[str]:
    """The keys that the model knows at ``location`` of the file (``()`` is its top)."""
    places: list[Any] = [model]
    here: Any = data
    for step in location:
        places = [inner for place in places for inner in _inside(place, step)]
        if isinstance(here, Mapping):
            here = here.get(str(step))
        elif isinstance(here, list) and isinstance(step, int) and step < len(here):
            here = here[step]
    models = [place for place in places if _is_model(place)]
    chosen = _matching(models, here) if isinstance(here, Mapping) else models
    return list(dict.fromkeys(key for found in chosen for key in keys_of(found)))


def _is_model(place: Any) -> bool:
    return isinstance(place, type) and issubclass(place, BaseModel)


def _members(annotation: Any) -> list[Any]:
    """The annotation's alternatives, without Annotated and None."""
    origin = get_origin(annotation)
    if origin is Annotated:
        return _members(get_args(annotation)[0])
    if origin in _UNIONS:
        return [member for part in get_args(annotation) for member in _members(part)]
    return [] if annotation is type(None) else [annotation]


def _inside(place: Any, step: int | str) -> list[Any]:
    """What may stand under ``step`` of ``place``."""
    if _is_model(place):
        for name, field in place.model_fields.items():
            if step in (field.alias, name):
                return _members(field.annotation)
        return []
    arguments = get_args(place)
    if not arguments:
        return []
    value = arguments[-1] if isinstance(step, str) else arguments[0]
    return _members(value)


def _matching(models: list[type[BaseModel]], table: Mapping[str, Any]) -> list[type[BaseModel]]:
    """Of several models, those whose fixed words (``kind = "sweep"``) are the table's."""
    fitting = [
        model
        for model in models
        if all(
            table.get(field.alias or name) in get_args(field.annotation)
            for name, field in model.model_fields.items()
            if str(get_origin(field.annotation)) == "typing.Literal" and field.is_required()
        )
    ]
    return fitting or models
