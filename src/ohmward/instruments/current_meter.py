"""The current meter: a range that is held, its zero check, readings that are numbers or none."""

from dataclasses import replace
from math import isclose, isnan, nan

from ohmward.errors import InstrumentRefused
from ohmward.instruments.scalar_meter import ScalarMeter
from ohmward.instruments.talker import Talker
from ohmward.protocol.codec import Value
from ohmward.terms.reading import CurrentReading
from ohmward.terms.status import Status


class CurrentMeter(ScalarMeter):
    """One current meter. What was set is set again after a fault of its link."""

    def __init__(self, talker: Talker) -> None:
        super().__init__(talker, "current")
        self._range_a = nan

    async def set_range(self, range_a: float) -> None:
        """Hold the range with this full scale (A), the input at the terminals.

        Raises InstrumentRefused when the meter has no such range or does not take it.
        """
        if not self._talker.can_set("range"):
            raise InstrumentRefused("the driver has no setting for the range")
        await self._hold(range_a, zero_check=False)

    async def zero(self, range_a: float) -> CurrentReading:
        """One reading of the meter's own offset on a range; the input stays off the terminals.

        Raises InstrumentRefused when the meter has no zero check.
        """
        if not self._talker.can_set("zero_check"):
            raise InstrumentRefused("the driver has no setting for the zero check")
        await self._hold(range_a, zero_check=True)
        return await self.read()

    async def rest(self) -> None:
        """The input off the terminals, where the meter can, and ranging by itself."""
        self._range_a = nan
        self._wanted.pop("range", None)
        await self._apply({"range_automatic": True, "zero_check": True})

    async def read(self) -> CurrentReading:
        """One reading. A bad one comes back with its status and NaN, never as a number.

        Raises LinkError only when the link is lost beyond its budget.
        """
        value, status, also, reply = await self._take()
        told = also.get("range", self._range_a)
        range_a = told if isinstance(told, float) else nan
        reading = CurrentReading(current_a=value, range_a=range_a, status=status, reply=reply)
        if also and not isnan(self._range_a) and not isclose(range_a, self._range_a, rel_tol=1e-3):
            return replace(reading, current_a=nan, status=Status.NOT_SET)
        return reading

    async def _hold(self, range_a: float, *, zero_check: bool) -> None:
        wanted: dict[str, Value] = {"range_automatic": False}
        if self._talker.can_set("range"):
            settable = self._talker.settable("range", range_a)
            wanted["range"] = settable
            self._range_a = settable if isinstance(settable, float) else nan
        wanted["zero_check"] = zero_check
        await self._apply(wanted)
