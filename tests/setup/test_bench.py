"""A bench file is read, and everything wrong in it and between its keys is told at once."""

import tomllib
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.errors import Problems
from ohmward.setup.bench import Bench, load_bench
from ohmward.terms.role import Role

SCANNED = """
format = 1
name = "depot bench"
bias_ceiling = "35 V"

[instrument.meter]
role = "impedance meter"
driver = "scpi-impedance-meter"
address = "TCPIP::192.0.2.10::5025::SOCKET"
serial_number = "S1"
calibration_due = 2027-01-31
cable = "1 m"

[instrument.relays]
role = "scanner"
driver = "scpi-scanner"
address = "TCPIP::192.0.2.11::5025::SOCKET"

[fixture]
loading = "scanner"

[[position]]
name = "1"
meter_channels = ["101", "201"]

[[position]]
name = 2
meter_channels = [102, 202]
"""


def read(tmp_path: Path, text: str) -> tuple[Bench | None, Problems]:
    path = tmp_path / "bench.toml"
    path.write_text(text, encoding="utf-8")
    problems = Problems()
    return load_bench(path, problems), problems


def told(tmp_path: Path, text: str) -> dict[str, str]:
    bench, problems = read(tmp_path, text)
    assert bench is None
    return {problem.key: problem.id for problem in problems}


def test_a_bench_as_a_person_writes_it(tmp_path: Path) -> None:
    bench, problems = read(tmp_path, SCANNED)
    assert not list(problems)
    assert bench is not None
    assert bench.path == tmp_path / "bench.toml"
    assert bench.bias_ceiling_v == 35.0
    meter = bench.of_role(Role.IMPEDANCE_METER)
    assert meter is not None
    assert (meter.cable_m, meter.serial_number) == (1.0, "S1")
    assert bench.name_of_role(Role.SCANNER) == "relays"
    assert bench.of_role(Role.THERMOMETER) is None
    second = bench.position("2")
    assert second is not None
    assert second.meter_channels == ("102", "202")
    assert bench.physical_path is None


def test_a_hand_loaded_bench_needs_no_scanner(tmp_path: Path) -> None:
    text = SCANNED.replace('loading = "scanner"', 'loading = "by hand"')
    table = tomllib.loads(text)
    assert table["fixture"]["loading"] == "by hand"
    found = told(tmp_path, text)
    assert found == {
        "position[1].meter_channels": "channels-without-scanner",
        "position[2].meter_channels": "channels-without-scanner",
    }


def test_everything_wrong_is_told_at_once(tmp_path: Path) -> None:
    text = """
    format = 1
    bias_ceiling = "40"
    ceiling = 3
    [instrument.meter]
    role = "impedance"
    driver = "scpi-impedance-meter"
    address = "TCPIP::192.0.2.10"
    cable = "1 kg"
    calibration_due = "soon"
    [instrument.room]
    role = "thermometer"
    driver = "scpi-thermometer"
    address = "TCPIP::192.0.2.11::5025::SOCKET"
    [instrument."room 2"]
    role = "thermometer"
    driver = "scpi-thermometer"
    address = "TCPIP0::192.0.2.11::5025::SOCKET"
    [fixture]
    loading = "hand"
    [[position]]
    name = "A"
    meter_channels = ["101", "201"]
    [[position]]
    name = "a"
    meter_channels = [101, 101]
    [[position]]
    """
    assert told(tmp_path, text) == {
        "name": "missing-key",
        "bias_ceiling": "wrong-unit-or-value",
        "ceiling": "unknown-key",
        "instrument.meter.role": "unknown-word",
        "instrument.meter.cable": "wrong-unit-or-value",
        "instrument.meter.calibration_due": "wrong-type",
        "instrument.room 2": "wrong-name",
        "instrument.room 2.role": "role-taken",
        "instrument.room 2.address": "address-taken",
        "fixture.loading": "unknown-word",
        "position[2].name": "duplicate-position",
        "position[2].meter_channels": "position-not-apart",
        "position[3].name": "missing-key",
    }


def test_a_scanner_and_channels_must_be_there_for_scanner_loading(tmp_path: Path) -> None:
    text = SCANNED.replace('role = "scanner"', 'role = "thermometer"')
    text = text.replace("meter_channels = [102, 202]", "")
    assert told(tmp_path, text) == {
        "fixture.loading": "scanner-missing",
        "position[2].meter_channels": "channels-missing",
    }


def test_an_address_may_be_shared_by_those_who_say_so(tmp_path: Path) -> None:
    same = SCANNED.replace("192.0.2.11", "192.0.2.10")
    assert told(tmp_path, same) == {"instrument.relays.address": "address-taken"}
    one = same.replace('driver = "scpi-scanner"', 'driver = "scpi-scanner"\nshares_link = true')
    assert told(tmp_path, one) == {"instrument.relays.address": "address-taken"}
    both = one.replace('serial_number = "S1"', "shares_link = true")
    bench, problems = read(tmp_path, both)
    assert not list(problems)
    assert bench is not None


def test_positions_that_close_each_other_are_refused(tmp_path: Path) -> None:
    text = SCANNED.replace("[102, 202]", "[101, 201, 301]")
    assert told(tmp_path, text) == {"position[2].meter_channels": "position-not-apart"}


def test_a_common_contact_is_no_connection_by_itself(tmp_path: Path) -> None:
    bench, _ = read(tmp_path, SCANNED.replace("[102, 202]", "[102, 201]"))
    assert bench is not None


def test_the_physical_file_stands_beside_the_bench(tmp_path: Path) -> None:
    text = SCANNED + '\n[simulation]\nphysical_file = "physics.toml"\n'
    assert told(tmp_path, text) == {"simulation.physical_file": "file-missing"}
    (tmp_path / "physics.toml").write_text("")
    bench, _ = read(tmp_path, text)
    assert bench is not None
    assert bench.physical_path == tmp_path / "physics.toml"


@pytest.mark.parametrize("text", ["", "format = 1", "format = 2\nname = 3", "instrument = 3"])
def test_a_file_that_is_hardly_a_bench(tmp_path: Path, text: str) -> None:
    assert told(tmp_path, text)


@given(st.data())
def test_any_change_to_a_bench_is_a_bench_or_problems(
    tmp_path_factory: pytest.TempPathFactory, data: st.DataObject
) -> None:
    lines = SCANNED.strip().splitlines()
    index = data.draw(st.integers(0, len(lines) - 1))
    change = data.draw(
        st.sampled_from(["", "x = 1", 'name = "2"', "[position]", "[[instrument]]", "role = 3"])
    )
    lines[index] = change
    folder = tmp_path_factory.mktemp("bench")
    bench, problems = read(folder, "\n".join(lines))
    assert (bench is None) == (len(problems) > 0)
