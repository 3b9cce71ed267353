"""Checks a driver against its file and its instrument, and a bench against what answers there."""

from collections.abc import Awaitable, Callable
from contextlib import aclosing
from dataclasses import dataclass
from pathlib import Path
from typing import TypeVar

import trio

from ohmward.clock import Clock, run_in_real_time, today_utc
from ohmward.errors import (
    BadInput,
    InstrumentRefused,
    LinkError,
    OhmwardError,
    Problem,
    Problems,
)
from ohmward.instruments.current_meter import CurrentMeter
from ohmward.instruments.exercise import Exercised, exercise
from ohmward.instruments.interlock import Interlock
from ohmward.instruments.supply import Supply
from ohmward.instruments.talker import Talker, open_talker
from ohmward.instruments.thermometer import Thermometer
from ohmward.instruments.transcript import (
    Replayed,
    Transcript,
    escaped,
    read_transcript,
    replayed,
)
from ohmward.instruments.voltmeter import Voltmeter
from ohmward.protocol.check import check_driver as compile_driver
from ohmward.setup.address import AddressError, read_address
from ohmward.setup.bench import Bench, load_bench
from ohmward.setup.bench_drivers import load_drivers
from ohmward.setup.driver import Driver, load_driver
from ohmward.setup.resources import find_file
from ohmward.terms.role import Role
from ohmward.terms.status import Status

T = TypeVar("T")
TRY_TIMEOUT_S = 3.0


@dataclass(frozen=True, kw_only=True, slots=True)
class Found:
    """One instrument of a bench: who answered, and what a person should know."""

    name: str
    role: str
    address: str
    identity: str
    remarks: tuple[str, ...]
    failed: bool


def read_driver(file: str) -> Driver:
    """The driver of a file or a shipped one's name. Raises BadInput with every problem of it."""
    problems = Problems()
    driver = load_driver(file, Path(), problems)
    if driver is not None:
        compile_driver(driver, problems)
    problems.raise_if_any()
    if driver is None:
        raise OhmwardError(f"{file} was refused without a problem that says why")
    return driver


def commands_of(driver: Driver) -> list[tuple[str, str, str]]:
    """What a driver sends: (entry, command, query), as its file writes them."""
    rows = [
        (f"setting.{name}", one.set or one.set_and_ask, one.ask)
        for name, one in driver.setting.items()
    ]
    rows += [(f"reading.{name}", "", one.ask) for name, one in driver.reading.items()]
    rows += [(f"action.{name}", one.send, "") for name, one in driver.action.items()]
    return rows


def exercise_driver(driver: Driver, address: str, told: Callable[[Exercised], None]) -> bool:
    """Try a driver on its instrument, entry by entry; ``told`` of each. True if all did well."""
    address = checked_address(address)
    transcript = Transcript()

    async def work(talker: Talker) -> bool:
        well = True
        async with aclosing(exercise(talker, transcript)) as tried:
            async for one in tried:
                told(one)
                well = well and not one.failed
        return well

    return _with_talker(driver, address, transcript, work)


def replay(driver: Driver, file: Path) -> list[Replayed]:
    """Put a transcript through a driver without any link: what each reply means to it.

    Raises BadInput when the file is no transcript.
    """
    try:
        return replayed(read_transcript(file), driver)
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        problem = Problem(
            id="no-transcript",
            file=str(file),
            key="transcript",
            expected="lines of a transcript, as --transcript writes them",
            found=reason,
        )
        raise BadInput((problem,)) from error


def try_address(address: str, query: str, termination: str) -> tuple[str, str]:
    """Send one query and return the bytes both ways, escaped.

    Raises LinkError when nothing, or nothing whole, came back.
    """
    from pyvisa import ResourceManager

    from ohmward.links.link import Hello, Link
    from ohmward.links.settings import LinkSettings
    from ohmward.links.thread_waiter import ThreadWaiter

    address = checked_address(address)
    end = termination.encode("ascii").decode("unicode_escape").encode("latin-1")

    async def main(clock: Clock) -> tuple[str, str]:
        manager = ResourceManager("@py")
        settings = LinkSettings(
            read_termination=end, write_termination=end, timeout_s=TRY_TIMEOUT_S
        )
        link = Link(
            address=address,
            settings=settings,
            manager=manager,
            waiter=ThreadWaiter(),
            hello=Hello(query=b"", check=lambda _: None),
        )
        try:
            await link.open()
            sent = query.encode("ascii", "replace")
            reply = await link.query(sent)
            return escaped(sent + end), escaped(reply + end)
        finally:
            with trio.CancelScope(shield=True):
                await link.aclose()
                manager.close()

    return run_in_real_time(main)


def check_bench(file: str) -> tuple[Bench, list[Found]]:
    """Open every instrument of a bench: identity, serial number, calibration, interlock.

    Nothing is energised and no relay moves. Raises BadInput with every problem of the files.
    """
    problems = Problems()
    bench = load_bench(find_file(file, "simulators"), problems)
    drivers = load_drivers(bench, problems) if bench else None
    for driver in (drivers or {}).values():
        compile_driver(driver, problems)
    problems.raise_if_any()
    if bench is None or drivers is None:
        raise OhmwardError(f"{file} was refused without a problem that says why")
    return bench, [_look(bench, name, drivers[name]) for name in bench.instruments]


