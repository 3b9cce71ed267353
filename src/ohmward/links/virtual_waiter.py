"""Waiting under trio's virtual clock, for instruments that live in this process.

The in-process library says when a reply is due, the loop sleeps until then in virtual time,
and the read that follows returns at once. Nothing leaves the loop: no thread, no socket.
"""

from typing import cast

import pyvisa
import trio
from pyvisa.constants import StatusCode
from pyvisa.errors import VisaIOError

from ohmward.errors import OhmwardError
from ohmward.links.channel import Channel, SimulatedLibrary
from ohmward.links.foreign import foreign_errors, translated
from ohmward.links.settings import LinkSettings


class VirtualWaiter:
    """Waits until the virtual instant at which the simulated reply is due."""

    async def open(
        self, address: str, settings: LinkSettings, manager: pyvisa.ResourceManager
    ) -> Channel:
        """Open a session of an in-process library; any other library is our own mistake."""
        await trio.lowlevel.checkpoint()
        if not hasattr(manager.visalib, "reply_due"):
            raise OhmwardError(f"{address} would leave the process under the virtual clock")
        with foreign_errors(address):
            return Channel(address=address, settings=settings, manager=manager)

    async def write(self, channel: Channel, message: bytes, timeout_s: float) -> None:
        """Write ``message``; a simulated instrument takes it at once."""
        del timeout_s
        with foreign_errors(channel.address):
            channel.write(message)
        await trio.lowlevel.checkpoint()

    async def query(self, channel: Channel, message: bytes, timeout_s: float) -> bytes:
        """Write ``message`` and read the reply when it is due, or LinkTimeout."""
        try:
            channel.write(message)
        except Exception as error:
            raise translated(error, channel.address) from error
        return await self.read(channel, timeout_s)

    async def read(self, channel: Channel, timeout_s: float) -> bytes:
        """Read a message when it is due; one that trickles in is waited for until it is whole."""
        channel.set_timeout(timeout_s)
        library = cast(SimulatedLibrary, channel.library)
        now_s = trio.current_time()
        deadline_s = now_s + timeout_s
        looked_s = float("-inf")
        while True:
            due_s = library.reply_due(channel.handle)
            # bytes that were there at the last look, and no more to come: never whole
            if due_s is None or due_s > deadline_s or due_s <= looked_s:
                due_s = deadline_s
            if due_s > now_s:
                await trio.sleep_until(due_s)
            else:
                await trio.lowlevel.checkpoint()
            now_s = looked_s = trio.current_time()
            try:
                return channel.read()
            except VisaIOError as error:
                if error.error_code != StatusCode.error_timeout or now_s >= deadline_s:
                    raise translated(error, channel.address) from error
            except Exception as error:
                raise translated(error, channel.address) from error

    async def drain(self, channel: Channel, quiet_s: float, at_most_s: float) -> bool:
        """Clear the channel whenever something is there, until it was silent for ``quiet_s``."""
        library = cast(SimulatedLibrary, channel.library)
        end_s = trio.current_time() + at_most_s
        cleared_s = float("-inf")
        while True:
            silent_at_s = trio.current_time() + quiet_s
            due_s = library.reply_due(channel.handle)
            if due_s is None or due_s > silent_at_s:
                await trio.sleep_until(silent_at_s)
                return True
            # something that is there again at once cannot be cleared: a lost session
            if due_s > end_s or due_s <= cleared_s:
                return False
            await trio.sleep_until(due_s)
            cleared_s = trio.current_time()
            with foreign_errors(channel.address):
                channel.resource.flush(pyvisa.constants.BufferOperation.discard_read_buffer)

    async def close(self, channel: Channel, *, orderly: bool) -> None:
        """Close at once; nothing is ever on its way."""
        del orderly
        channel.close()
        await trio.lowlevel.cancel_shielded_checkpoint()

    def unread(self, channel: Channel) -> bool:
        """True if a simulated byte waits."""
        due_s = cast(SimulatedLibrary, channel.library).reply_due(channel.handle)
        return due_s is not None and due_s <= trio.current_time()

    def lost(self, channel: Channel) -> bool:
        """Never known beforehand: a simulated loss shows itself at the next call."""
        del channel
        return False
