"""Coverage and risk through the whole program: simulated meters whose errors the budget states.

Every part meets the simulated meter with an error drawn anew for it, in magnitude and phase apart,
spread evenly over the half-widths that the driver states; the frequency's error is drawn for each
bench. What is held against the truth has gone through bytes, driver, journal, derivation, budget
and decision. Bounds are the project's: intervals of 95 % hold in 93.5 to 96.5 %, errors over u
have an RMS of 0.85 to 1.15, at most 1 % of healthy readings are invalid; a false acceptance in at
most 2.5 % (one-sided bound of 95 %), undecided at most 5 % of parts that are 2U or more away.
"""

import csv
import io
from collections import defaultdict
from dataclasses import dataclass
from math import log, pi, sqrt
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import beta, binom

from ohmward import api
from ohmward.api import simulation
from ohmward.api.past_run import past_run
from ohmward.api.running import dry_run
from ohmward.metrology.immittance import gradients
from ohmward.metrology.uncertain import first_order, interval, is_curved
from ohmward.results.cells import Cell, cells_of

FREQUENCY_HZ = 1000.0
K_95 = 1.959964
UNIT = {"capacitor": "F", "inductor": "H", "resistor": "ohm"}
QUANTITIES = {
    "capacitor": ("cs_f", "cp_f", "d", "rs_ohm"),
    "inductor": ("ls_h", "lp_h", "q", "rs_ohm"),
    "resistor": ("resistance_ohm", "impedance_ohm", "phase_rad"),
}

# one flat band and no level or temperature factors: what is stated is what is drawn
DRIVER = """format = 1
extends = "scpi-impedance-meter"
without = ["accuracy"]

[accuracy]
distribution = "rectangular"
short = "1 mohm"
open = "1 nS"
frequency_share = "0.01 %"

[[accuracy.band]]
frequency = ["20 Hz", "2 MHz"]
impedance = ["1 mohm", "10 Gohm"]
magnitude = "0.05 %"
phase = "0.5 mrad"
"""

BENCH = """format = 1
name = "drawn bench"
[instrument.meter]
role = "impedance meter"
driver = "./meter.toml"
address = "TCPIP::192.0.2.31::5025::SOCKET"
[fixture]
loading = "by hand"
[simulation]
physical_file = "physics.toml"
[[position]]
name = "1"
"""

PHYSICS = """format = 1
[room]
temperature_c = 23.0
swing_k = 0.0
[instrument.meter]
knots = [[20.0, 5e-4, 5e-4], [2e6, 5e-4, 5e-4]]
short_ohm = 1e-3
open_s = 1e-9
full_level_v = 0.5
frequency_rel = 1e-4
noise = { short = 1e-4, medium = 1e-4, long = 1e-4 }
"""

SWEEP = """format = 1
name = "drawn"
purpose = "Hold intervals against the truth"
follows = "the test"
kinds = ["capacitor", "inductor", "resistor"]

[[stage]]
kind = "sweep"
name = "point"
frequency = "1 kHz"
level = "1 V"
integration = "short"
repeats = 3
"""


def measured(folder: Path, sequence: str, parts: list[str], seed: int) -> tuple[Path, api.Prepared]:
    """A dry run of these rows of a parts list."""
    folder.mkdir()
    head = "part_id,position,kind,nominal,tolerance\n"
    for name, text in (
        ("meter.toml", DRIVER),
        ("bench.toml", BENCH),
        ("physics.toml", PHYSICS),
        ("sequence.toml", sequence),
        ("parts.csv", head + "\n".join(parts) + "\n"),
    ):
        (folder / name).write_text(text, "utf-8")
    prepared = api.prepare(
        folder / "sequence.toml", bench=folder / "bench.toml", parts=folder / "parts.csv"
    )
    dry_run(prepared, out=folder / "run", seed=seed)
    return folder / "run", prepared


def lot(kind: str, decade: int, count: int, rng: np.random.Generator) -> list[str]:
    """Parts whose |Z| at 1 kHz lies in a decade, evenly on a logarithmic scale."""
    w = 2 * pi * FREQUENCY_HZ
    rows = []
    for number, size in enumerate((10 ** (decade + rng.uniform(size=count))).tolist()):
        value = {"capacitor": 1 / (w * size), "inductor": size / w, "resistor": size}[kind]
        rows.append(f"{kind[0]}{decade}-{number},1,{kind},{value!r} {UNIT[kind]},±5 %")
    return rows


@dataclass
class Tally:
    """How often the truth was inside, and how large the errors were in units of u."""

    parts: int = 0
    held: int = 0
    straight: int = 0
    held_first_order: int = 0
    squares: float = 0.0

    def add(self, name: str, cell: Cell, truth: float) -> None:
        """Count one value of one part."""
        z = cell.uncertain()
        at = interval(name, z, K_95)
        self.parts += 1
        self.held += bool(at.low <= truth <= at.high)
        if is_curved(name, z, z.covariance()):
            return  # first order has no claim there
        plain = first_order(name, z, K_95)
        self.straight += 1
        self.held_first_order += bool(plain.low <= truth <= plain.high)
        self.squares += ((plain.value - truth) / plain.u) ** 2


