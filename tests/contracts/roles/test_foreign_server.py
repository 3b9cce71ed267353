"""Our SCPI driver, as a black box, against a SCPI server of other people's making (scpipy)."""

import subprocess
import sys
from collections.abc import Iterator

import pytest
import pyvisa
from tests.contracts.roles.worlds import driver_of

from ohmward import api
from ohmward.clock import Clock, run_in_real_time
from ohmward.errors import InstrumentRefused, LinkError
from ohmward.instruments.exercise import Exercised
from ohmward.instruments.talker import open_talker
from ohmward.instruments.voltmeter import Voltmeter
from ohmward.links.thread_waiter import ThreadWaiter
from ohmward.terms.status import Status

pytestmark = [pytest.mark.processes, pytest.mark.slow]

SERVER = '''
"""A multimeter as docs/protocols/multimeter.md has it, on a server that knows SCPI by itself."""

import asyncio
import socket
import sys

from scpipy.server import Context, Router, Server
from scpipy.shared.errors import DefaultScpiErrors, ScpiException

router = Router()
state = {"function": "VOLT", "range": 1000.0, "auto": 1, "aperture": "MED", "high": 0}
RANGES = (0.1, 1.0, 10.0, 100.0, 1000.0)


def add(header, get, put=None):
    router.add_route(header + "?", get)
    if put is not None:
        router.add_route(header + " <value>", put)


def set_range(context: Context, value: str):
    wanted = float(value)
    if wanted > RANGES[-1]:
        raise ScpiException(DefaultScpiErrors.DATA_OUT_OF_RANGE.value)
    state["range"] = min(each for each in RANGES if each >= wanted * (1 - 1e-9))
    state["auto"] = 0


def setter(name, make):
    def put(context: Context, value: str):
        state[name] = make(value)

    return put


def flag(text):
    return int(text.upper() in ("1", "ON"))


def number(value):
    return f"{value:+.6E}"


add("*IDN", lambda context: "GENERIC,MULTIMETER,77,1.0")
add("FUNCtion", lambda context: '"' + state["function"] + '"',
    setter("function", lambda text: text.strip('"')))
add("VOLTage:RANGe", lambda context: number(state["range"]), set_range)
add("VOLTage:RANGe:AUTO", lambda context: state["auto"], setter("auto", flag))
add("APERture", lambda context: state["aperture"],
    setter("aperture", lambda text: {"SHORT": "SHOR", "MEDIUM": "MED"}.get(text.upper(), text)))
add("INPut:IMPedance:AUTO", lambda context: state["high"], setter("high", flag))
add("MEASure:VOLTage", lambda context: number(12.5))

with socket.socket() as probe:
    probe.bind(("127.0.0.1", 0))
    port = probe.getsockname()[1]
server = Server("127.0.0.1", port)
server.include_router(router)
print(port, flush=True)
server.run()
'''


@pytest.fixture(scope="module")
def address(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    script = tmp_path_factory.mktemp("foreign") / "server.py"
    script.write_text(SERVER, "utf-8")
    process = subprocess.Popen(
        [sys.executable, script], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    assert process.stdout is not None
    assert process.stderr is not None
    try:
        port = process.stdout.readline().strip()
        assert port, process.stderr.read()
        yield f"TCPIP::127.0.0.1::{port}::SOCKET"
    finally:
        process.terminate()
        process.communicate(timeout=10)


def connected(address: str) -> None:
    """Wait until it listens: it says its port before it does."""
    for _ in range(100):
        try:
            api.try_address(address, "*IDN?", r"\n")
        except LinkError:
            continue
        else:
            return


def test_the_driver_is_exercised_from_end_to_end(address: str) -> None:
    connected(address)
    told: list[Exercised] = []
    assert api.exercise_driver(driver_of("scpi-multimeter"), address, told.append)
    by_entry = {one.entry: one for one in told}
    assert by_entry["identity"].value == "GENERIC,MULTIMETER,77,1.0"
    assert by_entry["reading.voltage"].value == "voltage = 12.5"
    assert not [one for one in told if one.failed]


def test_its_role_works_and_its_errors_are_heard(address: str) -> None:
    connected(address)

    async def main(clock: Clock) -> None:
        manager = pyvisa.ResourceManager("@py")
        talker = open_talker(
            address=address,
            driver=driver_of("scpi-multimeter"),
            manager=manager,
            waiter=ThreadWaiter(),
            serial_number="77",
        )
        try:
            await talker.identify()
            reading = await Voltmeter(talker, ratio=1000.0).read()
            assert (reading.voltage_v, reading.status) == (12500.0, Status.OK)
            assert await talker.set("range", 30.0) == 100.0
            assert await talker.set("integration", "short") == "short"
            await talker.link.write(b"NO:SUCH:COMMAND 1")
            (error,) = await talker.errors()
            assert -119 <= error.code <= -110  # an error in a header (SCPI-1999 vol. 2, 21.8.9)
            with pytest.raises(InstrumentRefused, match="nothing was sent"):
                await talker.set("range", 5000.0)
        finally:
            await talker.aclose()
            manager.close()

    run_in_real_time(main)
