"""Wardens that live in the runner's own process, for benches on which nothing energises."""

from collections.abc import Mapping
from typing import NoReturn

import trio

from ohmward.errors import InstrumentRefused, LinkError, NotProvenSafe, OhmwardError, SafetyTrip
from ohmward.safety.equipment import Operator, Scanner
from ohmward.safety.handle import Ending

BY_HAND = "switch the scanner off, and take the part out only after you have shorted its leads"


class ScannerWarden:
    """Connects the impedance meter to one position at a time through a scanner that it owns.

    ``meter_channels`` gives, by position, the contacts in series that connect the meter to it.
    """

    def __init__(self, *, scanner: Scanner, meter_channels: Mapping[str, tuple[str, ...]]) -> None:
        for position, channels in meter_channels.items():
            if not channels:
                raise ValueError(f"position {position} names no contacts for the meter")
        self._scanner = scanner
        self._meter_channels = dict(meter_channels)
        self._leased: str | None = None

    @property
    def leased(self) -> str | None:
        """The position that the meter is connected to."""
        return self._leased

    async def start(self) -> None:
        """Open every relay and prove it; a scanner may wake with relays closed."""
        await self._open_everything("at the start")

    async def lease(self, position: str, part_id: str = "") -> None:
        """Close this position's contacts; exactly these and no others must read back closed."""
        if self._leased is not None:
            await self._trip(f"a lease on {position} was asked for while {self._leased} has one")
        if position not in self._meter_channels:
            await self._trip(f"a lease was asked for on {position}, which this bench has not")
        channels = self._meter_channels[position]
        try:
            before = await self._scanner.closed()
            if not before:
                self._leased = position
                await self._scanner.close(channels)
                after = await self._scanner.closed()
        except InstrumentRefused as error:
            await self._trip(f"the contacts for {position} did not close as told: {error}")
        except LinkError as error:
            await self._open_everything(f"after a fault on the scanner's link ({error})")
            raise
        if before:
            await self._trip(f"before a lease on {position}, {_named(before)} read back closed")
        if after != frozenset(channels):
            await self._trip(
                f"for {position} the contacts {_named(channels)} were to be closed, "
                f"but {_named(after)} read back closed"
            )

    async def holds(self) -> bool:
        """Whether the leased contacts, and no others, read back closed."""
        if self._leased is None:
            return False
        channels = frozenset(self._meter_channels[self._leased])
        try:
            return await self._scanner.closed() == channels
        except LinkError:
            pass  # asking again moves nothing, and first recovers the link
        try:
            return await self._scanner.closed() == channels
        except LinkError as error:
            await self._open_everything(f"after a fault on the scanner's link ({error})")
            raise

    async def release(self) -> None:
        """Open the meter path; nothing may read back closed afterwards."""
        if self._leased is None:
            await self._trip("a lease was given back that was never given")
        position = self._leased
        channels = self._meter_channels[str(position)]
        try:
            await self._scanner.open(channels)
            after = await self._scanner.closed()
        except InstrumentRefused as error:
            await self._trip(f"the contacts of {position} did not open as told: {error}")
        except LinkError as error:
            await self._open_everything(f"after a fault on the scanner's link ({error})")
            raise
        if after:
            await self._trip(f"after the lease on {position}, {_named(after)} read back closed")
        self._leased = None

    async def stop(self) -> Ending:
        """Open everything, whatever went before, and say whether that is proven."""
        with trio.CancelScope(shield=True):
            try:
                await self._open_everything("at the end")
            except OhmwardError as error:
                return Ending(proven=False, reasons=(str(error),))
        return Ending(proven=True)

    async def _trip(self, reason: str) -> NoReturn:
        """Open everything, then raise SafetyTrip, or NotProvenSafe if it will not open."""
        await self._open_everything(f"after this: {reason}")
        raise SafetyTrip(reason)

    async def _open_everything(self, when: str) -> None:
        """Open every relay and read back that none is closed, else raise NotProvenSafe.

        A link that fails meanwhile gets a second go, which recovers it first: opening what is
        open already does no harm.
        """
        with trio.CancelScope(shield=True):
            try:
                still = await self._all_opened()
            except LinkError:
                try:
                    still = await self._all_opened()
                except LinkError as error:
                    raise NotProvenSafe(
                        f"the relays could not be opened {when}: {error}; by hand: {BY_HAND}"
                    ) from error
        if still:
            raise NotProvenSafe(f"{_named(still)} will not open {when}; by hand: {BY_HAND}")
        self._leased = None

    async def _all_opened(self) -> frozenset[str]:
        """Open every relay; returns those that read back closed all the same."""
        await self._scanner.open_all()
        return await self._scanner.closed()


class HandLoadedWarden:
    """Asks a person to place each part; there are no relays, so a person is the contact."""

    def __init__(self, *, operator: Operator, positions: frozenset[str]) -> None:
        self._operator = operator
        self._positions = positions
        self._leased: str | None = None
        self._placed: tuple[str, str] | None = None

    @property
    def leased(self) -> str | None:
        """The position that the meter is connected to."""
        return self._leased

    async def start(self) -> None:
        """Nothing is connected before a person places a part."""
        self._leased = self._placed = None

    async def lease(self, position: str, part_id: str = "") -> None:
        """Have the part placed, unless it is the one that lies there already."""
        if self._leased is not None:
            self._leased = None
            raise SafetyTrip(f"a lease on {position} was asked for while another was open")
        if position not in self._positions:
            raise SafetyTrip(f"a lease was asked for on {position}, which this bench has not")
        if not part_id:
            raise SafetyTrip(f"a person must be told which part belongs at {position}")
        if self._placed != (part_id, position):
            self._placed = None
            await self._operator.place(part_id, position)
            self._placed = (part_id, position)
        self._leased = position

    async def holds(self) -> bool:
        """While a lease is open: there are no contacts that could fall off."""
        return self._leased is not None

    async def release(self) -> None:
        """End the lease; the part stays where it is until another is placed."""
        if self._leased is None:
            raise SafetyTrip("a lease was given back that was never given")
        self._leased = None

    async def stop(self) -> Ending:
        """Nothing here can energise or connect: the end is proven."""
        self._leased = self._placed = None
        return Ending(proven=True)


def _named(channels: frozenset[str] | tuple[str, ...]) -> str:
    """Channels as a person reads them."""
    return ", ".join(sorted(channels)) if channels else "no contact"
