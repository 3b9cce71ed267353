"""A layer of faults around a device core: what instruments and links do when they misbehave.

The layer is itself a device core, so the same fault happens in process and behind a server. Each
fault waits for the messages that it concerns: ``after`` of them pass unharmed, then it
strikes ``times`` in a row.
"""

import random
from collections import deque
from collections.abc import Callable, Iterable
from dataclasses import dataclass

from ohmward.sim.device import Device
from ohmward.sim.mutations import MUTATIONS, clamp, sets

KINDS: dict[str, str] = {
    "late": "the reply comes delay_s late",
    "split": "the second half of the reply comes delay_s after the first",
    "trickle": "the reply comes byte by byte, delay_s apart",
    "jitter": "the reply comes up to delay_s late, each time differently",
    "lost": "some bytes in the middle of the reply are lost",
    "truncated": "the reply ends early, properly terminated",
    "unterminated": "the reply ends early, without its termination",
    "garbage": "other bytes come in place of the reply",
    "non-ascii": "one character of the reply is no ASCII",
    "comma": "the reply has decimal commas",
    "unsolicited": "a line that nobody asked for comes before the reply",
    "banner": "a greeting comes when the instrument is connected next",
    "stale": "the reply is the last one to the same query",
    "previous": "the reply is the one to the query before",
    "silent": "no reply comes, but the command is obeyed",
    "clamped": "a number that is set is halved, and nothing is said",
    "identity": "after the next connection another serial number answers",
    "busy": "the message is obeyed delay_s later",
    "queue-overflow": "the error queue is full",
    "babbling": "bytes come without end until the next connection",
    "dead": "nothing is received or sent any more until the next connection",
    "disconnect": "the connection drops, and none is accepted for delay_s",
}
SETTING_KINDS = frozenset({"clamped"})
OPENING_KINDS = frozenset({"banner", "identity"})
BABBLE_S = 0.005
GREETING = b"MEASURING INSTRUMENT READY\r\n"


@dataclass(kw_only=True, slots=True)
class Fault:
    """One fault that is to happen; ``matching`` restricts it to messages that hold these bytes."""

    kind: str
    after: int = 0
    times: int = 1
    delay_s: float = 1.0
    matching: bytes = b""

    def __post_init__(self) -> None:
        if self.kind not in KINDS:
            raise ValueError(f"no fault is called {self.kind!r}; there are {', '.join(KINDS)}")

    def strikes(self, message: bytes) -> bool:
        """Whether it strikes this message; counts it."""
        if self.times <= 0 or self.kind in OPENING_KINDS or self.matching not in message:
            return False
        if not (sets(message) if self.kind in SETTING_KINDS else b"?" in message):
            return False
        if self.after > 0:
            self.after -= 1
            return False
        self.times -= 1
        return True


@dataclass(frozen=True, kw_only=True, slots=True)
class Chance:
    """Faults at random: each message meets one of the ``kinds`` that fit it with this ``share``."""

    kinds: tuple[str, ...]
    share: float
    delay_s: float = 1.0

    @property
    def on_queries(self) -> tuple[str, ...]:
        """The kinds that concern queries."""
        return tuple(
            kind for kind in self.kinds if kind not in SETTING_KINDS and kind not in OPENING_KINDS
        )

    @property
    def on_settings(self) -> tuple[str, ...]:
        """The kinds that concern settings."""
        return tuple(kind for kind in self.kinds if kind in SETTING_KINDS)


