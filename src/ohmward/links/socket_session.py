"""The session behind ``TCPIP::host::port::SOCKET``, in place of PyVISA-py's."""

import socket
import struct

from pyvisa import attributes
from pyvisa.constants import ResourceAttribute, StatusCode
from pyvisa_py.tcpip import TCPIPSocketSession

from ohmward.links.stream_session import CHUNK_BYTES, StreamSession

USER_TIMEOUT_MS = 10_000
"""A peer that leaves what was sent unacknowledged for so long is gone (RFC 5482)."""

OPEN_TIMEOUT_S = 5.0
"""Where the caller gives none."""

RESET_ON_CLOSE = struct.pack("ii", 1, 0)
"""SO_LINGER on, 0 s: what was not delivered is dropped, not sent once the cable is back."""


class SocketSession(StreamSession, TCPIPSocketSession):  # type: ignore[misc] # ships no types
    """One TCP connection to an instrument that sends bytes without any framing."""

    interface: socket.socket

    def after_parsing(self) -> None:
        """Connect within the open timeout, and set what VISA programs may ask for.

        Raises OSError if nothing listens there or the host cannot be reached.
        """
        timeout_s = self.open_timeout / 1e3 if self.open_timeout else OPEN_TIMEOUT_S
        host, port = self.parsed.host_address, int(self.parsed.port)
        self.interface = connected(host, port, timeout_s)
        self._watch(self.interface.fileno())
        self.attrs.update(
            {
                ResourceAttribute.tcpip_address: host,
                ResourceAttribute.tcpip_port: port,
                ResourceAttribute.interface_number: self.parsed.board,
                ResourceAttribute.tcpip_hostname: "",
                ResourceAttribute.tcpip_nodelay: True,
                ResourceAttribute.tcpip_keepalive: True,
                ResourceAttribute.suppress_end_enabled: True,
                **{
                    name: attributes.AttributesByID[name].default
                    for name in (ResourceAttribute.termchar, ResourceAttribute.termchar_enabled)
                },
            }
        )

    def _receive_now(self) -> bytes | None:
        try:
            return self.interface.recv(CHUNK_BYTES)
        except BlockingIOError:
            return None

    def _send_now(self, data: memoryview) -> int:
        try:
            return self.interface.send(data)
        except BlockingIOError:
            return 0

    def close(self) -> StatusCode:
        """Close with a reset, so that nothing still on its way is carried out later."""
        if self.interface is not None:
            self.interface.close()
            self.interface = None  # type: ignore[assignment] # as PyVISA-py does
        return StatusCode.success


def connected(host: str, port: int, timeout_s: float) -> socket.socket:
    """A connected non-blocking socket without Nagle's delay that notices a dead peer."""
    connection = socket.create_connection((host, port), timeout=timeout_s)
    try:
        make_alert(connection)
        connection.setblocking(False)
    except BaseException:
        connection.close()
        raise
    return connection


def make_alert(connection: socket.socket) -> None:
    """No delay on sending, a dead peer noticed, nothing delivered after closing."""
    connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    connection.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, RESET_ON_CLOSE)
    connection.setsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE, 1)
    # Linux has these; elsewhere a half-open link is noticed later, by a timeout
    for option, value in (
        ("TCP_USER_TIMEOUT", USER_TIMEOUT_MS),
        ("TCP_KEEPIDLE", 5),
        ("TCP_KEEPINTVL", 2),
        ("TCP_KEEPCNT", 3),
    ):
        if hasattr(socket, option):
            connection.setsockopt(socket.IPPROTO_TCP, getattr(socket, option), value)
