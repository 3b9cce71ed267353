"""Every part model against ngspice: the same elements, another program's solution.

Tolerance: Z within 1e-6 of |Z| at every frequency of an `.ac` analysis.
"""

import math
import os
import shutil
import subprocess
from pathlib import Path

import pytest

from ohmward.setup.resources import shipped
from ohmward.sim.network import Network, Parallel, R, netlist
from ohmward.sim.parts import FAULTS, PhysicalPart
from ohmward.sim.physical import PartTruth, read_model

NGSPICE = shutil.which("ngspice")
DIRECT_PATH_OHM = 1e12  # an operating point needs one; both sides have it
FREQUENCIES_HZ = (50.0, 1e3, 33e3, 1e6, 20e6)
NOMINAL = {
    "film-pp": 100e-9,
    "film-pet": 470e-9,
    "ceramic-c0g": 100e-12,
    "ceramic-x7r": 10e-9,
    "aluminium-electrolytic": 100e-6,
    "choke-ferrite": 1e-3,
    "resistor-film": 10e3,
}


def models() -> list[str]:
    return sorted(path.stem for path in (shipped("simulators") / "parts").glob("*.toml"))


def solve(network: Network, folder: Path) -> list[complex]:
    """The voltage of 1 A at each frequency: Z."""
    assert NGSPICE is not None
    commands = []
    for index, frequency in enumerate(FREQUENCIES_HZ):
        commands += [f"ac lin 1 {frequency!r} {frequency!r}", f"wrdata z{index} v(1)"]
    lines = [
        "part between node 1 and ground",
        "I1 0 1 dc 0 ac 1",
        *netlist(network),
        ".control",
        "set numdgt=12",
        *commands,
        "quit",
        ".endc",
        ".end",
    ]
    deck = folder / "part.cir"
    deck.write_text("\n".join(lines) + "\n")
    subprocess.run(
        [NGSPICE, "-b", str(deck)], capture_output=True, timeout=60, check=False, cwd=folder
    )
    found = []
    for index in range(len(FREQUENCIES_HZ)):
        words = (folder / f"z{index}").read_text().split()
        found.append(complex(float(words[1]), float(words[2])))
    return found


@pytest.mark.processes
@pytest.mark.parametrize("name", models())
def test_part_models_agree_with_ngspice(name: str, tmp_path: Path) -> None:
    if NGSPICE is None:
        missing = "ngspice is not installed: this comparison with a foreign simulator is NOT made"
        if os.environ.get("CI"):
            pytest.fail(missing)
        pytest.skip(missing)
    model = read_model(shipped("simulators") / "parts" / f"{name}.toml")
    for fault, kinds in FAULTS.items():
        # an open part is its 0.4 pF: beside 1e4 S the foreign matrix cannot resolve 1e-10 S
        if model.kind not in kinds or fault == "open":
            continue
        part = PhysicalPart(
            part_id="X1",
            model=model,
            truth=PartTruth(model=name, fault=fault),
            nominal=NOMINAL[name],
            tolerance=0.1,
            rated_v=100.0,
            rated_a=0.5,
            seed=3,
        )
        for bias_v, temperature_c in ((0.0, 20.0), (30.0, 35.0)):
            part_network = part.network(bias_v, temperature_c, bias_v / 100)
            network = Parallel(part_network, R(DIRECT_PATH_OHM))
            foreign = solve(network, tmp_path)
            for frequency, z in zip(FREQUENCIES_HZ, foreign, strict=True):
                ours = network.impedance(2j * math.pi * frequency)
                assert abs(ours - z) <= 1e-6 * abs(z), (fault, frequency, ours, z)
