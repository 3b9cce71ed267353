"""What supplies, current meters and voltmeters see of the bench: their ends of the circuit."""

from typing import Protocol


class SupplyPort(Protocol):
    """The output terminals of a supply; the circuit does what physics does with its orders."""

    def order(
        self,
        now_s: float,
        *,
        level_v: float,
        slew_v_per_s: float,
        limit_a: float,
        on: bool,
        until_s: float,
    ) -> None:
        """From now on aim at this level, at this slew and within this current, or be off.

        At ``until_s`` the output goes off by itself: the supply's watchdog.
        """

    def voltage_v(self, now_s: float) -> float:
        """Voltage at the terminals."""

    def current_a(self, now_s: float) -> float:
        """Current out of the high terminal."""

    def limiting(self, now_s: float) -> bool:
        """Whether the current limit is at work."""

    def interlock_closed(self, now_s: float) -> bool:
        """Whether the supply's interlock lets it have an output."""


class CurrentPort(Protocol):
    """The input of a current meter."""

    def current_a(self, now_s: float) -> float:
        """Current into the high terminal."""

    def load(self, now_s: float, ohm: float) -> None:
        """From now on this resistance is between the terminals: the range's burden, or a zero."""


class VoltagePort(Protocol):
    """The input of a voltmeter."""

    def voltage_v(self, now_s: float) -> float:
        """Voltage between the terminals."""

    def resistance_ohm(self, now_s: float) -> float:
        """Resistance between the terminals, as a small test current finds it."""

    def load(self, now_s: float, ohm: float) -> None:
        """The input now has this resistance."""


class Circuit(Protocol):
    """The high-voltage side of a bench: hands out the terminals of its instruments."""

    def supply(
        self, name: str, *, drain_ohm: float, output_f: float, two_quadrant: bool = False
    ) -> SupplyPort:
        """The output of a supply that has this off-state resistance and output capacitance."""

    def current_input(self, name: str) -> CurrentPort:
        """The input of a current meter."""

    def voltage_input(self, name: str) -> VoltagePort:
        """The input of a voltmeter."""

    def interlock_closed(self, now_s: float) -> bool:
        """Whether the door of the enclosure is closed."""
