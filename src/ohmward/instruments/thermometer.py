"""The thermometer: the room's temperature and humidity, missing rather than wrong."""

from math import nan

from ohmward.errors import InstrumentRefused, LinkLost, LinkTimeout, ReplyMalformed
from ohmward.instruments.talker import Talker
from ohmward.terms.reading import Environment
from ohmward.terms.status import Status


class Thermometer:
    """One thermometer, with or without humidity."""

    def __init__(self, talker: Talker) -> None:
        self._talker = talker

    async def read(self) -> Environment:
        """The room now; NaN for what could not be read.

        Raises LinkError only when the link is lost beyond its budget.
        """
        await self._talker.fresh()
        return Environment(
            temperature_c=await self._one("temperature"),
            humidity_pct=await self._one("humidity"),
        )

    async def _one(self, name: str) -> float:
        if not self._talker.can_ask(name) or self._talker.link.dirty:
            return nan
        try:
            answer = await self._talker.ask(name)
        except (LinkTimeout, LinkLost, ReplyMalformed, InstrumentRefused):
            return nan
        value = answer.values[name]
        good = answer.status is Status.OK and isinstance(value, float)
        return float(value) if good else nan  # type: ignore[arg-type]
