"""Command templates: text with ``{placeholders}``, checked when the driver file is read."""

import re
from collections.abc import Mapping
from dataclasses import dataclass

_PIECE = re.compile(r"\{\{|\}\}|\{([^{}]*)\}|[{}]|[^{}]+")
_NAME = re.compile(r"[a-z][a-z0-9_]*")


class TemplateError(ValueError):
    """The template is not well formed: ``expected`` says what would be, ``found`` what is there."""

    def __init__(self, expected: str, found: str) -> None:
        super().__init__(f"expected {expected}, found {found}")
        self.expected = expected
        self.found = found


@dataclass(frozen=True, slots=True)
class Template:
    """A command taken apart: literal pieces and placeholders in turn.

    ``literals`` has one entry more than ``names``: literal, name, literal, name, …, literal.
    """

    text: str
    literals: tuple[str, ...]
    names: tuple[str, ...]

    def fill(self, values: Mapping[str, str]) -> str:
        """The command with each placeholder replaced; KeyError for one that has no value."""
        filled = [self.literals[0]]
        for name, literal in zip(self.names, self.literals[1:], strict=True):
            filled += (values[name], literal)
        return "".join(filled)


def read_template(text: str) -> Template:
    """Take a template apart; ``{{`` and ``}}`` stand for braces. Raises TemplateError.

    A placeholder is lower-case letters, digits and underscores between braces, such as
    ``{value}``; there is nothing more to the syntax.
    """
    literals = [""]
    names: list[str] = []
    for piece in _PIECE.finditer(text):
        whole, name = piece[0], piece[1]
        if whole in ("{{", "}}"):
            literals[-1] += whole[0]
        elif name is not None:
            if not _NAME.fullmatch(name):
                raise TemplateError("a placeholder such as {value}", f"{whole} in '{text}'")
            names.append(name)
            literals.append("")
        elif whole in ("{", "}"):
            raise TemplateError(f"{whole * 2} for a brace", f"a lone {whole} in '{text}'")
        else:
            literals[-1] += whole
    return Template(text, tuple(literals), tuple(names))
