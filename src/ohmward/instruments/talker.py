"""Speaks a driver's words over a link: asks, sets, reads back, compares, waits."""

from collections.abc import Mapping
from math import isclose
from typing import NamedTuple

import pyvisa
import trio

from ohmward.errors import InstrumentRefused, LinkError, LinkTimeout, ReplyMalformed
from ohmward.instruments.identity import identity_check
from ohmward.instruments.line import Wire, hello_of, link_settings, read_end
from ohmward.instruments.transcript import TappedWire, Transcript
from ohmward.links.link import Link
from ohmward.links.waiter import Waiter
from ohmward.protocol.codec import Codec, Command, Decoded, Layout, Value, codec_of
from ohmward.protocol.receiver import NEED_DATA
from ohmward.protocol.scpi import ScpiError, read_error
from ohmward.setup.driver import Driver
from ohmward.setup.driver_commands import Setting, Wait
from ohmward.terms.status import Status

NOW_S = 1e-3
"""How long is waited to learn that nothing waits."""
MOST_WAITING = 10_000


class Answer(NamedTuple):
    """What an instrument answered: values by field name, and the bytes that said so."""

    values: dict[str, Value]
    resolutions: dict[str, float]
    status: Status
    reply: bytes


class _Words(NamedTuple):
    """One setting, compiled."""

    setting: Setting
    set: Command | None
    ask: bytes
    both: Command | None
    layout: Layout


