"""The session behind ``TCPIP::host::hislip0,port::INSTR``: PyVISA-py's, with reads of our own.

PyVISA-py loses its place when a timeout falls into a header, and never returns if the peer
dies inside a payload that it throws away. Here what arrives is kept until a frame is whole,
and reading with nothing on its way is a timeout. Messages are numbered (IVI-6.1, HiSLIP): a
reply to an earlier message is thrown away, whenever it comes.
"""

import select
import socket
import struct
from collections import deque
from contextlib import suppress
from typing import Any

from pyvisa.constants import BufferOperation, ResourceAttribute, StatusCode
from pyvisa_py.protocols.hislip import HEADER_FORMAT, HEADER_SIZE, MESSAGETYPE, PORT, Instrument
from pyvisa_py.tcpip import TCPIPInstrHiSLIP, TCPIPInstrSession

from ohmward.clock import stopwatch_s
from ohmward.links.socket_session import make_alert
from ohmward.links.stream_session import CHUNK_BYTES, POLL_S, nothing_queued

DATA, DATA_END = MESSAGETYPE["Data"], MESSAGETYPE["DataEnd"]
FATAL_ERROR, ERROR = MESSAGETYPE["FatalError"], MESSAGETYPE["Error"]
ANY_MESSAGE = 0xFFFF_FFFF
UNREAD_AT_MOST = 10_000
"""More messages than this that nobody reads: the peer never stops talking."""


class _Channels(Instrument):  # type: ignore[misc] # ships no types
    """The two connections; closed again if the second one, or an answer, fails to come."""

    def __init__(self, *arguments: Any, **keywords: Any) -> None:
        try:
            super().__init__(*arguments, **keywords)
        except BaseException:
            for name in ("_sync", "_async"):
                if name in vars(self):
                    vars(self)[name].close()
            raise


