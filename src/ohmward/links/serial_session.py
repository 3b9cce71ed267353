"""The session behind ``ASRL/dev/…::INSTR``, in place of PyVISA-py's.

A serial line has no clear and no status byte: after a fault it is drained and asked who it is.
"""

import os
from contextlib import suppress
from typing import Any

import serial
from pyvisa import attributes
from pyvisa.constants import ResourceAttribute, SerialTermination, StatusCode
from pyvisa_py.serial import SerialSession as LibrarySession

from ohmward.links.stream_session import CHUNK_BYTES, StreamSession


class SerialSession(StreamSession, LibrarySession):  # type: ignore[misc] # ships no types
    """One serial port, held exclusively and read without blocking."""

    interface: Any

    def after_parsing(self) -> None:
        """Open the port for us alone.

        Raises SerialException (an OSError) if it is missing, or in use by another program.
        """
        self.interface = serial.serial_for_url(
            self.parsed.board, timeout=0, write_timeout=0, exclusive=True
        )
        self._watch(self.interface.fileno())
        for name in (
            ResourceAttribute.asrl_end_in,
            ResourceAttribute.asrl_end_out,
            ResourceAttribute.send_end_enabled,
            ResourceAttribute.termchar,
            ResourceAttribute.termchar_enabled,
            ResourceAttribute.suppress_end_enabled,
        ):
            self.attrs[name] = attributes.AttributesByID[name].default

    def _marked(self) -> bool:
        return bool(self.attrs[ResourceAttribute.asrl_end_in] == SerialTermination.termination_char)

    def _receive_now(self) -> bytes | None:
        try:
            return os.read(self.interface.fileno(), CHUNK_BYTES)
        except BlockingIOError:
            return None

    def _send_now(self, data: memoryview) -> int:
        try:
            return os.write(self.interface.fileno(), data)
        except BlockingIOError:
            return 0

    def close(self) -> StatusCode:
        """Drop what was not sent yet, and close: the system would wait for it to be sent."""
        with suppress(Exception):  # the port may have been unplugged
            self.interface.reset_output_buffer()
        self.interface.close()
        return StatusCode.success