class Talker:
    """One instrument, spoken to in its driver's words. Raises LinkError's children only."""

    def __init__(
        self, link: Wire, driver: Driver, codec: Codec, *, serial_number: str = ""
    ) -> None:
        self.link = link
        self.driver = driver
        self.codec = codec
        self.discards = 0
        """Readings that are still to be thrown away because of what was set."""
        self._serial_number = serial_number
        self._recoveries = link.recoveries
        self._end = read_end(driver)
        self._unasked = codec.receiver()
        self._settings = {name: self._words(one) for name, one in driver.setting.items()}
        self._readings = {
            name: (codec.command(one.ask), codec.layout(one), one.timeout)
            for name, one in driver.reading.items()
        }

    def _words(self, setting: Setting) -> _Words:
        def command(text: str) -> Command | None:
            return self.codec.command(text, setting) if text else None

        ask = self.codec.command(setting.ask).encode({}) if setting.ask else b""
        layout = self.codec.layout(setting.layout)
        return _Words(setting, command(setting.set), ask, command(setting.set_and_ask), layout)

    # --- opening ---

    async def identify(self) -> str:
        """Open the link, know the instrument again, take the driver's first actions.

        Returns the identity, empty where the instrument has none. Raises WrongIdentity before
        anything else is sent.
        """
        answer = await self.link.open()
        self._recoveries = self.link.recoveries
        answer = await self._check_identity() or answer
        for name in self.driver.start:
            await self.act(name)
        if self.driver.errors is not None:
            await self.errors()  # what was left from before is nobody's here
        return self._bare(answer).decode("ascii", "backslashreplace")

    def _bare(self, answer: bytes) -> bytes:
        """The identity without the echo around it, where the link asked for it."""
        table = self.driver.identity
        if table is None or self._asks_itself or not self.codec.talks_back:
            return answer
        receiver = self.codec.receiver(table.ask.encode("ascii"))
        receiver.feed(answer + self._end)
        message = receiver.next()
        return answer if message is NEED_DATA else message

    @property
    def _asks_itself(self) -> bool:
        """Whether the link cannot ask: an echo without a prompt makes two lines of one reply."""
        return self.driver.link.echo and not self.driver.link.prompt

    async def fresh(self) -> bool:
        """Recover a dirty link, and greet an instrument that may have been off in between.

        True when the link has recovered since the last time: the instrument may have forgotten
        all that was set.
        """
        if self.link.dirty:
            await self.link.recover()
        recoveries = self.link.recoveries
        if recoveries == self._recoveries:
            return False
        await self._check_identity()
        for name in self.driver.start:
            await self.act(name)
        self._recoveries = recoveries
        return True

    async def _check_identity(self) -> bytes:
        """Ask for the identity where the link cannot; b"" where it can, or there is none."""
        table = self.driver.identity
        if table is None or not self._asks_itself:
            return b""
        answer = await self._exchange(table.ask.encode("ascii"), answers=True)
        identity_check(self.driver, serial_number=self._serial_number)(answer)
        return answer

    async def aclose(self) -> None:
        """Close the link."""
        await self.link.aclose()

    # --- readings ---

    def reading(self, name: str) -> tuple[bytes, Layout]:
        """A reading's query and layout, compiled, for a loop that asks again and again."""
        command, layout, _ = self._readings[name]
        return command.encode({}), layout

    async def ask(self, name: str, **values: Value) -> Answer:
        """Take a reading by its name. A reply that does not fit makes the link dirty."""
        command, layout, timeout_s = self._readings[name]
        sent = command.encode(values)
        reply = await self.exchange(sent, timeout_s=timeout_s)
        return self._decoded(layout, reply)

    def can_ask(self, name: str) -> bool:
        """Whether the driver has this reading."""
        return name in self._readings

    def _decoded(self, layout: Layout, reply: bytes) -> Answer:
        try:
            decoded: Decoded = layout.decode(reply)
        except ReplyMalformed as error:
            self.link.distrust(str(error))
            raise
        return Answer(*decoded, reply)

    async def exchange(self, sent: bytes, *, timeout_s: float | None = None) -> bytes:
        """Send a query, or nothing, and return the one reply that belongs to it."""
        return await self._exchange(sent, answers=True, timeout_s=timeout_s)

    async def _exchange(
        self, sent: bytes, *, answers: bool, timeout_s: float | None = None
    ) -> bytes:
        if self.codec.unasked:
            return await self._next_unasked(timeout_s)
        if not self.codec.talks_back:
            if answers:
                return await self.link.query(sent, timeout_s)
            await self.link.write(sent)
            return b""
        try:
            return await self._converse(sent, answers=answers, timeout_s=timeout_s)
        except InstrumentRefused:
            raise  # it answered as it should: with a refusal
        except ReplyMalformed as error:
            self.link.distrust(str(error))
            raise

    async def _converse(self, sent: bytes, *, answers: bool, timeout_s: float | None) -> bytes:
        """An exchange of more than one line, or one that ends with a prompt."""
        receiver = self.codec.receiver(sent, answers=answers)
        if self.driver.link.prompt:
            receiver.feed(await self.link.query(sent, timeout_s) + self._end)
        else:
            await self.link.write(sent)
        while (message := receiver.next()) is NEED_DATA:
            receiver.feed(await self.link.receive(timeout_s) + self._end)
        return message

    async def _next_unasked(self, timeout_s: float | None) -> bytes:
        """The next whole message that an instrument sends of its own accord, none older."""
        deadline_s = trio.current_time() + (timeout_s or self.driver.link.timeout)
        await self._skip_what_waits()
        try:
            return await self._whole_by(deadline_s)
        except LinkTimeout as error:
            # one that talks of its own accord and is silent: its link may be dead
            self.link.distrust(str(error), reopen=True)
            raise

    async def _whole_by(self, deadline_s: float) -> bytes:
        while (message := self._unasked.next()) is NEED_DATA:
            left_s = deadline_s - trio.current_time()
            if left_s <= 0:
                raise LinkTimeout("nothing whole came in time")
            self._unasked.feed(await self.link.receive(left_s) + self._end)
        return message

    async def _skip_what_waits(self) -> None:
        """Throw away what came while nobody listened: it was measured before it was asked for."""
        for _ in range(MOST_WAITING):
            try:
                self._unasked.feed(await self.link.receive(NOW_S) + self._end)
            except LinkTimeout:
                return
            while self._unasked.next() is not NEED_DATA:
                pass

    # --- settings ---

    def can_set(self, name: str) -> bool:
        """Whether the driver has this setting."""
        return name in self._settings

    async def set(self, name: str, value: Value) -> Value:
        """Set, wait, read back and compare; return the read-back.

        Where the instrument cannot be asked, the value that was sent is returned. Raises
        InstrumentRefused when the value cannot be set, is not taken, or is clamped silently.
        """
        return (await self.set_all({name: value}))[name]

    async def set_all(self, values: Mapping[str, Value]) -> dict[str, Value]:
        """Set several things in the order given, then read all of them back."""
        sent = {name: self.settable(name, value) for name, value in values.items()}
        found: dict[str, Value] = {}
        for name, value in sent.items():
            words = self._settings[name]
            if words.both is not None:
                reply = await self.exchange(words.both.encode({"value": value}))
                found[name] = self._decoded(words.layout, reply).values["value"]
            elif words.set is not None:
                await self._exchange(words.set.encode({"value": value}), answers=False)
            if words.setting.wait is not None:
                await self._wait(words.setting.wait)
        for name in sent:
            if name not in found:
                found[name] = await self.read_back(name, sent[name])
        await self._compare(sent, found)
        return found

    def settable(self, name: str, value: Value) -> Value:
        """The value as it will be sent; InstrumentRefused when the driver says it cannot be."""
        words = self._settings.get(name)
        if words is None:
            raise InstrumentRefused(f"the driver has no setting {name}; nothing was sent")
        setting = words.setting
        if setting.kind != "number" or isinstance(value, str | tuple):
            return value
        number = setting.settable(float(value))
        if number is None:
            raise InstrumentRefused(
                f"{name} cannot be {value:g}: the driver allows {_limits(setting)};"
                " nothing was sent"
            )
        return number

    async def read_back(self, name: str, otherwise: Value = "") -> Value:
        """What the instrument says a setting is; ``otherwise`` where it cannot be asked."""
        words = self._settings[name]
        if not words.ask:
            return otherwise
        reply = await self.exchange(words.ask)
        answer = self._decoded(words.layout, reply)
        if answer.status is not Status.OK:
            self.link.distrust(f"{name} was read back as {reply!r}")
            raise ReplyMalformed(f"{name} was read back as {reply!r}")
        return answer.values["value"]

    async def _compare(self, sent: Mapping[str, Value], found: Mapping[str, Value]) -> None:
        errors = self.driver.errors
        reported: tuple[ScpiError, ...] = ()
        differing = [
            f"{name} was set to {_said(sent[name])} and is {_said(found[name])}"
            for name in sent
            if not _same(self._settings[name].setting, sent[name], found[name])
        ]
        if errors is not None and (differing or errors.after == "settings"):
            reported = await self.errors()
        if differing or reported:
            told = [f"it reports {error.code}, {error.text}" for error in reported]
            raise InstrumentRefused("; ".join(differing + told))

    # --- actions ---

    def can_act(self, name: str) -> bool:
        """Whether the driver has this action."""
        return name in self.driver.action

    async def act(self, name: str, **values: Value) -> Answer | None:
        """Take an action, wait as the driver says; its answer, where it answers."""
        action = self.driver.action[name]
        sent = self.codec.command(action.send).encode(values)
        answer = None
        if action.reply is None:
            await self._exchange(sent, answers=False)
        else:
            answer = self._decoded(self.codec.layout(action.reply), await self.exchange(sent))
        if action.wait is not None:
            await self._wait(action.wait)
        return answer

    async def errors(self) -> tuple[ScpiError, ...]:
        """Empty the instrument's error queue; LinkError when it never becomes empty."""
        table = self.driver.errors
        if table is None:
            return ()
        ask = table.ask.encode("ascii")
        found: list[ScpiError] = []
        for _ in range(table.at_most + 1):
            reply = await self.exchange(ask)
            try:
                error = read_error(reply)
            except ReplyMalformed as problem:
                self.link.distrust(str(problem))
                raise
            if error.code == 0:
                return tuple(found)
            found.append(error)
        self.link.distrust("its error queue never becomes empty")
        raise LinkError(f"its error queue never becomes empty: {found[0]} …")

    async def _wait(self, wait: Wait) -> None:
        if wait.time:
            await trio.sleep(wait.time)
        if wait.ask:
            await self._poll(wait)
        self.discards = max(self.discards, wait.discard)

    async def _poll(self, wait: Wait) -> None:
        ask = wait.ask.encode("ascii")
        deadline_s = trio.current_time() + wait.at_most
        while True:
            left_s = deadline_s - trio.current_time()
            reply = await self.exchange(ask, timeout_s=max(left_s, self.driver.link.timeout))
            if self._is_done(wait, reply):
                return
            if trio.current_time() + wait.every > deadline_s:
                raise LinkTimeout(f"{wait.ask} still answers {reply[:40]!r}")
            await trio.sleep(wait.every)

    def _is_done(self, wait: Wait, reply: bytes) -> bool:
        text = reply.decode("ascii", "backslashreplace").strip()
        if wait.until:
            return text == wait.until or text.lstrip("+") == wait.until
        try:
            number = int(text)
        except ValueError:
            self.link.distrust(f"{wait.ask} was answered {reply[:40]!r}")
            raise ReplyMalformed(f"{wait.ask} was answered {reply[:40]!r}") from None
        return bool(number >> (wait.bit or 0) & 1) is wait.bit_is


