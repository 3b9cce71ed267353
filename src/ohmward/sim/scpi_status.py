"""The status side of IEEE 488.2 and SCPI-1999: error queue, event registers, status byte."""

from collections import deque
from dataclasses import dataclass, field

ERROR_TEXTS = {
    0: "No error",
    -100: "Command error",
    -101: "Invalid character",
    -102: "Syntax error",
    -103: "Invalid separator",
    -104: "Data type error",
    -108: "Parameter not allowed",
    -109: "Missing parameter",
    -113: "Undefined header",
    -114: "Header suffix out of range",
    -121: "Invalid character in number",
    -128: "Numeric data not allowed",
    -131: "Invalid suffix",
    -138: "Suffix not allowed",
    -141: "Invalid character data",
    -148: "Character data not allowed",
    -151: "Invalid string data",
    -158: "String data not allowed",
    -171: "Invalid expression",
    -178: "Expression data not allowed",
    -200: "Execution error",
    -203: "Command protected",
    -221: "Settings conflict",
    -222: "Data out of range",
    -224: "Illegal parameter value",
    -230: "Data corrupt or stale",
    -241: "Hardware missing",
    -350: "Queue overflow",
    -363: "Input buffer overrun",
    -400: "Query error",
    -410: "Query INTERRUPTED",
    -420: "Query UNTERMINATED",
    -430: "Query DEADLOCKED",
}

# bits of the standard event status register
OPERATION_COMPLETE = 0x01
QUERY_ERROR = 0x04
DEVICE_ERROR = 0x08
EXECUTION_ERROR = 0x10
COMMAND_ERROR = 0x20
POWER_ON = 0x80

# bits of the status byte
ERROR_AVAILABLE = 0x04
QUESTIONABLE_SUMMARY = 0x08
MESSAGE_AVAILABLE = 0x10
EVENT_SUMMARY = 0x20
MASTER_SUMMARY = 0x40
OPERATION_SUMMARY = 0x80

QUEUE_LENGTH = 20


class ScpiError(Exception):
    """A command cannot be obeyed; ``number`` goes into the error queue."""

    def __init__(self, number: int, detail: str = "") -> None:
        super().__init__(f"{number} {ERROR_TEXTS.get(number, '')} {detail}".rstrip())
        self.number = number
        self.detail = detail


def event_bit(number: int) -> int:
    """The bit of the event status register that an error sets (SCPI-1999 volume 2, 21.8)."""
    if -199 <= number <= -100:
        return COMMAND_ERROR
    if -299 <= number <= -200:
        return EXECUTION_ERROR
    if -499 <= number <= -400:
        return QUERY_ERROR
    return DEVICE_ERROR


@dataclass(slots=True)
class EventRegister:
    """A SCPI condition register with its event and enable registers (both edges latch rising)."""

    condition: int = 0
    event: int = 0
    enable: int = 0

    def set_condition(self, condition: int) -> None:
        """Take the present condition; what has risen is latched into the event register."""
        self.event |= condition & ~self.condition
        self.condition = condition

    def read_event(self) -> int:
        """The event register, which reading clears."""
        event, self.event = self.event, 0
        return event

    @property
    def summary(self) -> bool:
        """Whether an enabled event is latched."""
        return bool(self.event & self.enable)


@dataclass(slots=True)
class Status:
    """All status of one instrument."""

    errors: deque[str] = field(default_factory=deque)
    standard_event: int = POWER_ON
    standard_enable: int = 0
    service_enable: int = 0
    operation: EventRegister = field(default_factory=EventRegister)
    questionable: EventRegister = field(default_factory=EventRegister)
    _asserted: int = 0
    _requested: bool = False

    def note(self, number: int, detail: str = "") -> None:
        """Put an error into the queue; the last entry of a full one becomes −350."""
        self.standard_event |= event_bit(number)
        if len(self.errors) >= QUEUE_LENGTH:
            self.standard_event |= event_bit(-350)
            self.errors[-1] = f'-350,"{ERROR_TEXTS[-350]}"'
            return
        text = ERROR_TEXTS.get(number, "Device-specific error")
        detail = detail.replace('"', "'")[:60]
        self.errors.append(f'{number},"{text};{detail}"' if detail else f'{number},"{text}"')

    def next_error(self) -> str:
        """The oldest error, taken out of the queue; ``0,"No error"`` when there is none."""
        return self.errors.popleft() if self.errors else '0,"No error"'

    def clear(self) -> None:
        """What *CLS clears: events and errors, never the enable registers."""
        self.errors.clear()
        self.standard_event = 0
        self.operation.event = 0
        self.questionable.event = 0

    def read_standard_event(self) -> int:
        """The standard event status register, which reading clears."""
        event, self.standard_event = self.standard_event, 0
        return event

    def byte(self, message_available: bool) -> int:
        """The status byte as ``*STB?`` answers it, bit 6 being the master summary."""
        value = ERROR_AVAILABLE if self.errors else 0
        if self.questionable.summary:
            value |= QUESTIONABLE_SUMMARY
        if message_available:
            value |= MESSAGE_AVAILABLE
        if self.standard_event & self.standard_enable:
            value |= EVENT_SUMMARY
        if self.operation.summary:
            value |= OPERATION_SUMMARY
        if value & self.service_enable & ~MASTER_SUMMARY:
            value |= MASTER_SUMMARY
        return value

    def polled_byte(self, message_available: bool) -> int:
        """The status byte as a serial poll reads it: bit 6 says that service is requested.

        A new reason for service requests it; the poll that reads the request takes it back
        (IEEE 488.2 §11.3.3).
        """
        value = self.byte(message_available) & ~MASTER_SUMMARY
        reasons = value & self.service_enable & ~MASTER_SUMMARY
        if reasons & ~self._asserted:
            self._requested = True
        if not reasons:
            self._requested = False
        self._asserted = reasons
        if self._requested:
            value |= MASTER_SUMMARY
            self._requested = False
        return value