class HislipSession(TCPIPInstrHiSLIP):  # type: ignore[misc] # ships no types
    """A HiSLIP connection that can be asked whether a message is there."""

    def after_parsing(self) -> None:
        """Connect both channels; raises OSError or RuntimeError if that fails."""
        name, _, port = self.parsed.lan_device_name.partition(",")
        self.interface = _Channels(
            self.parsed.host_address,
            timeout=self.timeout,
            port=int(port or PORT),
            sub_address=name,
        )
        self.attrs.update(
            {
                ResourceAttribute.interface_number: self.parsed.board,
                ResourceAttribute.send_end_enabled: True,
                ResourceAttribute.suppress_end_enabled: False,
                ResourceAttribute.tcpip_address: self.parsed.host_address,
                ResourceAttribute.tcpip_device_name: self.parsed.lan_device_name,
                ResourceAttribute.tcpip_hostname: self.parsed.host_address,
                ResourceAttribute.tcpip_is_hislip: True,
                ResourceAttribute.tcpip_port: int(port or PORT),
                ResourceAttribute.termchar: ord("\n"),
                ResourceAttribute.termchar_enabled: False,
            }
        )
        self._raw = bytearray()
        self._missing = 0  # bytes of the current frame's payload that have not come yet
        self._wanted = False  # the current frame answers our last message
        self._frame_ends = False  # and is its last one
        self._message = bytearray()  # the part of a message that has come
        self._messages: deque[bytes] = deque()
        self._gone = False
        for connection in (self.interface._sync, self.interface._async):
            make_alert(connection)
        self._readable = select.poll()
        self._readable.register(self.interface._sync, select.POLLIN)
        self._sendable = select.poll()
        self._sendable.register(self.interface._sync, select.POLLOUT)

    # --- for the waiter ---

    def complete_within(self, timeout_s: float, count: int) -> bool:
        """See PatientSession."""
        if self._returns_at_once(count):
            return True
        deadline_s = stopwatch_s() + timeout_s
        while True:
            left_s = deadline_s - stopwatch_s()
            if self._readable.poll(1e3 * max(0.0, min(left_s, POLL_S))):
                self._fill()
                if self._returns_at_once(count):
                    return True
            if left_s <= 0:
                return False

    def _returns_at_once(self, count: int) -> bool:
        return bool(self._messages) or self._gone or len(self._message) >= count

    def _fill(self) -> None:
        try:
            data = self.interface._sync.recv(CHUNK_BYTES)
        except (BlockingIOError, TimeoutError):
            return
        except OSError:  # reset or timed out
            data = b""
        if not data:
            self._gone = True
        self._raw += data
        while self._raw and not self._gone and (self._missing or self._header()):
            self._payload()

    def _header(self) -> bool:
        """Take the next frame's header; False if it is not whole yet."""
        if len(self._raw) < HEADER_SIZE:
            return False
        prologue, kind, _control, message_id, self._missing = struct.unpack(
            HEADER_FORMAT, self._raw[:HEADER_SIZE]
        )
        del self._raw[:HEADER_SIZE]
        # after either the two sides no longer agree on where they are
        self._gone = prologue != b"HS" or kind in (FATAL_ERROR, ERROR)
        self._wanted = kind in (DATA, DATA_END) and message_id in (
            ANY_MESSAGE,
            self.interface.last_message_id,
        )
        self._frame_ends = kind == DATA_END
        if not self._missing:
            self._end_frame()
        return True

    def _payload(self) -> None:
        part = self._raw[: self._missing]
        if not part:
            return
        del self._raw[: len(part)]
        self._missing -= len(part)
        if self._wanted:
            self._message += part
        if not self._missing:
            self._end_frame()

    def _end_frame(self) -> None:
        if self._wanted and self._frame_ends:
            self._messages.append(bytes(self._message))
            self._message.clear()
            self._gone = self._gone or len(self._messages) > UNREAD_AT_MOST

    def unread(self) -> bool:
        """See PatientSession."""
        if not self._gone and self._readable.poll(0):
            self._fill()
        return bool(self._messages or self._message)

    def lost(self) -> bool:
        """See PatientSession."""
        return self._gone

    def writable(self) -> bool:
        """See PatientSession."""
        return bool(self._sendable.poll(0))

    def discard(self) -> int:
        """See PatientSession; the place in the stream is kept."""
        while not self._gone and self._readable.poll(0):
            self._fill()
        if self._gone:
            raise ConnectionResetError("the peer closed the connection")
        return self._forget()

    def _forget(self) -> int:
        forgotten = len(self._message) + sum(map(len, self._messages))
        self._message.clear()
        self._messages.clear()
        self._wanted = False
        return forgotten

    def settled(self) -> bool:
        """See PatientSession."""
        return nothing_queued(self.interface._sync.fileno())

    def interrupt(self) -> None:
        """See PatientSession."""
        self._gone = True
        with suppress(OSError):  # it may be closed already
            self.interface._sync.shutdown(socket.SHUT_RDWR)

    # --- for PyVISA ---

    def read(self, count: int) -> tuple[bytes, StatusCode]:
        """viRead: one message, or its first ``count`` bytes."""
        patience_s = 3600.0 if self.timeout is None else self.timeout
        if not self.complete_within(patience_s, count):
            return b"", StatusCode.error_timeout
        if not self._messages:
            if len(self._message) < count:
                return b"", StatusCode.error_connection_lost
            part = bytes(self._message[:count])
            del self._message[:count]
            return part, StatusCode.success_max_count_read
        message = self._messages.popleft()
        if len(message) > count:
            self._messages.appendleft(message[count:])
            return message[:count], StatusCode.success_max_count_read
        self.interface._rmt = 1  # tells the server that its reply has been read to the end
        return message, StatusCode.success

    def write(self, data: bytes) -> tuple[int, StatusCode]:
        """viWrite: ``data`` as a new message, to which alone a reply counts from now on."""
        self._forget()
        try:
            self.interface.send(data)
        except OSError:
            self._gone = True  # the message may have gone in part: its frame is broken
            raise
        return len(data), StatusCode.success

    def flush(self, mask: BufferOperation) -> StatusCode:
        """viFlush: reading buffers are emptied; nothing written is ever held back."""
        del mask
        self.discard()
        return StatusCode.success


class NetworkSession(TCPIPInstrSession):  # type: ignore[misc] # ships no types
    """Chooses our HiSLIP session, or PyVISA-py's VXI-11 session, by the device's name."""

    def __new__(cls, *arguments: Any, **keywords: Any) -> Any:
        """The session itself, of another class: PyVISA-py does the same."""
        parsed = keywords["parsed"] if "parsed" in keywords else arguments[2]
        if parsed.lan_device_name.lower().startswith("hislip"):
            return HislipSession(*arguments, **keywords)
        return super().__new__(cls, *arguments, **keywords)
