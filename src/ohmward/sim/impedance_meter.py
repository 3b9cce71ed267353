"""A simulated impedance meter, written from docs/protocols/impedance-meter.md."""

from ohmward.sim.bridge import RANGES_OHM, Bridge, Drive
from ohmward.sim.meter_error import MeterError
from ohmward.sim.meter_pairs import PAIRS
from ohmward.sim.scpi_device import ScpiDevice, format_number
from ohmward.sim.scpi_parameters import Boolean, Choice, Number, Parameter, Quoted
from ohmward.sim.scpi_status import ScpiError
from ohmward.sim.scpi_tree import Later
from ohmward.sim.terminals import Terminals

APERTURE_S = {"SHOR": 0.010, "MED": 0.060, "LONG": 0.250}
SETTLING_S = 0.020
SETTLING_PERIODS = 2.0
_CORRECTIONS = {"OPEN": "open_on", "SHORt": "short_on", "LOAD": "load_on"}


class ImpedanceMeter(ScpiDevice):
    """Measures what lies between its leads, with the errors that ``error`` draws."""

    def __init__(
        self, name: str, serial_number: str, terminals: Terminals, error: MeterError
    ) -> None:
        super().__init__("IMPEDANCE-METER", serial_number)
        self.name = name
        self._bridge = Bridge(terminals, error)
        self._last: str | None = None
        self._add_source_commands()
        self._add_sense_commands()

    def reset(self, now_s: float) -> None:
        """Every setting as after power-up, both offsets off."""
        self._bridge.offset_moves(now_s)
        self._bridge.drive = Drive()
        self._bridge.touched(now_s)
        self._last = None

    # -- commands

    def _number(self, pattern: str, parameter: Number, attribute: str) -> None:
        """A numeric setting that the meter has to settle after."""
        bridge = self._bridge

        def put(now_s: float, value: object) -> None:
            setattr(bridge.drive, attribute, value)
            bridge.touched(now_s)

        self.add_setting(
            pattern, parameter, lambda: format_number(getattr(bridge.drive, attribute)), put
        )

    def _plain(self, pattern: str, parameter: Parameter, attribute: str) -> None:
        """A setting of another kind: a word, or a state that is answered as 1 or 0."""
        bridge = self._bridge

        def get() -> str:
            value = getattr(bridge.drive, attribute)
            return str(int(value)) if isinstance(value, bool) else str(value)

        self.add_setting(
            pattern,
            parameter,
            get,
            lambda now_s, value: setattr(bridge.drive, attribute, value),
        )

    def _add_source_commands(self) -> None:
        frequency = Number(minimum=20.0, maximum=2e6, default=1e3, unit="HZ")
        self._number("[SOURce:]FREQuency[:CW]", frequency, "frequency_hz")
        level = Number(minimum=5e-3, maximum=2.0, default=1.0, unit="V")
        self._number("[SOURce:]VOLTage[:LEVel]", level, "level_v")
        bridge = self._bridge
        self.add_setting(
            "[SOURce:]VOLTage:OFFSet",
            Number(minimum=-40.0, maximum=40.0, default=0.0, unit="V"),
            lambda: format_number(bridge.drive.offset_v),
            lambda now_s, value: self._offset(now_s, offset_v=value),
        )
        self.add_setting(
            "[SOURce:]CURRent:OFFSet",
            Number(minimum=0.0, maximum=0.1, default=0.0, unit="A"),
            lambda: format_number(bridge.drive.bias_a),
            lambda now_s, value: self._offset(now_s, bias_a=value),
        )
        self.add_setting(
            "[SOURce:]VOLTage:OFFSet:STATe",
            Boolean(),
            lambda: str(int(bridge.drive.offset_on)),
            lambda now_s, value: self._offset(now_s, offset_on=value, bias_on=False),
        )
        self.add_setting(
            "[SOURce:]CURRent:OFFSet:STATe",
            Boolean(),
            lambda: str(int(bridge.drive.bias_on)),
            lambda now_s, value: self._offset(now_s, offset_on=False, bias_on=value),
        )

    def _offset(self, now_s: float, **settings: object) -> None:
        self._bridge.offset_moves(now_s)
        for attribute, value in settings.items():
            setattr(self._bridge.drive, attribute, value)

    def _add_sense_commands(self) -> None:
        bridge = self._bridge
        self.add_setting(
            "[SENSe:]FUNCtion",
            Quoted(frozenset(PAIRS)),
            lambda: f'"{bridge.drive.pair}"',
            lambda now_s, value: setattr(bridge.drive, "pair", value),
        )
        self._plain("[SENSe:]APERture", Choice(("SHORt", "MEDium", "LONG")), "aperture")
        self.add_setting(
            "[SENSe:]RANGe",
            Number(minimum=RANGES_OHM[0], maximum=RANGES_OHM[-1], default=1e3, unit="OHM"),
            lambda: format_number(bridge.drive.range_ohm),
            self._hold_range,
        )
        self._plain("[SENSe:]RANGe:AUTO", Boolean(), "automatic")
        for word, attribute in _CORRECTIONS.items():
            self._plain(f"[SENSe:]CORRection:{word}[:STATe]", Boolean(), attribute)
        length = Number(minimum=0.0, maximum=4.0, default=0.0, unit="M")
        self._number("[SENSe:]CORRection:LENGth", length, "length_m")
        self.tree.add("READ?", self._read)
        self.tree.add("FETCh?", self._fetch)

    def _hold_range(self, now_s: float, value: object) -> None:
        asked = float(value)  # type: ignore[arg-type]  # the parameter is a Number
        drive = self._bridge.drive
        drive.range_ohm = next(each for each in RANGES_OHM if each >= asked * (1 - 1e-9))
        drive.automatic = False
        self._bridge.touched(now_s)

    # -- measuring

    def _read(self, now_s: float) -> Later:
        """Start a measurement: settle, range, integrate."""
        bridge = self._bridge
        bridge.prepare(now_s)
        periods_s = SETTLING_PERIODS / bridge.drive.frequency_hz
        starts_s = max(now_s, bridge.changed_s + SETTLING_S + periods_s)
        ends_s = starts_s + max(APERTURE_S[bridge.drive.aperture], periods_s)
        return Later(ends_s, lambda at_s: self._measured(starts_s, at_s), True)

    def _measured(self, started_s: float, now_s: float) -> str:
        """One reading at the end of its integration, as the answer to READ?."""
        found = self._bridge.measure(started_s, now_s)
        self._last = (
            f"{found.first:+.6E},{found.second:+.6E},{found.status},{found.level_v:+.6E},"
            f"{found.offset_v:+.6E},{self._bridge.drive.range_ohm:+.6E}"
        )
        return self._last

    def _fetch(self, now_s: float) -> str:
        if self._last is None:
            raise ScpiError(-230)
        return self._last
