"""What a link costs: its query rate as a ratio of a bare PyVISA loop, in the same run.

The instrument answers in a process of its own. The floor of each row is the best that
PyVISA does alone: the same commands in a plain loop, on PyVISA-py's own sessions. Rounds of
both alternate, so that a busy machine slows both, and the medians are compared.

    python benchmarks/links.py [rounds]
"""

import multiprocessing
import os
import socket
import statistics
import struct
import sys
import time
import tty
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import partial

import pyvisa
import trio
from pyvisa.constants import InterfaceType
from pyvisa_py.serial import SerialSession
from pyvisa_py.sessions import Session
from pyvisa_py.tcpip import TCPIPInstrSession, TCPIPSocketSession

from ohmward.links.link import Hello, Link
from ohmward.links.sessions import register_sessions
from ohmward.links.settings import LinkSettings
from ohmward.links.thread_waiter import ThreadWaiter

REPLY = b"+1.234567E-07,+1.000000E-03,0,+1.0\n"
TOGETHER = 8

PYVISA_PY = {
    (InterfaceType.tcpip, "SOCKET"): TCPIPSocketSession,
    (InterfaceType.tcpip, "INSTR"): TCPIPInstrSession,
    (InterfaceType.asrl, "INSTR"): SerialSession,
}


def serve(listener: socket.socket, delay_s: float) -> None:
    """Answer every line with a reading after ``delay_s``, one process per connection."""
    while True:
        connection, _ = listener.accept()
        if os.fork() == 0:
            listener.close()
            answer(connection, delay_s)
            os._exit(0)
        connection.close()


def serve_hislip(listener: socket.socket, delay_s: float) -> None:
    """Answer as a HiSLIP instrument with two connections at a time (IVI-6.1)."""
    while True:
        sync, _ = listener.accept()
        hear(sync)
        sync.sendall(frame(1, 0x0100 << 16 | 1))
        other, _ = listener.accept()
        hear(other)
        other.sendall(frame(18, 0))
        other.sendall(frame(16, 0, hear(other)[2]))
        for connection in (sync, other):
            connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        try:
            while True:
                _, number, _ = hear(sync)
                if delay_s:
                    time.sleep(delay_s)
                sync.sendall(frame(7, number, REPLY))
        except (OSError, struct.error):
            sync.close()
            other.close()


def frame(kind: int, number: int, payload: bytes = b"") -> bytes:
    """One HiSLIP message."""
    return struct.pack("!2sBBIQ", b"HS", kind, 0, number, len(payload)) + payload


def hear(connection: socket.socket) -> tuple[int, int, bytes]:
    """One HiSLIP message; struct.error once the other side has left."""
    _, kind, _, number, length = struct.unpack("!2sBBIQ", connection.recv(16, socket.MSG_WAITALL))
    return kind, number, connection.recv(length, socket.MSG_WAITALL) if length else b""


def serve_line(master: int, delay_s: float) -> None:
    """Answer on a pseudo-terminal."""
    while os.read(master, 4096):
        if delay_s:
            time.sleep(delay_s)
        os.write(master, REPLY)


def answer(connection: socket.socket, delay_s: float) -> None:
    """One connection, until the other side leaves."""
    connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    try:
        while connection.recv(4096):
            if delay_s:
                time.sleep(delay_s)
            connection.sendall(REPLY)
    except OSError:
        pass


@contextmanager
def served(serve_it: Callable[..., None], *arguments: object) -> Iterator[None]:
    """A process that serves, for as long as it is wanted."""
    process = multiprocessing.get_context("fork").Process(target=serve_it, args=arguments)
    process.start()
    try:
        yield
    finally:
        process.terminate()
        process.join()


@contextmanager
def instrument(delay_s: float) -> Iterator[str]:
    """An instrument on a raw socket; gives its address."""
    with socket.create_server(("127.0.0.1", 0)) as listener, served(serve, listener, delay_s):
        yield f"TCPIP::127.0.0.1::{listener.getsockname()[1]}::SOCKET"


