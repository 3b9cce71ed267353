"""What our PyVISA-py sessions for sockets and serial lines have in common.

PyVISA-py's own sessions lose half a reply at a timeout, spin or hang when the peer closes,
and measure time with the wall clock. Here bytes stay in the buffer until the reply is whole,
every wait is a poll under a monotonic deadline, and a closed peer is a lost connection.

The PyVISA calls (``read``, ``write``, ``clear``, ``flush``) keep VISA's meaning. Beside them
stands what a waiter needs so that it never blocks: ``PatientSession``.
"""

import select
import struct
from typing import Any, Protocol, runtime_checkable

from pyvisa.constants import BufferOperation, ResourceAttribute, StatusCode

from ohmward.clock import stopwatch_s

CHUNK_BYTES = 1 << 16
POLL_S = 0.05
"""The longest single wait; after it, cancellation and the deadline are looked at."""

DISCARDED_AT_MOST = 1 << 22
"""More unread bytes than this are no leftovers: the peer never stops talking."""


@runtime_checkable
class PatientSession(Protocol):
    """A session that can be asked, without blocking, whether a read would return at once."""

    def complete_within(self, timeout_s: float, count: int) -> bool:
        """True once ``read(count)`` would return at once: message whole, too long, or peer gone."""

    def unread(self) -> bool:
        """True if bytes wait that nobody has read."""

    def lost(self) -> bool:
        """True if the peer is known to be gone, as of the last ``unread`` or wait."""

    def writable(self) -> bool:
        """True if a short message can be written at once."""

    def discard(self) -> int:
        """Throw away what waits, and return how many bytes; OSError if the peer is gone."""

    def settled(self) -> bool:
        """True once everything written has been taken by the other side."""

    def interrupt(self) -> None:
        """Make a blocking write in another thread end soon; the session then counts as lost."""


def nothing_queued(descriptor: int) -> bool:
    """True if the system holds no byte back that was written to this socket or serial line."""
    import fcntl
    import termios

    return struct.unpack("i", fcntl.ioctl(descriptor, termios.TIOCOUTQ, bytes(4))) == (0,)


class StreamSession:
    """The byte-stream half of a session; children say how bytes come and go.

    A child calls ``_watch(fd)`` once it is connected.
    """

    attrs: dict[ResourceAttribute, Any]
    timeout: float | None

    def _watch(self, descriptor: int) -> None:
        self._descriptor = descriptor
        self._buffer = bytearray()
        self._searched = 0
        self._gone = False
        self._readable = select.poll()
        self._readable.register(descriptor, select.POLLIN)
        self._sendable = select.poll()
        self._sendable.register(descriptor, select.POLLOUT)

    def _receive_now(self) -> bytes | None:
        """Bytes that are there; ``b""`` if the peer is gone; None if there are none after all."""
        raise NotImplementedError

    def _send_now(self, data: memoryview) -> int:
        """Send what fits now, and return how much that was; 0 if nothing does."""
        raise NotImplementedError

    # --- for the waiter ---

    def complete_within(self, timeout_s: float, count: int) -> bool:
        """See PatientSession."""
        if self._returns_at_once(count):
            return True
        deadline_s = stopwatch_s() + timeout_s
        while True:
            left_s = deadline_s - stopwatch_s()
            # poll counts whole milliseconds and rounds up
            if self._readable.poll(1e3 * max(0.0, min(left_s, POLL_S))):
                self._fill()
                if self._returns_at_once(count):
                    return True
            if left_s <= 0:
                return False

    def _fill(self) -> None:
        try:
            data = self._receive_now()
        except OSError:  # reset, timed out, unplugged: what came before is still good
            data = b""
        if data:
            self._buffer += data
        elif data is not None:
            self._gone = True

    def _returns_at_once(self, count: int) -> bool:
        return self._gone or len(self._buffer) >= count or self._end() > 0

    def _marked(self) -> bool:
        """True if the termination character ends a message."""
        return bool(self.attrs[ResourceAttribute.termchar_enabled])

    def _end(self) -> int:
        """Length of the first whole message in the buffer, 0 if there is none."""
        if not self._marked():
            return len(self._buffer)  # nothing marks an end: whatever is there is a message
        end = self._buffer.find(self.attrs[ResourceAttribute.termchar], self._searched) + 1
        if not end:
            self._searched = len(self._buffer)
        return end

    def _take(self, count: int) -> bytes:
        taken = bytes(self._buffer[:count])
        del self._buffer[:count]
        self._searched = 0
        return taken

    def unread(self) -> bool:
        """See PatientSession."""
        if not self._buffer and not self._gone and self._readable.poll(0):
            self._fill()
        return bool(self._buffer)

    def lost(self) -> bool:
        """See PatientSession."""
        return self._gone

    def writable(self) -> bool:
        """See PatientSession."""
        return bool(self._sendable.poll(0))

    def discard(self) -> int:
        """See PatientSession."""
        discarded = len(self._take(len(self._buffer)))
        while not self._gone and self._readable.poll(0) and discarded < DISCARDED_AT_MOST:
            self._fill()
            discarded += len(self._take(len(self._buffer)))
        if self._gone:
            raise ConnectionResetError("the peer closed the connection")
        return discarded

    def settled(self) -> bool:
        """See PatientSession (tcp(7), tty_ioctl(4): bytes not acknowledged, not yet sent)."""
        return nothing_queued(self._descriptor)

    def interrupt(self) -> None:
        """See PatientSession."""
        self._gone = True

    # --- for PyVISA ---

    def read(self, count: int) -> tuple[bytes, StatusCode]:
        """viRead: up to and with the termination character, or ``count`` bytes, or a status.

        After a timeout the bytes so far stay in the buffer, for the next read or ``discard``.
        """
        if not self._returns_at_once(count) and not self.complete_within(self._patience(), count):
            return b"", StatusCode.error_timeout
        end = self._end()
        if 0 < end <= count:
            marked = self._marked()
            return self._take(end), (
                StatusCode.success_termination_character_read if marked else StatusCode.success
            )
        if len(self._buffer) >= count:
            return self._take(count), StatusCode.success_max_count_read
        return b"", StatusCode.error_connection_lost

    def write(self, data: bytes) -> tuple[int, StatusCode]:
        """viWrite: all of ``data``, or how much went before time was up or the peer was gone."""
        rest = memoryview(data)
        deadline_s = stopwatch_s() + self._patience()
        while rest:
            sent = self._send_now(rest)
            rest = rest[sent:]
            if sent:
                continue
            left_s = deadline_s - stopwatch_s()
            if left_s <= 0:
                return len(data) - len(rest), StatusCode.error_timeout
            if self._gone:
                return len(data) - len(rest), StatusCode.error_connection_lost
            self._sendable.poll(1e3 * min(left_s, POLL_S))
        return len(data), StatusCode.success

    def clear(self) -> StatusCode:
        """viClear, as far as a stream has it: forget what waits; returns whatever the peer does."""
        self.discard()
        return StatusCode.success

    def flush(self, mask: BufferOperation) -> StatusCode:
        """viFlush: reading buffers are emptied; nothing written is ever held back."""
        if mask & BufferOperation.discard_read_buffer:
            self.discard()
        elif mask & (
            BufferOperation.discard_read_buffer_no_io | BufferOperation.discard_receive_buffer
        ):
            self._take(len(self._buffer))
        return StatusCode.success

    def _patience(self) -> float:
        # VISA knows an endless timeout; a link that can hang for ever is not wanted here
        return 3600.0 if self.timeout is None else self.timeout
