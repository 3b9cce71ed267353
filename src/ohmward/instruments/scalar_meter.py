"""A meter of one number: what it was set to is set again after a fault, bad readings say why."""

from collections.abc import Mapping
from math import nan
from typing import NamedTuple

from ohmward.errors import (
    InstrumentRefused,
    LinkError,
    LinkLost,
    LinkTimeout,
    ReplyMalformed,
    WrongIdentity,
)
from ohmward.instruments.talker import Talker
from ohmward.protocol.codec import Value
from ohmward.terms.status import Status

TRIES = 3
"""How often settings are tried anew over a link that faults in between."""


class Scalar(NamedTuple):
    """One reading: NaN unless its status is ok; ``also`` is what else the reply said."""

    value: float
    status: Status
    also: Mapping[str, Value]
    reply: bytes


class ScalarMeter:
    """What current meters and voltmeters have in common."""

    def __init__(self, talker: Talker, reading: str) -> None:
        self._talker = talker
        self._reading = reading
        self._wanted: dict[str, Value] = {}
        self._standing = True
        self._recoveries = talker.link.recoveries

    async def _apply(self, wanted: Mapping[str, Value]) -> None:
        """Set these, read back; from now on they are set again after each fault of the link.

        What the driver does not have is left out. Raises InstrumentRefused when not taken,
        LinkError when the link stays bad.
        """
        for name, value in wanted.items():
            self._wanted.pop(name, None)
            if self._talker.can_set(name):
                self._wanted[name] = value
        self._standing = False
        for last in (False,) * (TRIES - 1) + (True,):
            await self._talker.link.recover()  # beyond its budget: raised
            try:
                await self._stand()
            except (WrongIdentity, InstrumentRefused):
                raise
            except LinkError:
                if last:
                    raise
            else:
                return

    async def _stand(self) -> None:
        """See that the instrument is set as wanted, also when it may have been off meanwhile."""
        talker = self._talker
        await talker.fresh()
        if talker.link.recoveries != self._recoveries:
            self._recoveries = talker.link.recoveries
            self._standing = False
        if not self._standing:
            await talker.set_all(self._wanted)
            if talker.link.recoveries != self._recoveries:
                raise LinkLost("the link was recovered while the meter was set")
            self._standing = True
        while talker.discards:
            await talker.ask(self._reading)
            talker.discards -= 1

    async def _take(self) -> Scalar:
        """One reading. Raises LinkError only when the link is lost beyond its budget."""
        talker = self._talker
        await talker.link.recover()
        try:
            await self._stand()
            answer = await talker.ask(self._reading)
        except WrongIdentity:
            raise
        except InstrumentRefused:
            return Scalar(nan, Status.REFUSED if self._standing else Status.NOT_SET, {}, b"")
        except ReplyMalformed:
            return Scalar(nan, Status.MALFORMED, {}, b"")
        except (LinkTimeout, LinkLost):
            return Scalar(nan, Status.TIMEOUT, {}, b"")
        if talker.link.recoveries != self._recoveries:
            # it was recovered within the exchange: the meter may have been off in between
            return Scalar(nan, Status.STALE, {}, answer.reply)
        value = answer.values[self._reading]
        number = value if isinstance(value, float) and answer.status is Status.OK else nan
        return Scalar(number, answer.status, answer.values, answer.reply)
