"""What the codecs of instruments that are spoken to in ASCII have in common, and SCPI's."""

from collections.abc import Callable, Mapping
from math import isfinite
from typing import NamedTuple

from ohmward.errors import InstrumentRefused
from ohmward.protocol.columns import compile_columns
from ohmward.protocol.fields import Value, sent_word
from ohmward.protocol.layout import Layout, compile_layout
from ohmward.protocol.manner import Manner
from ohmward.protocol.numbers import Form, write_number
from ohmward.protocol.receiver import LineReceiver, Receiver
from ohmward.protocol.scpi import write_channels
from ohmward.setup.driver import Driver
from ohmward.setup.driver_commands import Setting
from ohmward.setup.driver_replies import Reply
from ohmward.setup.template import read_template


class Command(NamedTuple):
    """A compiled command: its values, by placeholder, into the bytes that are sent.

    The bytes are without the terminator, which belongs to the link.
    """

    encode: Callable[[Mapping[str, Value]], bytes]


class TextCodec:
    """What the codecs of instruments that are spoken to in ASCII have in common."""

    any_case = False
    short_forms = False
    switch_words: Mapping[bool, str] = {True: "1", False: "0"}

    def __init__(self, driver: Driver) -> None:
        self._driver = driver
        self._termination = driver.link.read_termination.encode("latin-1")
        self._manner = Manner.of(driver, any_case=self.any_case, short_forms=self.short_forms)

    @property
    def talks_back(self) -> bool:
        """No: a command that asks nothing is answered with silence."""
        return False

    @property
    def unasked(self) -> bool:
        """No: it speaks when it is asked."""
        return False

    def command(self, text: str, setting: Setting | None = None) -> Command:
        """Compile a command template; raises InstrumentRefused for a value that cannot be sent."""
        template = read_template(text)
        if not template.names:
            constant = template.fill({}).encode("ascii")
            return Command(lambda values: constant)
        write = {name: self._writer(name, setting) for name in template.names}

        def encode(values: Mapping[str, Value]) -> bytes:
            texts = {name: write[name](values[name]) for name in write}
            return template.fill(texts).encode("ascii")

        return Command(encode)

    def layout(self, reply: Reply) -> Layout:
        """Compile a reply's layout: fields in order, by label or in fixed columns."""
        if reply.by == "offset":
            return compile_columns(reply, self._manner)
        return compile_layout(reply, self._manner)

    def receiver(self, sent: bytes = b"", *, answers: bool = True) -> Receiver:
        """Lines as they come; an instrument of this kind sends nothing but its replies."""
        return LineReceiver(self._termination, self._driver.link.longest_reply)

    def _writer(self, name: str, setting: Setting | None) -> Callable[[Value], str]:
        if name == "channels":
            return self._write_channels
        if setting is None or setting.kind == "text":
            return lambda value: _plain(value)
        if setting.kind == "number":
            return _number_writer(setting)
        if setting.kind == "switch":
            return self._switch_writer(setting)
        words = {ours: sent_word(word, self.short_forms) for ours, word in setting.words.items()}
        return lambda value: _word(words, value)

    def _switch_writer(self, setting: Setting) -> Callable[[Value], str]:
        words = dict(self.switch_words)
        if setting.words:
            words = {
                ours == "on": sent_word(word, self.short_forms)
                for ours, word in setting.words.items()
            }
        return lambda value: words[bool(value)]

    def _write_channels(self, value: Value) -> str:
        return ",".join(str(int(channel)) for channel in _channels(value))


class ScpiCodec(TextCodec):
    """SCPI-1999: short forms, any case, channel lists in brackets."""

    any_case = True
    short_forms = True
    switch_words: Mapping[bool, str] = {True: "ON", False: "OFF"}

    def _write_channels(self, value: Value) -> str:
        return write_channels(_channels(value))


def _channels(value: Value) -> tuple[int, ...]:
    if not isinstance(value, tuple) or not value:
        raise InstrumentRefused(f"{value!r} is not a list of channels; nothing was sent")
    return tuple(int(channel) for channel in value)


def _plain(value: Value) -> str:
    """A value without a setting that says how it is written."""
    if isinstance(value, str):
        if not (value.isascii() and value.isprintable()):
            raise InstrumentRefused(f"{value!r} cannot be sent in a command; nothing was sent")
        return value
    if isinstance(value, bool | tuple):
        raise InstrumentRefused(f"{value!r} cannot be sent in a command; nothing was sent")
    return _finite(value, Form.ANY, None, 0, sign=False)


def _number_writer(setting: Setting) -> Callable[[Value], str]:
    written = setting.written
    form = Form(written.form or "any")

    def write(value: Value) -> str:
        if isinstance(value, str | tuple):
            raise InstrumentRefused(f"{value!r} is not a number; nothing was sent")
        # a division, so that 1 V in kV is 0.001 and not 0.0010000000000000002
        number = float(value) / written.factor
        return _finite(number, form, written.decimals, written.digits, sign=written.sign)

    return write


def _finite(number: float, form: Form, decimals: int | None, width: int, *, sign: bool) -> str:
    if not isfinite(number):
        raise InstrumentRefused(f"{number} cannot be sent to an instrument; nothing was sent")
    return write_number(number, form, decimals=decimals, width=width, sign=sign)


def _word(words: Mapping[str, str], value: Value) -> str:
    found = words.get(str(value))
    if found is None:
        known = ", ".join(sorted(words))
        raise InstrumentRefused(f"{value!r} is none of {known}; nothing was sent")
    return found
