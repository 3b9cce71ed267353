"""Several simulated instruments behind one address, such as a meter with a scanner in its back."""

from collections.abc import Sequence
from typing import Protocol

from ohmward.sim.device import Device


class Listener(Device, Protocol):
    """A device core that can say whether a message is meant for it."""

    def understands(self, message: bytes) -> bool:
        """Whether it knows every command of this message."""


class SharedLink:
    """Gives each message to the first instrument that understands it, else to the first of all."""

    def __init__(self, devices: Sequence[Listener]) -> None:
        if len({device.ends_line for device in devices}) != 1:
            raise ValueError("instruments on one link end their lines alike")
        self._devices = tuple(devices)
        self._input = bytearray()

    @property
    def ends_line(self) -> bytes:
        """The byte that ends a command, for all of them."""
        return self._devices[0].ends_line

    @property
    def message_based(self) -> bool:
        """Whether the link marks the ends of messages."""
        return self._devices[0].message_based

    @message_based.setter
    def message_based(self, value: bool) -> None:
        for device in self._devices:
            device.message_based = value

    def opened(self, now_s: float) -> None:
        """A controller has connected to all of them."""
        self._input.clear()
        for device in self._devices:
            device.opened(now_s)

    def refuses(self, now_s: float) -> bool:
        """True while one of them lets nobody connect."""
        return any(device.refuses(now_s) for device in self._devices)

    def hung_up(self, now_s: float) -> bool:
        """True once one of them has dropped the connection."""
        return any(device.hung_up(now_s) for device in self._devices)

    def receive(self, data: bytes, now_s: float) -> None:
        """Give whole messages to whom they are meant for."""
        self._input += data
        *lines, rest = self._input.split(self.ends_line)
        self._input = rest
        for line in lines:
            message = bytes(line) + self.ends_line
            fitting = (device for device in self._devices if device.understands(message))
            next(fitting, self._devices[0]).receive(message, now_s)

    def due_s(self) -> float | None:
        """When the next byte of any of them is there."""
        times = [device.due_s() for device in self._devices]
        return min((each for each in times if each is not None), default=None)

    def take(self, now_s: float) -> bytes:
        """What all of them have sent by now."""
        return b"".join(device.take(now_s) for device in self._devices)

    def asked_in_vain(self, now_s: float) -> None:
        """Told to the first."""
        self._devices[0].asked_in_vain(now_s)

    def status_byte(self, now_s: float) -> int:
        """The bits of all of them."""
        found = 0
        for device in self._devices:
            found |= device.status_byte(now_s)
        return found

    def clear(self, now_s: float) -> None:
        """Clear all of them."""
        self._input.clear()
        for device in self._devices:
            device.clear(now_s)
