"""What runner and warden say to each other, as frozen models that go through JSON unchanged."""

import json
from collections.abc import Mapping
from dataclasses import dataclass
from math import inf
from typing import ClassVar, Literal, Protocol, TypeAlias

from pydantic import ConfigDict, TypeAdapter

from ohmward.errors import ReplyMalformed
from ohmward.terms.status import Status

_LINE = ConfigDict(extra="forbid", ser_json_inf_nan="strings")


@dataclass(frozen=True, kw_only=True, slots=True)
class Hold:
    """Charge a part, soak it, read its current; then discharge it and prove it dead.

    Readings are taken ``every_s`` and at the times ``also_s``, counted from when the part's
    own voltage is within 1 % of the set voltage, or within ``within_rel`` where that is given:
    an oxide that forms draws current through the series resistor. ``measured_f`` is the part's
    capacitance, where a sweep has measured it. The part stops when its net current passes
    ``current_max_a`` or voltage × current passes ``power_max_w``.
    """

    __pydantic_config__: ClassVar[ConfigDict] = _LINE

    part_id: str
    position: str
    voltage_v: float
    ramp_v_per_s: float
    soak_s: float
    every_s: float
    also_s: tuple[float, ...] = ()
    measured_f: float | None = None
    within_rel: float | None = None
    current_max_a: float = inf
    power_max_w: float = inf


@dataclass(frozen=True, kw_only=True, slots=True)
class Recover:
    """Charge a part, short it for ``short_s``, and read what absorption brings back.

    The voltmeter is connected for the moments ``read_s`` only, counted from the end of the
    short.
    """

    __pydantic_config__: ClassVar[ConfigDict] = _LINE

    hold: Hold
    short_s: float
    read_s: tuple[float, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class Observation:
    """One reading under voltage, or of what came back after a short.

    ``current_a`` is as the meter read it; ``divider_a`` of it flows through the voltmeter's
    divider. What was not read is None.
    """

    __pydantic_config__: ClassVar[ConfigDict] = _LINE

    part_id: str
    position: str
    since_voltage_s: float
    voltage_set_v: float
    voltage_v: float
    current_a: float | None
    divider_a: float
    range_a: float | None
    status: Status
    voltage_reply: str = ""
    current_reply: str = ""


@dataclass(frozen=True, kw_only=True, slots=True)
class Directive:
    """The runner's answer to an observation: go on, stop, or go to another voltage."""

    __pydantic_config__: ClassVar[ConfigDict] = _LINE

    do: Literal["continue", "stop", "change"] = "continue"
    voltage_v: float | None = None
    soak_s: float | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class Held:
    """How a hold went. The part has been discharged and is proven dead.

    ``connection`` says what the charge drawn, or the charge given back, shows, and
    ``bypass_shown`` that the current meter was seen to be in the path; without both nothing
    that was read counts. ``stopped`` says why it ended early, else ''.
    """

    __pydantic_config__: ClassVar[ConfigDict] = _LINE

    part_id: str
    position: str
    reached: bool
    connection: str
    drawn_c: float
    decay: str
    bypass_shown: bool
    stopped: str = ""

    @property
    def counts(self) -> bool:
        """Whether readings of this hold may enter a decision."""
        return self.reached and self.bypass_shown and self.connection == "agrees"


@dataclass(frozen=True, kw_only=True, slots=True)
class Event:
    """A thing that happened, for the log and for events.csv."""

    __pydantic_config__: ClassVar[ConfigDict] = _LINE

    kind: str
    position: str
    detail: str


class Observer(Protocol):
    """The runner's side of a hold: an observation is answered once it is in the journal."""

    async def observe(self, observation: Observation) -> Directive:
        """Keep the observation, then say what to do next."""


class Events(Protocol):
    """Takes what happens, as it happens."""

    def happened(self, event: Event) -> None:
        """Note it; never fails, never waits."""


Message: TypeAlias = Hold | Recover | Observation | Directive | Held | Event

_KINDS: Mapping[str, TypeAdapter[Message]] = {
    kind.__name__: TypeAdapter(kind)
    for kind in (Hold, Recover, Observation, Directive, Held, Event)
}


def to_line(message: Message) -> bytes:
    """One JSON line: the message's name and its body."""
    name = type(message).__name__
    body = _KINDS[name].dump_json(message)
    return b'{"message":"' + name.encode() + b'","body":' + body + b"}\n"


def from_line(line: bytes) -> Message:
    """The message in a line; ReplyMalformed for anything that is not exactly one."""
    try:
        whole = json.loads(line)
        if not isinstance(whole, dict) or set(whole) != {"message", "body"}:
            raise ReplyMalformed(f"a line that is no message: {line[:200]!r}")
        return _KINDS[whole["message"]].validate_json(json.dumps(whole["body"]))
    except (ValueError, KeyError, TypeError) as error:
        raise ReplyMalformed(f"a line that is no message: {line[:200]!r}") from error
