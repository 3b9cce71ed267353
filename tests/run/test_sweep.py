"""The settle rule, the dwell and the interval in virtual time; settings that are not taken."""

import itertools
from pathlib import Path

import pytest
from tests.run.workbench import Served, Workbench, journal, sequence, table

from ohmward.sim.faults import Fault

MICROSECOND = 1e-6
READING_S = 0.010
"""A reading with the short integration, once the meter has settled (its protocol says so)."""
SETTING_S = 0.150
"""Setting a point and settling take less than twice this."""


def elapsed(folder: Path) -> list[float]:
    return [float(row["elapsed_s"]) for row in table(folder, "impedance")]


def points_of_first_part(folder: Path) -> list[list[float]]:
    """Elapsed times of the first part's readings, point by point."""
    rows = [row for row in table(folder, "impedance") if row["part_id"] == "C1"]
    found: list[list[float]] = []
    for row in rows:
        if row["repeat"] == "0":
            found.append([])
        found[-1].append(float(row["elapsed_s"]))
    return found


def test_the_interval_is_kept_from_beginning_to_beginning(tmp_path: Path) -> None:
    """A minute is a minute, however long a reading takes: no drift, and the day passes at once."""
    workbench = Workbench(tmp_path)
    workbench.write("sequence.toml", sequence('interval = "60 s"', repeats="5"))
    for times in points_of_first_part(workbench.dry_run()):
        gaps = [later - earlier for earlier, later in itertools.pairwise(times)]
        # the first reading of a point waits for the meter to settle, the others do not
        assert gaps[0] == pytest.approx(60.0, abs=0.2)
        assert gaps[1:] == pytest.approx([60.0] * 3, abs=MICROSECOND)


def test_times_of_day_and_elapsed_times_agree(tmp_path: Path) -> None:
    workbench = Workbench(tmp_path)
    workbench.write("sequence.toml", sequence('interval = "60 s"', repeats="2"))
    rows = journal(workbench.dry_run(), "SELECT time_us, elapsed_s FROM impedance ORDER BY reading")
    started = {round(time_us - 1e6 * elapsed_s) for time_us, elapsed_s in rows}
    assert max(started) - min(started) <= 1


def test_the_dwell_comes_before_every_point(tmp_path: Path) -> None:
    workbench = Workbench(tmp_path)
    workbench.write("sequence.toml", sequence('dwell = "30 s"', repeats="2"))
    points = points_of_first_part(workbench.dry_run())
    assert len(points) == 4
    for before, after in itertools.pairwise(points):
        # nothing but setting a point and, once a minute, the thermometer lies between
        assert after[0] - before[-1] == pytest.approx(30.0 + READING_S + SETTING_S, abs=SETTING_S)


def test_a_settle_rule_that_is_met_costs_only_its_readings(tmp_path: Path) -> None:
    workbench = Workbench(tmp_path)
    rule = 'settle = { tolerance = "5 %", readings = 4, at_most = "10 s" }'
    workbench.write("sequence.toml", sequence(rule, repeats="1"))
    settled = workbench.dry_run()
    workbench.write("sequence.toml", sequence(repeats="1"))
    plain = workbench.dry_run("plain")
    assert {row["status"] for row in table(settled, "impedance")} == {"ok"}
    ours, theirs = points_of_first_part(settled), points_of_first_part(plain)
    extra_s = [(ours[n][0] - ours[0][0]) - (theirs[n][0] - theirs[0][0]) for n in range(4)]
    assert extra_s == pytest.approx([4 * READING_S * n for n in range(4)], abs=1e-3)


def test_a_settle_rule_that_is_never_met_ends_in_its_time(tmp_path: Path) -> None:
    """Its readings are kept, say so, and enter nothing."""
    workbench = Workbench(tmp_path)
    rule = 'settle = { tolerance = "0.0001 %", readings = 8, at_most = "2 s" }'
    workbench.write("sequence.toml", sequence(rule, repeats="2"))
    out = workbench.dry_run()
    rows = table(out, "impedance")
    assert {row["status"] for row in rows} == {"unsettled"}
    assert all(row["resistance_ohm"] == row["cs_f"] == "" for row in rows)
    points = points_of_first_part(out)
    for before, after in itertools.pairwise(points):
        assert after[0] - before[-1] == pytest.approx(2.0 + READING_S + SETTING_S, abs=SETTING_S)
    judged = [row for row in table(out, "results") if row["limit_source"]]
    assert {row["decision"] for row in judged} == {"invalid"}


