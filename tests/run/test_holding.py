"""A stage under voltage on the simulated bench: what is in the journal, and in which order."""

import json
import sqlite3
from pathlib import Path

import pytest
from tests.contracts.high_voltage_table import STAGES

from ohmward import api
from ohmward.api.preparing import Prepared
from ohmward.run.recorder import Recorder

HEAD = 'format = 1\nname = "n"\npurpose = "p"\nfollows = "nobody"\nkinds = "capacitor"\n'


def job(folder: Path, stage: str) -> Prepared:
    lot, keys, limit = STAGES[stage]
    (folder / "s.toml").write_text(f'{HEAD}[[stage]]\nname = "held"\n{keys}\n{limit}', "utf-8")
    (folder / "p.csv").write_text(lot, "utf-8")
    return api.prepare(folder / "s.toml", bench="depot-retest-bench", parts=folder / "p.csv")


def ask(folder: Path, statement: str) -> list[tuple[object, ...]]:
    with sqlite3.connect(folder / "journal.sqlite") as connection:
        return list(connection.execute(statement))


def test_every_observation_is_in_the_journal_before_it_is_answered(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """While the warden waits for the answer, another connection finds the reading already."""
    out, seen = tmp_path / "run", []
    keep = Recorder.leakage

    async def kept(self: Recorder, *given: object, **more: object) -> None:
        await keep(self, *given, **more)  # type: ignore[arg-type]
        seen.append(ask(out, "SELECT count(*) FROM leakage")[0][0])

    monkeypatch.setattr(Recorder, "leakage", kept)
    api.dry_run(job(tmp_path, "leakage"), out=out, seed=1)
    assert seen == list(range(1, len(seen) + 1))
    assert len(seen) == 2 * 12


def test_a_hold_is_kept_with_what_was_asked_and_how_it_went(tmp_path: Path) -> None:
    out = tmp_path / "run"
    api.dry_run(job(tmp_path, "leakage"), out=out, seed=1)
    rows = ask(out, "SELECT stage, hold, asked, held FROM hold ORDER BY stage")
    assert [row[:2] for row in rows] == [(1, 1), (2, 1)]
    asked, held = json.loads(str(rows[0][2])), json.loads(str(rows[0][3]))
    assert (asked["voltage_v"], asked["soak_s"]) == (400.0, 60.0)
    assert held["reached"] is held["bypass_shown"] is True
    assert held["connection"] == "agrees"
    temperatures = ask(out, "SELECT DISTINCT temperature_c IS NULL FROM leakage")
    assert temperatures == [(0,)]


def test_a_part_that_breaks_down_stops_and_the_lot_goes_on(tmp_path: Path) -> None:
    out = tmp_path / "run"
    api.dry_run(job(tmp_path, "leakage"), out=out, seed=1, faults=["C1=short@held+45s"])
    states = ask(out, "SELECT part_id, state FROM stage ORDER BY number")
    assert states == [("C1", "ended"), ("C2", "ended")]
    stopped = ask(out, "SELECT part_id FROM event WHERE kind = 'part-stopped' AND stage = 'held'")
    assert ("C1",) in stopped
    assert ("C2",) not in stopped


def test_a_reform_raises_the_voltage_only_in_order(tmp_path: Path) -> None:
    out = tmp_path / "run"
    api.dry_run(job(tmp_path, "reform"), out=out, seed=1)
    volts = [row[0] for row in ask(out, "SELECT voltage_set_v FROM leakage WHERE stage = 1")]
    assert volts == sorted(volts)  # type: ignore[type-var]
    assert set(volts) == {200.0, 400.0}
    first = ask(out, "SELECT max(since_voltage_s) FROM leakage WHERE voltage_set_v = 200")
    assert float(str(first[0][0])) >= 20.0
