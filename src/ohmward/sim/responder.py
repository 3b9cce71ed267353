"""Answers for a home-made driver: an instrument made of nothing but the driver's own file.

It proves the sequence, not the driver: it understands exactly what the driver says, and answers as
the driver expects. What it measures is the simulated part without any error of its own.
"""

import re
from collections import deque
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from ohmward.sim.plain import quantity
from ohmward.sim.responder_roles import Behaviour
from ohmward.sim.responder_text import Numbers, ReplyWriter, switch_words, word_in

_PLACEHOLDER = re.compile(r"\{\{|\}\}|\{([a-z][a-z0-9_]*)\}|([^{}]+)")


@dataclass(frozen=True, slots=True)
class _Rule:
    """A message that is understood: its form, and what it does."""

    form: re.Pattern[str]
    act: Callable[[float, Mapping[str, str]], tuple[str | None, float]]
    """(time, placeholders) → (reply or None, when it is done)"""


class Responder:
    """A device core for a driver's merged data (plain TOML), with a role's behaviour behind it."""

    message_based = False

    def __init__(self, driver: Mapping[str, Any], serial_number: str, behaviour: Behaviour) -> None:
        self._driver = filled(driver)
        self._serial_number = serial_number
        self._behaviour = behaviour
        link = self._table("link")
        self._ends_reply = link.get("read_termination", "\n").encode("latin-1")
        # CR LF and LF are both seen as the end of a line when a line ends in LF
        self.ends_line = (link.get("write_termination", "\n") or "\n").encode("latin-1")[-1:]
        self._echo = bool(link.get("echo", False))
        self._prompt = str(link.get("prompt", "")).encode("latin-1")
        self._acknowledge = str(link.get("acknowledge", "")).encode("latin-1")
        self._refusals = tuple(link.get("refusals", ()))
        self._banner = bool(link.get("banner", False))
        self._is_scpi = self._driver.get("codec", "scpi") == "scpi"
        self._numbers = Numbers(self._table("numbers"))
        self._errors: deque[str] = deque(maxlen=20)
        self._input = bytearray()
        self._outgoing: deque[tuple[float, bytes]] = deque()
        self._free_s = 0.0
        self._rules: list[_Rule] = []
        self._values: dict[str, Any] = {}
        self._add_rules()

    def _table(self, name: str) -> dict[str, Any]:
        found = self._driver.get(name, {})
        return found if isinstance(found, dict) else {}

    # -- what is understood

    def _add_rules(self) -> None:
        identity = self._table("identity")
        if "identity" in self._driver:
            answer = self._identity(identity)
            self._add(identity.get("ask", "*IDN?"), lambda now_s, given: (answer, now_s))
        if "errors" in self._driver:
            self._add(self._table("errors").get("ask", "SYST:ERR?"), self._next_error)
        for name, setting in self._table("setting").items():
            self._add_setting(name, setting)
        for name, action in self._table("action").items():
            self._add_action(name, action)
        for name, reading in self._table("reading").items():
            if reading.get("ask"):
                self._add(reading["ask"], self._reading(name, reading))
        for wait in self._waits():
            self._add(wait["ask"], _answering(_done(wait)))
        # "U?" is a query even where "U{value}" would take it for a setting
        self._rules.sort(key=lambda rule: bool(rule.form.groups))

    def _add(
        self,
        template: str,
        act: Callable[[float, Mapping[str, str]], tuple[str | None, float]],
    ) -> None:
        self._rules.append(_Rule(form_of(template, any_case=self._is_scpi), act))

    def _identity(self, table: Mapping[str, Any]) -> str:
        """An answer that the driver's own rule for the identity accepts."""
        separator = table.get("separator", ",")
        if table.get("exactly"):
            fields = str(table["exactly"]).split(separator)
        elif table.get("fields"):
            fields = [field or "0" for field in table["fields"]]
        else:
            fields = str(table.get("starts_with", "")).split(separator)
            fields[-1] = fields[-1] or "SIMULATED"
        place = table.get("serial_field")
        if place and self._serial_number and not table.get("exactly"):
            fields += ["0"] * (place - len(fields))
            fields[place - 1] = self._serial_number
        return str(separator.join(fields))

    def _waits(self) -> list[dict[str, Any]]:
        tables = [*self._table("setting").values(), *self._table("action").values()]
        waits = [table.get("wait") for table in tables]
        return [wait for wait in waits if isinstance(wait, dict) and wait.get("ask")]

    def _add_setting(self, name: str, table: Mapping[str, Any]) -> None:
        kind = table.get("kind", "number")
        words = dict(
            table.get("words") or (switch_words(self._is_scpi) if kind == "switch" else {})
        )
        written = quantity((table.get("written") or {}).get("factor", 1.0))
        self._values[name] = self._first_value(table, kind, words)

        def put(now_s: float, given: Mapping[str, str]) -> tuple[str | None, float]:
            text = given["value"].strip().strip("\"'")
            if kind == "number":
                number = _number_in(text)
                value: Any = None if number is None else self._limited(table, number * written)
                if value is None:
                    self._refuse(-104 if number is None else -222)
                    return None, now_s
            else:
                value = word_in(words, text) if words else text
                if value is None:
                    self._refuse(-224)
                    return None, now_s
            self._values[name] = value
            self._behaviour.changed(name, now_s)
            return None, now_s

        layout = table.get("reply") or {"fields": [{**table, "name": "value"}]}
        writer = ReplyWriter(layout, self._numbers, self._driver)

        def ask(now_s: float, given: Mapping[str, str]) -> tuple[str | None, float]:
            return writer.write({"value": self._values[name]}), now_s

        def both(now_s: float, given: Mapping[str, str]) -> tuple[str | None, float]:
            put(now_s, given)
            return ask(now_s, given)

        for key, act in (("set", put), ("ask", ask), ("set_and_ask", both)):
            if table.get(key):
                self._add(table[key], act)

    def _first_value(self, table: Mapping[str, Any], kind: str, words: Mapping[str, str]) -> Any:
        if kind == "switch":
            return "off"
        if words:
            return next(iter(words))
        if kind == "number":
            allowed = table.get("allowed") or [table.get("minimum", 0.0)]
            return max(quantity(allowed[0]), 0.0)
        return ""

    def _limited(self, table: Mapping[str, Any], value: float) -> float | None:
        """The number as it is taken; None if it is out of range."""
        room = 1e-9 * abs(value)
        for key, sign in (("minimum", 1.0), ("maximum", -1.0)):
            if key in table and sign * (value - quantity(table[key])) < -room:
                return None
        allowed = [quantity(each) for each in table.get("allowed", ())]
        return min(allowed, key=lambda each: abs(each - value)) if allowed else value

    def _add_action(self, name: str, table: Mapping[str, Any]) -> None:
        writer = (
            ReplyWriter(table["reply"], self._numbers, self._driver) if table.get("reply") else None
        )

        def act(now_s: float, given: Mapping[str, str]) -> tuple[str | None, float]:
            done_s = self._behaviour.act(name, channels_in(given), now_s)
            if writer is None:
                return None, done_s
            return writer.write(self._behaviour.read(name, self._values, (), done_s)), done_s

        if table.get("send"):
            self._add(table["send"], act)

    def _reading(
        self, name: str, table: Mapping[str, Any]
    ) -> Callable[[float, Mapping[str, str]], tuple[str | None, float]]:
        writer = ReplyWriter(table, self._numbers, self._driver)

        def read(now_s: float, given: Mapping[str, str]) -> tuple[str | None, float]:
            done_s = now_s + self._duration_s()
            values = self._behaviour.read(name, self._values, channels_in(given), done_s)
            return writer.write(values), done_s

        return read

    def _duration_s(self) -> float:
        timing = self._table("timing")
        stated = quantity(timing.get("reading", {}).get(self._values.get("integration", ""), 0.0))
        frequency_hz = self._values.get("frequency") or 0.0
        periods = quantity(timing.get("least_periods", 0.0))
        return max(stated, periods / frequency_hz if frequency_hz else 0.0)

    def _next_error(self, now_s: float, given: Mapping[str, str]) -> tuple[str | None, float]:
        return (self._errors.popleft() if self._errors else '0,"No error"'), now_s

    def _refuse(self, number: int) -> None:
        texts = {-113: "Undefined header", -222: "Data out of range"}
        self._errors.append(f'{number},"{texts.get(number, "Illegal parameter value")}"')
        self._refused = True

    # -- the interface's side

    def opened(self, now_s: float) -> None:
        """A new connection, greeted if the driver says so."""
        self._input.clear()
        self._outgoing.clear()
        if self._banner:
            self._outgoing.append((now_s, b"READY" + self._ends_reply))

    def refuses(self, now_s: float) -> bool:
        """Never."""
        return False

    def hung_up(self, now_s: float) -> bool:
        """Never."""
        return False

    def receive(self, data: bytes, now_s: float) -> None:
        """Take bytes and answer each line that is whole."""
        self._input += data
        while (end := self._input.find(self.ends_line)) >= 0:
            line = bytes(self._input[: end + 1])
            del self._input[: end + 1]
            self._free_s = max(self._free_s, now_s)
            self._line(line)

    def _line(self, line: bytes) -> None:
        text = line.decode("latin-1").strip()
        if not text:
            return
        if self._echo:
            self._send(text.encode("latin-1") + self._ends_reply)
        replies = []
        self._refused = False
        for unit in self._units(text):
            reply = self._obey(unit)
            if reply is not None:
                replies.append(reply)
        if replies:
            self._send(";".join(replies).encode("ascii") + self._ends_reply)
        elif self._refused and self._refusals:
            self._send(str(self._refusals[0]).encode("latin-1") + self._ends_reply)
        elif self._acknowledge:
            self._send(self._acknowledge + self._ends_reply)
        if self._prompt:
            self._send(self._prompt)

    def _units(self, text: str) -> list[str]:
        """The commands of one line."""
        if not self._is_scpi:
            return [text]
        return [unit.strip().lstrip(":") for unit in text.split(";")]

    def understands(self, message: bytes) -> bool:
        """Whether the driver says something of every command of a message."""
        units = self._units(message.decode("latin-1").strip())
        return all(any(rule.form.fullmatch(unit) for rule in self._rules) for unit in units)

    def _obey(self, unit: str) -> str | None:
        for rule in self._rules:
            found = rule.form.fullmatch(unit)
            if found is not None:
                reply, self._free_s = rule.act(self._free_s, found.groupdict())
                return reply
        self._refuse(-113)
        return None

    def _send(self, data: bytes) -> None:
        self._outgoing.append((self._free_s, data))

    def due_s(self) -> float | None:
        """When the next reply is there."""
        return self._outgoing[0][0] if self._outgoing else None

    def take(self, now_s: float) -> bytes:
        """Every reply that is there by now."""
        taken = b""
        while self._outgoing and self._outgoing[0][0] <= now_s:
            taken += self._outgoing.popleft()[1]
        return taken

    def asked_in_vain(self, now_s: float) -> None:
        """Nothing to say."""

    def status_byte(self, now_s: float) -> int:
        """Message available, errors waiting."""
        available = bool(self._outgoing and self._outgoing[0][0] <= now_s)
        return 16 * available + 4 * bool(self._errors)

    def clear(self, now_s: float) -> None:
        """Forget input and output."""
        self._input.clear()
        self._outgoing.clear()
        self._free_s = now_s


