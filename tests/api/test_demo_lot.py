"""The demo lot, drawn anew by many seeds: what a person would be told of each part is right.

Asked for: at least 90 % of good parts accepted and of faulty ones rejected for their fault's
own quantity, and none decided the wrong way round.
"""

import csv
from collections import Counter
from pathlib import Path

import pytest

from ohmward import api
from ohmward.terms.decision import Decision

# What gives each fault away (common practice: it is what a technician looks at).
OWN_QUANTITIES = {
    "low": {"capacitance_f"},
    "dried out": {"capacitance_f", "rs_ohm", "d"},
    "shorted": {"impedance_ohm"},
    "open": {"impedance_ohm", "resistance_ohm"},
    "wrong dielectric": {"d", "q"},
    "shorted turn": {"inductance_h", "q"},
}


def tally(seeds: range, folder: Path) -> Counter[str]:
    prepared = api.prepare("depot-survey", bench="depot-bench", parts="depot-lot")
    count: Counter[str] = Counter()
    for seed in seeds:
        outcome = api.dry_run(prepared, out=folder / str(seed), seed=seed)
        with (outcome.folder / "truth.csv").open(newline="") as file:
            fault = {row["part_id"]: row["fault"] for row in csv.DictReader(file)}
        with (outcome.folder / "results.csv").open(newline="") as file:
            rejected = {
                (row["part_id"], row["quantity"])
                for row in csv.DictReader(file)
                if row["decision"] == Decision.REJECT
            }
        for verdict in outcome.verdicts:
            part_id = verdict.part.part_id
            own = OWN_QUANTITIES.get(fault[part_id], set())
            if not fault[part_id]:
                count["good"] += 1
                count["good, accepted"] += verdict.decision is Decision.ACCEPT
                count["good, rejected"] += verdict.decision is Decision.REJECT
            else:
                count["faulty"] += 1
                count["faulty, accepted"] += verdict.decision is Decision.ACCEPT
                for_its_own = any((part_id, quantity) in rejected for quantity in own)
                count["faulty, rejected for its own quantity"] += for_its_own
    return count


def assert_right(count: Counter[str]) -> None:
    print(dict(count))
    assert count["good, rejected"] == 0
    assert count["faulty, accepted"] == 0
    assert count["good, accepted"] >= 0.9 * count["good"] > 0
    assert count["faulty, rejected for its own quantity"] >= 0.9 * count["faulty"] > 0


@pytest.mark.slow
def test_the_demo_lot_over_twelve_seeds(tmp_path: Path) -> None:
    assert_right(tally(range(12), tmp_path))


@pytest.mark.soak
def test_the_demo_lot_over_two_hundred_seeds(tmp_path: Path) -> None:
    assert_right(tally(range(200), tmp_path))
