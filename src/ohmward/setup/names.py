"""Names that people give on a bench, as pydantic types: scanner channels and positions."""

import re
from typing import Annotated

from pydantic import BeforeValidator

from ohmward.setup.quantities import wrong

INSTRUMENT_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9_.-]*")
_CHANNEL = re.compile(r"[A-Za-z0-9][A-Za-z0-9_.:!-]*")
LONGEST_NAME = 60


def _word(value: object) -> object:
    """A whole number is taken for its digits: ``meter_channels = [101, 201]``."""
    return str(value) if isinstance(value, int) and not isinstance(value, bool) else value


def _check_channel(value: object) -> object:
    value = _word(value)
    if isinstance(value, str) and _CHANNEL.fullmatch(value) is None:
        raise wrong("one channel such as '101'", f"'{value}'")
    return value


def _check_name(value: object) -> object:
    value = _word(value)
    if isinstance(value, str):
        value = value.strip()
        if not value or len(value) > LONGEST_NAME or not value.isprintable():
            raise wrong("a short name", f"'{value[:20]}'" if value else "nothing")
    return value


_TEXT_OR_NUMBER = str | int

Channel = Annotated[str, BeforeValidator(_check_channel, json_schema_input_type=_TEXT_OR_NUMBER)]
Name = Annotated[str, BeforeValidator(_check_name, json_schema_input_type=_TEXT_OR_NUMBER)]
