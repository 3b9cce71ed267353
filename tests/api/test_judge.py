"""Deciding a run again: the same limits change nothing, others change what they must."""

import csv
import hashlib
import io
import shutil
from pathlib import Path

import pytest
from tests.api.clip_bench import SEQUENCE, write_bench

from ohmward import api
from ohmward.api.running import dry_run
from ohmward.errors import BadInput
from ohmward.terms.decision import Decision

REQUIRED = SEQUENCE[SEQUENCE.index("[compensation]") : SEQUENCE.index("[[stage]]")]
PLAIN = SEQUENCE.replace(REQUIRED, "")


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A compensated run whose bench is gone; its readings are of the parts behind the clips."""
    bench = write_bench(tmp_path_factory.mktemp("bench") / "here")
    api.compensate(
        bench=bench / "bench.toml",
        sequence=bench / "sequence.toml",
        out=bench / "fixture.toml",
        dry=True,
    )
    prepared = api.prepare(
        bench / "sequence.toml",
        bench=bench / "bench.toml",
        parts=bench / "parts.csv",
        compensation=bench / "fixture.toml",
    )
    run = tmp_path_factory.mktemp("runs") / "run"
    dry_run(prepared, out=run)
    shutil.rmtree(bench)
    return run


def limits(folder: Path, text: str) -> Path:
    path = folder / "limits.toml"
    path.write_text(text, "utf-8")
    return path


def digest(folder: Path) -> dict[str, str]:
    return {
        str(path.relative_to(folder)): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def test_the_same_limits_decide_the_same_and_leave_the_folder_alone(
    folder: Path, tmp_path: Path
) -> None:
    before = digest(folder)
    found = api.judge_again(folder, limits=limits(tmp_path, SEQUENCE), out=tmp_path / "again.csv")
    assert found.changes == ()
    assert all(then is now for _, then, now in found.parts)
    assert digest(folder) == before
    # every row decided again is the row that was decided then, to the last digit
    assert (tmp_path / "again.csv").read_bytes() == (folder / "results.csv").read_bytes()
    assert (tmp_path / "again.csv-metadata.json").exists()


def test_tighter_limits_show_what_changes_and_why(folder: Path, tmp_path: Path) -> None:
    tight = SEQUENCE.replace('"-20 %"', '"+5 %"', 1)
    found = api.judge_again(folder, limits=limits(tmp_path, tight))
    (change,) = found.changes
    assert (change.part_id, change.quantity) == ("C", "cp_f")
    assert (change.before, change.after) == (Decision.ACCEPT, Decision.REJECT)
    assert "100 kHz" in change.condition
    assert "105 pF" in change.reason
    assert {part: now for part, _, now in found.parts}["C"] is Decision.REJECT


def test_a_stricter_rule_alone_changes_a_decision(folder: Path, tmp_path: Path) -> None:
    (row,) = (
        row
        for row in csv.DictReader(io.StringIO((folder / "results.csv").read_text("utf-8")))
        if row["quantity"] == "cp_f"
    )
    # a limit 1.5 U above the value: accepted with a guard band of U, undecided with one of 2U
    edge = float(row["value"]) + 1.5 * float(row["u_expanded"])
    text = SEQUENCE.replace('max = "+20 %"', f'max = "{edge!r} F"', 1)
    near = api.judge_again(folder, limits=limits(tmp_path, text))
    assert near.changes == ()
    wide = text.replace("[[stage]]", "[decision]\nguard = 2\n\n[[stage]]", 1)
    (change,) = api.judge_again(folder, limits=limits(tmp_path, wide)).changes
    assert (change.before, change.after) == (Decision.ACCEPT, Decision.UNDECIDED)


def test_limits_that_are_gone_or_new_are_shown(folder: Path, tmp_path: Path) -> None:
    first = PLAIN.rindex("[[limit]]")
    new = '[[limit]]\nstage = "resistor"\nquantity = "phase_rad"\nmax = "1 rad"\nsource = "new"\n'
    found = api.judge_again(folder, limits=limits(tmp_path, PLAIN[:first] + new))
    assert {(change.quantity, change.before, change.after) for change in found.changes} == {
        ("rs_ohm", Decision.ACCEPT, None),
        ("phase_rad", None, Decision.ACCEPT),
    }


def test_limits_on_what_was_not_measured_are_refused(folder: Path, tmp_path: Path) -> None:
    text = SEQUENCE.replace('at = { frequency = "100 kHz" }', 'at = { frequency = "5 kHz" }', 1)
    with pytest.raises(BadInput) as caught:
        api.judge_again(folder, limits=limits(tmp_path, text))
    assert {problem.id for problem in caught.value.problems} == {"limit-not-measured"}


@pytest.mark.parametrize("where", ["run", "there"])
def test_nothing_is_written_over_or_into_the_run(folder: Path, tmp_path: Path, where: str) -> None:
    there = tmp_path / "there.csv"
    there.write_text("mine")
    out = folder / "again.csv" if where == "run" else there
    with pytest.raises(BadInput, match="output-unusable"):
        api.judge_again(folder, limits=limits(tmp_path, SEQUENCE), out=out)
    assert there.read_text() == "mine"
    assert not (folder / "again.csv").exists()


def test_a_run_without_its_results_is_told(folder: Path, tmp_path: Path) -> None:
    copy = tmp_path / "copy"
    shutil.copytree(folder, copy)
    (copy / "results.csv").unlink()
    with pytest.raises(BadInput, match="results-missing"):
        api.judge_again(copy, limits=limits(tmp_path, SEQUENCE))
