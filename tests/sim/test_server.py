"""The served bench over real sockets, with plain PyVISA and plain sockets on the other side."""

import queue
import socket
import struct
import threading
from collections.abc import Iterator, Mapping
from types import SimpleNamespace

import pytest
import pyvisa
import trio
from pyvisa.constants import InterfaceType, StatusCode
from pyvisa.errors import VisaIOError
from pyvisa.resources import MessageBasedResource
from pyvisa_py.sessions import Session
from pyvisa_py.tcpip import TCPIPSocketSession

from ohmward.sim import hislip_port as hislip
from ohmward.sim.backend import InProcessLibrary
from ohmward.sim.faults import Fault, FaultLayer
from ohmward.sim.scanner import Contacts, Scanner
from ohmward.sim.scpi_device import ScpiDevice
from ohmward.sim.scpi_tree import Later
from ohmward.sim.server import serve

pytestmark = pytest.mark.processes


class Slow(ScpiDevice):
    def __init__(self) -> None:
        super().__init__("SLOW", "5")
        self.tree.add("READ?", lambda now_s: Later(now_s + 0.05, lambda at_s: "+1.5E+00", True))


class Bench:
    """Instruments on every kind of link, one of them behind a layer of faults."""

    def __init__(self) -> None:
        self.layer = FaultLayer(Slow())
        self.lan_layer = FaultLayer(Slow())
        self.named = {
            "meter": Slow(),
            "faulty": self.layer,
            "scanner": Scanner("scanner", "9", Contacts(("101", "201"))),
            "lan": self.lan_layer,
            "line": Slow(),
        }


class Serving:
    def __init__(self) -> None:
        self.bench = Bench()
        self._ready: queue.Queue[tuple[dict[str, str], trio.lowlevel.TrioToken]] = queue.Queue()
        self._scope = trio.CancelScope()
        self._thread = threading.Thread(target=trio.run, args=(self._main,))
        self._thread.start()
        self.addresses, self._token = self._ready.get(timeout=10)

    async def _main(self) -> None:
        token = trio.lowlevel.current_trio_token()
        with self._scope:
            await serve(
                self.bench,
                links={"lan": "hislip", "line": "serial"},
                ready=lambda found: self._ready.put((found, token)),
            )

    def stop(self) -> None:
        self._token.run_sync_soon(self._scope.cancel)
        self._thread.join(timeout=10)
        assert not self._thread.is_alive()

    def port(self, name: str) -> int:
        return int(self.addresses[name].split("::")[2])


@pytest.fixture(scope="module")
def serving() -> Iterator[Serving]:
    started = Serving()
    yield started
    started.stop()


@pytest.fixture
def manager() -> Iterator[pyvisa.ResourceManager]:
    made = pyvisa.ResourceManager("@py")
    yield made
    made.close()


def opened(
    manager: pyvisa.ResourceManager, address: str, **settings: object
) -> MessageBasedResource:
    found = manager.open_resource(address, **settings)
    assert isinstance(found, MessageBasedResource)
    return found


LINES = {"read_termination": "\n", "write_termination": "\n"}


def talk_on(link: socket.socket) -> None:
    """Read until the other side has closed, then talk on."""
    while link.recv(100) != b"":
        pass
    link.sendall(b"*IDN?\n")
    link.recv(100)


def test_a_plain_pyvisa_script(serving: Serving, manager: pyvisa.ResourceManager) -> None:
    with opened(manager, serving.addresses["meter"], **LINES, timeout=2000) as meter:
        assert meter.query("*IDN?") == "GENERIC,SLOW,5,1.0"
        assert meter.query("READ?") == "+1.5E+00"
    with opened(manager, serving.addresses["scanner"], **LINES, timeout=2000) as scanner:
        scanner.write("ROUT:CLOS (@101)")
        assert scanner.query("*OPC?;:ROUT:CLOS:STAT?") == "1;(@101)"


def test_one_connection_after_another(serving: Serving, manager: pyvisa.ResourceManager) -> None:
    for _ in range(3):
        with opened(manager, serving.addresses["meter"], **LINES, timeout=2000) as meter:
            assert meter.query("*IDN?").startswith("GENERIC,")