@contextmanager
def hislip_instrument(delay_s: float = 0.0) -> Iterator[str]:
    """An instrument that speaks HiSLIP; gives its address."""
    with (
        socket.create_server(("127.0.0.1", 0)) as listener,
        served(serve_hislip, listener, delay_s),
    ):
        yield f"TCPIP::127.0.0.1::hislip0,{listener.getsockname()[1]}::INSTR"


@contextmanager
def serial_instrument(delay_s: float = 0.0) -> Iterator[str]:
    """An instrument on a serial line; gives its address."""
    master, slave = os.openpty()
    tty.setraw(slave)
    with served(serve_line, master, delay_s):
        yield f"ASRL{os.ttyname(slave)}::INSTR"
    os.close(master)
    os.close(slave)


def bare(address: str, count: int) -> float:
    """Seconds per query of a plain PyVISA loop."""
    Session._session_classes.update(PYVISA_PY)
    resource = pyvisa.ResourceManager("@py").open_resource(
        address, read_termination="\n", write_termination="\n"
    )
    started_s = time.perf_counter()
    for _ in range(count):
        resource.query("READ?")  # type: ignore[attr-defined]
    spent_s = time.perf_counter() - started_s
    resource.close()
    return spent_s / count


def linked(address: str, count: int, together: int = 1) -> float:
    """Seconds per query of one link, while ``together`` of them are polled side by side."""
    register_sessions()
    manager, waiter = pyvisa.ResourceManager("@py"), ThreadWaiter()

    async def ask(link: Link) -> None:
        for _ in range(count):
            await link.query(b"READ?")

    async def main() -> float:
        links = [
            Link(
                address=address,
                settings=LinkSettings(),
                manager=manager,
                waiter=waiter,
                hello=Hello(query=b"*IDN?", check=lambda reply: None),
            )
            for _ in range(together)
        ]
        for link in links:
            await link.open()
        started_s = time.perf_counter()
        async with trio.open_nursery() as nursery:
            for link in links:
                nursery.start_soon(ask, link)
        spent_s = time.perf_counter() - started_s
        for link in links:
            await link.aclose()
        return spent_s

    return trio.run(main) / count


def compare(
    name: str, floor: Callable[[], float], ours: Callable[[], float], rounds: int, target: float
) -> None:
    """Alternate, take medians, print one row."""
    pairs = [(floor(), ours()) for _ in range(rounds)]
    floor_s, ours_s = (statistics.median(column) for column in zip(*pairs, strict=True))
    print(
        f"{name:44} {1e6 * floor_s:9.1f} {1e6 * ours_s:9.1f} "
        f"{floor_s / ours_s:7.3f}   at least {target:g}"
    )


def main() -> None:
    """All rows."""
    rounds = int(sys.argv[1]) if len(sys.argv) > 1 else 5
    print(f"{'µs per query':44} {'floor':>9} {'link':>9}   ratio")
    with instrument(0.0) as address:
        compare(
            "SOCKET, no delay, against bare PyVISA",
            partial(bare, address, 2000),
            partial(linked, address, 2000),
            rounds,
            0.5,
        )
    with hislip_instrument() as address:
        compare(
            "HiSLIP, no delay, against bare PyVISA",
            partial(bare, address, 2000),
            partial(linked, address, 2000),
            rounds,
            0.5,
        )
    with serial_instrument() as address:
        compare(
            "serial, no delay, against bare PyVISA",
            partial(bare, address, 1000),
            partial(linked, address, 1000),
            rounds,
            0.9,
        )
    with instrument(0.01) as address:
        compare(
            "SOCKET, 10 ms, against bare PyVISA",
            partial(bare, address, 100),
            partial(linked, address, 100),
            rounds,
            0.95,
        )
        compare(
            f"SOCKET, 10 ms, {TOGETHER} together against one link",
            partial(linked, address, 100),
            partial(linked, address, 100, TOGETHER),
            rounds,
            0.9,
        )
    for kind, served_as in (("HiSLIP", hislip_instrument), ("serial", serial_instrument)):
        with served_as(0.01) as address:
            compare(
                f"{kind}, 10 ms, against bare PyVISA",
                partial(bare, address, 100),
                partial(linked, address, 100),
                rounds,
                0.95,
            )


if __name__ == "__main__":
    main()
