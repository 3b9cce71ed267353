"""A disk that takes no more: named, the bench at rest, what was committed is readable."""

from pathlib import Path

import pytest
from tests.crash.test_stopped import readings
from tests.run.program import Program
from tests.run.workbench import Served, Workbench, journal, sequence

pytestmark = [pytest.mark.processes, pytest.mark.slow]

LARGEST_FILE = 200_000
"""Enough for the inputs and a few dozen commits to the write-ahead log."""


def test_a_run(tmp_path: Path, program: Program) -> None:
    """RLIMIT_FSIZE refuses the journal's growth as a full disk does, without one."""
    workbench = Workbench(tmp_path)
    workbench.write("sequence.toml", sequence('bias = "5 V"', repeats="30"))
    out = tmp_path / "out"
    with Served(workbench) as served:
        running = program.start("run", *workbench.arguments(out), largest_file=LARGEST_FILE)
        ended = running.wait()
        assert ended.code == 1, ended.err
        assert str(out / "journal.sqlite") in ended.err
        assert "Traceback" not in ended.err
        assert served.at_rest()
        kept = journal(out)
        assert 0 < len(kept) == readings(out) < 3 * 4 * 30
        workbench.write("sequence.toml", sequence('bias = "5 V"', repeats="30"))
        ended = program.start("resume", str(out)).wait()  # somebody made room
        assert ended.code == 0, ended.err
    assert journal(out)[: len(kept)] == kept
    assert readings(out) == 3 * 4 * 30


def test_a_dry_run(tmp_path: Path, program: Program) -> None:
    workbench = Workbench(tmp_path)
    workbench.write("sequence.toml", sequence(repeats="2000"))
    out = tmp_path / "out"
    running = program.start(
        "dryrun", *workbench.arguments(out, "bench.toml"), largest_file=LARGEST_FILE
    )
    ended = running.wait()
    assert ended.code == 1, ended.err
    assert str(out / "journal.sqlite") in ended.err
    assert "Traceback" not in ended.err


def test_tables_that_do_not_fit(tmp_path: Path, program: Program) -> None:
    """Every reading is in the journal; the tables can be made when there is room again."""
    workbench = Workbench(tmp_path)
    workbench.write("sequence.toml", sequence(repeats="60"))
    out = workbench.dry_run("out")
    largest = (out / "impedance.csv").stat().st_size // 2
    running = program.start("resume", str(out), largest_file=largest)
    ended = running.wait()
    assert ended.code == 1, ended.err
    assert str(out) in ended.err
    assert "Traceback" not in ended.err
    ended = program.start("resume", str(out)).wait()
    assert ended.code == 0, ended.err
    assert readings(out) == 3 * 4 * 60
