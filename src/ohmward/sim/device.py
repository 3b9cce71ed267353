"""What every simulated instrument is: bytes in, bytes out, and time as an argument.

A device core opens nothing and knows no clock. Whoever carries its bytes (the in-process VISA
library, a TCP server, a fault layer) says what time it is with every call, in seconds since the
bench was switched on, and never lets time run backwards.
"""

from typing import Protocol


class Device(Protocol):
    """A simulated instrument, as its interface sees it.

    ``message_based`` is set by whoever carries the bytes. On a bus with message boundaries
    (HiSLIP, GPIB, USB) an unread reply is lost when the next message arrives, as IEEE 488.2
    has it; on a stream (raw socket, serial line) every reply leaves as soon as it is there.
    """

    message_based: bool

    @property
    def ends_line(self) -> bytes:
        """The byte that ends a command."""

    def opened(self, now_s: float) -> None:
        """A controller has connected."""

    def refuses(self, now_s: float) -> bool:
        """True while nobody can connect to the instrument."""

    def hung_up(self, now_s: float) -> bool:
        """True once the instrument has dropped the connection that was opened last."""

    def receive(self, data: bytes, now_s: float) -> None:
        """Take bytes from the controller; whole messages are executed in order."""

    def due_s(self) -> float | None:
        """When the next reply byte is there; None when no reply is on its way."""

    def take(self, now_s: float) -> bytes:
        """Every reply byte that is there by now."""

    def asked_in_vain(self, now_s: float) -> None:
        """The controller waited for a reply on a message-based bus, and none came."""

    def status_byte(self, now_s: float) -> int:
        """The status byte, as a serial poll reads it."""

    def clear(self, now_s: float) -> None:
        """Device clear: forget unexecuted input and unread output."""