def checked_address(address: str) -> str:
    """The address as PyVISA takes it. Raises BadInput for what is none."""
    try:
        return read_address(address).text
    except AddressError as error:
        problem = Problem(
            id="wrong-address",
            file="command line",
            key="address",
            expected=error.expected,
            found=repr(address),
        )
        raise BadInput((problem,)) from error


def _look(bench: Bench, name: str, driver: Driver) -> Found:
    one = bench.instruments[name]
    remarks: list[str] = []
    identity, failed = "", False
    today = today_utc().date()
    if one.calibration_due is None:
        remarks.append("no calibration date stated")
    elif one.calibration_due < today:
        remarks.append(f"calibration was due on {one.calibration_due}")
    if not one.serial_number:
        remarks.append("any serial number is taken")

    async def work(talker: Talker) -> tuple[str, list[str]]:
        said = await talker.identify()
        return said, await _remarks(talker, one.role)

    try:
        identity, more = _with_talker(driver, one.address, Transcript(), work, one.serial_number)
        remarks += more
    except LinkError as error:
        remarks.insert(0, str(error))
        failed = True
    return Found(
        name=name,
        role=one.role.value,
        address=one.address,
        identity=identity,
        remarks=tuple(remarks),
        failed=failed,
    )


async def _remarks(talker: Talker, role: Role) -> list[str]:
    """What the instrument says of its state, where its role has something that matters."""
    if role in (Role.HIGH_VOLTAGE_SUPPLY, Role.BIAS_SOURCE):
        return await _of_supply(talker)
    if role is Role.CURRENT_METER:
        return await _of_current_meter(talker)
    if role is Role.VOLTMETER:
        reading = await Voltmeter(talker).read()
        said = f"{reading.voltage_v:.6g} V" if reading.status is Status.OK else reading.status
        return [f"reads {said} at its terminals now"]
    if role is Role.INTERLOCK:
        return ["enclosure closed" if await Interlock(talker).closed() else "ENCLOSURE OPEN"]
    if role is Role.THERMOMETER:
        room = await Thermometer(talker).read()
        return [f"{room.temperature_c:.1f} °C, {room.humidity_pct:.0f} %"]
    return []


async def _of_supply(talker: Talker) -> list[str]:
    """A supply's output, what is at its terminals, its trip and its interlock; nothing is set."""
    reading = await Supply(talker).read()
    remarks = ["OUTPUT IS ON" if reading.output_on else "output off"]
    zero = f"measures {reading.voltage_v:.4g} V"
    accuracy = talker.driver.scalar_accuracy
    if not reading.output_on and accuracy is not None:
        offset_v = max(one.offset for one in accuracy.ranges)
        if abs(reading.voltage_v) > offset_v:
            zero += f" with its output off: more than its zero's {offset_v:g} V"
    remarks.append(zero)
    if reading.tripped:
        remarks.append("TRIPPED")
    try:
        interlock = Interlock(talker)
    except InstrumentRefused:
        return remarks
    remarks.append("interlock closed" if await interlock.closed() else "INTERLOCK OPEN")
    return remarks


async def _of_current_meter(talker: Talker) -> list[str]:
    """The offset on the lowest range, the input off the terminals, against its accuracy."""
    accuracy = talker.driver.scalar_accuracy
    if accuracy is None or not (talker.can_set("zero_check") and talker.can_set("range")):
        return ["its zero cannot be checked by its driver"]
    meter = CurrentMeter(talker)
    lowest = min(accuracy.ranges, key=lambda one: one.full_scale)
    zero = await meter.zero(lowest.full_scale)
    await meter.rest()
    if zero.status is not Status.OK:
        return [f"its zero is no reading: {zero.status}"]
    said = f"zero {zero.current_a:.3g} A on its range of {lowest.full_scale:g} A"
    within = abs(zero.current_a) <= lowest.offset
    return [said if within else f"{said}: more than the {lowest.offset:g} A that are stated"]


def _with_talker(
    driver: Driver,
    address: str,
    transcript: Transcript,
    work: Callable[[Talker], Awaitable[T]],
    serial_number: str = "",
) -> T:
    """Run ``work`` on a talker that is not open yet, and close it whatever happens."""
    from pyvisa import ResourceManager

    from ohmward.links.thread_waiter import ThreadWaiter

    async def main(clock: Clock) -> T:
        manager = ResourceManager("@py")
        talker = open_talker(
            address=address,
            driver=driver,
            manager=manager,
            waiter=ThreadWaiter(),
            serial_number=serial_number,
            transcript=transcript,
        )
        try:
            return await work(talker)
        finally:
            with trio.CancelScope(shield=True):
                await talker.aclose()
                manager.close()

    return run_in_real_time(main)
