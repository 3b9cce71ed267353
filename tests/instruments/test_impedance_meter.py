"""The impedance meter against a peer written by hand from the protocol's description."""

from collections.abc import Callable
from math import isnan
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from ohmward.errors import InstrumentRefused, LinkError, Problems, WrongIdentity
from ohmward.instruments.impedance_meter import ImpedanceMeter
from ohmward.instruments.talker import Talker
from ohmward.protocol.codec import codec_of
from ohmward.setup.driver import load_driver
from ohmward.terms.condition import Point
from ohmward.terms.status import Status

DEFAULTS = {
    "FREQ": "+1.000000E+03",
    "VOLT": "+1.000000E+00",
    "VOLT:OFFS": "+0.000000E+00",
    "VOLT:OFFS:STAT": "0",
    "CURR:OFFS": "+0.000000E+00",
    "CURR:OFFS:STAT": "0",
    "FUNC": '"RX"',
    "APER": "MED",
    "RANG": "+1.000000E+03",
    "RANG:AUTO": "1",
    "CORR:OPEN": "1",
    "CORR:SHOR": "1",
    "CORR:LOAD": "0",
    "CORR:LENG": "+1.000000E+00",
}


class Meter:
    """A meter that holds strings: each setting answers what was sent, numbers as NR3."""

    def __init__(self) -> None:
        self.state = dict(DEFAULTS)
        self.errors: list[str] = []
        self.history: list[str] = []
        self.clamps: dict[str, float] = {}
        self.deaf: set[str] = set()
        self.status = 0
        self.first = "+1.234567E+02"
        self.level = ""
        self.speaks_state = False  # its first number then says which frequency it stands at
        self.identity = b"GENERIC,IMPEDANCE-METER,77,1.0"

    def restart(self) -> None:
        self.state = dict(DEFAULTS)

    def handle(self, line: bytes) -> bytes | None:
        text = line.decode("ascii")
        if text == "*IDN?":
            return self.identity
        if text == "*CLS":
            self.errors.clear()
            return None
        if text == "SYST:ERR?":
            return (self.errors.pop(0) if self.errors else '0,"No error"').encode()
        if text == "READ?":
            level = self.level or self.state["VOLT"]
            offset = (
                self.state["VOLT:OFFS"] if self.state["VOLT:OFFS:STAT"] == "1" else "+0.000000E+00"
            )
            first = f"{float(self.state['FREQ']) / 7.0:+.6E}" if self.speaks_state else self.first
            fields = [first, "-9.876543E+01", str(self.status), level, offset]
            return ",".join([*fields, self.state["RANG"]]).encode()
        if text.endswith("?"):
            return self.state[text[:-1]].encode()
        header, _, value = text.partition(" ")
        self.history.append(text)
        if header in self.deaf:
            self.errors.append('-222,"Data out of range"')
            return None
        self.state[header] = self._kept(header, value)
        if header == "RANG":
            self.state["RANG:AUTO"] = "0"
        return None

    def _kept(self, header: str, value: str) -> str:
        if value in ("ON", "OFF"):
            return "1" if value == "ON" else "0"
        try:
            number = float(value)
        except ValueError:
            return value
        limit = self.clamps.get(header)
        return f"{number if limit is None else min(number, limit):+.6E}"


@pytest.fixture
def peer() -> Meter:
    return Meter()


@pytest.fixture
def link(peer: Meter, link_to: Callable[[Any], Any]) -> Any:
    return link_to(peer)


@pytest.fixture
def meter(link: Any) -> ImpedanceMeter:
    return ImpedanceMeter(talker(link))


def talker(link: Any, serial_number: str = "") -> Talker:
    driver = load_driver("scpi-impedance-meter", Path(), Problems())
    assert driver is not None
    return Talker(link, driver, codec_of(driver), serial_number=serial_number)


async def prepared(meter: ImpedanceMeter, **changes: Any) -> dict[str, str]:
    wanted: dict[str, Any] = {"pair": "R-X", "integration": "medium", "range_ohm": None}
    return await meter.prepare(**(wanted | changes))


POINT = Point(frequency_hz=1e4, level_v=0.5)


def test_identity_is_asked_and_old_errors_are_nobodys(
    link: Any, peer: Meter, virtually: Any
) -> None:
    peer.errors.append('-100,"Command error"')
    assert virtually(talker(link).identify) == "GENERIC,IMPEDANCE-METER,77,1.0"
    assert peer.errors == []