HALF_VOLT = b"VOLT 0.5"
"""The level, in the words of the shipped driver."""


@pytest.mark.processes
@pytest.mark.slow
def test_a_setting_that_is_clamped_silently_gives_no_number(tmp_path: Path) -> None:
    workbench = Workbench(tmp_path)
    workbench.write("sequence.toml", sequence(level='["0.5 V", "1 V"]', repeats="1"))
    with Served(workbench, faulty=("meter",)) as served:
        served.layer("meter").inject(Fault(kind="clamped", matching=HALF_VOLT))
        out = workbench.run()
    rows = table(out, "impedance")
    not_set = [row for row in rows if row["status"] == "not-set"]
    assert not_set
    for row in not_set:
        numbers = ("resistance_ohm", "reactance_ohm", "impedance_ohm", "cs_f", "d", "level_v")
        assert [row[name] for name in numbers] == [""] * 6
    assert len(rows) == 3 * 7  # every reading has its row all the same
    told = [row for row in table(out, "events") if row["kind"] == "not-set"]
    assert "level was set to" in told[0]["detail"]
    for row in table(out, "results"):
        places = [r for r in rows if r["part_id"] == row["part_id"]]
        at = [r for r in places if (r["frequency_hz"], r["level_set_v"]) == conditions(row)]
        if at and all(r["status"] == "not-set" for r in at):
            assert row["decision"] == "invalid"
            assert row["value"] == ""


def conditions(row: dict[str, str]) -> tuple[str, str]:
    return row["frequency_hz"], row["level_v"]


@pytest.mark.processes
@pytest.mark.slow
def test_what_is_refused_before_the_first_point_gives_rows_without_numbers(
    tmp_path: Path,
) -> None:
    """The cable's length holds for all of the stage; the next part's stage may do better."""
    workbench = Workbench(tmp_path)
    with Served(workbench, faulty=("meter",)) as served:
        served.layer("meter").inject(Fault(kind="clamped", matching=b"CORR:LENG 1"))
        out = workbench.run()
        assert served.at_rest()
    rows = table(out, "impedance")
    statuses = {part: {r["status"] for r in rows if r["part_id"] == part} for part in ("C1", "C2")}
    assert statuses["C1"] == {"not-set"}
    assert "ok" in statuses["C2"]
    decided = {row["part_id"]: row["decision"] for row in table(out, "results") if row["limit_min"]}
    assert decided["C1"] == "invalid"


@pytest.mark.processes
@pytest.mark.slow
@pytest.mark.parametrize(
    ("kind", "status"), [("garbage", "malformed"), ("truncated", "malformed"), ("late", "timeout")]
)
def test_a_reply_that_is_none_is_kept_with_its_status(
    tmp_path: Path, kind: str, status: str
) -> None:
    workbench = Workbench(tmp_path)
    workbench.driver('[link]\ntimeout = "0.5 s"\n')
    with Served(workbench, faulty=("meter",)) as served:
        served.layer("meter").inject(Fault(kind=kind, matching=b"READ?", after=1, delay_s=1.0))
        out = workbench.run()
    rows = table(out, "impedance")
    assert [row["status"] for row in rows].count(status) == 1
    bad = next(row for row in rows if row["status"] == status)
    assert bad["resistance_ohm"] == bad["cs_f"] == ""
    assert len(rows) == 3 * 4 * 3
    kept = journal(out, "SELECT status, first, reply FROM impedance ORDER BY reading")
    odd = [row for row in kept if row[0] == status]
    assert odd[0][1] is None
    assert (odd[0][2] != b"") == (status == "malformed")  # the bytes that came are kept


def test_an_overload_is_kept_with_its_status(tmp_path: Path) -> None:
    """1 uF, 160 ohm and less, held on the 1 Mohm range: more current than the range can take."""
    workbench = Workbench(tmp_path)
    workbench.write("sequence.toml", sequence('range = "1 Mohm"'))
    out = workbench.dry_run()
    rows = [row for row in table(out, "impedance") if row["part_id"] == "C1"]
    assert rows[0]["status"] == "overload"
    assert rows[0]["reactance_ohm"] == ""
    decided = [r for r in table(out, "results") if r["part_id"] == "C1" and r["limit_min"]]
    assert [row["decision"] for row in decided] == ["invalid"]
