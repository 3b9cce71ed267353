"""The voltmeter across a part's own terminals, its divider accounted for."""

from ohmward.instruments.scalar_meter import ScalarMeter
from ohmward.instruments.talker import Talker
from ohmward.protocol.codec import Value
from ohmward.terms.reading import VoltageReading


class Voltmeter(ScalarMeter):
    """One voltmeter behind a divider of ``ratio``: the part's voltage is ratio · reading."""

    def __init__(self, talker: Talker, *, ratio: float = 1.0, integration: str = "") -> None:
        if not ratio >= 1.0:
            raise ValueError("a divider's ratio is 1 or above")
        super().__init__(talker, "voltage")
        self._ratio = ratio
        wanted: dict[str, Value] = {
            "function": "voltage",
            "range_automatic": True,
            "input_resistance": "fixed",  # a divider is stated for one load, and only for that
        }
        if integration:
            wanted["integration"] = integration
        self._wanted = {name: value for name, value in wanted.items() if talker.can_set(name)}
        self._standing = False  # set before the first reading

    async def read(self) -> VoltageReading:
        """One reading (V). A bad one comes back with its status and NaN, never as a number.

        Raises LinkError only when the link is lost beyond its budget.
        """
        value, status, also, reply = await self._take()
        told = also.get("range", "")
        return VoltageReading(
            voltage_v=self._ratio * value,
            status=status,
            range=f"{told:g}" if isinstance(told, float) else str(told),
            reply=reply,
        )