def filled(driver: Mapping[str, Any]) -> dict[str, Any]:
    """The driver's data with its constants put into every text."""
    constants = driver.get("constants", {})

    def fill(value: Any) -> Any:
        if isinstance(value, str):
            for name, text in constants.items():
                value = value.replace(f"{{{name}}}", str(text))
            return value
        if isinstance(value, dict):
            return {key: fill(inner) for key, inner in value.items()}
        return [fill(inner) for inner in value] if isinstance(value, list) else value

    return {key: fill(value) for key, value in driver.items()}


def form_of(template: str, *, any_case: bool) -> re.Pattern[str]:
    """A pattern for what a command template can become; ``{value}`` stands for any text."""
    pieces: list[str] = []
    for found in _PLACEHOLDER.finditer(template.strip().lstrip(":")):
        name, literal = found.groups()
        if name:
            pieces.append(f"(?P<{name}>.+)")
        else:
            pieces.append(re.escape(literal if literal is not None else found[0][0]))
    return re.compile("".join(pieces), re.IGNORECASE if any_case else 0)


def channels_in(given: Mapping[str, str]) -> tuple[str, ...]:
    """The channels that a message names."""
    text = given.get("channels") or given.get("channel") or ""
    return tuple(re.findall(r"[A-Za-z0-9][A-Za-z0-9_.!-]*", text))


def _number_in(text: str) -> float | None:
    try:
        return float(text)
    except ValueError:
        return None


def _done(wait: Mapping[str, Any]) -> str:
    """The answer that means done."""
    if wait.get("until"):
        return str(wait["until"])
    bit = int(wait.get("bit") or 0)
    return str(1 << bit) if wait.get("bit_is", True) else "0"


def _answering(
    answer: str,
) -> Callable[[float, Mapping[str, str]], tuple[str | None, float]]:
    return lambda now_s, given: (answer, now_s)
