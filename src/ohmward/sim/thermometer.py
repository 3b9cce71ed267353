"""A simulated thermometer with a humidity sensor, written from docs/protocols/thermometer.md."""

from collections.abc import Callable

from ohmward.sim.scpi_device import ScpiDevice, format_number
from ohmward.sim.scpi_tree import Later
from ohmward.sim.terminals import Room

MEASURING_S = 0.050
TEMPERATURE_HALF_WIDTH_C = 0.2
HUMIDITY_HALF_WIDTH_PCT = 2.0


class Thermometer(ScpiDevice):
    """Reads the room with an error that stays: ``errors`` holds its two shares, −1 … +1."""

    def __init__(
        self, name: str, serial_number: str, room: Room, errors: tuple[float, float]
    ) -> None:
        super().__init__("THERMOMETER", serial_number)
        self.name = name
        self._room = room
        self._temperature_error_c = errors[0] * TEMPERATURE_HALF_WIDTH_C
        self._humidity_error_pct = errors[1] * HUMIDITY_HALF_WIDTH_PCT
        self.tree.add("MEASure:TEMPerature?", self._measuring(self._temperature_c))
        self.tree.add("MEASure:HUMidity?", self._measuring(self._humidity_pct))

    def _measuring(self, value: Callable[[float], float]) -> Callable[[float], Later]:
        def measure(now_s: float) -> Later:
            return Later(now_s + MEASURING_S, lambda at_s: format_number(value(at_s)), True)

        return measure

    def _temperature_c(self, now_s: float) -> float:
        return round(self._room.temperature_c(now_s) + self._temperature_error_c, 2)

    def _humidity_pct(self, now_s: float) -> float:
        humidity = self._room.humidity_pct(now_s) + self._humidity_error_pct
        return round(min(max(humidity, 0.0), 100.0), 1)
