"""Keeps the last exchanges of a link: what was sent, what came back, how long it took.

A transcript is bounded: a run of days keeps its last ``most`` exchanges and no more. It can be
written as lines of JSON and read again, and what it holds can be put through a driver's codec
without any link (``replayed``).
"""

import json
import re
from collections import deque
from collections.abc import Awaitable, Callable, Iterable
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import NamedTuple

import trio

from ohmward.errors import LinkError, ReplyMalformed
from ohmward.instruments.line import Wire
from ohmward.protocol.codec import codec_of
from ohmward.protocol.layout import Layout
from ohmward.setup.driver import Driver

MOST = 1000
_ESCAPES = re.compile(r"\\(?:x[0-9a-f]{2}|[\\nrt])")


@dataclass(frozen=True, kw_only=True, slots=True)
class Exchange:
    """One exchange: trio's time at its beginning, the bytes both ways, seconds, and its error.

    ``sent`` is empty for a message that came unasked; ``received`` where nothing came. Line
    ends are the link's and are left out.
    """

    at_s: float
    sent: bytes
    received: bytes
    took_s: float
    error: str = ""

    def as_line(self) -> str:
        """One line of JSON; bytes as text with every byte that is not ASCII escaped."""
        plain = asdict(self)
        return json.dumps({**plain, "sent": escaped(self.sent), "received": escaped(self.received)})

    @classmethod
    def from_line(cls, line: str) -> "Exchange":
        """The exchange of a line that ``as_line`` wrote. Raises ValueError for any other."""
        plain = json.loads(line)
        try:
            return cls(
                at_s=float(plain["at_s"]),
                sent=unescaped(plain["sent"]),
                received=unescaped(plain["received"]),
                took_s=float(plain["took_s"]),
                error=str(plain["error"]),
            )
        except (KeyError, TypeError, AttributeError) as error:
            raise ValueError(f"no line of a transcript: {line[:60]!r}") from error


def escaped(data: bytes) -> str:
    r"""Bytes as a person reads them: ``+1.5,0\n``; a backslash is doubled."""
    return data.decode("latin-1").encode("unicode_escape").decode("ascii")


def unescaped(text: str) -> bytes:
    """The bytes that ``escaped`` wrote. Raises ValueError for what it cannot have written."""
    if not text.isascii() or _ESCAPES.sub("", text).count("\\"):
        raise ValueError(f"no escaped bytes: {text[:60]!r}")
    return text.encode("ascii").decode("unicode_escape").encode("latin-1")


class Transcript:
    """The last exchanges, oldest first."""

    def __init__(self, most: int = MOST) -> None:
        self.exchanges: deque[Exchange] = deque(maxlen=most)

    def lines(self) -> Iterable[str]:
        """Every exchange as a line of JSON."""
        return (exchange.as_line() for exchange in self.exchanges)

    def text(self) -> str:
        """What is written to a file: a line for each exchange."""
        return "".join(f"{line}\n" for line in self.lines())


class Transcripts:
    """The transcripts of a bench's instruments, by name; each begins when it is first asked for."""

    def __init__(self, most: int = MOST) -> None:
        self._most = most
        self.by_name: dict[str, Transcript] = {}

    def of(self, name: str) -> Transcript:
        """The transcript of one instrument."""
        return self.by_name.setdefault(name, Transcript(self._most))

    def write(self, folder: Path) -> None:
        """Write NAME.jsonl for each instrument into a folder, which is made. Raises OSError."""
        folder.mkdir(exist_ok=True)
        for name, transcript in self.by_name.items():
            (folder / f"{name}.jsonl").write_text(transcript.text(), "ascii")


def read_transcript(path: Path) -> list[Exchange]:
    """The exchanges of a file that was written by ``Transcript.text``.

    Raises ValueError naming the first line that is none; OSError when it cannot be read.
    """
    found = []
    for number, line in enumerate(path.read_text("utf-8").splitlines(), start=1):
        try:
            found.append(Exchange.from_line(line))
        except ValueError as error:
            raise ValueError(f"line {number}: {error}") from error
    return found