def test_a_new_connection_takes_over_from_a_half_open_one(serving: Serving) -> None:
    with (
        socket.create_connection(("127.0.0.1", serving.port("meter")), timeout=5) as first,
        socket.create_connection(("127.0.0.1", serving.port("meter")), timeout=5) as second,
    ):
        second.sendall(b"*IDN?\n")
        assert second.recv(100) == b"GENERIC,SLOW,5,1.0\n"
        with pytest.raises(ConnectionError):
            talk_on(first)


def test_a_script_that_closes_its_side_still_gets_its_reply(serving: Serving) -> None:
    with socket.create_connection(("127.0.0.1", serving.port("meter")), timeout=5) as link:
        link.sendall(b"READ?\n")
        link.shutdown(socket.SHUT_WR)
        received = b""
        while chunk := link.recv(100):
            received += chunk
    assert received == b"+1.5E+00\n"


def test_only_this_machine_can_connect(serving: Serving) -> None:
    network = [address for address in serving.addresses.values() if address[0] == "T"]
    assert {address.split("::")[1] for address in network} == {"127.0.0.1"}
    assert len(network) == 4


def test_a_port_can_be_chosen_and_an_unknown_name_is_refused() -> None:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        free = probe.getsockname()[1]
    found: list[Mapping[str, str]] = []

    async def main(ports: Mapping[str, int]) -> None:
        with trio.CancelScope() as scope:

            def ready(addresses: dict[str, str]) -> None:
                found.append(addresses)
                scope.cancel()

            await serve(Bench(), ports=ports, ready=ready)

    trio.run(main, {"meter": free})
    assert found[0]["meter"] == f"TCPIP::127.0.0.1::{free}::SOCKET"
    with pytest.raises(ValueError, match="oscilloscope"):
        trio.run(main, {"oscilloscope": 0})


def test_an_unknown_link_is_refused() -> None:
    async def main() -> None:
        await serve(Bench(), links={"meter": "carrier pigeon"})

    with pytest.raises(ValueError, match="pigeon"):
        trio.run(main)


def test_a_forgotten_termination_fails_served_as_it_does_in_process(
    serving: Serving, manager: pyvisa.ResourceManager, monkeypatch: pytest.MonkeyPatch
) -> None:
    # plain PyVISA, also where another test of this process has put ohmward's sessions in place
    socket_kind = (InterfaceType.tcpip, "SOCKET")
    monkeypatch.setitem(Session._session_classes, socket_kind, TCPIPSocketSession)
    now_s = [0.0]

    def wait(until_s: float) -> None:
        now_s[0] = until_s

    library = InProcessLibrary(
        SimpleNamespace(devices={serving.addresses["meter"]: Slow()}), lambda: now_s[0], wait
    )
    simulated = pyvisa.ResourceManager(library)
    for each in (manager, simulated):
        with opened(each, serving.addresses["meter"], write_termination="\n", timeout=100) as meter:
            with pytest.raises(VisaIOError) as failed:
                meter.query("*IDN?")
            assert failed.value.error_code == StatusCode.error_timeout
    simulated.close()


def test_faults_reach_the_other_side_of_a_socket(
    serving: Serving, manager: pyvisa.ResourceManager
) -> None:
    layer = serving.bench.layer
    with opened(manager, serving.addresses["faulty"], **LINES, timeout=2000) as meter:
        assert meter.query("*IDN?") == "GENERIC,SLOW,5,1.0"
        layer.inject(Fault(kind="comma"))
        assert meter.query("READ?") == "+1,5E+00"
        layer.inject(Fault(kind="trickle", delay_s=0.002))
        assert meter.query("READ?") == "+1.5E+00"
    layer.inject(Fault(kind="identity"))
    with opened(manager, serving.addresses["faulty"], **LINES, timeout=2000) as meter:
        assert meter.query("*IDN?") == "GENERIC,SLOW,999999,1.0"


def test_a_dropped_connection_is_seen(serving: Serving) -> None:
    layer = serving.bench.layer
    layer.inject(Fault(kind="disconnect", delay_s=0.0))
    with socket.create_connection(("127.0.0.1", serving.port("faulty")), timeout=5) as link:
        link.sendall(b"READ?\n")
        with pytest.raises(ConnectionError):
            talk_on(link)


