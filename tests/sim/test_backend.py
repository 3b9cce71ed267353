"""The in-process VISA library through PyVISA, against VISA's own rules."""

import gc
import weakref
from collections.abc import Iterator
from types import SimpleNamespace

import pytest
import pyvisa
from pyvisa.constants import BufferOperation, StatusCode
from pyvisa.errors import VisaIOError
from pyvisa.resources import MessageBasedResource

from ohmward.sim.backend import InProcessLibrary
from ohmward.sim.scpi_device import ScpiDevice
from ohmward.sim.scpi_tree import Later

SOCKET = "TCPIP::192.0.2.1::5025::SOCKET"
HISLIP = "TCPIP::192.0.2.2::hislip0::INSTR"
SERIAL = "ASRL/dev/ttyS9::INSTR"
GPIB = "GPIB0::9::INSTR"


class Clock:
    def __init__(self) -> None:
        self.now_s = 100.0

    def __call__(self) -> float:
        return self.now_s

    def wait(self, until_s: float) -> None:
        self.now_s = max(self.now_s, until_s)


class Slow(ScpiDevice):
    def __init__(self, serial_number: str) -> None:
        super().__init__("SLOW", serial_number)
        self.tree.add("READ?", lambda now_s: Later(now_s + 1.5, lambda at_s: "+1.5E+00", True))
        self.tree.add("VOLT?", lambda now_s: "+7.0E+00")


class Bench:
    def __init__(self, *, waiting: bool = True) -> None:
        self.clock = Clock()
        self.cores = {
            address: Slow(str(number))
            for number, address in enumerate((SOCKET, HISLIP, SERIAL, GPIB))
        }
        self.library = InProcessLibrary(
            SimpleNamespace(devices=self.cores), self.clock, self.clock.wait if waiting else None
        )
        self.manager = pyvisa.ResourceManager(self.library)

    def open(self, address: str, **settings: object) -> MessageBasedResource:
        opened = self.manager.open_resource(address, **settings)
        assert isinstance(opened, MessageBasedResource)
        return opened


@pytest.fixture
def bench() -> Iterator[Bench]:
    made = Bench()
    yield made
    made.manager.close()


LINES = {"read_termination": "\n", "write_termination": "\n"}


@pytest.mark.parametrize("address", [SOCKET, HISLIP, SERIAL, GPIB])
def test_a_query_over_every_kind_of_address(bench: Bench, address: str) -> None:
    device = bench.open(address, **LINES)
    assert device.query("*IDN?") == bench.cores[address].identity
    assert device.query("READ?") == "+1.5E+00"
    assert bench.clock.now_s == 101.5, "the read waited exactly as long as the reply took"


@pytest.mark.parametrize(
    ("address", "reply"),
    # VISA: a socket has no END, so nothing ends a read; a serial read ends at VI_ATTR_ASRL_END_IN,
    # which is the termination character LF by default; a bus has its END. PyVISA strips nothing.
    [(SOCKET, None), (HISLIP, "+7.0E+00\n"), (SERIAL, "+7.0E+00\n"), (GPIB, "+7.0E+00\n")],
)
def test_a_forgotten_read_termination(bench: Bench, address: str, reply: str | None) -> None:
    device = bench.open(address, write_termination="\n", timeout=500)
    if reply is not None:
        assert device.query("VOLT?") == reply
        return
    with pytest.raises(VisaIOError) as failed:
        device.query("VOLT?")
    assert failed.value.error_code == StatusCode.error_timeout
    assert bench.clock.now_s == 100.5


@pytest.mark.parametrize(("address", "answers"), [(SOCKET, False), (HISLIP, True)])
def test_a_forgotten_write_termination(bench: Bench, address: str, answers: bool) -> None:
    device = bench.open(address, read_termination="\n", write_termination="", timeout=500)
    if answers:
        assert device.query("VOLT?") == "+7.0E+00"
    else:
        with pytest.raises(VisaIOError):
            device.query("VOLT?")


def test_a_late_reply_on_a_stream_goes_to_the_next_query(bench: Bench) -> None:
    device = bench.open(SOCKET, **LINES, timeout=1000)
    with pytest.raises(VisaIOError):
        device.query("READ?")
    assert device.query("VOLT?") == "+1.5E+00", "off by one, as a real socket is"
    assert device.read() == "+7.0E+00"


def test_a_late_reply_on_a_bus_is_lost(bench: Bench) -> None:
    device = bench.open(HISLIP, **LINES, timeout=1000)
    with pytest.raises(VisaIOError):
        device.query("READ?")
    assert device.query("VOLT?") == "+7.0E+00"
    assert device.query("SYST:ERR?").startswith("-410")


class Stuttering(Slow):
    """Sends a reply in two halves, 0.4 s apart."""

    def take(self, now_s: float) -> bytes:
        data = super().take(now_s)
        if data:
            self.second, self.second_s = data[5:], now_s + 0.4
            return data[:5]
        second = getattr(self, "second", b"")
        if second and now_s >= self.second_s:
            self.second = b""
            return second
        return b""

    def due_s(self) -> float | None:
        return self.second_s if getattr(self, "second", b"") else super().due_s()


