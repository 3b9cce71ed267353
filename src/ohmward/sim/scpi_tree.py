"""The command tree of a SCPI instrument: headers in, handlers with parsed parameters out."""

import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

from ohmward.sim.scpi_parameters import Number, Parameter, short_form, split_parameters
from ohmward.sim.scpi_status import ScpiError


@dataclass(slots=True)
class Later:
    """A command that takes time: it ends at ``due_s``, and ``finish(due_s)`` is its reply, if any.

    ``replies`` says beforehand whether there will be one.
    """

    due_s: float
    finish: Callable[[float], str | None]
    replies: bool = False


# A handler gets the time in seconds and the parsed parameters.
Outcome = str | Later | None
Handler = Callable[..., Outcome]

_NODE = re.compile(r"\[:?([A-Za-z]+):?\]|:?([A-Za-z]+)")
_HEADER = re.compile(
    r"(\*[A-Z]{3,12}|:?[A-Z][A-Z0-9_]*(?::[A-Z][A-Z0-9_]*)*)(\?)?(?:\s+(.*))?$", re.S
)
MNEMONIC_LENGTH = 12


@dataclass(frozen=True, slots=True)
class Unit:
    """One program message unit, ready to run: ``handler(now_s, *arguments)``."""

    handler: Handler
    arguments: tuple[object, ...]
    is_query: bool


@dataclass(frozen=True, slots=True)
class Refusal:
    """A unit that cannot run, and the error to note in its place."""

    error: ScpiError


@dataclass(slots=True)
class _Command:
    handler: Handler
    parameters: tuple[Parameter, ...]


@dataclass(slots=True)
class _Node:
    children: dict[str, "_Node"] = field(default_factory=dict)
    setting: _Command | None = None
    query: _Command | None = None


class CommandTree:
    """All commands of one instrument.

    A pattern is written as manuals write it: ``[SOURce:]VOLTage[:LEVel]`` sets and
    ``[SOURce:]VOLTage[:LEVel]?`` asks; ``*IDN?`` is a common command. Nodes in brackets may be
    left out, every mnemonic has its short and its long form.
    """

    def __init__(self) -> None:
        self._root = _Node()
        self._common: dict[str, _Command] = {}
        self._compiled: dict[bytes, tuple[Unit | Refusal, ...]] = {}

    def add(self, pattern: str, handler: Handler, *parameters: Parameter) -> None:
        """Add a command; a query's parameters are all optional when they are numbers."""
        command = _Command(handler, parameters)
        if pattern.startswith("*"):
            self._common[pattern.upper()] = command
            return
        is_query = pattern.endswith("?")
        for path in variants(pattern.rstrip("?")):
            self._insert(path, command, is_query)

    def _insert(self, path: Sequence[str], command: _Command, is_query: bool) -> None:
        node = self._root
        for mnemonic in path:
            child = node.children.setdefault(mnemonic.upper(), _Node())
            node.children[short_form(mnemonic)] = child
            node = child
        if is_query:
            node.query = command
        else:
            node.setting = command

    def compile(self, message: bytes) -> tuple[Unit | Refusal, ...]:
        """The units of one program message (without its terminator), remembered for next time.

        A syntax error ends the message, as the rest cannot be understood.
        """
        known = self._compiled.get(message)
        if known is not None:
            return known
        units = tuple(self._units(message))
        if len(self._compiled) > 4096:
            self._compiled.clear()
        self._compiled[message] = units
        return units

    def _units(self, message: bytes) -> list[Unit | Refusal]:
        try:
            text = message.decode("ascii")
        except UnicodeDecodeError:
            return [Refusal(ScpiError(-101))]
        found: list[Unit | Refusal] = []
        path = self._root
        for written in split_units(text):
            try:
                command, is_query, rest, path = self._locate(written, path)
                arguments = _arguments(command, split_parameters(rest), is_query)
            except ScpiError as error:
                found.append(Refusal(error))
                if error.number > -200:
                    break
            else:
                found.append(Unit(command.handler, arguments, is_query))
        return found

    def _locate(self, written: str, path: _Node) -> tuple[_Command, bool, str, _Node]:
        """The command that is meant, whether it asks, its parameters' text, and the path left."""
        found = _HEADER.match(written) or _HEADER.match(_upper_header(written))
        if found is None:
            raise ScpiError(-102 if written.isprintable() else -101, written)
        header, mark, rest = found.groups()
        is_query = mark is not None
        if header.startswith("*"):
            command = self._common.get(header + (mark or ""))
        else:
            command, path = self._find(header, is_query, path)
        if command is None:
            raise ScpiError(-113, header + (mark or ""))
        return command, is_query, (rest or "").strip(), path

    def _find(self, header: str, is_query: bool, path: _Node) -> tuple[_Command | None, _Node]:
        node = parent = self._root if header.startswith(":") else path
        for mnemonic in header.lstrip(":").split(":"):
            if len(mnemonic) > MNEMONIC_LENGTH:
                raise ScpiError(-113, mnemonic)
            child = node.children.get(mnemonic)
            if child is None and mnemonic.endswith("1"):
                child = node.children.get(mnemonic[:-1])  # an absent numeric suffix means 1
            if child is None:
                raise ScpiError(-113, header)
            parent, node = node, child
        return (node.query if is_query else node.setting), parent


def _upper_header(written: str) -> str:
    """The unit with its header in upper case; its parameters stay as they are."""
    header, space, rest = written.partition(" ")
    if "\t" in header:
        header, space, rest = written.partition("\t")
    return header.upper() + space + rest


def _arguments(command: _Command, written: Sequence[str], is_query: bool) -> tuple[object, ...]:
    """The parsed parameters; a query with a number in its pattern may name MIN, MAX or DEF."""
    wanted = command.parameters
    if len(written) > len(wanted):
        raise ScpiError(-108, written[len(wanted)])
    if is_query and not written and all(isinstance(each, Number) for each in wanted):
        return ()
    if len(written) < len(wanted):
        raise ScpiError(-109)
    if is_query and wanted and isinstance(wanted[0], Number):
        value = wanted[0].named(written[0].upper())
        if value is None:
            raise ScpiError(-104, written[0])
        return (value,)
    return tuple(each.parse(text) for each, text in zip(wanted, written, strict=True))


def variants(pattern: str) -> list[tuple[str, ...]]:
    """Every sequence of long mnemonics that a pattern stands for."""
    paths: list[tuple[str, ...]] = [()]
    for optional, needed in _NODE.findall(pattern):
        if optional:
            paths += [(*path, optional) for path in paths]
        else:
            paths = [(*path, needed) for path in paths]
    return paths


def split_units(text: str) -> list[str]:
    """The units of a message, split at the semicolons outside quotes."""
    if '"' not in text and "'" not in text:
        return [unit.strip() for unit in text.split(";") if unit.strip()]
    units: list[str] = []
    start = 0
    quote = ""
    for position, character in enumerate(text):
        if quote:
            quote = "" if character == quote else quote
        elif character in "\"'":
            quote = character
        elif character == ";":
            units.append(text[start:position].strip())
            start = position + 1
    units.append(text[start:].strip())
    return [unit for unit in units if unit]
