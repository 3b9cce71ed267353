"""Every instrument of a bench gets its driver, or the bench file is told what is wrong."""

from pathlib import Path

from ohmward.errors import Problems
from ohmward.setup.bench import load_bench
from ohmward.setup.bench_drivers import load_drivers
from ohmward.setup.resources import shipped
from ohmward.terms.role import Role


def test_the_depot_bench_has_drivers_for_its_roles() -> None:
    problems = Problems()
    bench = load_bench(shipped("simulators") / "depot-bench.toml", problems)
    assert bench is not None, list(problems)
    drivers = load_drivers(bench, problems)
    assert not list(problems)
    assert drivers is not None
    assert {name: driver.role for name, driver in drivers.items()} == {
        name: instrument.role for name, instrument in bench.instruments.items()
    }


def test_what_leads_nowhere_or_elsewhere_is_told_by_the_bench(tmp_path: Path) -> None:
    path = tmp_path / "bench.toml"
    path.write_text(
        """
        format = 1
        name = "x"
        [instrument.meter]
        role = "impedance meter"
        driver = "scpi-impedance-metre"
        address = "TCPIP::h::1::SOCKET"
        [instrument.room]
        role = "thermometer"
        driver = "mine/room.toml"
        address = "TCPIP::h::2::SOCKET"
        [instrument.relays]
        role = "scanner"
        driver = "scpi-thermometer"
        address = "TCPIP::h::3::SOCKET"
        [fixture]
        loading = "by hand"
        [[position]]
        name = "1"
        """
    )
    problems = Problems()
    bench = load_bench(path, problems)
    assert bench is not None, list(problems)
    assert bench.of_role(Role.SCANNER) is not None
    assert load_drivers(bench, problems) is None
    assert {problem.key: problem.id for problem in problems} == {
        "instrument.meter.driver": "unknown-driver",
        "instrument.room.driver": "unknown-driver",
        "instrument.relays.driver": "driver-of-another-role",
    }
    assert "'scpi-impedance-meter'" in next(iter(problems)).expected
