"""How a link waits: the protocol that real and virtual time have in common.

All methods raise nothing but LinkError's children and cancellation. A cancelled call leaves
nobody behind who still reads the channel; what the channel then holds is unknown.
"""

from typing import Protocol

import pyvisa

from ohmward.links.channel import Channel
from ohmward.links.settings import LinkSettings


class Waiter(Protocol):
    """Opens, writes, reads and closes sessions without ever blocking the loop for long."""

    async def open(
        self, address: str, settings: LinkSettings, manager: pyvisa.ResourceManager
    ) -> Channel:
        """Open a session; LinkLost or LinkTimeout if nothing answers there."""

    async def write(self, channel: Channel, message: bytes, timeout_s: float) -> None:
        """Write all of ``message``."""

    async def query(self, channel: Channel, message: bytes, timeout_s: float) -> bytes:
        """Write ``message`` and read one reply, both within ``timeout_s`` together.

        Raises LinkTimeout if the reply is not whole by then.
        """

    async def read(self, channel: Channel, timeout_s: float) -> bytes:
        """Read one message without its termination; LinkTimeout if it is not whole in time."""

    async def drain(self, channel: Channel, quiet_s: float, at_most_s: float) -> bool:
        """Throw away what comes until it was silent for ``quiet_s``; False if it never was."""

    async def close(self, channel: Channel, *, orderly: bool) -> None:
        """Close; ``orderly`` first lets what was written arrive, for a moment."""

    def unread(self, channel: Channel) -> bool:
        """True if bytes are known to wait that nobody has read."""

    def lost(self, channel: Channel) -> bool:
        """True if the peer is known to be gone; asked after ``unread``."""
