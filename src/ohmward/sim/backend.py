"""An in-process PyVISA library in front of simulated instruments, under anybody's clock.

It keeps VISA's termination rules, so that what is forgotten for a real instrument fails here
too: a raw socket has no end of message, so without a termination character every read times
out; a serial line ends at its END-IN character; on a bus the instrument itself marks the end.
It also keeps what makes streams dangerous: a late reply stays in the session's buffer for
the next read, and a time-out in the middle of a reply loses its first half.
"""

import itertools
from collections.abc import Callable, Iterable, Mapping
from typing import Any, Protocol, Self

from pyvisa import constants, rname
from pyvisa.attributes import Attribute, AttributesByID, NotAvailable
from pyvisa.constants import BufferOperation, InterfaceType, ResourceAttribute, StatusCode
from pyvisa.highlevel import VisaLibraryBase
from pyvisa.typing import VISARMSession, VISASession
from pyvisa.util import LibraryPath

from ohmward.sim.device import Device

_numbers = itertools.count(1)

_INFINITE_MS = constants.VI_TMO_INFINITE
_READ_BUFFERS = (
    BufferOperation.discard_read_buffer
    | BufferOperation.discard_read_buffer_no_io
    | BufferOperation.discard_receive_buffer
    | BufferOperation.discard_receive_buffer2
)


class Devices(Protocol):
    """Whatever holds simulated instruments by VISA address."""

    @property
    def devices(self) -> Mapping[str, Device]:
        """The device cores by address, as the bench file writes it."""


class _Session:
    """One open session: its device, what has arrived, and its attributes."""

    __slots__ = (
        "asked_s",
        "attributes",
        "buffer",
        "device",
        "end_in",
        "is_bus",
        "is_serial",
        "looked_at",
        "lost",
        "termination",
        "timeout_ms",
    )

    def __init__(self, device: Device, parsed: rname.ResourceName, name: str) -> None:
        interface = parsed.interface_type_const
        self.device = device
        self.buffer = bytearray()
        self.is_serial = interface == InterfaceType.asrl
        self.is_bus = parsed.resource_class == "INSTR" and not self.is_serial
        self.lost = False
        self.looked_at = 0  # bytes that a read has seen and found not to be whole
        self.asked_s: float | None = None
        self.timeout_ms = 2000
        self.termination: int | None = None
        self.end_in: int | None = ord("\n") if self.is_serial else None
        self.attributes: dict[int, Any] = {
            ResourceAttribute.interface_type: interface,
            ResourceAttribute.interface_number: _board(parsed),
            ResourceAttribute.resource_class: parsed.resource_class,
            ResourceAttribute.resource_name: name,
            ResourceAttribute.termchar: ord("\n"),
            ResourceAttribute.termchar_enabled: False,
        }

    def pull(self, now_s: float) -> None:
        """Fetch what the instrument has sent by now."""
        arrived = self.device.take(now_s)
        if arrived:
            self.buffer += arrived
        if self.device.hung_up(now_s):
            self.lost = True

    def whole(self, count: int) -> tuple[int, StatusCode]:
        """How many of the buffer's bytes a read of ``count`` returns, and its status; 0: none."""
        buffer = self.buffer
        if not buffer:
            return 0, StatusCode.error_timeout
        if self.termination is not None:
            found = buffer.find(self.termination, 0, count)
            if found >= 0:
                return found + 1, StatusCode.success_termination_character_read
        if self.end_in is not None:
            found = buffer.find(self.end_in, 0, count)
            if found >= 0:
                return found + 1, StatusCode.success
        if len(buffer) >= count:
            return count, StatusCode.success_max_count_read
        if self.is_bus and self.device.due_s() is None:
            return len(buffer), StatusCode.success
        return 0, StatusCode.error_timeout


def _board(parsed: rname.ResourceName) -> int:
    board = str(getattr(parsed, "board", "0"))
    return int(board) if board.isdigit() else 0


