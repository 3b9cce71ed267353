"""What each role is for, done again and again while the test knows the truth.

A visit sets what is to be set, changes what is to be measured, reads, and compares: it gives
``right``, ``none`` where the instrument gave no number, or ``wrong`` with the particulars.
"""

from collections.abc import Awaitable, Callable
from math import isnan

from tests.contracts.roles.worlds import Place

from ohmward.errors import LinkError, ReplyMalformed
from ohmward.instruments.current_meter import CurrentMeter
from ohmward.instruments.impedance_meter import ImpedanceMeter
from ohmward.instruments.interlock import Interlock
from ohmward.instruments.scanner import Scanner
from ohmward.instruments.supply import Supply
from ohmward.instruments.thermometer import Thermometer
from ohmward.instruments.voltmeter import Voltmeter
from ohmward.terms.condition import Point
from ohmward.terms.role import Role
from ohmward.terms.status import Status

RIGHT, NONE = "right", "none"
Visit = Callable[[int], Awaitable[str]]


def visitor(place: Place) -> Visit:
    """The work of the instrument's role."""
    return _VISITS[place.talker.driver.role](place)


def _close(value: float, truth: float, room: float) -> bool:
    return abs(value - truth) <= room


def _wrong(what: str, value: object, truth: object) -> str:
    return f"wrong: {what} was taken for {value}, and is {truth}"


def _impedance(place: Place) -> Visit:
    meter = ImpedanceMeter(place.talker)
    by_hand = not place.talker.can_set("frequency")
    points = [Point(frequency_hz=1e3, level_v=0.6)]
    if not by_hand:
        points = [
            Point(frequency_hz=frequency_hz, level_v=level_v)
            for frequency_hz in (1e3, 1e4, 100.0)
            for level_v in (1.0, 0.3)
        ]

    async def visit(n: int) -> str:
        if n == 0 and not by_hand:
            await meter.prepare(pair="R-X", integration="short", range_ohm=None)
        part_id = ("C1", "C2")[n % 2]
        point = points[n % len(points)]
        place.bench.place(part_id, now_s=place.now_s())
        await place.sleep(1.0)  # what was under way when the part was changed is of the other one
        await meter.set_point(point)
        reading = await meter.read()
        if reading.status is not Status.OK:
            assert isnan(reading.first)
            return NONE
        truth = {
            name: place.bench.truth(
                part_id, name, frequency_hz=point.frequency_hz, level_v=point.level_v
            )
            for name in ("reactance_ohm", "cs_f")
        }
        seen, is_ = reading.second, truth["reactance_ohm"]
        if reading.pair == "Cs-D":
            seen, is_ = reading.first, truth["cs_f"]
        if not _close(seen, is_, 0.02 * abs(is_)):
            return _wrong(reading.pair, seen, is_)
        return RIGHT

    return visit


