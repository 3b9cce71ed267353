"""One runner, two benches: in process in virtual time, and over TCP in real time."""

import math
from pathlib import Path

import pytest
from tests.run.workbench import Served, Workbench, decisions, places, sequence, table

pytestmark = [pytest.mark.processes, pytest.mark.slow]

WITH_BIAS = """\
format = 1
name = "with bias"
purpose = "Bias up and down, two stages, a settle rule"
follows = "nobody"
kinds = "capacitor"
[[stage]]
kind = "sweep"
name = "first"
frequency = ["1 kHz", "20 kHz"]
level = ["0.5 V", "1 V"]
bias = ["0 V", "5 V", "10 V"]
integration = "short"
settle = { tolerance = "1 %", readings = 2, at_most = "1 s" }
[[stage]]
kind = "sweep"
name = "second"
frequency = "1 kHz"
level = "0.1 V"
integration = "medium"
repeats = 2
dwell = "20 ms"
closure = true
[[limit]]
stage = "first"
quantity = "capacitance_f"
at = { frequency = "1 kHz", level = "1 V", bias = "0 V" }
rule = "marked-tolerance"
source = "the part's own marking"
"""
OTHER_KINDS = """\
part_id,position,kind,nominal,tolerance,rated_current,rated_power
L1,1,inductor,1 mH,±10 %,1 A,
R1,2,resistor,10 kohm,±5 %,,0.5 W
R2,4,resistor,47 ohm,±1 %,,0.5 W
"""
ALL_KINDS = """\
format = 1
name = "other kinds"
purpose = "Inductors and resistors"
follows = "nobody"
kinds = ["inductor", "resistor"]
[[stage]]
kind = "sweep"
name = "sweep"
frequency = ["100 Hz", "1 kHz", "10 kHz"]
level = "1 V"
integration = "short"
[[limit]]
stage = "sweep"
quantity = "impedance_ohm"
at = { frequency = "1 kHz" }
max = "100 kohm"
source = "nobody"
"""
JOBS = {
    "short": (sequence(), ""),
    "bias": (WITH_BIAS, ""),
    "kinds": (ALL_KINDS, OTHER_KINDS),
}
PHYSICAL = ("resistance_ohm", "reactance_ohm")


@pytest.mark.parametrize("job", JOBS)
def test_the_same_job_gives_the_same_decisions_and_tables(tmp_path: Path, job: str) -> None:
    workbench = Workbench(tmp_path)
    text, lot = JOBS[job]
    workbench.write("sequence.toml", text)
    if lot:
        workbench.write("parts.csv", lot)
    dry = workbench.dry_run(seed=3)
    with Served(workbench, seed=3) as served:
        real = workbench.run()
        assert served.at_rest()
    assert decisions(real) == decisions(dry)
    assert places(real) == places(dry)
    for name in ("impedance", "results"):
        ours, theirs = table(dry, name), table(real, name)
        assert list(ours[0]) == list(theirs[0])
        for one, other in zip(ours, theirs, strict=True):
            # the same cells are empty: missing is missing on both
            assert {k for k, v in one.items() if v == ""} == {
                k for k, v in other.items() if v == ""
            }
    for one, other in zip(table(dry, "impedance"), table(real, "impedance"), strict=True):
        z, z_real = (complex(*(float(row[name]) for name in PHYSICAL)) for row in (one, other))
        assert abs(z - z_real) < 0.01 * abs(z)
        assert math.isclose(float(one["level_v"]), float(other["level_v"]), rel_tol=0.01)
        assert (one["simulated"], other["simulated"]) == ("true", "false")
    kinds = [[(row["kind"], row["part_id"]) for row in table(f, "events")] for f in (dry, real)]
    assert kinds[0] == kinds[1]
    truth = table(dry, "truth")
    assert len(truth) == len(table(dry, "results"))
    assert not (real / "truth.csv").exists()