def test_a_plain_pyvisa_script_over_hislip(
    serving: Serving, manager: pyvisa.ResourceManager
) -> None:
    address = serving.addresses["lan"]
    with opened(manager, address, **LINES, timeout=2000) as meter:
        assert meter.query("*IDN?") == "GENERIC,SLOW,5,1.0"
        assert meter.query("READ?") == "+1.5E+00"
        meter.write("*CLS;*SRE 0")
        assert meter.read_stb() == 0
        meter.write("NONSENSE")
        assert meter.query("*ESR?") == "32"
        assert meter.read_stb() & 0b100, "the error queue is not empty"
        meter.write("READ?")
        meter.clear()
        assert meter.query("*IDN?") == "GENERIC,SLOW,5,1.0"
    with opened(manager, address, timeout=2000, write_termination="") as meter:
        assert meter.query("*IDN?") == "GENERIC,SLOW,5,1.0\n", "the end of a message is marked"


def test_a_reply_that_nobody_read_is_dropped_over_hislip(
    serving: Serving, manager: pyvisa.ResourceManager
) -> None:
    with opened(manager, serving.addresses["lan"], **LINES, timeout=2000) as meter:
        meter.write("*CLS")
        meter.write("READ?")
        assert meter.query("*IDN?") == "GENERIC,SLOW,5,1.0"
        assert meter.query("SYST:ERR?").startswith("-410,")


def test_faults_reach_the_other_side_of_hislip(
    serving: Serving, manager: pyvisa.ResourceManager
) -> None:
    layer = serving.bench.lan_layer
    with opened(manager, serving.addresses["lan"], **LINES, timeout=2000) as meter:
        layer.inject(Fault(kind="split", delay_s=0.02))
        assert meter.query("READ?") == "+1.5E+00"
        layer.inject(Fault(kind="disconnect", delay_s=0.0))
        meter.write("READ?")
        with pytest.raises((VisaIOError, RuntimeError, OSError)):
            meter.read()
    with opened(manager, serving.addresses["lan"], **LINES, timeout=2000) as meter:
        assert meter.query("*IDN?") == "GENERIC,SLOW,5,1.0"


def answer_to(link: socket.socket) -> tuple[int, int]:
    """Kind and control code of the next HiSLIP message (IVI-6.1: 16 bytes of header)."""
    header = b""
    while len(header) < 16:
        chunk = link.recv(16 - len(header))
        assert chunk
        header += chunk
    prologue, kind, control, _, length = struct.unpack("!2sBBIQ", header)
    assert prologue == b"HS"
    while length:
        length -= len(link.recv(length))
    return kind, control


@pytest.mark.parametrize(
    ("sent", "answer"),
    # IVI-6.1: fatal error 1 is a poorly formed header, 3 a wrong initialization sequence
    [
        (b"GET / HTTP/1.1\r\n\r\n", (hislip.FATAL_ERROR, 1)),
        (struct.pack("!2sBBIQ", b"HS", 7, 0, 1, 0), (hislip.FATAL_ERROR, 3)),
        (struct.pack("!2sBBIQ", b"HS", 17, 0, 12345, 0), (hislip.FATAL_ERROR, 3)),
        (struct.pack("!2sBBIQ", b"HS", 0, 0, 0x01000000, 1 << 40), (hislip.FATAL_ERROR, 1)),
    ],
)
def test_what_is_no_hislip_is_told_so(
    serving: Serving, sent: bytes, answer: tuple[int, int]
) -> None:
    port = int(serving.addresses["lan"].split(",")[1].split("::")[0])
    with socket.create_connection(("127.0.0.1", port), timeout=5) as link:
        link.sendall(sent)
        assert answer_to(link) == answer


def test_a_plain_pyvisa_script_over_a_serial_line(
    serving: Serving, manager: pyvisa.ResourceManager
) -> None:
    for _ in range(2):
        with opened(manager, serving.addresses["line"], **LINES, timeout=2000) as meter:
            assert meter.query("*IDN?") == "GENERIC,SLOW,5,1.0"
            assert meter.query("READ?") == "+1.5E+00"
