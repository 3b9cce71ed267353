"""The JSON Schemas of the files that people write, for editors."""

from typing import Any

from ohmward.errors import BadInput, Problem
from ohmward.sequence.model import Sequence
from ohmward.setup.schema import names
from ohmward.setup.schema import schema as registered

__all__ = ["Sequence", "schema"]  # the sequence's model adds itself to the registry


def schema(name: str) -> dict[str, Any]:
    """The JSON Schema of a kind of file. Raises BadInput for a name that there is not."""
    if name not in names():
        expected = f"one of {', '.join(names())}"
        problem = Problem(
            id="unknown-schema", file="command line", key="NAME", expected=expected, found=name
        )
        raise BadInput((problem,))
    return registered(name)
