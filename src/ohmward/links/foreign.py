"""The one place that turns what PyVISA and its libraries raise into ohmward's own errors.

    raised                                                   becomes
    LinkError and its children                               itself
    VisaIOError: timeout, "operation aborted"                LinkTimeout
    VisaIOError: any other code                              LinkLost, or LinkError if the
                                                             address or a setting is refused
    socket and operating system (OSError, termios.error)     LinkLost; TimeoutError: LinkTimeout
    pyserial, VXI-11, USB                                    LinkLost
    RuntimeError, TypeError, a bare Exception, EOFError,
    AssertionError, struct.error: what the libraries raise
    when the peer dies in the middle of something            LinkLost
    UnicodeDecodeError                                       ReplyMalformed

A lost link is closed and opened again, a timed-out one is drained first: when in doubt an
error counts as a loss, because a fresh session holds nothing stale.
"""

import struct
from collections.abc import Iterator
from contextlib import contextmanager

from pyvisa import errors as visa
from pyvisa.constants import StatusCode

from ohmward.errors import LinkError, LinkLost, LinkTimeout, ReplyMalformed

TIMED_OUT = frozenset({StatusCode.error_timeout, StatusCode.error_abort})

REFUSED = frozenset(
    {
        StatusCode.error_resource_busy,
        StatusCode.error_resource_locked,
        StatusCode.error_invalid_resource_name,
        StatusCode.error_allocation,
        StatusCode.error_invalid_setup,
        StatusCode.error_nonsupported_operation,
        StatusCode.error_nonsupported_attribute,
        StatusCode.error_nonsupported_attribute_state,
        StatusCode.error_nonsupported_format,
        StatusCode.error_nonsupported_mode,
        StatusCode.error_nonimplemented_operation,
        StatusCode.error_attribute_read_only,
        StatusCode.error_library_not_found,
        StatusCode.error_no_permission,
    }
)
"""The library understood and said no: the bench file, or who else uses the instrument, is why."""

BY_TYPE: tuple[tuple[type[Exception], type[LinkError], str], ...] = (
    (visa.InvalidSession, LinkLost, "the session is closed"),
    (visa.LibraryError, LinkError, "the VISA library cannot be used"),
    (visa.OSNotSupported, LinkError, "this system is not supported by the VISA library"),
    (visa.Error, LinkError, "the VISA library refused"),
    (UnicodeDecodeError, ReplyMalformed, "a reply holds bytes that are no text"),
    (ConnectionRefusedError, LinkLost, "nothing listens there"),
    (ConnectionError, LinkLost, "the connection broke"),
    (TimeoutError, LinkTimeout, "no answer in time"),
    (OSError, LinkLost, "the system reports"),  # SerialException too: it is an OSError
    (EOFError, LinkLost, "the peer closed in the middle of a message"),
    (struct.error, LinkLost, "the peer sent a header that cannot be read"),
    (ValueError, LinkError, "the VISA library does not accept the address or a setting"),
    (NotImplementedError, LinkError, "the VISA library cannot do this"),
    (ImportError, LinkError, "a library for this kind of link is missing"),
    (RuntimeError, LinkLost, "the VISA library broke off"),
    (TypeError, LinkLost, "the port was closed under the VISA library"),
    (AttributeError, LinkLost, "the session was closed under the VISA library"),
    (AssertionError, LinkLost, "the peer broke the protocol"),
    (LookupError, LinkLost, "the peer broke the protocol"),
    (ArithmeticError, LinkLost, "the peer broke the protocol"),
    (MemoryError, LinkLost, "the peer announced more than fits"),
)
"""Looked through from the top; what stands nowhere is a bare Exception and counts as a loss."""


def translated(error: Exception, address: str) -> LinkError:
    """The LinkError that stands for ``error`` on the link at ``address``."""
    if isinstance(error, LinkError):
        return error
    if isinstance(error, visa.VisaIOError):
        return _visa(error, address)
    for raised, becomes, meaning in BY_TYPE:
        if isinstance(error, raised):
            return becomes(f"{meaning}: {_text(error)}", address=address)
    # termios.error, bare Exception and whatever a plugged-in library invents
    return LinkLost(f"the link broke: {_text(error)}", address=address)


def _visa(error: visa.VisaIOError, address: str) -> LinkError:
    if error.error_code in TIMED_OUT:
        return LinkTimeout("no whole reply in time", address=address)
    kind = LinkError if error.error_code in REFUSED else LinkLost
    return kind(f"{error.description} ({error.abbreviation})", address=address)


def _text(error: Exception) -> str:
    return f"{type(error).__name__}: {error}" if str(error) else type(error).__name__


@contextmanager
def foreign_errors(address: str) -> Iterator[None]:
    """Whatever is raised inside leaves as a LinkError; cancellation and exits pass untouched."""
    try:
        yield
    except LinkError:
        raise
    except Exception as error:
        raise translated(error, address) from error