def _limits(setting: Setting) -> str:
    if setting.allowed:
        return ", ".join(f"{one:g}" for one in setting.allowed)
    low = "any" if setting.minimum is None else f"{setting.minimum:g}"
    high = "any" if setting.maximum is None else f"{setting.maximum:g}"
    return f"{low} to {high} {setting.unit}"


def _said(value: Value) -> str:
    if isinstance(value, bool):
        return "on" if value else "off"
    return f"{value:.9g}" if isinstance(value, float) else str(value)


def _same(setting: Setting, sent: Value, found: Value) -> bool:
    if setting.kind != "number":
        return sent == found
    if isinstance(sent, str | tuple) or isinstance(found, str | tuple):
        return False
    return isclose(sent, found, rel_tol=0.0, abs_tol=_room(setting, float(sent)))


def _room(setting: Setting, value: float) -> float:
    return setting.tolerance * abs(value) + setting.tolerance_absolute


def open_talker(
    *,
    address: str,
    driver: Driver,
    manager: pyvisa.ResourceManager,
    waiter: Waiter,
    serial_number: str = "",
    transcript: Transcript | None = None,
) -> Talker:
    """A talker for the instrument at an address; nothing is opened before ``identify``.

    With a ``transcript`` every exchange is kept in it.
    """
    codec = codec_of(driver)
    link: Wire = Link(
        address=address,
        settings=link_settings(driver, codec),
        manager=manager,
        waiter=waiter,
        hello=hello_of(driver, codec, address=address, serial_number=serial_number),
    )
    if transcript is not None:
        link = TappedWire(link, transcript)
    return Talker(link, driver, codec, serial_number=serial_number)
