"""JSON Schema of the files that people write, made from the models that read them.

``register`` lets a room above add its own file (a sequence) without being imported here. The
schemas are kept as files under ``schemas/`` too, where each TOML's ``#:schema`` line finds
them; a test holds files and models together.
"""

import json
from collections.abc import Callable
from typing import Any

from pydantic import BaseModel

DIALECT = "https://json-schema.org/draft/2020-12/schema"

_MODELS: dict[str, Callable[[], type[BaseModel]]] = {}


def register(name: str, model: Callable[[], type[BaseModel]]) -> None:
    """Add the file kind ``name``; ``model`` returns its model when its schema is asked for."""
    _MODELS[name] = model


def names() -> tuple[str, ...]:
    """The kinds of file whose schema can be asked for."""
    return tuple(sorted(_MODELS))


def schema(name: str) -> dict[str, Any]:
    """The JSON Schema of a kind of file. Raises KeyError for a kind that is not registered."""
    model = _MODELS[name]()
    made = model.model_json_schema(by_alias=True)
    return {"$schema": DIALECT, **made, "title": f"ohmward {name}"}


def schema_text(name: str) -> str:
    """The schema as its file holds it: two spaces of indent, one newline at the end."""
    return json.dumps(schema(name), indent=2, ensure_ascii=False) + "\n"


def _bench() -> type[BaseModel]:
    from ohmward.setup.bench import Bench

    return Bench


def _driver() -> type[BaseModel]:
    from ohmward.setup.driver import Driver

    return Driver


def _standards() -> type[BaseModel]:
    from ohmward.setup.standards_file import Standards

    return Standards


register("bench", _bench)
register("driver", _driver)
register("standards", _standards)