class InProcessLibrary(VisaLibraryBase):
    """A VISA library whose instruments are device cores; make one ResourceManager of it.

    ``now`` gives the time in seconds. A read cannot wait, as the clock is not its own: it
    returns what is there or times out, and ``reply_due`` says when a read is worth while. Give
    ``wait`` (which makes time pass until an instant) and reads wait as a real library does.
    """

    sessions: dict[int, _Session]

    def __new__(cls, *arguments: object, **keywords: object) -> Self:
        """A new library each time: PyVISA remembers libraries by path, so each has its own."""
        path = LibraryPath(f"simulated bench {next(_numbers)}", "ohmward")
        return super().__new__(cls, path)  # type: ignore[return-value]

    def __init__(
        self,
        bench: Devices,
        now: Callable[[], float],
        wait: Callable[[float], None] | None = None,
    ) -> None:
        self._now = now
        self._wait = wait
        self._devices = {
            rname.to_canonical_name(address): device for address, device in bench.devices.items()
        }

    def _init(self) -> None:
        self.sessions = {}
        self._handles = itertools.count(1)
        self._latest: dict[int, _Session] = {}

    # -- what VISA lacks

    def reply_due(self, session: int) -> float | None:
        """When a read is worth while: the next reply byte is there; None: none is on its way."""
        found = self.sessions[session]
        now_s = self._now()
        if found.asked_s is None:
            found.asked_s = now_s
        if not found.is_bus:  # on a bus the reply stays in the instrument until it is read
            found.pull(now_s)
        if found.lost or len(found.buffer) > found.looked_at:
            return now_s
        due_s = found.device.due_s()
        if due_s is not None:
            return max(due_s, now_s)
        return now_s if found.buffer else None

    # -- opening and closing

    @staticmethod
    def get_library_paths() -> Iterable[LibraryPath]:
        """None: a library of a simulated bench is made, never found."""
        return ()

    def open_default_resource_manager(self) -> tuple[VISARMSession, StatusCode]:
        """The one resource manager's session."""
        return VISARMSession(next(self._handles)), StatusCode.success

    def list_resources(self, session: VISARMSession, query: str = "?*::INSTR") -> tuple[str, ...]:
        """The addresses of the bench that match."""
        return rname.filter(self._devices, query)

    def open(
        self,
        session: VISARMSession,
        resource_name: str,
        access_mode: constants.AccessModes = constants.AccessModes.no_lock,
        open_timeout: int | None = constants.VI_TMO_IMMEDIATE,
    ) -> tuple[VISASession, StatusCode]:
        """Open a session; an older one to the same instrument is lost, as its server has it."""
        try:
            name = rname.to_canonical_name(resource_name)
            parsed = rname.parse_resource_name(name)
        except rname.InvalidResourceName:
            return VISASession(0), self._status(None, StatusCode.error_invalid_resource_name)
        device = self._devices.get(name)
        now_s = self._now()
        if device is None or device.refuses(now_s):
            return VISASession(0), self._status(None, StatusCode.error_resource_not_found)
        opened = _Session(device, parsed, name)
        older = self._latest.get(id(device))
        if older is not None:
            older.lost = True
        self._latest[id(device)] = opened
        device.message_based = opened.is_bus
        device.opened(now_s)
        handle = VISASession(next(self._handles))
        self.sessions[handle] = opened
        return handle, self._status(handle, StatusCode.success)

    def close(self, session: Any) -> StatusCode:
        """Close a session or the resource manager, and forget all about it."""
        closed = self.sessions.pop(session, None)
        if closed is not None and self._latest.get(id(closed.device)) is closed:
            del self._latest[id(closed.device)]
        self._last_status_in_session.pop(session, None)
        self._ignore_warning_in_session.pop(session, None)
        return StatusCode.success

    # -- talking

    def write(self, session: VISASession, data: bytes) -> tuple[int, StatusCode]:
        """Hand bytes to the instrument; a bus marks the end of the message by itself."""
        found = self.sessions.get(session)
        if found is None:
            return 0, self._status(session, StatusCode.error_invalid_object)
        now_s = self._now()
        if found.is_bus:
            found.buffer.clear()
            found.looked_at = 0
            if data[-1:] != b"\n":
                data += b"\n"
        else:
            found.pull(now_s)
        if found.lost or found.device.hung_up(now_s):
            return 0, self._status(session, StatusCode.error_connection_lost)
        found.asked_s = None
        found.device.receive(data, now_s)
        return len(data), self._status(session, StatusCode.success)

    def read(self, session: VISASession, count: int) -> tuple[bytes, StatusCode]:
        """Read a message, or what VISA's rules make of what is there."""
        found = self.sessions.get(session)
        if found is None:
            return b"", self._status(session, StatusCode.error_invalid_object)
        now_s = self._now()
        found.pull(now_s)
        length, status = found.whole(count)
        if not length and self._wait is not None:
            now_s = self._wait_for(found, count, now_s)
            length, status = found.whole(count)
        if length:
            data = bytes(found.buffer[:length])
            del found.buffer[:length]
            found.looked_at = 0
            found.asked_s = None
            return data, self._status(session, status)
        if found.lost:
            return b"", self._status(session, StatusCode.error_connection_lost)
        self._timed_out(found, now_s)
        return b"", self._status(session, StatusCode.error_timeout)

    def _wait_for(self, found: _Session, count: int, now_s: float) -> float:
        """Let time pass until a read is whole or its time is over; returns the time then."""
        assert self._wait is not None
        if found.asked_s is None:
            found.asked_s = now_s
        endless = found.timeout_ms >= _INFINITE_MS
        deadline_s = float("inf") if endless else now_s + found.timeout_ms / 1e3
        while not found.lost and not found.whole(count)[0]:
            due_s = found.device.due_s()
            if due_s is None or due_s > deadline_s:
                if not endless:
                    self._wait(deadline_s)
                found.pull(self._now())
                break
            self._wait(max(due_s, self._now()))
            found.pull(self._now())
        return self._now()

    def _timed_out(self, found: _Session, now_s: float) -> None:
        """A read found nothing whole: at the end of its time VISA drops what there is."""
        if found.asked_s is None:
            found.asked_s = now_s
        found.looked_at = len(found.buffer)
        if now_s - found.asked_s >= found.timeout_ms / 1e3 * (1 - 1e-9):
            found.buffer.clear()
            found.looked_at = 0
            found.asked_s = None
            if found.is_bus:
                found.device.asked_in_vain(now_s)

    def clear(self, session: VISASession) -> StatusCode:
        """Device clear on a bus; on a socket only what has arrived is dropped; never serial."""
        found = self.sessions.get(session)
        if found is None:
            return self._status(session, StatusCode.error_invalid_object)
        if found.is_serial:
            return self._status(session, StatusCode.error_nonsupported_operation)
        now_s = self._now()
        if found.is_bus:
            found.device.clear(now_s)
        self._discard(found, now_s)
        return self._status(session, StatusCode.success)

    def flush(self, session: VISASession, mask: constants.BufferOperation) -> StatusCode:
        """Drop what has arrived; what was written has already left."""
        found = self.sessions.get(session)
        if found is None:
            return self._status(session, StatusCode.error_invalid_object)
        if mask & _READ_BUFFERS:
            self._discard(found, self._now())
        return self._status(session, StatusCode.success)

    def _discard(self, found: _Session, now_s: float) -> None:
        found.pull(now_s)
        found.buffer.clear()
        found.looked_at = 0
        found.asked_s = None

    def read_stb(self, session: VISASession) -> tuple[int, StatusCode]:
        """Serial poll; streams have none."""
        found = self.sessions.get(session)
        if found is None:
            return 0, self._status(session, StatusCode.error_invalid_object)
        if not found.is_bus:
            return 0, self._status(session, StatusCode.error_nonsupported_operation)
        value = found.device.status_byte(self._now())
        return value, self._status(session, StatusCode.success)

    def assert_trigger(
        self, session: VISASession, protocol: constants.TriggerProtocol
    ) -> StatusCode:
        """A trigger on a bus is the common command; streams have none."""
        found = self.sessions.get(session)
        if found is None:
            return self._status(session, StatusCode.error_invalid_object)
        if not found.is_bus:
            return self._status(session, StatusCode.error_nonsupported_operation)
        found.device.receive(b"*TRG\n", self._now())
        return self._status(session, StatusCode.success)

    # -- attributes and events

    def get_attribute(self, session: Any, attribute: int) -> tuple[Any, StatusCode]:
        """An attribute as set, or its default."""
        found = self.sessions.get(session)
        if found is None:
            return None, self._status(session, StatusCode.error_invalid_object)
        if attribute == ResourceAttribute.timeout_value:
            return found.timeout_ms, self._status(session, StatusCode.success)
        if attribute in found.attributes:
            return found.attributes[attribute], self._status(session, StatusCode.success)
        known = AttributesByID.get(attribute)
        if known is None or known.default in (NotAvailable, Attribute.default):
            return None, self._status(session, StatusCode.error_nonsupported_attribute)
        return known.default, self._status(session, StatusCode.success)

    def set_attribute(
        self, session: VISASession, attribute: ResourceAttribute, attribute_state: Any
    ) -> StatusCode:
        """Set an attribute; those that no rule here looks at are only remembered."""
        found = self.sessions.get(session)
        if found is None:
            return self._status(session, StatusCode.error_invalid_object)
        if attribute not in AttributesByID:
            return self._status(session, StatusCode.error_nonsupported_attribute)
        if attribute == ResourceAttribute.timeout_value:
            found.timeout_ms = int(attribute_state)
        attributes = found.attributes
        attributes[attribute] = attribute_state
        character = attributes[ResourceAttribute.termchar]
        found.termination = character if attributes[ResourceAttribute.termchar_enabled] else None
        if found.is_serial:
            ends = attributes.get(
                ResourceAttribute.asrl_end_in, constants.SerialTermination.termination_char
            )
            by_character = ends == constants.SerialTermination.termination_char
            found.end_in = character if by_character else None
        return self._status(session, StatusCode.success)

    def disable_event(self, session: Any, event_type: Any, mechanism: Any) -> StatusCode:
        """There are no events to disable."""
        return StatusCode.success

    def discard_events(self, session: Any, event_type: Any, mechanism: Any) -> StatusCode:
        """There are no events to discard."""
        return StatusCode.success

    def _status(self, session: Any, status: StatusCode) -> StatusCode:
        """Note a status; PyVISA raises the errors among them."""
        if status is StatusCode.success:  # the usual one, and nothing to raise or to warn of
            self._last_status = status
            self._last_status_in_session[session] = status
            return status
        return self.handle_return_value(session, status)
