"""Every exception that a VISA library can raise has its place among ohmward's errors."""

import importlib
import inspect
import pkgutil
import struct
import termios

import pytest
import pyvisa
import pyvisa_py
import pyvisa_py.protocols
import serial
import trio
from pyvisa.constants import StatusCode
from pyvisa.errors import VisaIOError

from ohmward.errors import LinkError, LinkLost, LinkTimeout, ReplyMalformed
from ohmward.links.foreign import BY_TYPE, foreign_errors, translated

# the list in the notes on what PyVISA 1.16 and pyvisa-py 0.8.1 raised when a peer was lost
ON_A_LOST_PEER = [
    VisaIOError(StatusCode.error_connection_lost),
    BrokenPipeError(32, "Broken pipe"),
    ConnectionResetError(104, "Connection reset by peer"),
    RuntimeError("Connection was dropped by server."),
    serial.SerialException("device reports readiness to read but returned no data"),
    termios.error(5, "Input/output error"),
    TypeError("an integer is required (got type NoneType)"),
    OSError(5, "Input/output error"),
    Exception("could not connect: StatusCode.error_timeout"),
    EOFError(),
    struct.error("unpack requires a buffer of 16 bytes"),
    AssertionError(),
]


@pytest.mark.parametrize("error", ON_A_LOST_PEER, ids=lambda error: type(error).__name__)
def test_a_lost_peer_is_a_lost_link(error):
    found = translated(error, "TCPIP::host::1::SOCKET")
    assert type(found) is LinkLost
    assert found.address == "TCPIP::host::1::SOCKET"


def test_a_timeout_is_a_timeout_and_bytes_that_are_no_text_a_malformed_reply():
    assert type(translated(VisaIOError(StatusCode.error_timeout), "A")) is LinkTimeout
    assert type(translated(TimeoutError(), "A")) is LinkTimeout
    assert type(translated(UnicodeDecodeError("ascii", b"\xff", 0, 1, "no"), "A")) is ReplyMalformed


@pytest.mark.parametrize("code", [code for code in StatusCode if code < 0], ids=lambda c: c.name)
def test_every_visa_status_becomes_an_error_that_names_it(code):
    found = translated(VisaIOError(code), "A")
    assert isinstance(found, LinkError)
    assert isinstance(found, LinkTimeout) or "VI_ERROR" in str(found)


def library_exceptions() -> list[type[Exception]]:
    """All exception classes that PyVISA, PyVISA-py and pyserial define themselves."""
    modules = [importlib.import_module("pyvisa.errors"), serial, serial.serialutil]
    for package in (pyvisa_py, pyvisa_py.protocols):
        for found in pkgutil.iter_modules(package.__path__, package.__name__ + "."):
            try:
                modules.append(importlib.import_module(found.name))
            except ImportError:
                continue  # wants a library that is not installed, and so cannot raise
    classes = {
        member
        for module in modules
        for member in vars(module).values()
        if inspect.isclass(member) and issubclass(member, Exception)
    }
    return sorted((c for c in classes if not issubclass(c, Warning)), key=lambda c: c.__qualname__)


# defined as bare children of Exception by the libraries: they count as a loss
BARE = {
    "OpenError",  # PyVISA-py turns it into a VisaIOError itself
    "UnknownAttribute",
    "RPCError",
    "RPCBadFormat",
    "RPCBadVersion",
    "RPCGarbageArgs",
    "RPCUnpackError",
    "Vxi11Error",
    "Error",
    "ConversionError",
}


@pytest.mark.parametrize("kind", library_exceptions(), ids=lambda kind: kind.__qualname__)
def test_no_exception_of_a_library_is_unmapped(kind):
    known = (VisaIOError, *(raised for raised, _becomes, _meaning in BY_TYPE))
    bare = {c.__name__ for c in kind.__mro__} & BARE
    assert issubclass(kind, known) or bare or kind is Exception, (
        f"{kind.__module__}.{kind.__qualname__} has no place in ohmward.links.foreign"
    )


@pytest.mark.parametrize(
    "kind",
    [
        member
        for member in vars(__import__("builtins")).values()
        if inspect.isclass(member)
        and issubclass(member, Exception)
        and not issubclass(member, Warning | ExceptionGroup | UnicodeError)
        and member not in (StopIteration, StopAsyncIteration, SyntaxError)
    ],
    ids=lambda kind: kind.__name__,
)
def test_every_builtin_exception_becomes_a_link_error(kind):
    assert isinstance(translated(kind("reason"), "A"), LinkError)


def test_our_own_errors_pass_as_they_are():
    error = ReplyMalformed("half a number")
    assert translated(error, "A") is error
    with pytest.raises(ReplyMalformed) as caught, foreign_errors("A"):
        raise error
    assert caught.value is error


@pytest.mark.parametrize("kind", [KeyboardInterrupt, SystemExit, GeneratorExit])
def test_exits_pass_untouched(kind):
    with pytest.raises(kind), foreign_errors("A"):
        raise kind


def test_cancellation_passes_untouched():
    async def main() -> bool:
        with trio.CancelScope() as scope, foreign_errors("A"):
            scope.cancel()
            await trio.lowlevel.checkpoint()
        return scope.cancelled_caught

    assert trio.run(main)


def test_the_cause_is_kept():
    with pytest.raises(LinkLost) as caught, foreign_errors("A"):
        raise RuntimeError("Connection was dropped by server.")
    assert isinstance(caught.value.__cause__, RuntimeError)


def test_the_libraries_are_those_that_were_measured():
    """The facts that the links rely on were measured with these: look again on an upgrade."""
    assert pyvisa_py.__version__ == "0.8.1"
    assert pyvisa.__version__.startswith("1.16")
