"""Standard output and error that never end a command: readers that leave, terminals that cannot.

A terminal without the letters of the trade gets them spelt out (``uF``, ``kohm``), never a
question mark where a prefix stood.
"""

import codecs
import os
import sys
from typing import TextIO

SPELT_OUT = "ohmward-spelt-out"
_SPELLINGS = {
    **{"µ": "u", "Ω": "ohm", "×": "x", "±": "+-", "°": "deg", "θ": "theta", "²": "2", "√": "sqrt"},
    **{"–": "-", "−": "-", "—": "-", "…": "...", "∞": "inf", "≤": "<=", "≥": ">=", "’": "'"},
}


def prepare() -> None:
    """Make both streams take any text; ASCII, which means that nobody chose, becomes UTF-8."""
    codecs.register_error(SPELT_OUT, _spelt_out)
    for stream in (sys.stdout, sys.stderr):
        if stream is None or not hasattr(stream, "reconfigure"):
            continue
        if codecs.lookup(stream.encoding).name == "ascii":
            stream.reconfigure(encoding="utf-8")
        stream.reconfigure(errors=SPELT_OUT)


def _spelt_out(error: UnicodeError) -> tuple[str, int]:
    if not isinstance(error, UnicodeEncodeError):
        raise error
    text = error.object[error.start : error.end]
    return "".join(_SPELLINGS.get(letter, "?") for letter in text), error.end


def flush() -> str:
    """Write out what is still held; returns why that failed, or '' where it did not or no
    longer matters: a reader that left has read enough.
    """
    reason = ""
    for stream in (sys.stdout, sys.stderr, sys.__stdout__):
        if stream is None:
            continue
        try:
            stream.flush()
        except BrokenPipeError:
            let_go(stream)
        except (OSError, ValueError) as error:
            reason = getattr(error, "strerror", None) or str(error)
            let_go(stream)
    return reason


def let_go(stream: TextIO) -> None:
    """Send the rest of a stream nowhere, so that the interpreter's end says nothing of it."""
    try:
        nowhere = os.open(os.devnull, os.O_WRONLY)
        os.dup2(nowhere, stream.fileno())
        os.close(nowhere)
    except (OSError, ValueError):
        pass  # no stream of the system's, as in a test
