"""A simulated interlock module, written from docs/protocols/interlock.md."""

from ohmward.sim.scpi_device import ScpiDevice
from ohmward.sim.terminals_dc import Circuit

DEBOUNCE_S = 0.020


class Interlock(ScpiDevice):
    """Tells of the door by two contacts; ``sticks`` is what they are stuck at, if they are."""

    def __init__(self, name: str, serial_number: str, circuit: Circuit) -> None:
        super().__init__("INTERLOCK", serial_number)
        self.name = name
        self.sticks: tuple[bool, bool] | None = None
        self._circuit = circuit
        self._told: bool | None = None
        self._seen, self._since_s = False, 0.0
        self.tree.add("SENSe:DOOR?", self._door)

    def _door(self, now_s: float) -> str:
        closed = self._circuit.interlock_closed(now_s)
        if self._told is None:
            self._told = closed
        if closed != self._seen:
            self._seen, self._since_s = closed, now_s
        if not closed or now_s - self._since_s >= DEBOUNCE_S:
            self._told = closed  # an opening is told at once
        made, opened = self.sticks or (self._told, not self._told)
        return f"{int(made)},{int(opened)}"
