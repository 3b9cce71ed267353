"""What every instrument of a role must do, clause by clause, whatever driver and link it has."""

from collections.abc import Awaitable, Callable, Iterator
from math import isnan

import pytest
from tests.contracts.roles.works import RIGHT, visitor
from tests.contracts.roles.worlds import Place

from ohmward.errors import InstrumentRefused
from ohmward.instruments.current_meter import CurrentMeter
from ohmward.instruments.impedance_meter import ImpedanceMeter
from ohmward.instruments.interlock import Interlock
from ohmward.instruments.scanner import Scanner
from ohmward.instruments.supply import Supply
from ohmward.instruments.voltmeter import Voltmeter
from ohmward.protocol.fields import Value
from ohmward.setup.driver_commands import Setting
from ohmward.sim.faults import Fault
from ohmward.terms.condition import Point
from ohmward.terms.role import Role
from ohmward.terms.status import Status

Clause = Callable[[Place], Awaitable[None]]
VISITS = 8


async def the_work_of_the_role_is_done_right(place: Place) -> None:
    visit = visitor(place)
    assert [await visit(n) for n in range(VISITS)] == [RIGHT] * VISITS


# --- settings


def _some_values(setting: Setting) -> Iterator[Value]:
    """Values that the driver allows; a number that may lie anywhere is not its own half."""
    if setting.kind == "switch":
        yield from (True, False)
    elif setting.kind == "word":
        yield from (*setting.words, next(iter(setting.words)))
    elif setting.allowed:
        yield from (setting.allowed[0], setting.allowed[-1])
    elif setting.minimum is not None and setting.maximum is not None:
        yield float(f"{0.6 * setting.maximum + 0.4 * setting.minimum:.1e}")


async def every_setting_is_read_back(place: Place) -> None:
    talker = place.talker
    for name, setting in talker.driver.setting.items():
        if setting.ask or setting.set_and_ask:
            for value in _some_values(setting):
                found = await talker.set(name, value)
                assert found == (pytest.approx(value) if isinstance(value, float) else value)
    if talker.can_set("output"):
        await Supply(talker).rest()


async def a_value_that_is_clamped_in_silence_is_refused(place: Place) -> None:
    talker = place.talker
    for name, setting in talker.driver.setting.items():
        free = setting.kind == "number" and not setting.allowed and setting.minimum is not None
        if not free or not setting.ask:
            continue
        (value,) = _some_values(setting)
        place.layer.inject(Fault(kind="clamped"))
        with pytest.raises(InstrumentRefused, match=name):
            await talker.set(name, value)
        assert await talker.set(name, value) == pytest.approx(value)
        if talker.can_set("output"):
            await Supply(talker).rest()


async def what_the_driver_does_not_allow_is_never_sent(place: Place) -> None:
    talker = place.talker
    for name, setting in talker.driver.setting.items():
        if setting.kind == "number" and setting.maximum is not None:
            before = len(place.bench.records["it"].entries)
            with pytest.raises(InstrumentRefused, match="nothing was sent"):
                await talker.set(name, 2.0 * setting.maximum + 1.0)
            assert len(place.bench.records["it"].entries) == before


# --- the error queue


async def the_error_queue_is_read_until_it_is_empty(place: Place) -> None:
    talker = place.talker
    if talker.driver.errors is None:
        return
    assert await talker.errors() == ()
    for _ in range(3):
        await talker.link.write(b"NO:SUCH:COMMAND 1")
    found = await talker.errors()
    assert [error.code for error in found] == [-113] * 3
    assert await talker.errors() == ()


# --- readings that are none


async def _impedance_meter_says_what_is_no_reading(place: Place) -> None:
    meter = ImpedanceMeter(place.talker)
    if place.talker.can_set("range"):
        await meter.prepare(pair="R-X", integration="short", range_ohm=1e6)
    place.bench.terminals.load("1", {}, place.now_s())
    if place.talker.can_set("range"):  # a part far below the range that is held
        place.bench.place("C1", now_s=place.now_s())
    await place.sleep(1.0)
    level_v = 1.0 if place.talker.can_set("level") else 0.6
    await meter.set_point(Point(frequency_hz=1e3, level_v=level_v))
    reading = await meter.read()
    assert reading.status is Status.OVERLOAD, reading
    assert isnan(reading.first)
    assert isnan(reading.second)