def _supply(place: Place) -> Visit:
    supply = Supply(place.talker)
    core = place.device.core

    async def visit(n: int) -> str:
        if n % 6 == 0:
            limit_a = (1e-3, 2e-3)[n // 6 % 2]
            await supply.set_limit(limit_a)
            if not _close(core.limit_a, limit_a, 1e-6):
                return _wrong("the limit that was set", limit_a, core.limit_a)
            on = n // 6 % 3 != 2
            await supply.output(on)
            if core.on is not on:
                return _wrong("the output that was set", on, core.on)
        volts = 10.0 + 7.0 * (n % 9)
        await supply.set_voltage(volts)
        if not _close(core.level_v, volts, 0.06):
            return _wrong("the voltage that was set", volts, core.level_v)
        await place.sleep(1.0)
        before_v = core.port.voltage_v(place.now_s())
        reading = await supply.read()
        after_v = core.port.voltage_v(place.now_s())
        low_v, high_v = sorted((before_v, after_v))
        room_v = 0.005 * high_v + 1.1
        if not low_v - room_v <= reading.voltage_v <= high_v + room_v:
            return _wrong("the voltage", reading.voltage_v, (low_v, high_v))
        for what, seen, is_, room in (
            ("the level", reading.voltage_set_v, core.level_v, 0.06),
            ("the limit", reading.limit_set_a, core.limit_a, 1e-6),
            ("the current", reading.current_a, 0.0, 5e-6),
        ):
            if not _close(seen, is_, room):
                return _wrong(what, seen, is_)
        if (reading.output_on, reading.tripped) != (core.on, core.tripped):
            return _wrong("output and trip", reading, (core.on, core.tripped))
        return RIGHT

    return visit


def _current(place: Place) -> Visit:
    meter = CurrentMeter(place.talker)

    async def visit(n: int) -> str:
        range_a = (2e-6, 2e-5, 2e-7)[n // 3 % 3]
        if n % 3 == 0:
            await meter.set_range(range_a)
        amperes = range_a * (0.2 + 0.11 * (n % 7)) * (-1) ** n
        place.playground.input.amperes = amperes
        reading = await meter.read()
        if reading.status is not Status.OK:
            assert isnan(reading.current_a)
            return NONE
        if not _close(reading.current_a, amperes, 0.003 * abs(amperes) + 1e-3 * range_a):
            return _wrong("the current", reading.current_a, amperes)
        return RIGHT

    return visit


def _voltage(place: Place) -> Visit:
    meter = Voltmeter(place.talker, ratio=10.0)

    async def visit(n: int) -> str:
        volts = (0.05, 0.5, 3.0, 40.0, 700.0)[n % 5] * (-1) ** n
        place.playground.input.volts = volts
        reading = await meter.read()
        if reading.status is not Status.OK:
            assert isnan(reading.voltage_v)
            return NONE
        if not _close(reading.voltage_v, 10.0 * volts, 10.0 * (1e-3 * abs(volts) + 1e-4)):
            return _wrong("the voltage", reading.voltage_v, 10.0 * volts)
        return RIGHT

    return visit


def _scanner(place: Place) -> Visit:
    scanner = Scanner(place.talker)
    sets = (("101", "201"), ("102", "202"), ("103",), ("101", "102"), ("203", "201"))

    async def visit(n: int) -> str:
        channels = sets[n % len(sets)]
        if n % 4 == 3:
            await scanner.open(channels)
        elif n % 7 == 6:
            await scanner.open_all()
        else:
            await scanner.close(channels)
        told = await scanner.closed()
        real = frozenset(place.bench.contacts.closed(place.now_s()))
        return RIGHT if told == real else _wrong("closed", sorted(told), sorted(real))

    return visit


def _thermometer(place: Place) -> Visit:
    thermometer = Thermometer(place.talker)

    async def visit(n: int) -> str:
        if place.speed == 1.0:
            await place.sleep(3600.0)
        truth_c = place.bench.room.temperature_c(place.now_s())
        reading = await thermometer.read()
        for what, seen, is_, room in (
            ("the temperature", reading.temperature_c, truth_c, 0.25),
            ("the humidity", reading.humidity_pct, 41.0, 2.1),
        ):
            if not isnan(seen) and not _close(seen, is_, room):
                return _wrong(what, seen, is_)
        return NONE if isnan(reading.temperature_c) or isnan(reading.humidity_pct) else RIGHT

    return visit


def _interlock(place: Place) -> Visit:
    interlock = Interlock(place.talker)

    async def visit(n: int) -> str:
        door = n % 3 != 0
        place.playground.close_door(door)
        try:
            await interlock.closed()  # whoever asks for the first time starts its debouncing
        except ReplyMalformed:
            return NONE
        await place.sleep(0.1)
        told = await interlock.closed()
        return RIGHT if told is door else _wrong("the door", told, door)

    return visit


_VISITS: dict[Role, Callable[[Place], Visit]] = {
    Role.IMPEDANCE_METER: _impedance,
    Role.BIAS_SOURCE: _supply,
    Role.HIGH_VOLTAGE_SUPPLY: _supply,
    Role.CURRENT_METER: _current,
    Role.VOLTMETER: _voltage,
    Role.SCANNER: _scanner,
    Role.THERMOMETER: _thermometer,
    Role.INTERLOCK: _interlock,
}


async def outcome(visit: Visit, n: int) -> str:
    """One visit; a LinkError is none."""
    try:
        return await visit(n)
    except LinkError:
        return NONE
