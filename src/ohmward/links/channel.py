"""One open PyVISA session with its terminations set: the synchronous half of a link.

Every function here may raise whatever PyVISA raises; the waiters translate it.
"""

from contextlib import ExitStack, suppress
from typing import Any, Protocol

import pyvisa
from pyvisa.constants import (
    ControlFlow,
    InterfaceType,
    Parity,
    ResourceAttribute,
    SerialTermination,
    StatusCode,
    StopBits,
)
from pyvisa.errors import VisaIOError
from pyvisa.resources import MessageBasedResource, SerialInstrument, TCPIPSocket

from ohmward.errors import LinkError, LinkLost, ReplyMalformed
from ohmward.links.settings import LinkSettings
from ohmward.links.stream_session import PatientSession

WRITE_AT_ONCE_BYTES = 1024
"""A message up to this size fits where ``writable`` says that there is room."""


class SimulatedLibrary(Protocol):
    """What an in-process VISA library offers beside PyVISA's calls, for virtual time."""

    def reply_due(self, session: int) -> float | None:
        """When (trio time) the next byte of a reply is there; None if none is on its way."""


class Channel:
    """One session: what was asked for at opening, and how its replies have come so far."""

    def __init__(
        self, *, address: str, settings: LinkSettings, manager: pyvisa.ResourceManager
    ) -> None:
        self.address = address
        self.settings = settings
        self.prompt = True
        """The last reply was so quick that it is worth waiting for the next one on the spot."""
        self.abandoned = False
        """A hung thread still uses the session, and closes it if it ever ends."""
        self._count = settings.max_reply_bytes + len(settings.read_termination) + 1
        self._timeout_s = 0.0
        self._warnings = ExitStack()
        resource = manager.open_resource(address, open_timeout=round(1e3 * settings.open_timeout_s))
        if not isinstance(resource, MessageBasedResource):
            resource.close()
            raise LinkError("no address of an instrument that takes messages", address=address)
        self.resource = resource
        self.library: Any = resource.visalib
        self.handle = resource.session
        try:
            self._configure()
        except BaseException:
            self.close()
            raise
        self._stream = isinstance(resource, TCPIPSocket | SerialInstrument)
        self.endless = self._stream and not settings.read_termination
        """Nothing marks the end of a message."""
        self.renewable = isinstance(resource, TCPIPSocket)
        """A new session is sure to hold nothing that the old one was still owed."""
        self.carries_over = isinstance(resource, SerialInstrument)
        """The line outlives the session, and with it a reply that is still owed."""
        session = getattr(self.library, "sessions", {}).get(self.handle)
        self.patient: PatientSession | None = (
            session if isinstance(session, PatientSession) else None
        )

    def _configure(self) -> None:
        settings, resource = self.settings, self.resource
        # "there is more to read" is a status that is looked at here, not a warning
        self._warnings.enter_context(resource.ignore_warning(StatusCode.success_max_count_read))
        self.set_timeout(settings.timeout_s)
        end = settings.read_termination
        resource.set_visa_attribute(ResourceAttribute.termchar, end[-1] if end else ord("\n"))
        resource.set_visa_attribute(ResourceAttribute.termchar_enabled, bool(end))
        if resource.interface_type == InterfaceType.asrl:
            self._configure_serial()

    def _configure_serial(self) -> None:
        settings = self.settings
        for attribute, value in (
            (ResourceAttribute.asrl_baud_rate, settings.baud_rate),
            (ResourceAttribute.asrl_data_bits, settings.data_bits),
            (ResourceAttribute.asrl_parity, Parity[settings.parity]),
            (
                ResourceAttribute.asrl_stop_bits,
                StopBits.one if settings.stop_bits == 1 else StopBits.two,
            ),
            (
                ResourceAttribute.asrl_flow_control,
                {
                    "none": ControlFlow.none,
                    "xon/xoff": ControlFlow.xon_xoff,
                    "rts/cts": ControlFlow.rts_cts,
                }[settings.flow_control],
            ),
            (
                ResourceAttribute.asrl_end_in,
                SerialTermination.termination_char
                if settings.read_termination
                else SerialTermination.none,
            ),
            (ResourceAttribute.asrl_end_out, SerialTermination.none),
        ):
            self.resource.set_visa_attribute(attribute, value)

    def set_timeout(self, timeout_s: float) -> None:
        """Give every following PyVISA call ``timeout_s``, and at least a millisecond."""
        if timeout_s != self._timeout_s:
            self.resource.timeout = max(1.0, round(1e3 * timeout_s))
            self._timeout_s = timeout_s

    def write(self, message: bytes) -> None:
        """Write all of ``message``, or raise."""
        written, _status = self.library.write(self.handle, message)
        if written != len(message):
            raise LinkLost(
                f"only {written} of {len(message)} bytes could be written", address=self.address
            )

    def read(self) -> bytes:
        """One whole message without its termination.

        Raises ReplyMalformed if it is longer than allowed or ends otherwise than agreed.
        """
        if self.endless and self.patient is None:
            return self._whatever()
        message, status = self.library.read(self.handle, self._count)
        end = self.settings.read_termination
        if end and message.endswith(end):
            return bytes(message[: -len(end)])
        if status == StatusCode.success and not (self._stream and end):
            return bytes(message)  # the interface itself marked the end
        if status == StatusCode.success_max_count_read:
            expected = f"at most {self.settings.max_reply_bytes} bytes"
        else:
            expected = f"a reply that ends in {end!r}"
        raise ReplyMalformed(
            f"expected {expected}, found {len(message)} bytes ending in {bytes(message[-16:])!r}",
            address=self.address,
        )

    def _whatever(self) -> bytes:
        """What is there: where nothing marks an end, a read of one byte is the only whole one."""
        found = bytearray()
        while len(found) < self.settings.max_reply_bytes:
            try:
                byte, _status = self.library.read(self.handle, 1)
            except VisaIOError:
                if not found:
                    raise
                break
            found += byte
        return bytes(found)

    def whole_within(self, timeout_s: float) -> bool:
        """True once ``read`` would return at once; only where ``patient`` is there."""
        assert self.patient is not None
        return self.patient.complete_within(timeout_s, self._count)

    def close(self) -> None:
        """Close the session and forget its handle, whatever the library says to it."""
        library, handle = self.library, self.handle
        with suppress(Exception):  # a dead session cannot be closed in order, and need not be
            self._warnings.close()
        with suppress(Exception):
            self.resource.close()
        # so that the resource does not try again when it is collected
        self.resource.session = None
        for registry in (
            getattr(library, "sessions", {}),
            library._last_status_in_session,
            library._ignore_warning_in_session,
            library.handlers,
        ):
            registry.pop(handle, None)
