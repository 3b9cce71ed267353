"""ASCII lines: with or without an echo, a prompt and an acknowledgement; terse or wordy."""

from ohmward.errors import InstrumentRefused, ReplyMalformed
from ohmward.protocol.receiver import NEED_DATA, LineReceiver, NeedDataType, Receiver
from ohmward.protocol.text import TextCodec
from ohmward.setup.driver import Driver


class LinesCodec(TextCodec):
    """Words exactly as the driver writes them, in its case; one exchange may be several lines.

    What comes back after a command, in this order: the echo, where there is one; the reply to a
    query, or else the acknowledgement, where there is one; the prompt, where there is one.
    """

    def __init__(self, driver: Driver) -> None:
        super().__init__(driver)
        link = driver.link
        self._echo = link.echo
        self._acknowledge = link.acknowledge.encode("ascii")
        self._prompt = link.prompt.encode("ascii")
        self._refusals = tuple(text.encode("ascii") for text in link.refusals)

    @property
    def talks_back(self) -> bool:
        """Whether an exchange is more than a query and its reply."""
        return bool(self._echo or self._acknowledge or self._prompt or self._refusals)

    def receiver(self, sent: bytes = b"", *, answers: bool = True) -> Receiver:
        """A receiver for one exchange, or for plain lines where there is nothing around them."""
        if not self.talks_back:
            return super().receiver(sent, answers=answers)
        return ExchangeReceiver(
            echo=sent if self._echo else None,
            answers=answers,
            acknowledge=self._acknowledge,
            prompt=self._prompt,
            refusals=self._refusals,
            termination=self._termination,
            longest=self._driver.link.longest_reply,
        )


class ExchangeReceiver:
    """All that comes back after one command; ``next`` gives the reply, b"" where there is none."""

    def __init__(
        self,
        *,
        echo: bytes | None,
        answers: bool,
        acknowledge: bytes,
        prompt: bytes,
        refusals: tuple[bytes, ...],
        termination: bytes,
        longest: int,
    ) -> None:
        self._lines = LineReceiver(termination, longest)
        self._echo = echo
        self._acknowledge = acknowledge
        self._prompt = prompt
        self._refusals = refusals
        self._wants_line = answers or bool(acknowledge)
        self._answers = answers
        self._reply = b""

    def feed(self, data: bytes) -> None:
        """Take bytes as they came."""
        self._lines.feed(data)

    @property
    def trailing(self) -> bytes:
        """Bytes that came after this exchange."""
        return self._lines.trailing

    def next(self) -> bytes | NeedDataType:
        """The reply once the whole exchange is there, or NEED_DATA.

        Raises ReplyMalformed when something else comes than belongs to it, InstrumentRefused
        when the instrument says that it refuses.
        """
        if self._echo is not None:
            line = self._lines.next()
            if line is NEED_DATA:
                return NEED_DATA
            if line != self._echo:
                raise ReplyMalformed(f"{self._echo!r} was echoed as {line!r}")
            self._echo = None
        if self._wants_line:
            line = self._lines.next()
            if line is NEED_DATA:
                return NEED_DATA
            self._take(line)
            self._wants_line = False
        if self._prompt and not self._prompted():
            return NEED_DATA
        if self._reply.startswith(self._refusals) and self._refusals:
            raise InstrumentRefused(f"it answers {self._reply!r}")
        return self._reply if self._answers else b""

    def _take(self, line: bytes) -> None:
        self._reply = line
        refused = bool(self._refusals) and line.startswith(self._refusals)
        if not self._answers and not refused and line != self._acknowledge:
            raise ReplyMalformed(f"{line!r} came instead of {self._acknowledge!r}")

    def _prompted(self) -> bool:
        """Whether the prompt is there; it is taken away."""
        came = self._lines.trailing
        if came.startswith(self._prompt):
            self._lines.skip(len(self._prompt))
            return True
        if not self._prompt.startswith(came):
            raise ReplyMalformed(f"{came[:80]!r} came instead of the prompt {self._prompt!r}")
        return False
