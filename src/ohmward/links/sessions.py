"""Puts our sessions in the place of PyVISA-py's, for the whole process, when first needed."""

from typing import Any

from pyvisa.constants import InterfaceType

from ohmward.links.hislip_session import NetworkSession
from ohmward.links.serial_session import SerialSession
from ohmward.links.socket_session import SocketSession

OURS = (
    (SocketSession, InterfaceType.tcpip, "SOCKET"),
    (NetworkSession, InterfaceType.tcpip, "INSTR"),
    (SerialSession, InterfaceType.asrl, "INSTR"),
)


def register_sessions() -> None:
    """From now on PyVISA-py opens our sessions; sessions that are open stay what they are."""
    for session_class, interface, resource_class in OURS:
        _register(session_class, interface, resource_class)


def _register(session_class: Any, interface: InterfaceType, resource_class: str) -> None:
    kinds = session_class._session_classes
    if kinds.get((interface, resource_class)) is not session_class:
        # PyVISA-py's own register() logs a warning about the replacement that is wanted here
        kinds.pop((interface, resource_class), None)
        session_class.register(interface, resource_class)(session_class)
