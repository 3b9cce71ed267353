"""A link that is gone for an hour: the sweep goes on as it was, or ends beyond its budget."""

import csv
from itertools import pairwise
from pathlib import Path

import pytest

from ohmward.errors import LinkError
from ohmward.setup.resources import shipped
from ohmward.testing.bench import VirtualBench

HOUR_S = 3600.0
AFTER = 60
"""Queries to the meter before its link goes: in the middle of a part's sweep."""


def bench_with(folder: Path, budget: str) -> Path:
    """The depot's bench, its meter's link given up after ``budget``."""
    (folder / "own-meter.toml").write_text(
        f'format = 1\nextends = "scpi-impedance-meter"\n[link]\nreopen_budget = "{budget}"\n',
        "utf-8",
    )
    simulators = shipped("simulators")
    text = (simulators / "depot-bench.toml").read_text("utf-8")
    text = text.replace('driver = "scpi-impedance-meter"', 'driver = "own-meter.toml"')
    physics = simulators / "depot-physics.toml"
    text = text.replace('"depot-physics.toml"', f'"{physics}"')
    bench = folder / "bench.toml"
    bench.write_text(text, "utf-8")
    return bench


def rows(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def test_a_link_that_comes_back_after_an_hour_goes_on_with_its_sweep(tmp_path: Path) -> None:
    bench = VirtualBench(seed=3)
    bench.use_bench(bench_with(tmp_path, "2 h"))
    bench.fault("disconnect", instrument="meter", after=AFTER, delay_s=HOUR_S, matching=b"READ?")
    outcome = bench.dry_run("film-sweep", parts="depot-lot", out=tmp_path / "run")

    whole = VirtualBench(seed=3)
    whole.use_bench(bench_with(tmp_path, "2 h"))
    undisturbed = whole.dry_run("film-sweep", parts="depot-lot", out=tmp_path / "whole")

    def decided(found: object) -> dict[str, str]:
        return {one.part.part_id: one.decision.value for one in found.verdicts}  # type: ignore[attr-defined]

    assert decided(outcome) == decided(undisturbed)

    # one reading is lost; no other is a number that the meter did not measure
    found, other = (
        rows(tmp_path / "run" / "impedance.csv"),
        rows(tmp_path / "whole" / "impedance.csv"),
    )
    assert len(found) == len(other)
    assert [row["status"] for row in other] == ["ok"] * len(other)
    (lost,) = [row for row in found if row["status"] != "ok"]
    assert lost["status"] in ("timeout", "stale", "unsettled")
    for row, was in zip(found, other, strict=True):
        if row["status"] == "ok" and row["part_id"] != "HD-C4":  # a short has no capacitance
            assert float(row["cs_f"]) == pytest.approx(float(was["cs_f"]), rel=0.01)
    times = [float(row["elapsed_s"]) for row in found]
    assert max(b - a for a, b in pairwise(times)) == pytest.approx(HOUR_S, rel=0.02)

    # the meter heard everything again before it was asked to read, its corrections included
    assert bench.simulated is not None
    entries = list(bench.simulated.records["meter"].entries)
    again = max(n for n, one in enumerate(entries) if one.what == "opened")
    heard = [one.data.strip() for one in entries[again:] if one.what == "heard"]
    before = heard[: heard.index(b"READ?")]
    assert before[0] == b"*IDN?"
    for query in (b"FUNC?", b"APER?", b"CORR:OPEN?", b"CORR:SHOR?", b"CORR:LOAD?", b"FREQ?"):
        assert query in before
    assert any(one.startswith(b"FREQ ") for one in before)
    # and the part's contacts were read back after the outage
    back_s = entries[again].at_s
    switch = bench.simulated.records["switch"].entries
    assert any(one.data.startswith(b"ROUT:CLOS:STAT?") and one.at_s >= back_s for one in switch)


def test_beyond_its_budget_the_run_ends_and_keeps_what_it_has(tmp_path: Path) -> None:
    bench = VirtualBench(seed=3)
    bench.use_bench(bench_with(tmp_path, "10 min"))
    bench.fault("disconnect", instrument="meter", after=AFTER, delay_s=HOUR_S, matching=b"READ?")
    with pytest.raises(LinkError) as ended:
        bench.dry_run("film-sweep", parts="depot-lot", out=tmp_path / "run")
    assert ended.value.exit_code == 4
    found = rows(tmp_path / "run" / "impedance.csv")
    assert (
        sum(row["status"] == "ok" for row in found) >= AFTER // 4
    )  # the others were of the settle rule