def test_what_is_prepared_is_read_back_and_told(meter: ImpedanceMeter, virtually: Any) -> None:
    found = virtually(lambda: prepared(meter, pair="Cs-D", integration="long"))
    assert found == {
        "pair": "Cs-D",
        "integration": "long",
        "range_automatic": "on",
        "correction_open": "on",
        "correction_short": "on",
        "correction_load": "off",
        "cable_length": "1",
    }


def test_a_range_is_held_at_the_next_one_up(
    meter: ImpedanceMeter, link: Any, peer: Meter, virtually: Any
) -> None:
    found = virtually(lambda: prepared(meter, range_ohm=2000.0))
    assert found["range"] == "10000"
    assert found["range_automatic"] == "off"
    assert peer.state["RANG"] == "+1.000000E+04"


def test_one_query_per_reading_while_nothing_changes(
    meter: ImpedanceMeter, link: Any, virtually: Any
) -> None:
    async def work() -> None:
        await prepared(meter)
        await meter.set_point(POINT)
        await meter.read()
        before = len(link.sent)
        for _ in range(10):
            reading = await meter.read()
            assert reading.status is Status.OK
        assert link.sent[before:] == [b"READ?"] * 10

    virtually(work)


def test_only_what_differs_is_set(meter: ImpedanceMeter, peer: Meter, virtually: Any) -> None:
    async def work() -> None:
        await prepared(meter)
        await meter.set_point(POINT)
        peer.history.clear()
        await meter.set_point(POINT)
        assert peer.history == []
        await meter.set_point(Point(frequency_hz=2e4, level_v=0.5))
        assert peer.history == ["FREQ 20000"]

    virtually(work)


def test_a_reading_as_it_was_sent(meter: ImpedanceMeter, peer: Meter, virtually: Any) -> None:
    async def work() -> None:
        await prepared(meter)
        await meter.set_point(Point(frequency_hz=1e4, level_v=0.5, bias_v=10.0))
        reading = await meter.read()
        assert (reading.pair, reading.first, reading.second) == ("R-X", 123.4567, -98.76543)
        assert reading.first_resolution == pytest.approx(1e-4)
        assert reading.second_resolution == pytest.approx(1e-5)
        assert (reading.level_v, reading.bias_v, reading.range) == (0.5, 10.0, "1000")
        assert isnan(reading.bias_a)
        assert reading.reply.startswith(b"+1.234567E+02,-9.876543E+01,0,")

    virtually(work)


def test_level_sag_is_seen_in_the_read_back_level(
    meter: ImpedanceMeter, peer: Meter, virtually: Any
) -> None:
    peer.level, peer.status = "+2.100000E-01", 3

    async def work() -> None:
        await prepared(meter)
        await meter.set_point(POINT)
        reading = await meter.read()
        assert reading.status is Status.OK  # a warning: the value holds
        assert reading.level_v == 0.21

    virtually(work)


@pytest.mark.parametrize(
    ("first", "status", "worth"),
    [
        ("9.9E37", 0, Status.OVERLOAD),
        ("9.9E37", 1, Status.OVERLOAD),
        ("9.91E37", 2, Status.UNBALANCED),
        ("+1.234567E+02", 1, Status.OVERLOAD),
        ("+1.234567E+02", 9, Status.MALFORMED),
        ("+1.2345", 0, Status.MALFORMED),
    ],
)
def test_bad_readings_are_no_numbers(
    meter: ImpedanceMeter,
    peer: Meter,
    virtually: Any,
    first: str,
    status: int,
    worth: Status,
) -> None:
    peer.first, peer.status = first, status

    async def work() -> None:
        await prepared(meter)
        await meter.set_point(POINT)
        reading = await meter.read()
        assert reading.status is worth
        assert isnan(reading.first)
        assert isnan(reading.second)
        assert first.encode() in reading.reply

    virtually(work)


def test_silent_clamping_is_caught(meter: ImpedanceMeter, peer: Meter, virtually: Any) -> None:
    peer.clamps["VOLT:OFFS"] = 20.0

    async def work() -> None:
        await prepared(meter)
        with pytest.raises(InstrumentRefused, match="bias_voltage was set to 30 and is 20"):
            await meter.set_point(Point(frequency_hz=1e3, level_v=0.5, bias_v=30.0))
        assert (await meter.read()).status is Status.NOT_SET

    virtually(work)


