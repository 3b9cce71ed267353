"""A simulated scanner, written from docs/protocols/scanner.md, and the contacts that it moves."""

import math
from collections.abc import Callable, Iterable, Mapping

from ohmward.sim.scpi_device import ScpiDevice
from ohmward.sim.scpi_parameters import ChannelList
from ohmward.sim.terminals import Relays

RELAY_S = 0.005


class Contacts:
    """Relay contacts in time: what was ordered happens ``RELAY_S`` later.

    A contact named in ``stuck`` stays as it is there (True: closed), whatever is ordered.
    """

    def __init__(self, channels: Iterable[str], stuck: Mapping[str, bool] | None = None) -> None:
        self._channels = frozenset(channels)
        self.stuck = dict(stuck or {})
        self._closed = frozenset(channel for channel, closed in self.stuck.items() if closed)
        self._moves: list[tuple[float, str, bool]] = []
        self._changed_s = -math.inf

    @property
    def channels(self) -> frozenset[str]:
        """Every channel that is fitted."""
        return self._channels

    def order(self, channels: Iterable[str], close: bool, now_s: float) -> float:
        """Order contacts to close or open; returns when the last of them has come to rest."""
        self._settle(now_s)
        ordered = frozenset(channels)
        self._moves = [move for move in self._moves if move[1] not in ordered]
        moving = ordered - self._closed if close else ordered & self._closed
        moving = frozenset(each for each in moving if each not in self.stuck)
        if not moving:
            return max((move[0] for move in self._moves), default=now_s)
        self._moves += [(now_s + RELAY_S, channel, close) for channel in sorted(moving)]
        return now_s + RELAY_S

    def closed(self, now_s: float) -> frozenset[str]:
        """The contacts that are closed now."""
        if self._moves:
            self._settle(now_s)
        return self._closed

    def reported(self, now_s: float) -> frozenset[str]:
        """The contacts themselves: these relays have a second contact that tells."""
        return self.closed(now_s)

    def changed_s(self, now_s: float) -> float:
        """When a contact moved last."""
        if self._moves:
            self._settle(now_s)
        return self._changed_s

    def _settle(self, now_s: float) -> None:
        done = [move for move in self._moves if move[0] <= now_s]
        if not done:
            return
        self._moves = [move for move in self._moves if move[0] > now_s]
        closed = set(self._closed)
        for at_s, channel, close in sorted(done):
            (closed.add if close else closed.discard)(channel)
            self._changed_s = max(self._changed_s, at_s)
        self._closed = frozenset(closed)


class Scanner(ScpiDevice):
    """Closes and opens contacts by channel; answers what the contacts really are."""

    def __init__(self, name: str, serial_number: str, contacts: Relays) -> None:
        super().__init__("SCANNER", serial_number)
        self.name = name
        self._contacts = contacts
        channels = ChannelList(contacts.channels)
        self.tree.add("ROUTe:CLOSe", self._ordering(close=True), channels)
        self.tree.add("ROUTe:OPEN", self._ordering(close=False), channels)
        self.tree.add("ROUTe:OPEN:ALL", self.reset)
        self.tree.add("ROUTe:CLOSe?", self._are_closed, channels)
        self.tree.add("ROUTe:CLOSe:STATe?", self._closed)

    def reset(self, now_s: float) -> None:
        """Open every relay."""
        self.begin_operation(self._contacts.order(self._contacts.channels, False, now_s))

    def _ordering(self, *, close: bool) -> Callable[[float, tuple[str, ...]], None]:
        def order(now_s: float, channels: tuple[str, ...]) -> None:
            self.begin_operation(self._contacts.order(channels, close, now_s))

        return order

    def _are_closed(self, now_s: float, channels: tuple[str, ...]) -> str:
        closed = self._contacts.reported(now_s)
        return ",".join(str(int(channel in closed)) for channel in channels)

    def _closed(self, now_s: float) -> str:
        closed = sorted(self._contacts.reported(now_s), key=int)
        return f"(@{','.join(closed)})"