class FaultLayer:
    """Wraps a device core; harmless until a fault is given to it."""

    def __init__(self, device: Device, seed: int = 0) -> None:
        self.device = device
        self.struck: list[tuple[float, str]] = []
        """What has happened: instant and kind."""
        self._seed = seed
        self._faults: list[Fault] = []
        self._chance: Chance | None = None
        self._draws = 0
        self._input = bytearray()
        self._held: deque[tuple[float, bytes]] = deque()
        self._pending: deque[tuple[bytes, Fault | None]] = deque()
        self._outgoing: deque[tuple[float, bytes]] = deque()
        self._replies: dict[bytes, bytes] = {}
        self._previous = b""
        self._echo = (b"", b"")
        self._false_identity = False
        self._babbles_s: float | None = None
        self._dead = False
        self._hung_up = False
        self._back_s = float("-inf")

    def inject(self, *faults: Fault) -> None:
        """Let these faults happen as well."""
        self._faults.extend(faults)

    def at_random(self, chance: Chance | None) -> None:
        """Let faults happen at random from now on; None: no longer."""
        self._chance = chance

    @property
    def ends_line(self) -> bytes:
        """As the core inside."""
        return self.device.ends_line

    @property
    def message_based(self) -> bool:
        """As the core inside."""
        return self.device.message_based

    @message_based.setter
    def message_based(self, value: bool) -> None:
        self.device.message_based = value

    # -- connections

    def opened(self, now_s: float) -> None:
        """A new connection: what was wrong with the last one is over."""
        self._advance(now_s)
        self._input.clear()
        self._outgoing.clear()
        self._pending.clear()
        self._babbles_s = None
        self._dead = self._hung_up = False
        self.device.opened(now_s)
        for fault in self._faults:
            if fault.kind in OPENING_KINDS and fault.times > 0:
                if fault.after > 0:
                    fault.after -= 1
                    continue
                fault.times -= 1
                self.struck.append((now_s, fault.kind))
                if fault.kind == "banner":
                    self._outgoing.append((now_s, GREETING))
                else:
                    self._false_identity = True

    def refuses(self, now_s: float) -> bool:
        """True while a dropped connection cannot be made again."""
        return now_s < self._back_s or self.device.refuses(now_s)

    def hung_up(self, now_s: float) -> bool:
        """True after a drop, until the next connection."""
        return self._hung_up or self.device.hung_up(now_s)

    # -- bytes

    def receive(self, data: bytes, now_s: float) -> None:
        """Pass whole messages on, unless a fault has other plans."""
        self._advance(now_s)
        if self._dead or self._hung_up:
            return
        if not self._held and self.device.due_s() is None:
            self._pending.clear()  # what was not answered by now never will be
        self._input += data
        *lines, rest = self._input.split(self.ends_line)
        self._input = rest
        for line in lines:
            self._message(bytes(line) + self.ends_line, now_s)
        self._advance(now_s)

    def _message(self, message: bytes, now_s: float) -> None:
        fault = self._fault_for(message)
        if fault is not None:
            self.struck.append((now_s, fault.kind))
            message, passes = self._before(fault, message, now_s)
            if not passes:
                return
        if self.device.message_based:
            self._pending.clear()
            self._outgoing.clear()
        if b"?" in message:
            self._pending.append((message, fault))
        if fault is not None and fault.kind == "busy":
            self._held.append((now_s + fault.delay_s, message))
        elif self._held:  # the instrument obeys in order
            self._held.append((self._held[-1][0], message))
        else:
            self.device.receive(message, now_s)

    def _before(self, fault: Fault, message: bytes, now_s: float) -> tuple[bytes, bool]:
        """What a fault does before the message is obeyed: the message, and whether it is."""
        if fault.kind == "clamped":
            clamped = clamp(message)
            self._echo = (clamped.strip(), message.strip())
            return clamped, True
        if fault.kind == "queue-overflow":
            self.device.receive(b"NO:SUCH:COMMAND\n" * 40, now_s)
        elif fault.kind == "dead":
            self._dead = True
            self._outgoing.clear()
        elif fault.kind == "babbling":
            self._babbles_s = now_s
        elif fault.kind == "disconnect":
            self._hung_up = True
            self._back_s = now_s + fault.delay_s
            self._outgoing.clear()
            self._pending.clear()
        return message, fault.kind not in ("dead", "disconnect")

    def _fault_for(self, message: bytes) -> Fault | None:
        for fault in self._faults:
            if fault.strikes(message):
                return fault
        chance = self._chance
        if chance is None:
            return None
        fitting = chance.on_queries if b"?" in message else chance.on_settings
        if not fitting or not (b"?" in message or sets(message)):
            return None
        draw = self._draw()
        if draw.random() >= chance.share:
            return None
        return Fault(kind=draw.choice(fitting), times=0, delay_s=chance.delay_s)

    def _draw(self) -> random.Random:
        """Random numbers for one event, the same for the same seed and count of events."""
        self._draws += 1
        return random.Random(f"{self._seed} {self._draws}")

    def _advance(self, now_s: float) -> None:
        """Let the core do what it has done by now, and shape its replies."""
        while self._held and self._held[0][0] <= now_s:
            at_s, message = self._held.popleft()
            self._collect(at_s)
            self.device.receive(message, at_s)
        self._collect(now_s)

    def _collect(self, now_s: float) -> None:
        while True:
            due_s = self.device.due_s()
            if due_s is None or due_s > now_s:
                return
            data = self.device.take(due_s)
            if not data:
                return
            for reply in _replies_in(data):
                self._shape(reply, due_s)

    def _shape(self, reply: bytes, at_s: float) -> None:
        """Turn one reply into what leaves the instrument, and when."""
        clamped, said = self._echo
        if clamped and reply.startswith(clamped):  # it echoes what it was sent, not what it does
            reply = said + reply[len(clamped) :]
        self._echo = (b"", b"")
        if self._pending:
            message, fault = self._pending.popleft()
        else:  # it speaks unasked, or acknowledges
            message, fault = b"?", self._fault_for(b"?")
            if fault is not None:
                self.struck.append((at_s, fault.kind))
                self._before(fault, message, at_s)
        if self._dead or self._hung_up:
            return
        if self._false_identity and message.strip().upper() == b"*IDN?":
            fields = reply.rstrip(b"\n").split(b",")
            reply = b",".join((*fields[:2], b"999999", *fields[3:])) + b"\n"
        sent = self._faulted(reply, message, fault, at_s) if fault else [(at_s, reply)]
        self._replies[message] = reply
        self._previous = reply
        last_s = self._outgoing[-1][0] if self._outgoing else at_s
        for due_s, data in sent:
            last_s = max(last_s, due_s)
            self._outgoing.append((last_s, data))

    def _faulted(
        self, reply: bytes, message: bytes, fault: Fault, at_s: float
    ) -> list[tuple[float, bytes]]:
        delay_s = fault.delay_s
        timed: dict[str, Callable[[], list[tuple[float, bytes]]]] = {
            "late": lambda: [(at_s + delay_s, reply)],
            "jitter": lambda: [(at_s + delay_s * self._draw().random(), reply)],
            "split": lambda: [
                (at_s, reply[: len(reply) // 2]),
                (at_s + delay_s, reply[len(reply) // 2 :]),
            ],
            "trickle": lambda: [(at_s + delay_s * n, reply[n : n + 1]) for n in range(len(reply))],
            "unsolicited": lambda: [(at_s, b"+1.000000E+00\n"), (at_s, reply)],
            "silent": lambda: [],
            "stale": lambda: [(at_s, self._replies.get(message, reply))],
            "previous": lambda: [(at_s, self._previous or reply)],
        }
        if fault.kind in timed:
            return timed[fault.kind]()
        mutate = MUTATIONS.get(fault.kind)
        return [(at_s, mutate(reply, self._draw()) if mutate else reply)]

    def due_s(self) -> float | None:
        """When the next byte is there, as far as can be said now."""
        if self._dead or self._hung_up:
            return None
        times: Iterable[float | None] = (
            self._outgoing[0][0] if self._outgoing else None,
            self.device.due_s(),
            self._held[0][0] if self._held and self._pending else None,
            self._babbles_s + BABBLE_S if self._babbles_s is not None else None,
        )
        return min((each for each in times if each is not None), default=None)

    def take(self, now_s: float) -> bytes:
        """Every byte that has left by now."""
        self._advance(now_s)
        if self._dead or self._hung_up:
            return b""
        taken = bytearray()
        while self._outgoing and self._outgoing[0][0] <= now_s:
            taken += self._outgoing.popleft()[1]
        if self._babbles_s is not None:
            count = int((now_s - self._babbles_s) / BABBLE_S + 1e-6)
            self._babbles_s += count * BABBLE_S
            taken += b"x" * min(count, 4096)
        return bytes(taken)

    def asked_in_vain(self, now_s: float) -> None:
        """Passed on, unless the core is dead."""
        if not self._dead:
            self.device.asked_in_vain(now_s)

    def status_byte(self, now_s: float) -> int:
        """The core's."""
        self._advance(now_s)
        return self.device.status_byte(now_s)

    def clear(self, now_s: float) -> None:
        """Device clear; a dead instrument does not hear it."""
        self._advance(now_s)
        if not self._dead:
            self._outgoing.clear()
            self._pending.clear()
            self._held.clear()
            self._input.clear()
            self.device.clear(now_s)


def _replies_in(data: bytes) -> list[bytes]:
    """The lines of a text; what is no text, or has no lines, is one reply."""
    if not data.isascii() or not data.endswith(b"\n"):
        return [data]
    return [line + b"\n" for line in data[:-1].split(b"\n")]
