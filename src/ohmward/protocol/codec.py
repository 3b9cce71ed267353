"""The codec of a driver: commands into bytes, bytes into messages, messages into values."""

from collections.abc import Callable
from importlib.metadata import entry_points
from typing import Protocol

from ohmward.protocol.fields import Value
from ohmward.protocol.frames import FramesCodec
from ohmward.protocol.layout import Decoded, Layout
from ohmward.protocol.lines import LinesCodec
from ohmward.protocol.receiver import Receiver
from ohmward.protocol.stream import StreamCodec
from ohmward.protocol.text import Command, ScpiCodec, TextCodec
from ohmward.setup.driver import Driver
from ohmward.setup.driver_commands import Setting
from ohmward.setup.driver_replies import Reply

ENTRY_POINTS = "ohmward.codecs"


class Codec(Protocol):
    """What every codec can do; nothing in it waits, sends or knows the time.

    A package adds one under the entry point group ``ohmward.codecs``: a callable that takes a
    Driver and returns an object with these methods.
    """

    def command(self, text: str, setting: Setting | None = None) -> Command:
        """Compile a command template; ``setting`` says how its ``{value}`` is written."""

    def layout(self, reply: Reply) -> Layout:
        """Compile a reply's layout."""

    def receiver(self, sent: bytes = b"", *, answers: bool = True) -> Receiver:
        """A receiver for what comes after ``sent``, fed with bytes as they come.

        ``answers`` says whether the command is a query. The receiver gives the reply alone;
        echoes, prompts and acknowledgements are checked and kept back.
        """

    @property
    def talks_back(self) -> bool:
        """Whether something comes back after a command that asks nothing."""

    @property
    def unasked(self) -> bool:
        """Whether the instrument sends its readings of its own accord."""


CODECS: dict[str, Callable[[Driver], Codec]] = {
    "scpi": ScpiCodec,
    "lines": LinesCodec,
    "stream": StreamCodec,
    "frames": FramesCodec,
}


def codec_names() -> tuple[str, ...]:
    """Every codec that a driver may name: ours and those of installed packages."""
    return tuple(sorted({*CODECS, *(point.name for point in entry_points(group=ENTRY_POINTS))}))


def codec_of(driver: Driver) -> Codec:
    """The codec that a driver names; ours come first. Raises LookupError for one unheard of."""
    make = CODECS.get(driver.codec)
    if make is None:
        for point in entry_points(group=ENTRY_POINTS, name=driver.codec):
            make = point.load()
            break
    if make is None:
        raise LookupError(f"no codec is called {driver.codec!r}; known: {', '.join(codec_names())}")
    return make(driver)


__all__ = [
    "CODECS",
    "Codec",
    "Command",
    "Decoded",
    "FramesCodec",
    "Layout",
    "LinesCodec",
    "ScpiCodec",
    "StreamCodec",
    "TextCodec",
    "Value",
    "codec_names",
    "codec_of",
]
