"""A link that is pulled: back in time and the run goes on, else exit 4; nothing is lost."""

import threading
from collections.abc import Callable
from pathlib import Path

import pytest
from tests.crash.test_stopped import readings
from tests.run.program import Program
from tests.run.workbench import Served, Workbench, decisions, journal, places, sequence, table

from ohmward.sim.faults import Fault

pytestmark = [pytest.mark.processes, pytest.mark.slow]

SHORT = '[link]\nreopen_budget = "0.6 s"\ntimeout = "1 s"\n'
PATIENT = '[link]\nreopen_budget = "20 s"\ntimeout = "1 s"\n'
ENOUGH = 8
"""Committed readings after which the link is pulled: the first part is in work or done."""


def job(
    folder: Path, meter: str, scanner: str = "", *, bias: str = "0 V", repeats: str = "8"
) -> Workbench:
    workbench = Workbench(folder)
    workbench.driver(meter)
    if scanner:
        path = workbench.write("scanner.toml", f'format = 1\nextends = "scpi-scanner"\n{scanner}')
        text = (folder / "bench.toml").read_text().replace('"scpi-scanner"', f'"{path}"')
        text = text.replace('"scpi-thermometer"', f'"{folder / "room.toml"}"')
        workbench.write("room.toml", f'format = 1\nextends = "scpi-thermometer"\n{scanner}')
        workbench.write("bench.toml", text)
    workbench.write("sequence.toml", sequence(f'bias = "{bias}"', repeats=repeats))
    return workbench


def what_is_there_is_whole(out: Path) -> None:
    assert len(table(out, "impedance")) == readings(out) >= ENOUGH
    assert {path.name for path in out.glob("journal*")} == {"journal.sqlite"}
    assert (out / "manifest.json").exists()


def test_a_bench_that_is_gone_ends_the_run_with_4(tmp_path: Path, program: Program) -> None:
    workbench = job(tmp_path, SHORT, SHORT)
    out = tmp_path / "out"
    served = Served(workbench)
    with served:
        running = program.start("run", *workbench.arguments(out))
        running.until(lambda: readings(out) >= ENOUGH)
    ended = running.wait()
    assert ended.code == 4, ended.err
    assert any(address in ended.err for address in served.addresses.values())
    assert "relays could not be opened" in ended.err  # said, though nothing can be live
    what_is_there_is_whole(out)
    kept = journal(out)
    with served:  # the next morning
        ended = program.start("resume", str(out)).wait()
        assert ended.code == 0, ended.err
        assert served.at_rest()
    assert journal(out)[: len(kept)] == kept
    numbered = [row["repeat"] for row in table(out, "impedance")]
    assert len(numbered) == 3 * 4 * 8


def test_a_bench_that_is_gone_with_its_bias_on_ends_with_5(
    tmp_path: Path, program: Program
) -> None:
    # so many readings that the link is pulled within the first part, and not between two
    workbench = job(tmp_path, SHORT, SHORT, bias="10 V", repeats="80")
    out = tmp_path / "out"
    with Served(workbench):
        running = program.start("run", *workbench.arguments(out))
        running.until(lambda: readings(out) >= ENOUGH)
    ended = running.wait()
    assert ended.code == 5, ended.err
    assert "meter's bias may still be on, switch it off by hand" in ended.err
    what_is_there_is_whole(out)


def test_a_bench_that_was_switched_off_comes_back(tmp_path: Path, program: Program) -> None:
    """Its relays fell open meanwhile: what was read since they were seen closed cannot count."""
    workbench = job(tmp_path, PATIENT, PATIENT)
    out = tmp_path / "out"
    served = Served(workbench)
    with served:
        running = program.start("run", *workbench.arguments(out))
        running.until(lambda: readings(out) >= ENOUGH)
    with served:
        ended = running.wait()
        assert ended.code == 0, ended.err
        assert served.at_rest()
    rows = table(out, "impedance")
    assert len(rows) == 3 * 4 * 8
    lost = [row for row in table(out, "events") if row["kind"] == "contact-lost"]
    assert len(lost) == 1
    statuses = {row["status"] for row in rows if row["part_id"] == lost[0]["part_id"]}
    assert "disconnected" in statuses
    for row, other in zip(rows, table(workbench.dry_run(), "impedance"), strict=True):
        if row["status"] == "ok":  # no open contact was taken for a part
            z, wanted = impedance(row), impedance(other)
            assert abs(z - wanted) < 0.01 * abs(wanted)


def impedance(row: dict[str, str]) -> complex:
    return complex(float(row["resistance_ohm"]), float(row["reactance_ohm"]))


