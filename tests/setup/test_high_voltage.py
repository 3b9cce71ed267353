"""A bench's path of high voltage: what the safety rules need and the file lacks is told."""

from pathlib import Path

import pytest

from ohmward.errors import Problems
from ohmward.setup.bench import Bench, load_bench

BENCH = """
format = 1
name = "high bench"

[instrument.meter]
role = "impedance meter"
driver = "d"
address = "TCPIP::h::1::SOCKET"
[instrument.supply]
role = "high-voltage supply"
driver = "d"
address = "TCPIP::h::2::SOCKET"
[instrument.ammeter]
role = "current meter"
driver = "d"
address = "TCPIP::h::3::SOCKET"
[instrument.voltmeter]
role = "voltmeter"
driver = "d"
address = "TCPIP::h::4::SOCKET"
[instrument.relays]
role = "scanner"
driver = "d"
address = "TCPIP::h::5::SOCKET"
[instrument.lid]
role = "interlock"
driver = "d"
address = "TCPIP::h::6::SOCKET"

[fixture]
loading = "scanner"

[[position]]
name = "1"
meter_channels = [101, 201]

[high_voltage]
ceiling = "500 V"
current_ceiling = "10 mA"
supply_capacitance = "22 nF"
bleeder = "10 Mohm"
divider = "100 Mohm"
divider_ceiling = "1 kV"
current_meter_survives = "20 mA"
enclosure_interlock = true
supply = { channel = 301, relay = "vacuum" }
bypass = { channel = 302, relay = "reed", unpowered = "closed" }
watchdog = { kind = "supply timeout", time = "2 s" }

[high_voltage.relay.vacuum]
switch_voltage = "600 V"
switch_current = "0.5 A"
stand_off_voltage = "2 kV"
[high_voltage.relay.reed]
switch_voltage = "10 V"
switch_current = "10 mA"
stand_off_voltage = "1 kV"

[[high_voltage.position]]
name = "1"
connect = { channel = 401, relay = "vacuum" }
series = { resistance = "100 kohm", pulse = "5 J", power = "2 W" }
discharge = { channel = 501, relay = "vacuum", unpowered = "closed" }
discharge_resistor = { resistance = "10 kohm", pulse = "50 J" }
short = { channel = 601, relay = "vacuum" }
short_resistance = "0.1 ohm"
sense = [{ channel = 701, relay = "reed" }, { channel = 702, relay = "reed" }]
meter = [{ channel = 101, relay = "reed" }, { channel = 201, relay = "reed" }]
"""


def read(tmp_path: Path, text: str) -> tuple[Bench | None, dict[str, str]]:
    path = tmp_path / "bench.toml"
    path.write_text(text)
    problems = Problems()
    return load_bench(path, problems), {problem.key: problem.id for problem in problems}


def test_a_whole_path(tmp_path: Path) -> None:
    bench, problems = read(tmp_path, BENCH)
    assert not problems
    assert bench is not None
    path = bench.high_voltage
    assert path is not None
    assert path.lacks_for_unattended() == ()
    place = path.at("1")
    assert place is not None
    assert path.at("2") is None
    assert place.series.resistance_ohm == 100e3
    assert place.discharge.made_unpowered
    assert path.relay_of(place.sense[0]).switch_v == 10.0
    assert [contact.channel for _, contact in path.contacts()][:3] == ["301", "302", "401"]


@pytest.mark.parametrize(
    ("lost", "lacking"),
    [
        ('watchdog = { kind = "supply timeout", time = "2 s" }', "watchdog"),
        ("enclosure_interlock = true", "interlock"),
        (', relay = "vacuum", unpowered = "closed"', "discharge"),
    ],
)
def test_what_a_bench_lacks_to_be_left_alone(tmp_path: Path, lost: str, lacking: str) -> None:
    bench, _ = read(tmp_path, BENCH.replace(lost, ', relay = "vacuum"' if "relay" in lost else ""))
    assert bench is not None
    assert bench.high_voltage is not None
    (lack,) = bench.high_voltage.lacks_for_unattended()
    assert lacking in lack


