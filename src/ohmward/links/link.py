"""A link to one instrument that trusts nothing after a fault.

A timeout, a reply that cannot be right or a cancellation in the middle of an exchange makes
the link dirty. Before anything else is sent, a dirty link is drained and must answer its
identity query exactly as when it was opened; else it is closed and opened again, with growing
pauses, within a budget. A socket that still owes a reply is opened again at once: a new
connection never delivers what the old one owed, while a drain only hopes that it has.
An identity that is another one ends the link: nothing more is sent. On a link that was good
before, it must be answered twice alike, because a bad line garbles identities as well.

What is detected: a reply that comes late, in halves, twice, unasked, or from another
instrument after a reconnection, because before each command nothing may wait unread, after
each reply nothing may be left over, and after each fault the session must prove itself.

What no link without message numbers (sockets, serial lines) can detect, and what a codec
therefore checks by shape and range:
- a whole line of the right shape that arrives unasked between a query and its reply,
- on a serial line (or behind a gateway that carries old replies over into a new connection)
  a reply of the right shape that comes after the answer to a later identity query. Instruments
  that answer in order never do this. Choose ``timeout_s`` above the slowest measurement, and
  the case does not arise.
HiSLIP numbers its messages and has neither hole.
"""

from collections.abc import Callable
from dataclasses import dataclass

import pyvisa
import trio

from ohmward.errors import LinkError, LinkLost, LinkTimeout, ReplyMalformed, WrongIdentity
from ohmward.links.channel import Channel
from ohmward.links.settings import LinkSettings
from ohmward.links.waiter import Waiter