def test_a_link_that_was_pulled_and_put_back(tmp_path: Path, program: Program) -> None:
    """The instruments were on all the time: the relays are seen closed, so everything counts."""
    workbench = job(tmp_path, PATIENT, PATIENT)
    out = tmp_path / "out"
    served = Served(workbench, power_cycle=False)
    with served:
        running = program.start("run", *workbench.arguments(out))
        running.until(lambda: readings(out) >= ENOUGH)
    with served:
        ended = running.wait()
        assert ended.code == 0, ended.err
        assert served.at_rest()
    assert not [row for row in table(out, "events") if row["kind"] == "contact-lost"]
    bad = [row for row in table(out, "impedance") if row["status"] != "ok"]
    assert len(bad) <= 2
    assert {row["status"] for row in bad} <= {"timeout", "stale"}
    assert decisions(out) == decisions(workbench.dry_run())


def test_another_instrument_after_the_link_came_back(tmp_path: Path, program: Program) -> None:
    workbench = job(tmp_path, PATIENT, SHORT)
    out = tmp_path / "out"
    served = Served(workbench)
    with served:
        running = program.start("run", *workbench.arguments(out))
        running.until(lambda: readings(out) >= ENOUGH)
    served.be_another(meter="OTHER-1")
    heard: list[bytes] = []
    with served:
        listen(served, "meter", heard.append)
        ended = running.wait()
    assert ended.code == 4, ended.err
    assert "OTHER-1" in ended.err
    assert set(b"".join(heard).splitlines()) <= {b"*IDN?"}
    what_is_there_is_whole(out)


def listen(served: Served, name: str, tell: Callable[[bytes], None]) -> None:
    """Hear everything that an instrument is told from now on."""
    device = served.simulated.named[name]
    receive = device.receive
    lock = threading.Lock()

    def hear(data: bytes, now_s: float) -> None:
        with lock:
            tell(data)
        receive(data, now_s)

    device.receive = hear  # type: ignore[method-assign]


def test_the_scanner_alone_is_switched_off_and_on(tmp_path: Path, program: Program) -> None:
    """The meter notices nothing; the part was not connected all the same."""
    workbench = job(tmp_path, PATIENT, PATIENT)
    out = tmp_path / "out"
    with Served(workbench) as served:
        running = program.start("run", *workbench.arguments(out))
        running.until(lambda: readings(out) >= ENOUGH)
        served.ask("switch", "ROUT:OPEN:ALL;*OPC?")
        ended = running.wait()
    assert ended.code == 0, ended.err
    rows = table(out, "impedance")
    lost = [row for row in table(out, "events") if row["kind"] == "contact-lost"]
    assert len(lost) == 1
    of_part = [row for row in rows if row["part_id"] == lost[0]["part_id"]]
    # into open contacts a meter reads an overload, or a stray capacitance that looks like a part
    assert {row["status"] for row in of_part} <= {"disconnected", "overload", "unbalanced"}
    assert all(row["resistance_ohm"] == "" for row in of_part)
    for row in table(out, "results"):
        decided = row["part_id"] == lost[0]["part_id"] and row["limit_source"]
        assert not decided or row["decision"] == "invalid"
    others = [row["status"] for row in rows if row["part_id"] != lost[0]["part_id"]]
    assert set(others) == {"ok"}


def test_a_silence_is_kept_as_a_timeout(tmp_path: Path, program: Program) -> None:
    workbench = job(tmp_path, PATIENT, PATIENT)
    out = tmp_path / "out"
    with Served(workbench, faulty=("meter",)) as served:
        served.layer("meter").inject(Fault(kind="silent", matching=b"READ?", after=10))
        ended = program.start("run", *workbench.arguments(out)).wait()
    assert ended.code == 0, ended.err
    found = [(row["part_id"], row["status"]) for row in table(out, "impedance")]
    assert found.count(("C1", "timeout")) == 1
    assert [status for _, status in found].count("ok") == len(found) - 1
    dry = workbench.dry_run()
    assert [place[:-1] for place in places(out)] == [place[:-1] for place in places(dry)]
    assert decisions(out) == decisions(dry)


@pytest.mark.parametrize("asked", range(9))
def test_a_scanner_that_drops_its_link_at_any_step(tmp_path: Path, asked: int) -> None:
    """At the start and in the first lease; whichever read-back is cut off, the run goes on."""
    workbench = job(tmp_path, PATIENT, PATIENT)
    workbench.write("sequence.toml", sequence(repeats="1"))
    with Served(workbench, faulty=("switch",)) as served:
        read_back = Fault(kind="disconnect", matching=b"CLOS:STAT?", after=asked, delay_s=0.2)
        served.layer("switch").inject(read_back)
        out = workbench.run()
        assert served.layer("switch").struck
        assert served.at_rest()
    dry = workbench.dry_run()
    assert places(out) == places(dry)
    assert decisions(out) == decisions(dry)
