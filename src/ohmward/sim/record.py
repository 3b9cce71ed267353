"""A device core that keeps what it heard and said: the instrument's own side of a dispute."""

from collections import deque
from typing import NamedTuple

from ohmward.sim.device import Device

MOST = 2000


class Entry(NamedTuple):
    """One thing that happened to an instrument: ``opened``, ``heard``, ``said`` or ``cleared``."""

    at_s: float
    what: str
    data: bytes


class Recorded:
    """Wraps a device core; the last entries are in ``entries``, oldest first."""

    def __init__(self, device: Device, most: int = MOST) -> None:
        self.device = device
        self.entries: deque[Entry] = deque(maxlen=most)

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

    def opened(self, now_s: float) -> None:
        """Noted and passed on."""
        self.entries.append(Entry(now_s, "opened", b""))
        self.device.opened(now_s)

    def refuses(self, now_s: float) -> bool:
        """The core's."""
        return self.device.refuses(now_s)

    def hung_up(self, now_s: float) -> bool:
        """The core's."""
        return self.device.hung_up(now_s)

    def receive(self, data: bytes, now_s: float) -> None:
        """Noted and passed on."""
        if data:
            self.entries.append(Entry(now_s, "heard", bytes(data)))
        self.device.receive(data, now_s)

    def due_s(self) -> float | None:
        """The core's."""
        return self.device.due_s()

    def take(self, now_s: float) -> bytes:
        """The core's, noted."""
        data = self.device.take(now_s)
        if data:
            self.entries.append(Entry(now_s, "said", data))
        return data

    def asked_in_vain(self, now_s: float) -> None:
        """Passed on."""
        self.device.asked_in_vain(now_s)

    def status_byte(self, now_s: float) -> int:
        """The core's."""
        return self.device.status_byte(now_s)

    def clear(self, now_s: float) -> None:
        """Noted and passed on."""
        self.entries.append(Entry(now_s, "cleared", b""))
        self.device.clear(now_s)
