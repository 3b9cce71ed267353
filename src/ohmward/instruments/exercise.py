"""Exercises a driver on its instrument, gently: nothing is energised, no relay moves.

What can be asked is asked. What can be asked and set is set to the value that it has already,
and read back; what could energise (a bias, a supply's voltage and output) is only ever set to 0
or off. Actions are left alone but for the driver's own first ones.
"""

from collections.abc import AsyncGenerator, Awaitable, Callable
from dataclasses import dataclass

import trio

from ohmward.errors import LinkError, LinkLost, WrongIdentity
from ohmward.instruments.talker import Talker
from ohmward.instruments.transcript import Exchange, Transcript
from ohmward.protocol.fields import Value
from ohmward.terms.status import Status

AT_REST: dict[str, Value] = {
    "voltage": 0.0,
    "output": False,
    "bias_voltage": 0.0,
    "bias_voltage_output": False,
    "bias_current": 0.0,
    "bias_current_output": False,
}
LEFT_ALONE = frozenset(
    {"watchdog", "trigger", "polarity", "voltage_limit", "current_limit", "ramp", "remote"}
)
OK = "ok"
NOT_TRIED = "not tried: "


@dataclass(frozen=True, kw_only=True, slots=True)
class Exercised:
    """One entry of the driver, tried: ``verdict`` is ``ok``, what went wrong, or why not tried.

    ``exchanges`` are the bytes of it; ``value`` is what was understood.
    """

    entry: str
    value: str = ""
    took_s: float = 0.0
    verdict: str = OK
    exchanges: tuple[Exchange, ...] = ()
    ends: bool = False

    @property
    def failed(self) -> bool:
        """Whether it was tried and did something else than the driver says."""
        return self.verdict != OK and not self.verdict.startswith(NOT_TRIED)


async def exercise(talker: Talker, transcript: Transcript) -> AsyncGenerator[Exercised, None]:
    """Open the instrument and try every entry of its driver in turn.

    ``transcript`` is the one that the talker's wire is tapped with. A lost link or another
    instrument than expected ends it, after the entry at which that was seen.
    """

    async def identify() -> str:
        return await talker.identify()

    entries: list[tuple[str, Callable[[], Awaitable[str]] | str]] = [("identity", identify)]
    for name, setting in talker.driver.setting.items():
        work = _of_setting(talker, name) if setting.ask or name in AT_REST else "cannot be asked"
        entries.append((f"setting.{name}", work))
    entries += [
        (f"reading.{name}", _of_reading(talker, name))
        for name, reading in talker.driver.reading.items()
        if "{" not in reading.ask
    ]
    entries += [
        (f"action.{name}", "actions are left alone")
        for name in talker.driver.action
        if name not in talker.driver.start
    ]
    for entry, work_or_reason in entries:
        if isinstance(work_or_reason, str):
            yield Exercised(entry=entry, verdict=NOT_TRIED + work_or_reason)
            continue
        found = await _tried(transcript, entry, work_or_reason)
        yield found
        if found.ends:
            return


async def _tried(
    transcript: Transcript, entry: str, work: Callable[[], Awaitable[str]]
) -> Exercised:
    before = len(transcript.exchanges)
    start_s = trio.current_time()
    value, verdict, ends = "", OK, False
    try:
        value = await work()
    except LinkError as error:
        verdict, ends = str(error), isinstance(error, LinkLost | WrongIdentity)
    return Exercised(
        entry=entry,
        value=value,
        took_s=trio.current_time() - start_s,
        verdict=verdict,
        exchanges=tuple(transcript.exchanges)[before:],
        ends=ends or (entry == "identity" and verdict != OK),
    )


def _of_setting(talker: Talker, name: str) -> Callable[[], Awaitable[str]]:
    async def tried() -> str:
        if name in AT_REST:
            return _shown(await talker.set(name, AT_REST[name]))
        value = await talker.read_back(name)
        if name not in LEFT_ALONE:
            value = await talker.set(name, value)
        return _shown(value)

    return tried


def _of_reading(talker: Talker, name: str) -> Callable[[], Awaitable[str]]:
    async def tried() -> str:
        answer = await talker.ask(name)
        said = ", ".join(f"{key} = {_shown(value)}" for key, value in answer.values.items())
        return said if answer.status is Status.OK else f"{said} ({answer.status})"

    return tried


def _shown(value: Value) -> str:
    if isinstance(value, bool):
        return "on" if value else "off"
    return f"{value:.9g}" if isinstance(value, float) else str(value)
