"""The link that an instrument is spoken to over: what is needed of it, and its settings."""

from typing import Protocol

from ohmward.instruments.identity import identity_check
from ohmward.links.link import Hello
from ohmward.links.settings import LinkSettings
from ohmward.protocol.codec import Codec
from ohmward.protocol.receiver import NEED_DATA
from ohmward.setup.driver import Driver


class Wire(Protocol):
    """What a talker needs of a link."""

    @property
    def dirty(self) -> bool:
        """Whether the next command will first have to recover the link."""

    @property
    def recoveries(self) -> int:
        """How often the link has recovered: what was set before it may be forgotten since."""

    async def open(self) -> bytes:
        """Open the link and return the identity."""

    async def write(self, message: bytes) -> None:
        """Send a command that is not answered."""

    async def query(self, message: bytes, timeout_s: float | None = None) -> bytes:
        """Send a command and return its one reply."""

    async def receive(self, timeout_s: float | None = None) -> bytes:
        """Return the next message without asking for it."""

    def distrust(self, reason: str, *, reopen: bool = False) -> None:
        """Say that the last reply cannot be right, or that the session itself cannot."""

    async def recover(self) -> None:
        """Recover a dirty link now."""

    async def renew(self) -> None:
        """Abandon the session, whatever is pending in it, and open a fresh one."""

    async def aclose(self) -> None:
        """Close the link."""


_FLOW = {"none": "none", "software": "xon/xoff", "hardware": "rts/cts"}


def read_end(driver: Driver) -> bytes:
    """What ends a message for the link: the prompt, else the line's end; frames have none."""
    if driver.frame is not None:
        return b""
    return (driver.link.prompt or driver.link.read_termination).encode("latin-1")


def link_settings(driver: Driver, codec: Codec) -> LinkSettings:
    """The link's settings that a driver states."""
    table = driver.link
    return LinkSettings(
        read_termination=read_end(driver),
        write_termination=table.write_termination.encode("latin-1"),
        timeout_s=table.timeout,
        open_timeout_s=table.open_timeout,
        opening_delay_s=table.opening_delay,
        drain_s=table.drain,
        gap_s=table.gap,
        reopen_budget_s=table.reopen_budget,
        max_reply_bytes=table.longest_reply,
        free_running=codec.unasked,
        baud_rate=table.baud_rate,
        data_bits=table.data_bits,
        parity=table.parity,
        stop_bits=table.stop_bits,
        flow_control=_FLOW[table.flow],  # type: ignore[arg-type]
    )


def hello_of(driver: Driver, codec: Codec, *, address: str, serial_number: str) -> Hello:
    """How a link knows the instrument again after a fault."""
    check = identity_check(driver, address=address, serial_number=serial_number)
    if driver.identity is None or (driver.link.echo and not driver.link.prompt):
        return Hello(query=b"", check=check)
    query = driver.identity.ask.encode("ascii")
    if not codec.talks_back:
        return Hello(query=query, check=check)

    def check_whole(answer: bytes) -> None:
        receiver = codec.receiver(query)
        receiver.feed(answer + read_end(driver))
        message = receiver.next()
        check(b"" if message is NEED_DATA else message)

    return Hello(query=query, check=check_whole)
