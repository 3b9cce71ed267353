"""A supply or a bias source: set, read back, measured; it is never set again by itself.

After a fault of its link a supply may be in any state. Nothing here brings back what was set
before: whoever ordered the voltage reads what there is, and decides.
"""

from math import isnan, nan

from ohmward.errors import InstrumentRefused
from ohmward.instruments.agreed import agreed
from ohmward.instruments.talker import Talker
from ohmward.terms.reading import SupplyReading


class Supply:
    """One supply. Each method raises LinkError's children when it was not done."""

    def __init__(self, talker: Talker) -> None:
        self._talker = talker

    async def set_voltage(self, voltage_v: float) -> None:
        """Set the output voltage (V); InstrumentRefused when it is not taken or clamped."""
        await self._set("voltage", voltage_v)

    async def set_limit(self, current_a: float) -> None:
        """Set the current limit (A); InstrumentRefused when it is not taken or clamped."""
        await self._set("current_limit", current_a)

    async def output(self, on: bool) -> None:
        """Switch the output and see that it is ordered; what it does is found by ``read``."""
        await self._set("output", on)

    async def rest(self) -> None:
        """Output off, then 0 V: both are tried, and the first failure is raised."""
        try:
            await self.output(False)
        finally:
            await self.set_voltage(0.0)

    async def read(self) -> SupplyReading:
        """What it was told and what it measures; what its driver cannot ask for is NaN.

        Raises InstrumentRefused when it has no number for its own output.
        """
        talker = self._talker
        await talker.fresh()
        state = await self._state()
        voltage_set_v = await self._number_set("voltage")
        limit_set_a = await self._number_set("current_limit")
        on = await talker.read_back("output")
        voltage_v, reply = await self._measured("voltage")
        current_a, _ = await self._measured("current")
        return SupplyReading(
            voltage_set_v=voltage_set_v,
            limit_set_a=limit_set_a,
            voltage_v=voltage_v,
            current_a=current_a,
            output_on=on is True,
            limiting="current_limit" in state,
            tripped="tripped" in state,
            reply=reply,
        )

    async def renew(self) -> None:
        """Abandon the session, whatever is pending in it, and open a fresh one."""
        await self._talker.link.renew()
        await self._talker.fresh()

    async def _set(self, name: str, value: float | bool) -> None:
        await self._talker.fresh()
        await self._talker.set(name, value)

    async def _state(self) -> tuple[object, ...]:
        """The conditions that it reports, by the names that its driver gives them."""
        if not self._talker.can_ask("state"):
            return ()
        state = (await agreed(self._talker, "state", "state")).values["state"]
        return state if isinstance(state, tuple) else (state,)

    async def _number_set(self, name: str) -> float:
        if not self._talker.can_set(name):
            return nan
        value = await self._talker.read_back(name, nan)
        return value if isinstance(value, float) else nan

    async def _measured(self, name: str) -> tuple[float, bytes]:
        if not self._talker.can_ask(name):
            return nan, b""
        answer = await self._talker.ask(name)
        value = answer.values[name]
        # in a trip the numbers still say what is at the terminals; an overflow is no number
        if not isinstance(value, float) or isnan(value):
            raise InstrumentRefused(f"its {name} is {answer.status}: {answer.reply[:60]!r}")
        return value, answer.reply
