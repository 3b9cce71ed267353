"""Puts our sessions in the place of PyVISA-py's, for the whole process, when first needed."""

from pyvisa.constants import InterfaceType

from ohmward.links.socket_session import SocketSession, register


def register_sessions() -> None:
    """From now on PyVISA-py opens our sessions; sessions that are open stay what they are."""
    register(SocketSession, InterfaceType.tcpip, "SOCKET")
