"""Checks a driver against its file and its instrument, and a bench against what answers there."""

from collections.abc import Awaitable, Callable
from contextlib import aclosing
from dataclasses import dataclass
from pathlib import Path
from typing import TypeVar

import trio

from ohmward.clock import Clock, run_in_real_time, today_utc
from ohmward.errors import BadInput, LinkError, OhmwardError, Problem, Problems
from ohmward.instruments.exercise import Exercised, exercise
from ohmward.instruments.talker import Talker, open_talker
from ohmward.instruments.transcript import Transcript, escaped
from ohmward.protocol.check import check_driver as compile_driver
from ohmward.setup.address import AddressError, read_address
from ohmward.setup.bench import Bench, load_bench
from ohmward.setup.bench_drivers import load_drivers
from ohmward.setup.driver import Driver, load_driver
from ohmward.setup.resources import find_file
from ohmward.terms.role import Role

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
    remarks = []
    for reading in ("interlock", "state", "voltage", "current"):
        if role not in (Role.IMPEDANCE_METER, Role.SCANNER) and talker.can_ask(reading):
            answer = await talker.ask(reading)
            said = ", ".join(f"{key} {value}" for key, value in answer.values.items())
            remarks.append(f"{reading}: {said}")
    if talker.can_set("output") and talker.driver.setting["output"].ask:
        on = await talker.read_back("output")
        remarks.append("OUTPUT IS ON" if on else "output off")
    return remarks


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
