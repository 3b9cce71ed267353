"""``driver check``, ``try`` and ``replay``, ``bench check`` and ``serve``, on served benches."""

import json
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from ohmward import api
from ohmward.api import checking
from ohmward.errors import BadInput, LinkError
from ohmward.instruments.exercise import Exercised

BENCH = """
format = 1
name = "every role"

[instrument.meter]
role = "impedance meter"
driver = "scpi-impedance-meter"
address = "TCPIP::192.0.2.1::hislip0::INSTR"
serial_number = "M-1"
calibration_due = 2031-01-01

[instrument.supply]
role = "high-voltage supply"
driver = "terse-high-voltage-supply"
address = "ASRL/dev/ttyUSB0::INSTR"
calibration_due = 2001-01-01

[instrument.bias]
role = "bias source"
driver = "scpi-bias-source"
address = "TCPIP::192.0.2.2::5025::SOCKET"

[instrument.leakage]
role = "current meter"
driver = "scpi-current-meter"
address = "TCPIP::192.0.2.3::5025::SOCKET"

[instrument.volts]
role = "voltmeter"
driver = "scpi-multimeter"
address = "TCPIP::192.0.2.4::5025::SOCKET"

[instrument.door]
role = "interlock"
driver = "scpi-interlock"
address = "TCPIP::192.0.2.5::5025::SOCKET"

[instrument.room]
role = "thermometer"
driver = "scpi-thermometer"
address = "TCPIP::192.0.2.6::5025::SOCKET"

[fixture]
loading = "by hand"

[[position]]
name = "1"
"""

PLAIN = """
import sys
import pyvisa

assert "ohmward" not in sys.modules
address, query, serial = sys.argv[1:]
manager = pyvisa.ResourceManager("@py")
settings = {"read_termination": "\\n", "write_termination": "\\n", "timeout": 3000}
for _ in range(2):  # open, talk, leave, and again
    with manager.open_resource(address, **settings) as instrument:
        assert instrument.query("*IDN?").split(",")[2] == serial
        print(instrument.query(query))
manager.close()
"""


class Serving:
    """``ohmward serve`` in a process of its own."""

    def __init__(self, folder: Path, *arguments: str) -> None:
        bench = folder / "bench.toml"
        bench.write_text(BENCH, "utf-8")
        self._process = subprocess.Popen(
            [sys.executable, "-m", "ohmward", "serve", str(bench), *arguments],
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )
        assert self._process.stdout is not None
        self._out = self._process.stdout

    def line(self) -> str:
        return self._out.readline()

    def until(self, mark: str) -> str:
        text = ""
        while mark not in text:
            line = self._out.readline()
            assert line, text
            text += line
        return text

    def stop(self) -> None:
        self._process.terminate()
        self._process.communicate(timeout=20)


@pytest.fixture(scope="module")
def served_json(tmp_path_factory: pytest.TempPathFactory) -> Iterator[dict[str, dict[str, object]]]:
    links = ("--link", "volts=hislip", "--link", "room=serial", "--link", "meter=socket")
    serving = Serving(tmp_path_factory.mktemp("json"), "--json", *links)
    yield json.loads(serving.line())
    serving.stop()


@pytest.fixture(scope="module")
def served_bench(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Path]:
    folder = tmp_path_factory.mktemp("toml")
    serving = Serving(folder)
    served = folder / "served.toml"
    served.write_text(serving.until('name = "1"'), "utf-8")
    yield served
    serving.stop()


@pytest.mark.processes
@pytest.mark.slow
def test_what_is_served_says_on_which_link(served_json: dict[str, dict[str, object]]) -> None:
    links = {name: one["link"] for name, one in served_json.items()}
    assert links == {
        "meter": "socket",  # as asked, whatever its address says
        "supply": "serial",  # as its address says
        "bias": "socket",
        "leakage": "socket",
        "volts": "hislip",
        "door": "socket",
        "room": "serial",
    }
    assert served_json["supply"]["scpi"] is False
    assert str(served_json["volts"]["address"]).endswith("::INSTR")
    assert str(served_json["room"]["address"]).startswith("ASRL/dev/pts/")


