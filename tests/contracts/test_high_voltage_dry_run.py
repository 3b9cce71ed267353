"""What goes wrong under voltage in a dry run: judged by the part's true voltage and contacts.

The table is printed with ``pytest -s``. Nothing that is live may be called proven, and nothing
that was not measured may be accepted.
"""

import csv
from pathlib import Path

import pytest
from tests.contracts.high_voltage_table import STAGES, Cell, cell

from ohmward import api
from ohmward.errors import BadInput, SafetyTrip

# what takes the measurement away, or the part, or the voltage: no decision in the part's favour
SPOILS = frozenset(
    (
        *("short", "open", "contact-lost", "feed-broken", "sense-broken", "bypass-stuck"),
        *("supply-trips", "supply-ignores-off", "interlock-opens", "discharge-open"),
        "short-open",
    )
)
FEW = ("", "short", "open", "contact-lost")


def assert_ended_as_it_should(found: Cell) -> None:
    print(found)
    assert found.ending in ("finished", "tripped", "not proven"), found
    if found.proven:
        assert found.truly_dead, found
    if found.fault in SPOILS:
        assert found.decisions["C1"] != "accept", found
    if not found.fault:
        assert found.ending == "finished", found
        assert set(found.decisions.values()) == {"accept"}, found
    if found.fault == "leak" and found.stage == "leakage":
        assert found.decisions["C1"] == "reject", found
    assert "hot switched" not in found.happened or found.fault == "supply-ignores-off", found
    assert "current meter destroyed" not in found.happened, found
    assert "impedance meter struck" not in found.happened, found


@pytest.mark.parametrize("fault", FEW)
def test_a_leakage_stage_ends_as_it_should(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, fault: str
) -> None:
    assert_ended_as_it_should(cell(fault, "leakage", tmp_path, monkeypatch))


@pytest.mark.slow
@pytest.mark.parametrize("stage", STAGES)
def test_every_fault_in_every_stage_ends_as_it_should(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, stage: str
) -> None:
    for fault in ("", *api.fault_kinds()):
        assert_ended_as_it_should(cell(fault, stage, tmp_path, monkeypatch))


def rows(folder: Path, table: str) -> list[dict[str, str]]:
    with (folder / f"{table}.csv").open(encoding="utf-8") as stream:
        return list(csv.DictReader(stream))


def job(folder: Path, stage: str) -> api.Prepared:
    lot, keys, limit = STAGES[stage]
    head = 'format = 1\nname = "n"\npurpose = "p"\nfollows = "nobody"\nkinds = "capacitor"\n'
    (folder / "s.toml").write_text(f'{head}[[stage]]\nname = "held"\n{keys}\n{limit}', "utf-8")
    (folder / "p.csv").write_text(lot, "utf-8")
    return api.prepare(folder / "s.toml", bench="depot-retest-bench", parts=folder / "p.csv")


def test_a_stage_under_voltage_begins_anew_when_a_run_is_taken_up_again(tmp_path: Path) -> None:
    prepared = job(tmp_path, "leakage")
    whole, broken = tmp_path / "whole", tmp_path / "broken"
    api.dry_run(prepared, out=whole, seed=1)
    with pytest.raises(SafetyTrip):
        api.dry_run(prepared, out=broken, seed=1, faults=["C2=bypass-stuck@held+45s"])
    cut = [row for row in rows(broken, "leakage") if row["part_id"] == "C2"]
    api.resume(broken)
    again = [row for row in rows(broken, "leakage") if row["part_id"] == "C2"]
    first = [row for row in rows(whole, "leakage") if row["part_id"] == "C2"]
    assert 0 < len(cut) < len(again) == len(first)
    kept = ("part_id", "quantity", "decision", "limit_max")
    assert [[row[k] for k in kept] for row in rows(broken, "results")] == [
        [row[k] for k in kept] for row in rows(whole, "results")
    ]


def test_what_is_read_is_what_truly_flows(tmp_path: Path) -> None:
    """The value lies within twice its expanded uncertainty of the simulated part's current."""
    prepared = job(tmp_path, "leakage")
    api.dry_run(prepared, out=tmp_path / "run", seed=3)
    results, truths = rows(tmp_path / "run", "results"), rows(tmp_path / "run", "truth")
    assert len(results) == len(truths) == 2
    for row, truth in zip(results, truths, strict=True):
        apart = abs(float(row["value"]) - float(truth["true_value"]))
        assert apart <= 2 * float(row["u_expanded"])
        assert truth["fault"] == ""


def test_a_real_bench_is_not_energised(tmp_path: Path) -> None:
    prepared = job(tmp_path, "leakage")
    with pytest.raises(BadInput) as caught:
        api.run(prepared, out=tmp_path / "run")
    assert caught.value.exit_code == 2
    assert {problem.id for problem in caught.value.problems} == {"stage-energises"}
    assert not (tmp_path / "run").exists()


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("C1", "PART=KIND@STAGE+TIME"),
        ("C1=nothing@held+1s", "--faults"),
        ("C9=short@held+1s", "a part of this lot"),
        ("C1=short@elsewhere+1s", "a stage of C1"),
        ("C1=short@held+1", "unit"),
    ],
)
def test_a_fault_that_there_is_not_is_refused(tmp_path: Path, text: str, expected: str) -> None:
    prepared = job(tmp_path, "leakage")
    with pytest.raises(BadInput) as caught:
        api.dry_run(prepared, out=tmp_path / "run", faults=[text])
    assert expected in str(caught.value)
    assert not (tmp_path / "run").exists()


def test_the_same_faults_give_the_same_bytes(tmp_path: Path) -> None:
    prepared = job(tmp_path, "proof")
    asked = ["C1=short@held+30s"]
    for name in ("one", "two"):
        api.dry_run(prepared, out=tmp_path / name, seed=2, faults=asked)
    for table in ("results", "leakage", "events", "truth"):
        one, two = (tmp_path / name / f"{table}.csv" for name in ("one", "two"))
        assert one.read_bytes() == two.read_bytes()
    assert {row["part_id"]: row["decision"] for row in rows(tmp_path / "one", "results")} == {
        "C1": "reject",
        "C2": "accept",
    }
