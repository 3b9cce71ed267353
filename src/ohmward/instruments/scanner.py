"""The scanner: relays moved by channel, every move read back."""

from collections.abc import Iterable

from ohmward.errors import InstrumentRefused, ReplyMalformed
from ohmward.instruments.agreed import agreed
from ohmward.instruments.talker import Talker


class Scanner:
    """Relays by channel. Each method raises LinkError's children when it was not done."""

    def __init__(self, talker: Talker) -> None:
        self._talker = talker

    async def close(self, channels: tuple[str, ...]) -> None:
        """Close these relays, wait for them, and see that they are closed."""
        await self._talker.fresh()
        await self._talker.act("close", channels=_numbers(channels))
        await self._see(set(channels), "closed", set(channels) - await self.closed())

    async def open(self, channels: tuple[str, ...]) -> None:
        """Open these relays, wait for them, and see that they are open."""
        await self._talker.fresh()
        await self._talker.act("open", channels=_numbers(channels))
        await self._see(set(channels), "open", set(channels) & await self.closed())

    async def open_all(self) -> None:
        """Open every relay, wait, and see that none is closed."""
        await self._talker.fresh()
        await self._talker.act("open_all")
        closed = await self.closed()
        await self._see(set(closed), "open", set(closed))

    async def closed(self) -> frozenset[str]:
        """The channels that the scanner says are closed."""
        answer = await agreed(self._talker, "state", "channels")
        channels = answer.values["channels"]
        if not isinstance(channels, tuple):
            self._talker.link.distrust(f"{answer.reply!r} is no list of channels")
            raise ReplyMalformed(f"{answer.reply!r} is no list of channels")
        return frozenset(str(channel) for channel in channels)

    async def _see(self, asked: Iterable[str], state: str, failed: set[str]) -> None:
        """Raise InstrumentRefused for relays that are not as asked, or an error reported."""
        reported = [f"{error.code}, {error.text}" for error in await self._talker.errors()]
        if not failed and not reported:
            return
        which = ", ".join(sorted(failed)) or f"among {', '.join(sorted(asked)) or 'all'}"
        told = f"; it reports {'; '.join(reported)}" if reported else ""
        raise InstrumentRefused(f"relays {which}: asked to be {state} and not all are{told}")


def _numbers(channels: tuple[str, ...]) -> tuple[int, ...]:
    """Channels as numbers; a name that is none cannot be sent to a scanner with channel lists."""
    for channel in channels:
        if not (channel.isascii() and channel.isdigit()):
            raise InstrumentRefused(f"{channel!r} is no channel number; nothing was sent")
    return tuple(int(channel) for channel in channels)
