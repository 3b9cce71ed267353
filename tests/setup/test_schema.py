"""Schemas, models and shipped files hold together."""

import json
import re
import tomllib
from pathlib import Path
from typing import Any

import jsonschema
import pytest
from pydantic import BaseModel

import ohmward.sequence.model  # noqa: F401 - it registers its schema
from ohmward.setup.resources import shipped
from ohmward.setup.schema import names, register, schema

HEAD = re.compile(r"\A#:schema (\.\./schemas/(\w+)\.json)\n")
SHIPPED = sorted(
    path
    for folder in ("drivers", "sequences", "simulators")
    for path in shipped(folder).glob("*.toml")
    if folder != "simulators" or "bench" in path.stem
)


def plain(table: dict[str, Any]) -> Any:
    """The TOML table as JSON has it: dates are text."""
    return json.loads(json.dumps(table, default=str))


def test_there_is_something_to_check() -> None:
    assert {"bench", "driver", "sequence"} <= set(names())
    assert {path.parent.name for path in SHIPPED} == {"drivers", "sequences", "simulators"}


@pytest.mark.parametrize("name", ["bench", "driver", "sequence"])
def test_the_schema_file_is_the_models_schema(name: str) -> None:
    stored = json.loads((shipped("schemas") / f"{name}.json").read_text(encoding="utf-8"))
    jsonschema.Draft202012Validator.check_schema(stored)
    assert stored == schema(name), f"renew it: ohmward schema {name} > schemas/{name}.json"


@pytest.mark.parametrize("path", SHIPPED, ids=lambda path: path.name)
def test_a_shipped_file_names_its_schema_and_keeps_to_it(path: Path) -> None:
    text = path.read_text(encoding="utf-8")
    head = HEAD.match(text)
    assert head is not None, f"{path.name} starts with no #:schema line"
    stored = json.loads((path.parent / head[1]).read_text(encoding="utf-8"))
    validator = jsonschema.Draft202012Validator(stored)
    errors = [error.message for error in validator.iter_errors(plain(tomllib.loads(text)))]
    assert errors == []


@pytest.mark.parametrize(
    ("name", "change"),
    [
        ("bench", {"nmae": "x"}),
        ("bench", {"format": 2}),
        ("bench", {"bias_ceiling": 40}),
        ("bench", {"fixture": {"loading": "hand"}}),
    ],
)
def test_an_editor_is_told_what_the_model_refuses(name: str, change: dict[str, Any]) -> None:
    good = plain(tomllib.loads((shipped("simulators") / "depot-bench.toml").read_text("utf-8")))
    validator = jsonschema.Draft202012Validator(schema(name))
    assert list(validator.iter_errors(good)) == []
    assert list(validator.iter_errors({**good, **change}))


def test_a_room_above_adds_its_own_kind_of_file() -> None:
    class Note(BaseModel):
        text: str

    register("note", lambda: Note)
    assert schema("note")["required"] == ["text"]


def test_an_unknown_kind_of_file_is_an_error() -> None:
    with pytest.raises(KeyError):
        schema("nothing")