@pytest.mark.parametrize(
    ("old", "new", "expected"),
    [
        ('role = "high-voltage supply"', 'role = "bias source"', {"instrument": "role-missing"}),
        ('role = "voltmeter"', 'role = "thermometer"', {"instrument": "role-missing"}),
        ('role = "interlock"', 'role = "bias source"', {"instrument": "role-missing"}),
        (
            'bypass = { channel = 302, relay = "reed", unpowered = "closed" }',
            "",
            {"high_voltage.bypass": "bypass-missing"},
        ),
        (
            'current_meter_survives = "20 mA"',
            "",
            {"high_voltage.current_meter_survives": "rating-missing"},
        ),
        (
            'divider_ceiling = "1 kV"',
            'divider_ceiling = "400 V"',
            {"high_voltage.divider_ceiling": "divider-too-weak"},
        ),
        (
            'stand_off_voltage = "2 kV"',
            'stand_off_voltage = "400 V"',
            {
                "high_voltage.supply.relay": "relay-too-weak",
                "high_voltage.position[1].connect.relay": "relay-too-weak",
                "high_voltage.position[1].discharge.relay": "relay-too-weak",
                "high_voltage.position[1].short.relay": "relay-too-weak",
            },
        ),
        (
            'channel = 401, relay = "vacuum"',
            'channel = 401, relay = "vacum"',
            {"high_voltage.position[1].connect.relay": "unknown-relay"},
        ),
        (
            "channel = 601",
            "channel = 501",
            {"high_voltage.position[1].short.channel": "channel-taken"},
        ),
        (
            "channel = 702",
            "channel = 701",
            {"high_voltage.position[1].sense[2].channel": "channel-taken"},
        ),
        (
            ', { channel = 201, relay = "reed" }]',
            "]",
            {
                "high_voltage.position[1].meter": "meter-not-apart",
            },
        ),
        (
            'sense = [{ channel = 701, relay = "reed" }, { channel = 702, relay = "reed" }]',
            "sense = []",
            {"high_voltage.position[1].sense": "empty-list"},
        ),
        (
            ', pulse = "50 J"',
            "",
            {"high_voltage.position[1].discharge_resistor.pulse": "missing-key"},
        ),
        (
            'switch_voltage = "600 V"',
            "",
            {"high_voltage.relay.vacuum.switch_voltage": "missing-key"},
        ),
    ],
)
def test_what_is_wrong_or_missing_in_the_path(
    tmp_path: Path, old: str, new: str, expected: dict[str, str]
) -> None:
    assert old in BENCH
    bench, problems = read(tmp_path, BENCH.replace(old, new))
    assert bench is None
    assert expected.items() <= problems.items()


def test_a_position_that_the_fixture_does_not_have(tmp_path: Path) -> None:
    head, _, tail = BENCH.rpartition('name = "1"')
    bench, problems = read(tmp_path, f'{head}name = "7"{tail}')
    assert bench is None
    assert problems == {"high_voltage.position[1].name": "unknown-position"}


def test_discharge_and_short_may_serve_several_positions(tmp_path: Path) -> None:
    second = BENCH[BENCH.index("[[high_voltage.position]]") :].replace('name = "1"', 'name = "2"')
    for old, new in (
        ("401", "402"),
        ("701", "711"),
        ("702", "712"),
        ("101", "102"),
        ("201", "202"),
    ):
        second = second.replace(f"channel = {old}", f"channel = {new}")
    place = '[[position]]\nname = "2"\nmeter_channels = [102, 202]\n\n[high_voltage]'
    bench, problems = read(tmp_path, BENCH.replace("[high_voltage]", place, 1) + second)
    assert not problems
    assert bench is not None