FIRST_PAUSE_S = 0.1
LONGEST_PAUSE_S = 5.0
DRAIN_AT_MOST = 20
"""A link that is not silent within so many times ``drain_s`` will not be."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Hello:
    """How an instrument is recognised.

    ``check`` gets the reply and raises WrongIdentity, or another LinkError, if it is not the
    one that is expected. An empty ``query`` asks nothing, for instruments that cannot answer.
    """

    query: bytes
    check: Callable[[bytes], None]


class Link:
    """One instrument's link; tasks that share it take turns, an exchange at a time."""

    def __init__(
        self,
        *,
        address: str,
        settings: LinkSettings,
        manager: pyvisa.ResourceManager,
        waiter: Waiter,
        hello: Hello,
    ) -> None:
        self.address = address
        self.settings = settings
        self._manager = manager
        self._waiter = waiter
        self._hello = hello
        self._turn = trio.Lock()
        self._channel: Channel | None = None
        self._identity: bytes | None = None
        self._dirt = ""
        self._reopen = False
        self._ended: LinkError | None = None
        self._free_at_s = float("-inf")
        self.recoveries = 0
        """Counts up with every recovery: what was set before it may be forgotten since."""
        self._unanswered = 0
        self._owed = False

    @property
    def dirty(self) -> bool:
        """True if the next command will first have to recover the link."""
        return bool(self._dirt)

    @property
    def distrusted_because(self) -> str:
        """What made the link dirty; empty if it is clean."""
        return self._dirt

    # --- what instruments use ---

    async def open(self) -> bytes:
        """Open the link, wait, drain a banner, and return the identity that was answered.

        One attempt: a wrong address is told at once. Raises LinkError if nothing answers,
        WrongIdentity if something else does.
        """
        async with self._turn:
            try:
                return await self._connect()
            except BaseException as error:
                self._ended = error if isinstance(error, LinkError) else None
                await self._drop()
                raise

    async def write(self, message: bytes) -> None:
        """Send a command that is not answered."""
        await self._acquire()
        try:
            channel = await self._ready()
            self._dirt, self._reopen = "interrupted in the middle of a command", True
            await self._waiter.write(
                channel, message + self.settings.write_termination, self.settings.timeout_s
            )
            self._dirt, self._reopen = "", False
        except LinkError as error:
            self._blame(error)
            raise
        finally:
            self._release()

    async def query(self, message: bytes, timeout_s: float | None = None) -> bytes:
        """Send a command and return its one reply, without termination.

        Raises LinkTimeout, LinkLost or ReplyMalformed, after which the link is dirty.
        """
        await self._acquire()
        try:
            channel = await self._ready()
            self._delimited(channel)
            self._dirt, self._owed = "interrupted in the middle of a query", True
            # What the session then still owes could come after its identity, and a second
            # identity query could be answered by the first one's late reply.
            self._reopen = channel.renewable or message == self._hello.query
            reply = await self._waiter.query(
                channel,
                message + self.settings.write_termination,
                timeout_s or self.settings.timeout_s,
            )
            self._owed = False
            self._nothing_left(channel, reply)
            self._dirt, self._reopen = "", False
            return reply
        except LinkError as error:
            self._blame(error)
            raise
        finally:
            self._release()

    async def receive(self, timeout_s: float | None = None) -> bytes:
        """Return the next message, or whatever bytes are there, without asking for it.

        A receive that is cancelled or finds nothing in time leaves a free-running link clean:
        what comes later is still the next message.
        """
        await self._acquire()
        try:
            channel = self._channel
            if self._dirt or channel is None:
                channel = await self._ready()
            if not self.settings.free_running:
                self._dirt, self._owed = "interrupted while a message was awaited", True
                self._reopen = channel.renewable
            message = await self._waiter.read(channel, timeout_s or self.settings.timeout_s)
            self._dirt, self._owed, self._reopen = "", False, False
            return message
        except LinkError as error:
            if not (self.settings.free_running and isinstance(error, LinkTimeout)):
                self._blame(error)
            raise
        finally:
            self._release()

    def distrust(self, reason: str, *, reopen: bool = False) -> None:
        """Say that the last reply cannot be right: nothing is sent before the link recovers.

        With ``reopen`` the session itself is not trusted: it is closed and opened again.
        """
        self._dirt = reason
        self._reopen = self._reopen or reopen

    async def recover(self) -> None:
        """Recover now, also a link that was given up; on a clean link do nothing.

        Raises LinkError once the budget is spent, WrongIdentity if something else answers.
        """
        await self._acquire()
        try:
            if self._dirt:
                if not isinstance(self._ended, WrongIdentity):
                    self._ended = None
                await self._recover()
        finally:
            self._release()

    async def renew(self) -> None:
        """Abandon the session, whatever is pending in it, and open a fresh one.

        What was written and may still be on its way goes down with the old session, as far as
        the link allows that. Raises as ``recover``.
        """
        await self._acquire()
        try:
            if not isinstance(self._ended, WrongIdentity):
                self._ended = None
            self._dirt, self._reopen = "its session was abandoned", True
            await self._recover()
        finally:
            self._release()

    async def aclose(self) -> None:
        """Close the link; a clean one lets its last command arrive. Never raises LinkError."""
        with trio.CancelScope(shield=True):
            async with self._turn:
                await self._drop()
                self._dirt, self._reopen = "closed", True
                self._ended = LinkLost("the link has been closed", address=self.address)

    # --- turns ---

    async def _acquire(self) -> None:
        try:
            self._turn.acquire_nowait()
        except trio.WouldBlock:
            await self._turn.acquire()

    def _release(self) -> None:
        if self.settings.gap_s:
            self._free_at_s = trio.current_time() + self.settings.gap_s
        self._turn.release()

    async def _keep_the_gap(self) -> None:
        if self.settings.gap_s and self._free_at_s > trio.current_time():
            await trio.sleep_until(self._free_at_s)

    # --- trust ---

    async def _ready(self) -> Channel:
        """The channel, proven clean and with nothing waiting in it."""
        if self._dirt:
            await self._recover()
        elif self._channel is None:
            raise LinkLost("the link is not open", address=self.address)
        else:
            unasked = self._waiter.unread(self._channel) and not self.settings.free_running
            self._reopen = self._waiter.lost(self._channel)
            if self._reopen or unasked:
                self._dirt = (
                    "the peer closed" if self._reopen else "bytes came that nobody asked for"
                )
                await self._recover()
        await self._keep_the_gap()
        assert self._channel is not None
        return self._channel

    def _delimited(self, channel: Channel) -> None:
        if channel.endless:
            raise LinkError(
                "without a read termination nobody can tell where a reply ends",
                address=self.address,
            )

    def _nothing_left(self, channel: Channel, reply: bytes) -> None:
        if not self.settings.free_running and self._waiter.unread(channel):
            raise ReplyMalformed(
                f"more than one reply came; the first was {reply[:40]!r}",
                address=self.address,
            )

    def _blame(self, error: LinkError) -> None:
        if self._ended is None and self._channel is not None:
            self._dirt = self._dirt and str(error)
            if isinstance(error, ReplyMalformed):  # it came: nothing is owed any more
                self._reopen = self._owed = False
            elif isinstance(error, LinkLost):
                self._reopen = True
                self._dirt = self._dirt or str(error)  # also where it talks unasked

    async def _recover(self) -> None:
        if self._ended is not None:
            again = type(self._ended)(str(self._ended))
            again.address = self.address
            raise again
        dirt = self._dirt
        try:
            if not (
                self._channel is not None and not self._reopen and await self._resynchronised()
            ):
                await self._reopened()
        except LinkError as error:
            self._ended = error
            error.add_note(f"the link at {self.address} was dirty: {dirt}")
            await self._drop()
            raise
        self._dirt, self._reopen, self._owed = "", False, False
        self.recoveries += 1

    async def _resynchronised(self) -> bool:
        """Drain, and let the session prove that its replies belong to their queries."""
        channel = self._channel
        assert channel is not None
        # whatever happens from here on, this session gets no second identity query
        self._reopen = True
        if self._waiter.lost(channel):
            return False
        try:
            if not await self._drained(channel):
                return False
            if not self._hello.query:
                return True
            answer = await self._greet(channel)
        except LinkError:
            return False
        proven = answer == self._identity and not self._waiter.unread(channel)
        self._unanswered = 0 if proven else self._unanswered
        return proven

    async def _reopened(self) -> None:
        give_up_s = trio.current_time() + self.settings.reopen_budget_s
        pause_s = FIRST_PAUSE_S
        stranger = ""
        while True:
            await self._drop()
            try:
                await self._connect()
            except LinkError as error:
                # a bad line garbles an identity too: another instrument says the same again
                if isinstance(error, WrongIdentity):
                    if str(error) == stranger:
                        raise
                    stranger = str(error)
                if trio.current_time() + pause_s > give_up_s:
                    raise
            else:
                return
            await trio.sleep(pause_s)
            pause_s = min(2.0 * pause_s, LONGEST_PAUSE_S)

    # --- sessions ---

    async def _connect(self) -> bytes:
        """Open a session whose identity is the expected one, or leave it dirty and raise."""
        settings = self.settings
        self._dirt, self._reopen = "interrupted while it was opened", True
        channel = await self._waiter.open(self.address, settings, self._manager)
        self._channel = channel
        if settings.opening_delay_s:
            await trio.sleep(settings.opening_delay_s)
        if not await self._drained(channel):
            raise ReplyMalformed("the instrument never stops talking", address=self.address)
        identity = await self._greet(channel) if self._hello.query else b""
        if identity and not settings.free_running and self._waiter.unread(channel):
            # whichever of the lines is the identity, this one may not be
            raise ReplyMalformed(
                f"more followed the identity {identity[:80]!r}", address=self.address
            )
        self._recognise(channel, identity)
        if self._unanswered > 1 and not await self._drained(channel):
            # an earlier identity query went unanswered: on a line that outlives its session
            # (serial, a gateway) its answer may have been this one, and another may follow
            raise ReplyMalformed("the instrument never stops talking", address=self.address)
        if not settings.free_running and self._waiter.unread(channel):
            raise ReplyMalformed(
                f"more followed the identity {identity[:80]!r}", address=self.address
            )
        self._unanswered = 0
        self._identity = identity
        self._dirt, self._reopen, self._ended = "", False, None
        return identity

    def _recognise(self, channel: Channel, identity: bytes) -> None:
        if not self._hello.query:
            return
        if self._identity is not None and identity != self._identity:
            if self._owed and channel.carries_over:
                self._owed = False  # once: after that it is another instrument
                raise ReplyMalformed(
                    f"a late reply came for the identity: {identity[:40]!r}", address=self.address
                )
            raise WrongIdentity(
                f"expected {self._identity!r} again, found {identity[:200]!r}",
                address=self.address,
            )
        self._hello.check(identity)

    async def _drained(self, channel: Channel) -> bool:
        if self.settings.free_running:
            # it is never silent: what waited is old, what comes from now on is new
            await self._waiter.drain(channel, 0.0, self.settings.drain_s)
            return True
        quiet_s = self.settings.drain_s
        return await self._waiter.drain(channel, quiet_s, DRAIN_AT_MOST * quiet_s)

    async def _greet(self, channel: Channel) -> bytes:
        settings = self.settings
        await self._keep_the_gap()
        self._unanswered += 1
        answer = await self._waiter.query(
            channel, self._hello.query + settings.write_termination, settings.timeout_s
        )
        self._free_at_s = trio.current_time() + settings.gap_s
        return answer

    async def _drop(self) -> None:
        channel, self._channel = self._channel, None
        if channel is not None:
            with trio.CancelScope(shield=True):
                await self._waiter.close(channel, orderly=not self._dirt)
