"""Signals end a run in order: exit 130, the bench at rest, tables of what was measured."""

import signal
from pathlib import Path

import pytest
from tests.run.program import Ended, Program, Running
from tests.run.workbench import LOT, Served, Workbench, decisions, journal, places, sequence, table

from ohmward.sim.faults import Fault

pytestmark = [pytest.mark.processes, pytest.mark.slow]

TWICE = (signal.SIGINT, signal.SIGINT)
LONG_DRY = sequence(frequency='"1 kHz"', repeats="5000", closure="false")


def readings(out: Path) -> int:
    """How many readings are committed by now."""
    if not (out / "journal.sqlite").exists():
        return 0
    if not journal(out, "SELECT 1 FROM sqlite_master WHERE name = 'impedance'"):
        return 0
    return int(journal(out, "SELECT count(*) FROM impedance")[0][0])


def stop(running: Running, *signals: int) -> Ended:
    for number in signals:
        running.signal(number)
    return running.wait()


def whole(out: Path) -> None:
    """The folder holds the tables of what was measured and a journal that copies whole."""
    rows = table(out, "impedance")
    assert len(rows) == readings(out) > 0
    assert {path.name for path in out.glob("journal*")} == {"journal.sqlite"}
    assert {"results.csv", "events.csv", "manifest.json"} <= {path.name for path in out.iterdir()}
    kinds = [row["kind"] for row in table(out, "events")]
    assert kinds[-3:] == ["stage-stopped", "made-safe", "stopped"]
    assert journal(out, "SELECT value FROM run WHERE key = 'state'") == [("stopped",)]


@pytest.mark.parametrize("signals", [(signal.SIGINT,), (signal.SIGTERM,), TWICE], ids=str)
def test_a_run(tmp_path: Path, program: Program, signals: tuple[int, ...]) -> None:
    workbench = Workbench(tmp_path)
    # long enough to be caught in the middle, with a bias that must not stay on
    text = sequence('bias = "5 V"', repeats="12")
    workbench.write("sequence.toml", text)
    out = tmp_path / "out"
    with Served(workbench) as served:
        running = program.start("run", *workbench.arguments(out))
        running.until(lambda: readings(out) > 5)
        ended = stop(running, *signals)
        assert ended.code == 130, ended.err
        assert f"stopped by {signal.Signals(signals[0]).name}" in ended.err
        assert served.at_rest()
        whole(out)
        before = journal(out)
        assert len(before) < 3 * 4 * 12
        ended = program.start("resume", str(out)).wait()
        assert ended.code == 0, ended.err
        assert served.at_rest()
    undisturbed = workbench.dry_run("undisturbed")
    assert journal(out)[: len(before)] == before
    assert places(out) == places(undisturbed)
    assert decisions(out) == decisions(undisturbed)


@pytest.mark.parametrize("signals", [(signal.SIGTERM,), TWICE], ids=str)
def test_a_dry_run(tmp_path: Path, program: Program, signals: tuple[int, ...]) -> None:
    workbench = Workbench(tmp_path)
    workbench.write("sequence.toml", LONG_DRY)
    workbench.write("parts.csv", "".join(LOT.splitlines(keepends=True)[:2]))
    out = tmp_path / "out"
    running = program.start("dryrun", *workbench.arguments(out, "bench.toml"))
    running.until(lambda: readings(out) > 0)
    ended = stop(running, *signals)
    assert ended.code == 130, ended.err
    whole(out)
    taken = readings(out)
    assert taken < 5000
    before = journal(out)
    ended = program.start("resume", str(out)).wait()
    assert ended.code == 0, ended.err
    assert journal(out)[:taken] == before
    assert [row["repeat"] for row in table(out, "impedance")] == [str(n) for n in range(5000)]
    assert len(table(out, "truth")) == len(table(out, "results")) > 0


def test_a_signal_while_the_bench_is_opened(tmp_path: Path, program: Program) -> None:
    """Nobody waits for an instrument that does not answer after having asked to stop."""
    workbench = Workbench(tmp_path)
    with Served(workbench, faulty=("switch",)) as served:
        served.layer("switch").inject(Fault(kind="silent", times=100))
        out = tmp_path / "out"
        running = program.start("run", *workbench.arguments(out))
        running.until(lambda: bool(served.layer("switch").struck))
        ended = stop(running, signal.SIGINT)
    assert ended.code == 130, ended.err
    assert table(out, "impedance") == []


def test_what_is_to_be_ignored_stays_ignored(tmp_path: Path, program: Program) -> None:
    """As under nohup: the terminal may close."""
    workbench = Workbench(tmp_path)
    out = tmp_path / "out"
    with Served(workbench) as served:
        running = program.start(
            "run", *workbench.arguments(out), ignored=(signal.SIGHUP, signal.SIGINT)
        )
        running.until(lambda: readings(out) > 2)
        ended = stop(running, signal.SIGHUP, signal.SIGINT)
        assert served.at_rest()
    assert ended.code == 0, ended.err
    assert table(out, "events")[-1]["kind"] == "made-safe"
