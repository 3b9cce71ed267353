"""A SCPI instrument without its subject: message exchange, common commands, status, timing."""

from collections import deque
from collections.abc import Callable

from ohmward.sim.scpi_parameters import Number, Parameter, Whole
from ohmward.sim.scpi_status import OPERATION_COMPLETE, EventRegister, ScpiError, Status
from ohmward.sim.scpi_tree import CommandTree, Later, Refusal, Unit

INPUT_BUFFER = 65536
_BYTE = Whole(minimum=0, maximum=255)
_WORD = Whole(minimum=0, maximum=32767)


def format_number(value: float) -> str:
    """NR3 with seven digits, as every simulated instrument answers: ``+1.234567E-07``."""
    return f"{value:+.6E}"


class ScpiDevice:
    """Executes program messages one after another, each command at its own instant.

    A command may take time (``Later``): what follows waits in the input buffer. An operation
    may also go on while other commands are obeyed: ``begin_operation`` says until when, and
    ``*OPC``, ``*OPC?`` and ``*WAI`` wait for it.
    """

    message_based = False
    ends_line = b"\n"

    def __init__(self, kind: str, serial_number: str) -> None:
        self.identity = f"GENERIC,{kind},{serial_number},1.0"
        self.status = Status()
        self.tree = CommandTree()
        self._input = bytearray()
        self._messages: deque[bytes] = deque()
        self._units: deque[Unit | Refusal] = deque()
        self._replies: list[str] = []
        self._in_message = False
        self._unwanted = 0
        self._running: Later | None = None
        self._output = bytearray()
        self._operation_ends_s = 0.0
        self._completion_asked = False
        self._clock_s = 0.0
        self._add_common_commands()

    # -- what a kind of instrument adds

    def heard(self, now_s: float) -> None:
        """A message is about to be obeyed."""

    def reset(self, now_s: float) -> None:
        """What *RST does beyond ending pending operations; each kind adds its own."""

    def add_setting(
        self,
        pattern: str,
        parameter: Parameter,
        get: Callable[[], str],
        put: Callable[[float, object], None],
    ) -> None:
        """A command that sets one value and its query, MIN, MAX and DEF included."""

        def ask(now_s: float, limit: float | None = None) -> str:
            return get() if limit is None else format_number(limit)

        def take(now_s: float, value: object) -> None:
            put(now_s, value)

        self.tree.add(pattern, take, parameter)
        if isinstance(parameter, Number):
            self.tree.add(pattern + "?", ask, parameter)
        else:
            self.tree.add(pattern + "?", ask)

    def begin_operation(self, ends_s: float) -> None:
        """An operation goes on until ``ends_s`` while further commands are obeyed."""
        self._operation_ends_s = max(self._operation_ends_s, ends_s)

    # -- the interface's side

    def opened(self, now_s: float) -> None:
        """A controller has connected.

        Commands of the last connection are still obeyed, but nobody gets their answers.
        """
        self._advance(now_s)
        self._input.clear()
        self._output.clear()
        self._unwanted = len(self._messages) + self._in_message

    def refuses(self, now_s: float) -> bool:
        """Never: this instrument is there."""
        return False

    def hung_up(self, now_s: float) -> bool:
        """Never: this instrument keeps its connections."""
        return False

    def receive(self, data: bytes, now_s: float) -> None:
        """Take bytes; every line is a program message."""
        if self._running is not None or self._completion_asked:
            self._advance(now_s)
        if self.message_based and data:
            self._interrupt()
        if self._running is None:
            self._clock_s = max(self._clock_s, now_s)
        if not self._input and data and data.find(b"\n") == len(data) - 1:  # the usual case
            self._messages.append(data)
        else:
            self._input += data
            *lines, rest = self._input.split(b"\n")
            self._messages.extend(bytes(line) for line in lines)
            self._input = rest
            if len(rest) > INPUT_BUFFER:
                self._input.clear()
                self.status.note(-363)
        self._advance(now_s)

    def understands(self, message: bytes) -> bool:
        """Whether every command of a message is known here."""
        units = self.tree.compile(message)
        return not any(isinstance(unit, Refusal) and unit.error.number == -113 for unit in units)

    def due_s(self) -> float | None:
        """When the next reply is there, if one is on its way."""
        if self._output:
            return self._clock_s
        running = self._running
        if running is None or self._unwanted > len(self._messages):
            return None
        if running.replies or self._replies or self._query_waits():
            return running.due_s
        return None

    def take(self, now_s: float) -> bytes:
        """Every reply byte that is there by now."""
        running = self._running
        if running is not None and running.due_s <= now_s:
            self._advance(now_s)
        if not self._output:
            return b""
        data = bytes(self._output)
        self._output.clear()
        return data

    def asked_in_vain(self, now_s: float) -> None:
        """Nothing was asked, or what was asked is not finished: a query error either way."""
        self._advance(now_s)
        if self._running is None and not self._output:
            self.status.note(-420)

    def status_byte(self, now_s: float) -> int:
        """The status byte, as a serial poll reads it."""
        self._advance(now_s)
        return self.status.polled_byte(bool(self._output))

    def clear(self, now_s: float) -> None:
        """Device clear: input, output and what is being executed are dropped; settings stay."""
        self._advance(now_s)
        self._input.clear()
        self._messages.clear()
        self._units.clear()
        self._replies.clear()
        self._output.clear()
        self._running = None
        self._in_message = False
        self._unwanted = 0
        self._completion_asked = False

    # -- execution

    def _interrupt(self) -> None:
        """A new message arrives before the last reply was read: IEEE 488.2 §6.3.2.3."""
        running = self._running
        pending = running is not None and (running.replies or self._replies)
        if self._output or pending:
            self.status.note(-410)
            self._output.clear()
            self._units.clear()
            self._replies.clear()
            self._running = None
            self._in_message = False

    def _query_waits(self) -> bool:
        if any(isinstance(unit, Unit) and unit.is_query for unit in self._units):
            return True
        return any(b"?" in message for message in self._messages)

    def _advance(self, now_s: float) -> None:
        """Execute whatever can be executed by now."""
        while True:
            running = self._running
            if running is not None:
                if running.due_s > now_s:
                    break
                self._clock_s = max(self._clock_s, running.due_s)
                self._running = None
                self._reply(running.finish(running.due_s))
            elif self._units:
                self._execute(self._units.popleft())
            elif self._in_message:
                self._end_message()
            elif self._messages:
                self._in_message = True
                self.heard(self._clock_s)
                self._units.extend(self.tree.compile(self._messages.popleft()))
            else:
                break
        if self._completion_asked and now_s >= self._operation_ends_s:
            self._completion_asked = False
            self.status.standard_event |= OPERATION_COMPLETE

    def _end_message(self) -> None:
        """Every unit is executed: the replies leave as one message."""
        self._in_message = False
        if self._replies:
            if not self._unwanted:
                self._output += ";".join(self._replies).encode("latin-1") + b"\n"
            self._replies.clear()
        if self._unwanted:
            self._unwanted -= 1

    def _execute(self, unit: Unit | Refusal) -> None:
        if isinstance(unit, Refusal):
            self.status.note(unit.error.number, unit.error.detail)
            return
        try:
            outcome = unit.handler(self._clock_s, *unit.arguments)
        except ScpiError as error:
            self.status.note(error.number, error.detail)
            return
        if isinstance(outcome, Later):
            self._running = outcome
        else:
            self._reply(outcome)

    def _reply(self, text: str | None) -> None:
        if text is not None:
            self._replies.append(text)

    # -- common commands

    def _add_common_commands(self) -> None:
        add = self.tree.add
        add("*IDN?", lambda now_s: self.identity)
        add("*CLS", self._clear_status)
        add("*RST", self._reset)
        add("*TST?", lambda now_s: "0")
        add("*OPC", self._note_completion)
        add("*OPC?", lambda now_s: Later(self._settled(now_s), lambda at_s: "1", True))
        add("*WAI", lambda now_s: Later(self._settled(now_s), lambda at_s: None))
        add("*ESR?", lambda now_s: str(self.status.read_standard_event()))
        add("*STB?", self._status_byte)
        self._add_register("*ESE", "standard_enable", _BYTE)
        self._add_register("*SRE", "service_enable", _BYTE)
        add("SYSTem:ERRor[:NEXT]?", lambda now_s: self.status.next_error())
        add("SYSTem:ERRor:COUNt?", lambda now_s: str(len(self.status.errors)))
        add("SYSTem:VERSion?", lambda now_s: "1999.0")
        self._add_event_registers()

    def _add_register(self, pattern: str, attribute: str, parameter: Whole) -> None:
        status = self.status

        def put(now_s: float, value: int) -> None:
            setattr(status, attribute, value)

        self.tree.add(pattern, put, parameter)
        self.tree.add(pattern + "?", lambda now_s: str(getattr(status, attribute)))

    def _add_event_registers(self) -> None:
        add = self.tree.add
        status = self.status
        for name, register in (
            ("OPERation", status.operation),
            ("QUEStionable", status.questionable),
        ):
            self._add_event_register(f"STATus:{name}", register)
        add("STATus:PRESet", self._preset)

    def _add_event_register(self, header: str, register: EventRegister) -> None:
        def enable(now_s: float, mask: int) -> None:
            register.enable = mask

        add = self.tree.add
        add(f"{header}[:EVENt]?", lambda now_s: str(register.read_event()))
        add(f"{header}:CONDition?", lambda now_s: str(register.condition))
        add(f"{header}:ENABle?", lambda now_s: str(register.enable))
        add(f"{header}:ENABle", enable, _WORD)

    def _preset(self, now_s: float) -> None:
        self.status.operation.enable = self.status.questionable.enable = 0

    def _settled(self, now_s: float) -> float:
        return max(now_s, self._operation_ends_s)

    def _note_completion(self, now_s: float) -> None:
        self._completion_asked = True

    def _clear_status(self, now_s: float) -> None:
        self.status.clear()
        self._completion_asked = False

    def _reset(self, now_s: float) -> None:
        self._completion_asked = False
        self.reset(now_s)

    def _status_byte(self, now_s: float) -> str:
        waiting = bool(self._output or self._replies)
        return str(self.status.byte(waiting))