def test_a_refusal_names_what_the_meter_reports(
    meter: ImpedanceMeter, peer: Meter, virtually: Any
) -> None:
    peer.deaf.add("FREQ")

    async def work() -> None:
        await prepared(meter)
        with pytest.raises(InstrumentRefused, match="-222, Data out of range"):
            await meter.set_point(Point(frequency_hz=5e3, level_v=0.5))
        peer.deaf.clear()
        await meter.set_point(Point(frequency_hz=6e3, level_v=0.5))
        assert (await meter.read()).status is Status.OK

    virtually(work)


@pytest.mark.parametrize(
    "point",
    [
        Point(frequency_hz=5.0, level_v=0.5),
        Point(frequency_hz=1e3, level_v=3.0),
        Point(frequency_hz=1e3, level_v=0.5, bias_v=-41.0),
        Point(frequency_hz=1e3, level_v=0.5, bias_a=0.2),
        Point(frequency_hz=1e3, level_v=0.5, bias_v=1.0, bias_a=0.01),
    ],
)
def test_beyond_the_limits_nothing_of_it_is_sent(
    meter: ImpedanceMeter, peer: Meter, virtually: Any, point: Point
) -> None:
    async def work() -> None:
        await prepared(meter)
        await meter.set_point(POINT)
        before = dict(peer.state)
        with pytest.raises(InstrumentRefused):
            await meter.set_point(point)
        assert peer.state == before
        assert (await meter.read()).status is Status.NOT_SET
        await meter.set_point(POINT)
        assert (await meter.read()).status is Status.OK

    virtually(work)


def test_what_was_taken_of_a_refused_point_is_not_taken_for_the_point_before(
    meter: ImpedanceMeter, peer: Meter, virtually: Any
) -> None:
    async def work() -> None:
        await prepared(meter)
        await meter.set_point(Point(frequency_hz=1e3, level_v=0.5))
        peer.deaf.add("VOLT")
        with pytest.raises(InstrumentRefused):
            await meter.set_point(Point(frequency_hz=1e4, level_v=0.2))
        peer.deaf.clear()
        assert float(peer.state["FREQ"]) == 1e4
        await meter.set_point(Point(frequency_hz=1e3, level_v=0.5))
        assert float(peer.state["FREQ"]) == 1e3

    virtually(work)


def test_what_falls_is_set_before_what_rises(
    meter: ImpedanceMeter, peer: Meter, virtually: Any
) -> None:
    """Else bias 30 V and level 2 V would stand together on the way."""

    async def work() -> None:
        await prepared(meter)
        await meter.set_point(Point(frequency_hz=1e3, level_v=0.1, bias_v=30.0))
        peer.history.clear()
        await meter.set_point(Point(frequency_hz=1e3, level_v=2.0, bias_v=1.0))
        assert peer.history == ["VOLT:OFFS 1", "VOLT 2"]
        peer.history.clear()
        await meter.set_point(Point(frequency_hz=1e3, level_v=0.1, bias_v=30.0))
        assert peer.history == ["VOLT 0.1", "VOLT:OFFS 30"]

    virtually(work)


@pytest.mark.parametrize(
    ("stands", "wanted"),
    [
        (
            Point(frequency_hz=1e3, level_v=2.0, bias_v=3.0),
            Point(frequency_hz=1e3, level_v=0.1, bias_v=30.0),
        ),
        (
            Point(frequency_hz=1e3, level_v=0.1, bias_v=30.0),
            Point(frequency_hz=1e3, level_v=2.0, bias_v=3.0),
        ),
    ],
)
@pytest.mark.parametrize("known", [True, False])
def test_no_more_voltage_on_the_way_than_at_either_point(
    meter: ImpedanceMeter,
    link: Any,
    peer: Meter,
    virtually: Any,
    stands: Point,
    wanted: Point,
    known: bool,
) -> None:
    """Peaks are bias ± √2·level; a fault makes the meter forget what stands there."""
    peaks: list[tuple[float, float]] = []
    kept = peer._kept

    def keep(header: str, value: str) -> str:
        text = kept(header, value)
        now = peer.state | {header: text}
        bias = float(now["VOLT:OFFS"]) if now["VOLT:OFFS:STAT"] == "1" else 0.0
        swing = 2.0**0.5 * float(now["VOLT"])
        peaks.append((bias - swing, bias + swing))
        return text

    async def work() -> None:
        await prepared(meter)
        await meter.set_point(stands)
        peer._kept = keep  # type: ignore[method-assign]
        if not known:
            link.distrust("something came that nobody asked for")
        await meter.set_point(wanted)

    virtually(work)
    ends = [
        (p.bias_v - 2.0**0.5 * p.level_v, p.bias_v + 2.0**0.5 * p.level_v) for p in (stands, wanted)
    ]
    assert min(low for low, _ in peaks) >= min(low for low, _ in ends) - 1e-9
    assert max(high for _, high in peaks) <= max(high for _, high in ends) + 1e-9