def test_a_time_out_in_the_middle_of_a_reply_loses_its_first_half() -> None:
    clock = Clock()
    library = InProcessLibrary(
        SimpleNamespace(devices={SOCKET: Stuttering("1")}), clock, clock.wait
    )
    manager = pyvisa.ResourceManager(library)
    device = manager.open_resource(SOCKET, **LINES, timeout=300)
    assert isinstance(device, MessageBasedResource)
    with pytest.raises(VisaIOError):
        device.query("VOLT?")
    clock.wait(200.0)
    assert device.read() == "+00", "what is left looks like a reply of its own"
    device.timeout = 1000
    assert device.query("VOLT?") == "+7.0E+00", "a longer time-out gets both halves"
    manager.close()


def test_without_a_wait_the_library_says_when_to_read() -> None:
    bench = Bench(waiting=False)
    device = bench.open(SOCKET, **LINES, timeout=5000)
    assert bench.library.reply_due(device.session) is None
    device.write("READ?")
    assert bench.library.reply_due(device.session) == 101.5
    with pytest.raises(VisaIOError):
        device.read()
    bench.clock.now_s = 101.5
    assert bench.library.reply_due(device.session) == 101.5
    assert device.read() == "+1.5E+00"
    assert bench.library.reply_due(device.session) is None
    bench.manager.close()


def test_clear_and_flush(bench: Bench) -> None:
    stream = bench.open(SOCKET, **LINES)
    stream.write("VOLT?")
    stream.flush(BufferOperation.discard_read_buffer)
    assert stream.query("*IDN?") == "GENERIC,SLOW,0,1.0"
    stream.write("VOLT?")
    stream.clear()
    assert stream.query("*IDN?") == "GENERIC,SLOW,0,1.0"
    bus = bench.open(GPIB, **LINES)
    bus.write("READ?")
    bus.clear()
    assert bus.query("VOLT?") == "+7.0E+00"
    assert bus.query("SYST:ERR?").startswith("0,"), "a cleared query is no error"
    serial = bench.open(SERIAL, **LINES)
    with pytest.raises(VisaIOError):
        serial.clear()


def test_the_status_byte_is_read_on_a_bus_only(bench: Bench) -> None:
    bus = bench.open(GPIB, **LINES)
    bus.write("FRED")
    assert bus.read_stb() & 0b100, "the error queue is not empty"
    with pytest.raises(VisaIOError):
        bench.open(SOCKET, **LINES).read_stb()


def test_reading_with_nothing_asked_times_out_and_is_a_query_error(bench: Bench) -> None:
    bus = bench.open(GPIB, **LINES, timeout=300)
    with pytest.raises(VisaIOError) as failed:
        bus.read()
    assert failed.value.error_code == StatusCode.error_timeout
    assert bus.query("SYST:ERR?").startswith("-420")


def test_count_limits_a_read_and_keeps_the_rest(bench: Bench) -> None:
    device = bench.open(SOCKET, **LINES)
    device.write("VOLT?")
    assert device.read_bytes(3) == b"+7."
    assert device.read() == "0E+00"


def test_attributes(bench: Bench) -> None:
    device = bench.open(SERIAL, baud_rate=19200, timeout=1234)
    assert device.baud_rate == 19200
    assert device.timeout == 1234
    assert device.interface_type == pyvisa.constants.InterfaceType.asrl
    assert bench.open(SOCKET).resource_class == "SOCKET"
    del device.timeout
    assert device.timeout == float("inf")


def test_addresses_that_are_not_on_the_bench(bench: Bench) -> None:
    for address in ("TCPIP::192.0.2.99::5025::SOCKET", "GPIB0::10::INSTR"):
        with pytest.raises(VisaIOError) as failed:
            bench.open(address)
        assert failed.value.error_code == StatusCode.error_resource_not_found
    assert set(bench.manager.list_resources("?*")) == {
        "TCPIP0::192.0.2.1::5025::SOCKET",
        "TCPIP0::192.0.2.2::hislip0::INSTR",
        "ASRL/dev/ttyS9::INSTR",
        "GPIB0::9::INSTR",
    }


def test_a_second_session_takes_the_instrument_from_the_first(bench: Bench) -> None:
    first = bench.open(SOCKET, **LINES)
    second = bench.open(SOCKET, **LINES)
    assert second.query("VOLT?") == "+7.0E+00"
    with pytest.raises(VisaIOError) as failed:
        first.query("VOLT?")
    assert failed.value.error_code == StatusCode.error_connection_lost
    first.close()
    assert second.query("VOLT?") == "+7.0E+00"


def test_benches_are_kept_apart_and_nothing_is_kept_of_closed_sessions() -> None:
    one, other = Bench(), Bench()
    assert one.manager is not other.manager
    for _ in range(3):
        one.open(SOCKET, **LINES).close()
    assert one.library.sessions == {}
    assert not one.library._latest
    assert len(one.library._last_status_in_session) <= 1
    gone = weakref.ref(one.library)
    one.manager.close()
    other.manager.close()
    del one
    gc.collect()
    assert gone() is None