def tallies(
    folder: Path, decades: range, count: int, benches: int
) -> tuple[dict[tuple[str, str, int], Tally], float]:
    """A tally for each kind, quantity and decade of |Z|, and the share of invalid readings."""
    found: dict[tuple[str, str, int], Tally] = defaultdict(Tally)
    bad = taken = 0
    for number in range(benches):
        rng = np.random.default_rng([11, number])
        rows = [
            row
            for kind in QUANTITIES
            for decade in decades
            for row in lot(kind, decade, count // benches, rng)
        ]
        run, prepared = measured(folder / f"bench-{number}", SWEEP, rows, seed=number)
        truth_at = simulation.build(prepared, seed=number)
        past = past_run(run)
        bad += int(np.sum(past.readings["status"] != "ok"))
        taken += len(past.readings["status"])
        kinds = {part.part_id: part.kind.value for part in past.parts}
        cells = cells_of(past.readings, past.impedance, past.accuracies, past.cable_m)
        for (part_id, _), listed in cells.items():
            cell, kind = listed[0], kinds[part_id]
            true = [
                truth_at.truth(part_id, name, frequency_hz=FREQUENCY_HZ, level_v=1.0)
                for name in ("resistance_ohm", "reactance_ohm")
            ]
            views = gradients(FREQUENCY_HZ, true[0], true[1], QUANTITIES[kind])
            for name in QUANTITIES[kind]:
                decade = int(part_id[1:].split("-")[0])
                found[kind, name, decade].add(name, cell, float(views[name].value))
    return found, bad / taken


def allowed(share: float, count: int, sure: float) -> float:
    """What chance makes of a share of a cell's parts: how far it may lie from the bound."""
    return float(abs(binom.ppf(1 - sure, count, share) / count - share))


def check(folder: Path, decades: range, count: int, benches: int, sure: float) -> None:
    found, invalid = tallies(folder, decades, count, benches)
    print("\nkind      quantity        decade   held %   first order %  rms(e/u)")
    for (kind, name, decade), tally in found.items():
        share = tally.held / tally.parts
        rms = sqrt(tally.squares / tally.straight) if tally.straight else float("nan")
        first = tally.held_first_order / tally.straight if tally.straight else float("nan")
        print(
            f"{kind:10}{name:16}{decade:4}   {100 * share:6.2f}   {100 * first:6.2f}"
            f"          {rms:6.3f}"
        )
        low, high = 0.935 - allowed(0.935, count, sure), 0.965 + allowed(0.965, count, sure)
        assert low <= share <= high, (kind, name, decade)
        if tally.straight >= count / 2:
            assert first >= low, (kind, name, decade)
            slack = allowed(0.5, tally.straight, sure)
            assert 0.85 - slack <= rms <= 1.15 + slack, (kind, name, decade)
    assert invalid <= 0.01


@pytest.mark.slow
def test_intervals_hold_the_truth_of_simulated_parts(tmp_path: Path) -> None:
    """200 parts a cell; a cell may lie outside of the bounds by what chance makes of 200."""
    check(tmp_path, range(0, 7, 3), 200, 2, 0.9999)


@pytest.mark.soak
def test_intervals_hold_the_truth_of_many_simulated_parts(tmp_path: Path) -> None:
    check(tmp_path, range(0, 7), 2000, 20, 0.99)


LIMIT = """
[[limit]]
stage = "point"
quantity = "capacitance_f"
max = "+0 %"
source = "a limit in the middle of the lot"
"""


def risk(folder: Path, count: int, nominal: str) -> None:
    """A continuous population across its limit: a lot of ±1 %, accepted up to nominal."""
    rows = [f"c{number},1,capacitor,{nominal},±1 %" for number in range(count)]
    sequence = SWEEP.replace('["capacitor", "inductor", "resistor"]', '"capacitor"') + LIMIT
    run, _ = measured(folder / "lot", sequence, rows, seed=5)
    results, truths = (
        list(csv.DictReader(io.StringIO((run / name).read_text("utf-8"))))
        for name in ("results.csv", "truth.csv")
    )
    wrong = beyond = far = open_ = 0
    for row, truth in zip(results, truths, strict=True):
        if row["quantity"] != "capacitance_f":
            continue
        true, limit = float(truth["true_value"]), float(row["limit_max"])
        beyond += true > limit
        wrong += true > limit and row["decision"] == "accept"
        if abs(true - limit) >= 2 * float(row["u_expanded"]):
            far += 1
            open_ += row["decision"] not in ("accept", "reject")
    bound = float(beta.ppf(0.95, wrong + 1, beyond - wrong))  # Clopper and Pearson
    print(f"\n{wrong} of {beyond} accepted wrongly, at most {bound:.2%}; {open_} of {far} open")
    assert beyond > log(0.05) / log(1 - 0.025)  # enough of them to say so
    assert far >= 100
    assert bound <= 0.025
    assert open_ <= 0.05 * far


@pytest.mark.slow
def test_false_acceptance_and_indecision_over_a_lot_across_its_limit(tmp_path: Path) -> None:
    risk(tmp_path, 400, "100 nF")


@pytest.mark.soak
@pytest.mark.parametrize("nominal", ["100 pF", "100 nF", "47 uF"])
def test_the_risks_over_thousands_of_parts(tmp_path: Path, nominal: str) -> None:
    risk(tmp_path, 4000, nominal)