def test_one_bias_is_off_before_the_other_is_on(
    meter: ImpedanceMeter, peer: Meter, virtually: Any
) -> None:
    async def work() -> None:
        await prepared(meter)
        await meter.set_point(Point(frequency_hz=1e3, level_v=0.1, bias_v=5.0))
        peer.history.clear()
        await meter.set_point(Point(frequency_hz=1e3, level_v=0.1, bias_a=0.05))
        assert peer.history == [
            "VOLT:OFFS 0",
            "VOLT:OFFS:STAT OFF",
            "CURR:OFFS 0.05",
            "CURR:OFFS:STAT ON",
        ]

    virtually(work)


def test_rest_takes_every_bias_away(meter: ImpedanceMeter, peer: Meter, virtually: Any) -> None:
    async def work() -> None:
        await prepared(meter)
        assert not meter.bias_is_off  # nothing is confirmed yet
        await meter.set_point(Point(frequency_hz=1e3, level_v=0.5, bias_v=5.0))
        assert not meter.bias_is_off
        await meter.rest()
        assert meter.bias_is_off
        assert float(peer.state["VOLT:OFFS"]) == 0.0
        assert peer.state["VOLT:OFFS:STAT"] == "0"
        assert peer.state["CURR:OFFS:STAT"] == "0"
        assert float(peer.state["VOLT"]) == 0.005

    virtually(work)


def test_rest_tries_everything_whatever_fails(
    meter: ImpedanceMeter, peer: Meter, virtually: Any
) -> None:
    async def work() -> None:
        await prepared(meter)
        await meter.set_point(Point(frequency_hz=1e3, level_v=0.5, bias_v=5.0))
        peer.deaf.add("VOLT:OFFS")
        with pytest.raises(InstrumentRefused):
            await meter.rest()
        assert peer.state["VOLT:OFFS:STAT"] == "0"
        assert meter.bias_is_off  # its output is

    virtually(work)


def test_a_lost_link_leaves_the_bias_unconfirmed(
    meter: ImpedanceMeter, link: Any, virtually: Any
) -> None:
    async def work() -> None:
        await prepared(meter)
        await meter.set_point(Point(frequency_hz=1e3, level_v=0.5, bias_v=5.0))
        link.dirty = link.gone = True
        with pytest.raises(LinkError, match="budget"):
            await meter.rest()
        assert not meter.bias_is_off

    virtually(work)


@pytest.mark.parametrize(
    ("fault", "status"),
    [
        ("late", Status.TIMEOUT),
        ("lost", Status.TIMEOUT),
        ("half", Status.MALFORMED),
        ("restarted", Status.STALE),
    ],
)
def test_after_a_fault_all_is_set_again_before_the_next_reading(
    meter: ImpedanceMeter, link: Any, peer: Meter, virtually: Any, fault: str, status: Status
) -> None:
    async def work() -> None:
        await prepared(meter, pair="Cs-D")
        await meter.set_point(Point(frequency_hz=1e4, level_v=0.5, bias_v=2.0))
        link.faults[len(link.sent) + 1] = fault
        assert (await meter.read()).status is status
        peer.restart()
        before = len(link.sent)
        reading = await meter.read()
        assert link.sent[before] == b"*CLS"  # greeted anew, as after opening
        assert reading.status is Status.OK
        assert float(peer.state["FREQ"]) == 1e4
        assert (reading.level_v, reading.bias_v) == (0.5, 2.0)
        assert peer.state["FUNC"] == '"CSD"'

    virtually(work)


