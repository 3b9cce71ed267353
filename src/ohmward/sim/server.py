"""Serves a simulated bench on this machine: real links, real time, the same device cores.

One process serves the whole bench, so that the instruments see the same relays and parts. An
instrument talks to one controller at a time; a new connection takes over from an older one,
which may be half-open without anybody knowing.
"""

from collections.abc import Callable, Mapping
from typing import Protocol

import trio

from ohmward.sim.device import Device
from ohmward.sim.hislip_port import HislipPort
from ohmward.sim.serial_port import SerialPort
from ohmward.sim.socket_port import LOOPBACK, BenchClock, SocketPort

LINKS = ("socket", "hislip", "serial")


class Served(Protocol):
    """What can be served: device cores by name."""

    @property
    def named(self) -> Mapping[str, Device]:
        """The device cores by the names of their instruments."""


async def serve(
    bench: Served,
    *,
    ports: Mapping[str, int] | None = None,
    ready: Callable[[dict[str, str]], None] | None = None,
    links: Mapping[str, str] | None = None,
    speed: float = 1.0,
) -> None:
    """Serve every instrument of a bench on the loopback interface until cancelled.

    ``links`` says by instrument name which of ``LINKS`` it is served on: a raw TCP socket unless
    said otherwise, HiSLIP, or a pseudo-terminal as a serial line. ``ports`` gives TCP ports by
    name; an instrument without one gets any free port. ``ready`` is called once, when all
    listen, with the VISA address of each instrument. OSError is raised if a port is taken,
    ValueError if ``ports`` or ``links`` name what there is not.
    """
    ports, links = ports or {}, links or {}
    _check(bench, ports, links)
    clock = BenchClock(speed)
    addresses: dict[str, str] = {}
    async with trio.open_nursery() as nursery:
        served: dict[int, str] = {}
        for name, device in bench.named.items():
            first = served.setdefault(id(device), name)
            if first != name:  # they share one link
                addresses[name] = addresses[first]
                continue
            link, port = links.get(name, "socket"), ports.get(name, 0)
            if link == "serial":
                path = await nursery.start(SerialPort(device, clock).listen)
                addresses[name] = f"ASRL{path}::INSTR"
            elif link == "hislip":
                number = await nursery.start(HislipPort(device, clock).listen, port)
                addresses[name] = f"TCPIP::{LOOPBACK}::hislip0,{number}::INSTR"
            else:
                number = await nursery.start(SocketPort(device, clock).listen, port)
                addresses[name] = f"TCPIP::{LOOPBACK}::{number}::SOCKET"
        if ready is not None:
            ready(addresses)


def _check(bench: Served, ports: Mapping[str, int], links: Mapping[str, str]) -> None:
    unknown = sorted((set(ports) | set(links)) - set(bench.named))
    if unknown:
        raise ValueError(f"no instrument is called {', '.join(unknown)}")
    wrong = sorted(set(links.values()) - set(LINKS))
    if wrong:
        raise ValueError(f"a link is one of {', '.join(LINKS)}, not {', '.join(wrong)}")
