"""What the warden needs of the instruments that it owns: as little as will do."""

from typing import Protocol


class Scanner(Protocol):
    """Relays by channel; every method reads back what it did and raises when it was not done."""

    async def close(self, channels: tuple[str, ...]) -> None:
        """Close these relays."""

    async def open(self, channels: tuple[str, ...]) -> None:
        """Open these relays."""

    async def open_all(self) -> None:
        """Open every relay."""

    async def closed(self) -> frozenset[str]:
        """The channels that the scanner says are closed."""


class Operator(Protocol):
    """The person who puts parts into a hand-loaded fixture."""

    async def place(self, part_id: str, position: str) -> None:
        """Return once the person says that this part, and nothing else, is at this position."""