@pytest.mark.parametrize("fault", ["late", "lost", "half"])
@pytest.mark.parametrize("when", range(1, 22))
def test_a_fault_while_setting_is_mended(
    meter: ImpedanceMeter, link: Any, peer: Meter, virtually: Any, fault: str, when: int
) -> None:
    async def work() -> None:
        await prepared(meter)
        link.faults[len(link.sent) + when] = fault
        await meter.set_point(Point(frequency_hz=1e4, level_v=0.5, bias_v=2.0))
        first = await meter.read()
        reading = first if first.status is Status.OK else await meter.read()
        assert reading.status is Status.OK
        assert reading.bias_v == 2.0
        assert float(peer.state["FREQ"]) == 1e4

    virtually(work)


def test_a_reading_after_a_held_range_is_thrown_away_once(
    link: Any, peer: Meter, virtually: Any, tmp_path: Path
) -> None:
    (tmp_path / "own.toml").write_text(
        'format = 1\nextends = "scpi-impedance-meter"\n[setting.range]\nwait = { discard = 2 }\n',
        encoding="utf-8",
    )
    problems = Problems()
    driver = load_driver("own.toml", tmp_path, problems)
    assert driver is not None, list(problems)
    meter = ImpedanceMeter(Talker(link, driver, codec_of(driver)))

    async def work() -> None:
        await prepared(meter, range_ohm=100.0)
        await meter.set_point(POINT)
        before = len(link.sent)
        await meter.read()
        await meter.read()
        assert link.sent[before:] == [b"READ?"] * 4

    virtually(work)


@pytest.mark.parametrize("identity", [b"GENERIC,SCANNER,77,1.0", b"GENERIC", b"", b"\xff,a,b,c"])
def test_another_identity_and_nothing_more_is_sent(
    link: Any, peer: Meter, virtually: Any, identity: bytes
) -> None:
    from ohmward.instruments.identity import identity_check

    driver = load_driver("scpi-impedance-meter", Path(), Problems())
    assert driver is not None
    with pytest.raises(WrongIdentity):
        identity_check(driver)(identity)
    identity_check(driver)(peer.identity)
    identity_check(driver, serial_number="77")(peer.identity)
    with pytest.raises(WrongIdentity, match="serial number 78"):
        identity_check(driver, serial_number="78")(peer.identity)


def test_a_cable_is_told_to_the_meter(link: Any, peer: Meter, virtually: Any) -> None:
    meter = ImpedanceMeter(talker(link), cable_m=2.0)
    found = virtually(lambda: prepared(meter))
    assert found["cable_length"] == "2"
    assert float(peer.state["CORR:LENG"]) == 2.0


POINTS = [
    Point(frequency_hz=1e3, level_v=1.0),
    Point(frequency_hz=1e4, level_v=0.5, bias_v=2.0),
    Point(frequency_hz=5e4, level_v=0.2, bias_v=-7.0),
]
KINDS = [
    "late",
    "lost",
    "unheard",
    "restarted",
    "half",
    "head",
    "comma",
    "eighth bit",
    "twice",
    "empty",
    "previous",
]


@given(
    faults=st.dictionaries(st.integers(1, 120), st.sampled_from(KINDS), max_size=12),
    visits=st.lists(st.sampled_from(POINTS), min_size=1, max_size=5),
)
@example(faults={1: "late", 57: "previous", 24: "late"}, visits=[POINTS[0], POINTS[1], POINTS[0]])
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_whatever_happens_on_the_link_no_wrong_number_comes_out(
    link_to: Callable[[Any], Any],
    virtually: Any,
    faults: dict[int, str],
    visits: list[Point],
) -> None:
    """An accepted reading was taken at the point that was set; healthy ones are accepted."""
    peer = Meter()
    peer.speaks_state = True
    link = link_to(peer)
    meter = ImpedanceMeter(talker(link))

    async def work() -> None:
        link.faults = faults
        try:
            await prepared(meter)
        except LinkError:
            return
        for point in visits:
            try:
                await meter.set_point(point)
            except LinkError:
                continue
            for _ in range(3):
                before = len(link.sent)
                reading = await meter.read()
                if reading.status is Status.OK:
                    assert reading.first == pytest.approx(point.frequency_hz / 7.0, rel=1e-6)
                    assert reading.level_v == point.level_v
                    assert reading.bias_v == point.bias_v
                else:
                    assert isnan(reading.first)
                    assert any(number > before for number in faults)

    virtually(work)
