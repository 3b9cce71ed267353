"""One relay in time: its coil is told, its contact follows later, bounces, sticks or welds."""

from dataclasses import dataclass

from ohmward.sim import noise
from ohmward.sim.path import ContactAt, RelayKind


@dataclass(frozen=True, slots=True, order=True)
class Move:
    """A contact closes or opens; ``first`` unless it only bounces."""

    at_s: float
    channel: str
    closed: bool
    first: bool


class Relay:
    """A contact with its coil. ``closed`` is the contact, ``powered`` the coil."""

    def __init__(self, contact: ContactAt, kind: RelayKind, seed: int) -> None:
        self.contact = contact
        self.kind = kind
        self.powered = False
        self.stuck = contact.stuck
        self.welded = False
        self.closed = contact.rests_closed if not self.stuck else self.stuck == "closed"
        self.moves = 0
        self._seed = seed

    def order(self, powered: bool, now_s: float, *, dry: bool = False) -> tuple[Move, ...]:
        """Power the coil or not: what the contact will do. A dry contact's bounce is left out."""
        if powered == self.powered:
            return ()
        self.powered = powered
        if self.stuck or self.welded:
            return ()
        closes = powered != self.contact.rests_closed
        self.moves += 1
        at_s = now_s + (self.kind.operate_s if powered else self.kind.release_s)
        channel = self.contact.channel
        found = [Move(at_s, channel, closes, True)]
        for bounce in range(self.kind.bounces if closes and not dry else 0):
            for closed in (False, True):
                lasts = noise.uniform(self._seed, "bounce", channel, self.moves, bounce, closed)
                at_s += self.kind.bounce_s * (0.5 + lasts)
                found.append(Move(at_s, channel, closed, False))
        return tuple(found)

    def weld(self) -> None:
        """The contact stays closed from now on."""
        self.welded = self.closed = True

    def stick(self, how: str) -> None:
        """Stick open or closed; an empty string frees it where its coil holds it."""
        self.stuck = how
        self.welded = False
        if how:
            self.closed = how == "closed"
        else:
            self.closed = self.powered != self.contact.rests_closed