class TappedWire:
    """A wire whose exchanges are kept in a transcript; it changes nothing else."""

    def __init__(self, wire: Wire, transcript: Transcript) -> None:
        self._wire = wire
        self._transcript = transcript

    @property
    def dirty(self) -> bool:
        """Whether the next command will first have to recover the link."""
        return self._wire.dirty

    @property
    def recoveries(self) -> int:
        """How often the link has recovered."""
        return self._wire.recoveries

    async def open(self) -> bytes:
        """Open the link and return the identity."""
        return await self._kept(b"", self._wire.open)

    async def write(self, message: bytes) -> None:
        """Send a command that is not answered."""

        async def write() -> bytes:
            await self._wire.write(message)
            return b""

        await self._kept(message, write)

    async def query(self, message: bytes, timeout_s: float | None = None) -> bytes:
        """Send a command and return its one reply."""
        return await self._kept(message, lambda: self._wire.query(message, timeout_s))

    async def receive(self, timeout_s: float | None = None) -> bytes:
        """Return the next message without asking for it."""
        return await self._kept(b"", lambda: self._wire.receive(timeout_s))

    def distrust(self, reason: str, *, reopen: bool = False) -> None:
        """Say that the last reply, or the session, cannot be right."""
        self._wire.distrust(reason, reopen=reopen)

    async def recover(self) -> None:
        """Recover a dirty link now."""
        await self._wire.recover()

    async def renew(self) -> None:
        """Abandon the session and open a fresh one."""
        await self._wire.renew()

    async def aclose(self) -> None:
        """Close the link."""
        await self._wire.aclose()

    async def _kept(self, sent: bytes, exchange: Callable[[], Awaitable[bytes]]) -> bytes:
        at_s = trio.current_time()
        received, error = b"", ""
        try:
            received = await exchange()
        except LinkError as failure:
            error = str(failure)
            raise
        except BaseException:
            error = "cut short"  # cancelled: what comes of it nobody hears any more
            raise
        finally:
            took_s = trio.current_time() - at_s
            self._transcript.exchanges.append(
                Exchange(at_s=at_s, sent=sent, received=received, took_s=took_s, error=error)
            )
        return received


class Replayed(NamedTuple):
    """An exchange decoded again: the driver's entry whose query was sent, and what it means.

    ``entry`` is empty for what asks nothing that the driver knows; ``understood`` is False where
    a reply came that the driver cannot take.
    """

    exchange: Exchange
    entry: str
    meaning: str
    understood: bool


def replayed(exchanges: Iterable[Exchange], driver: Driver) -> list[Replayed]:
    """Each exchange decoded again without a link.

    A reply that does not fit says why, in the words that the run would have raised.
    """
    codec = codec_of(driver)
    layouts: dict[bytes, tuple[str, Layout]] = {}
    for name, setting in driver.setting.items():
        if setting.ask:
            query = codec.command(setting.ask).encode({})
            layouts[query] = (f"setting.{name}", codec.layout(setting.layout))
    for name, reading in driver.reading.items():
        if "{" not in reading.ask:
            query = codec.command(reading.ask).encode({})
            layouts[query] = (f"reading.{name}", codec.layout(reading))
    return [_replayed(exchange, *layouts.get(exchange.sent, ("", None))) for exchange in exchanges]


def _replayed(exchange: Exchange, entry: str, layout: Layout | None) -> Replayed:
    if layout is None or exchange.error:
        return Replayed(exchange, entry, exchange.error, True)
    try:
        decoded = layout.decode(exchange.received)
    except ReplyMalformed as error:
        return Replayed(exchange, entry, str(error), False)
    said = ", ".join(f"{name} = {value}" for name, value in decoded.values.items())
    return Replayed(exchange, entry, f"{said} ({decoded.status})", True)