async def _supply_says_that_it_tripped(place: Place) -> None:
    supply = Supply(place.talker)
    await supply.set_voltage(50.0)
    if not place.talker.can_set("watchdog"):
        return
    place.playground.close_door(False)
    with pytest.raises(InstrumentRefused):
        await supply.output(True)
    assert not (await supply.read()).output_on
    place.playground.close_door(True)
    await place.talker.set("watchdog", 5.0)
    await supply.output(True)
    await place.sleep(8.0)
    reading = await supply.read()
    assert reading.tripped
    assert not reading.output_on
    await place.talker.act("clear_trip")
    assert not (await supply.read()).tripped


async def _current_meter_says_overload(place: Place) -> None:
    meter = CurrentMeter(place.talker)
    await meter.set_range(2e-6)
    place.playground.input.amperes = 1e-3
    reading = await meter.read()
    assert (reading.status, reading.range_a) == (Status.OVERLOAD, 2e-6)
    assert isnan(reading.current_a)
    offset = await meter.zero(2e-6)  # the input is off the terminals
    assert offset.status is Status.OK
    assert abs(offset.current_a) < 1e-9


async def _voltmeter_says_overload(place: Place) -> None:
    place.playground.input.volts = 5000.0
    reading = await Voltmeter(place.talker).read()
    assert reading.status is Status.OVERLOAD
    assert isnan(reading.voltage_v)


async def _scanner_refuses_what_it_has_not(place: Place) -> None:
    scanner = Scanner(place.talker)
    with pytest.raises(InstrumentRefused, match="299"):
        await scanner.close(("299",))
    place.bench.contacts.stuck["101"] = True  # type: ignore[attr-defined]
    await scanner.open(("102",))


async def _interlock_takes_a_contradiction_for_open(place: Place) -> None:
    interlock = Interlock(place.talker)
    place.playground.close_door(True)
    await interlock.closed()
    await place.sleep(0.1)
    assert await interlock.closed()
    for sticks in ((True, True), (False, False), (False, True)):
        place.device.sticks = sticks
        assert not await interlock.closed()


async def _nothing_more(place: Place) -> None:
    """A thermometer has no state to tell."""


_NO_READING: dict[Role, Clause] = {
    Role.IMPEDANCE_METER: _impedance_meter_says_what_is_no_reading,
    Role.BIAS_SOURCE: _supply_says_that_it_tripped,
    Role.HIGH_VOLTAGE_SUPPLY: _supply_says_that_it_tripped,
    Role.CURRENT_METER: _current_meter_says_overload,
    Role.VOLTMETER: _voltmeter_says_overload,
    Role.SCANNER: _scanner_refuses_what_it_has_not,
    Role.THERMOMETER: _nothing_more,
    Role.INTERLOCK: _interlock_takes_a_contradiction_for_open,
}


async def what_is_no_reading_is_no_number(place: Place) -> None:
    await _NO_READING[place.talker.driver.role](place)


# --- rest


async def it_comes_to_rest(place: Place) -> None:
    talker = place.talker
    role = talker.driver.role
    if role is Role.IMPEDANCE_METER:
        meter = ImpedanceMeter(talker)
        if talker.can_set("bias_voltage"):
            await meter.set_point(Point(frequency_hz=1e3, level_v=1.0, bias_v=5.0))
            assert not meter.bias_is_off
        await meter.rest()
        assert meter.bias_is_off
        for name, value in (("bias_voltage", 0.0), ("bias_voltage_output", False)):
            if talker.can_set(name):
                assert await talker.read_back(name) == value
    elif role in (Role.HIGH_VOLTAGE_SUPPLY, Role.BIAS_SOURCE):
        supply = Supply(talker)
        await supply.set_voltage(20.0)
        await supply.output(True)
        await supply.rest()
        core = place.device.core
        assert (core.level_v, core.on) == (0.0, False)
        await supply.renew()
        reading = await supply.read()
        assert (reading.voltage_set_v, reading.output_on) == (0.0, False)
    elif role is Role.CURRENT_METER:
        await CurrentMeter(talker).rest()
        assert await talker.read_back("zero_check") is True
    elif role is Role.SCANNER:
        place.bench.contacts.stuck.clear()  # type: ignore[attr-defined]
        scanner = Scanner(talker)
        await scanner.close(("101",))
        await scanner.open_all()
        assert await scanner.closed() == frozenset()


CLAUSES: tuple[Clause, ...] = (
    the_work_of_the_role_is_done_right,
    every_setting_is_read_back,
    a_value_that_is_clamped_in_silence_is_refused,
    what_the_driver_does_not_allow_is_never_sent,
    the_error_queue_is_read_until_it_is_empty,
    what_is_no_reading_is_no_number,
    it_comes_to_rest,
)