@pytest.mark.processes
@pytest.mark.slow
@pytest.mark.parametrize(
    ("name", "query", "serial"),
    [("meter", "FREQ?", "M-1"), ("volts", "MEAS:VOLT?", "SIM-1"), ("room", "MEAS:TEMP?", "SIM-1")],
)
def test_a_plain_pyvisa_script_on_every_link(
    served_json: dict[str, dict[str, object]], name: str, query: str, serial: str
) -> None:
    address = str(served_json[name]["address"])
    done = subprocess.run(
        [sys.executable, "-c", PLAIN, address, query, serial],
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    replies = [float(line) for line in done.stdout.split()]
    assert len(replies) == 2


@pytest.mark.processes
@pytest.mark.slow
def test_a_bench_is_looked_at_instrument_by_instrument(served_bench: Path) -> None:
    text = served_bench.read_text("utf-8")
    text = text.replace('role = "high-', 'calibration_due = 2001-01-01\nrole = "high-')
    served_bench.write_text(text, "utf-8")
    _, found = checking.check_bench(str(served_bench))
    assert [one.name for one in found if one.failed] == []
    remarks = {one.name: "; ".join(one.remarks) for one in found}
    assert "calibration was due on 2001-01-01" in remarks["supply"]
    assert "output off" in remarks["supply"]
    assert "no calibration date stated" in remarks["bias"]
    assert "measures" in remarks["bias"]
    assert "any serial number is taken" in remarks["leakage"]
    assert "A on its range of 2e-09 A" in remarks["leakage"]
    assert "more than" not in remarks["leakage"]
    assert "V at its terminals" in remarks["volts"]
    assert "enclosure closed" in remarks["door"]
    assert "°C" in remarks["room"]
    identities = {one.name: one.identity for one in found}
    assert identities["supply"] == "T HVS2000 SIM-1"


@pytest.mark.processes
@pytest.mark.slow
def test_another_serial_number_and_nobody_are_named(served_bench: Path, tmp_path: Path) -> None:
    text = served_bench.read_text("utf-8").replace('"M-1"', '"M-2"')
    other = tmp_path / "other.toml"
    parts = text.split('address = "')
    door = next(n for n, part in enumerate(parts) if part.find("[instrument.room]") > 0)
    parts[door] = "TCPIP::127.0.0.1::9::SOCKET" + parts[door][parts[door].index('"') :]
    other.write_text('address = "'.join(parts), "utf-8")
    _, found = checking.check_bench(str(other))
    failed = {one.name: one.remarks[0] for one in found if one.failed}
    assert set(failed) == {"meter", "door"}
    assert "expected serial number M-2, found 'M-1'" in failed["meter"]
    assert not api.show_bench(str(other))


@pytest.mark.processes
@pytest.mark.slow
def test_a_driver_is_tried_at_an_address(served_json: dict[str, dict[str, object]]) -> None:
    told: list[Exercised] = []
    address = str(served_json["leakage"]["address"])
    assert api.exercise_driver(api.read_driver("scpi-current-meter"), address, told.append)
    assert {"identity", "setting.range", "reading.current"} <= {one.entry for one in told}
    with_wrong = api.read_driver("scpi-thermometer")
    told.clear()
    assert not api.exercise_driver(with_wrong, address, told.append)
    assert [one.entry for one in told] == ["identity"]
    assert "THERMOMETER" in told[0].verdict


@pytest.mark.processes
@pytest.mark.slow
def test_one_query_both_ways(served_json: dict[str, dict[str, object]]) -> None:
    address = str(served_json["bias"]["address"])
    assert api.try_address(address, "*IDN?", r"\n") == (
        r"*IDN?\n",
        r"GENERIC,BIAS-SOURCE,SIM-1,1.0\n",
    )
    with pytest.raises(LinkError):
        api.try_address("TCPIP::127.0.0.1::9::SOCKET", "*IDN?", r"\n")


def test_what_is_no_address_and_no_transcript_is_told(tmp_path: Path) -> None:
    with pytest.raises(BadInput, match="wrong-address"):
        api.try_address("COM3", "*IDN?", r"\n")
    odd = tmp_path / "odd.jsonl"
    odd.write_text("{}\n", "utf-8")
    with pytest.raises(BadInput, match="line 1"):
        checking.replay(api.read_driver("scpi-scanner"), odd)


@pytest.mark.parametrize(
    ("links", "ports", "problem"),
    [
        ({"nobody": "serial"}, {}, "unknown-instrument"),
        ({"meter": "pigeon"}, {}, "unknown-link"),
        ({"room": "serial"}, {"room": 5025}, "port-of-a-terminal"),
    ],
)
def test_what_cannot_be_served_is_refused_before_anything_listens(
    links: dict[str, str], ports: dict[str, int], problem: str
) -> None:
    with pytest.raises(BadInput) as refused:
        api.serve("depot-bench", parts=None, seed=0, as_json_line=True, ports=ports, links=links)
    assert [one.id for one in refused.value.problems] == [problem]
