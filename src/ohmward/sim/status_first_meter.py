"""A simulated impedance meter, written from docs/protocols/impedance-meter-status-first.md."""

from ohmward.sim.bridge import GOOD, LEVEL_LOW, OVERLOAD, UNBALANCED, Bridge, Drive, Reading
from ohmward.sim.meter_error import MeterError
from ohmward.sim.scpi_device import ScpiDevice
from ohmward.sim.scpi_parameters import Boolean, Choice, Number
from ohmward.sim.scpi_status import ScpiError
from ohmward.sim.scpi_tree import Later
from ohmward.sim.terminals import Terminals

FREQUENCIES_HZ = (100.0, 120.0, 1e3, 1e4, 1e5)
LEVELS_V = (0.1, 0.3, 1.0)
APERTURE_S = {"SHOR": 0.020, "LONG": 0.160}
PERIODS = 3.0
MEASURING = 0x10
UNSETTLED = 0.02
_WORDS = {GOOD: "N", LEVEL_LOW: "N", OVERLOAD: "O", UNBALANCED: "U"}


def format_blank(value: float) -> str:
    """A number with a blank in place of the plus sign and five decimals: `` 1.23457E-07``."""
    return f"{value: .5E}"


class StatusFirstMeter(ScpiDevice):
    """Few frequencies and levels; the first reading after a change of them is not settled."""

    def __init__(
        self, name: str, serial_number: str, terminals: Terminals, error: MeterError
    ) -> None:
        super().__init__("IMPEDANCE-METER-S", serial_number)
        self.identity = f"GENERIC,IMPEDANCE-METER-S,{serial_number},2.1"
        self.name = name
        self._bridge = Bridge(terminals, error, drive=Drive(aperture="LONG"))
        self._unsettled = True
        self._last: Reading | None = None
        self._add_settings()
        self.tree.add("*TRG", self._trigger)
        self.tree.add("FETCh?", self._fetch)

    def reset(self, now_s: float) -> None:
        """Every setting as after power-up."""
        self._bridge.drive = Drive(aperture="LONG")
        self._unsettled = True
        self._last = None

    def _add_settings(self) -> None:
        bridge = self._bridge
        self.add_setting(
            "[SOURce:]FREQuency[:CW]",
            Number(minimum=100.0, maximum=1e5, default=1e3, unit="HZ"),
            lambda: format_blank(bridge.drive.frequency_hz),
            self._put_frequency,
        )
        self.add_setting(
            "[SOURce:]VOLTage[:LEVel]",
            Number(minimum=0.1, maximum=1.0, default=1.0, unit="V"),
            lambda: format_blank(bridge.drive.level_v),
            self._put_level,
        )
        self.add_setting(
            "[SENSe:]FUNCtion",
            Choice(("CSRS", "CPRP", "CSD", "LSRS", "LSQ", "RX")),
            lambda: bridge.drive.pair,
            lambda now_s, value: setattr(bridge.drive, "pair", value),
        )
        self.add_setting(
            "[SENSe:]APERture",
            Choice(("SHORt", "LONG")),
            lambda: "SHORT" if bridge.drive.aperture == "SHOR" else "LONG",
            lambda now_s, value: setattr(bridge.drive, "aperture", value),
        )
        self.add_setting(
            "[SENSe:]RANGe:AUTO",
            Boolean(),
            lambda: str(int(bridge.drive.automatic)),
            lambda now_s, value: setattr(bridge.drive, "automatic", value),
        )

    def _put_frequency(self, now_s: float, value: object) -> None:
        asked = float(value)  # type: ignore[arg-type]  # the parameter is a Number
        self._bridge.drive.frequency_hz = min(FREQUENCIES_HZ, key=lambda one: abs(one - asked))
        self._unsettled = True

    def _put_level(self, now_s: float, value: object) -> None:
        if value not in LEVELS_V:
            raise ScpiError(-222)
        self._bridge.drive.level_v = float(value)
        self._unsettled = True

    def _trigger(self, now_s: float) -> Later:
        bridge = self._bridge
        bridge.prepare(now_s)
        drive = bridge.drive
        ends_s = now_s + max(APERTURE_S[drive.aperture], PERIODS / drive.frequency_hz)
        self.status.operation.set_condition(MEASURING)
        return Later(ends_s, lambda at_s: self._measured(now_s, at_s))

    def _measured(self, started_s: float, now_s: float) -> None:
        self.status.operation.set_condition(0)
        found = self._bridge.measure(started_s, now_s)
        if self._unsettled and found.status in (GOOD, LEVEL_LOW):
            off = 1.0 + UNSETTLED
            found = Reading(found.first * off, found.second * off, GOOD, 0.0, 0.0)
        self._unsettled = False
        self._last = found

    def _fetch(self, now_s: float) -> str:
        if self._last is None:
            raise ScpiError(-230)
        found = self._last
        return f"{_WORDS[found.status]},{format_blank(found.first)},{format_blank(found.second)}"
