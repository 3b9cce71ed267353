"""Every fault in every stage under voltage: how it ended, what was decided, and what is true."""

import csv
from dataclasses import dataclass
from pathlib import Path

import pytest

from ohmward import api
from ohmward.api import simulation
from ohmward.errors import NotProvenSafe, OhmwardError, SafetyTrip
from ohmward.sim.bench import SimulatedBench
from ohmward.sim.circuit import Circuit
from ohmward.sim.wired_circuit import WiredCircuit

HEAD = """\
format = 1
name = "one stage"
purpose = "One stage under voltage"
follows = "nobody"
kinds = "capacitor"
"""
FILM = (
    "part_id,position,kind,nominal,tolerance,rated_voltage,dielectric\n"
    "C1,1,capacitor,1 uF,±10 %,400 V DC,PET\n"
    "C2,2,capacitor,1 uF,±10 %,400 V DC,PET\n"
)
OXIDE = (
    "part_id,position,kind,nominal,tolerance,rated_voltage,dielectric,polarity\n"
    "C1,1,capacitor,10 uF,±20 %,400 V DC,aluminium electrolytic,polar\n"
    "C2,2,capacitor,10 uF,±20 %,400 V DC,aluminium electrolytic,polar\n"
)
LIMIT = """
[[limit]]
stage = "held"
quantity = "{quantity}"
{bound}
source = "the tests"
"""
STAGES = {
    "leakage": (
        FILM,
        'kind = "leakage"\nvoltage = "400 V"\nsoak = "60 s"\ninterval = "5 s"',
        LIMIT.format(quantity="leakage_a", bound='max = "1 uA"'),
    ),
    "insulation": (
        FILM,
        'kind = "insulation"\nrule = "insulation-by-rating"\ninterval = "5 s"',
        LIMIT.format(quantity="insulation_ohm", bound='min = "1 Gohm"'),
    ),
    "reform": (
        OXIDE,
        'kind = "reform"\nvoltages = ["200 V", "400 V"]\nhold = "20 s"\nbudget = "10 min"\n'
        'interval = "5 s"\ncurrent_limit = "8 mA"',
        LIMIT.format(quantity="reformed_v", bound='min = "400 V"'),
    ),
    "proof": (
        FILM,
        'kind = "proof"\nvoltage = "500 V"\nrating_allowed = 1.25\ndwell = "60 s"\n'
        'interval = "5 s"\ncurrent_limit = "5 mA"',
        LIMIT.format(quantity="withstood_v", bound='min = "500 V"'),
    ),
    "absorption": (
        FILM,
        'kind = "absorption"\nvoltage = "200 V"\ncharge = "60 s"\ninterval = "10 s"\n'
        'short = "10 s"\nread_at = "60 s"',
        LIMIT.format(quantity="absorption_rel", bound='max = "5 %"'),
    ),
}


@dataclass(frozen=True)
class Cell:
    """One fault in one stage: the run's ending, the decisions, and the bench as it was left."""

    fault: str
    stage: str
    ending: str
    decisions: dict[str, str]
    part_v: float
    rail_v: float
    supply_contact: bool
    happened: tuple[str, ...]

    @property
    def proven(self) -> bool:
        return self.ending in ("finished", "tripped")

    @property
    def truly_dead(self) -> bool:
        """No voltage on any part, and no supply on the rail."""
        return abs(self.part_v) <= 1.0 and (self.rail_v <= 1.0 or not self.supply_contact)

    def __str__(self) -> str:
        decided = " ".join(self.decisions.values())
        return (
            f"{self.fault:<20}{self.stage:<12}{self.ending:<12}{decided:<18}"
            f"part {self.part_v:8.3g} V  rail {self.rail_v:8.3g} V  {', '.join(self.happened)}"
        )


def cell(
    fault: str, stage: str, folder: Path, patch: pytest.MonkeyPatch, after: str = "45 s"
) -> Cell:
    """Two parts, the first of which meets the fault; the bench is looked at afterwards."""
    lot, keys, limit = STAGES[stage]
    name = f"{stage}-{fault or 'none'}"
    sequence, parts = folder / f"{name}.toml", folder / f"{name}.csv"
    sequence.write_text(f'{HEAD}[[stage]]\nname = "held"\n{keys}\n{limit}', "utf-8")
    parts.write_text(lot, "utf-8")
    built: list[SimulatedBench] = []

    def build(*given: object, **more: object) -> SimulatedBench:
        built.append(original(*given, **more))  # type: ignore[arg-type]
        return built[-1]

    original = simulation.build
    patch.setattr(simulation, "build", build)
    out = folder / name
    ending = "finished"
    try:
        prepared = api.prepare(sequence, bench="depot-retest-bench", parts=parts)
        asked = [f"C1={fault}@held+{after}"] if fault else []
        api.dry_run(prepared, out=out, seed=1, faults=asked)
    except SafetyTrip:
        ending = "tripped"
    except NotProvenSafe:
        ending = "not proven"
    except OhmwardError as error:
        ending = f"{type(error).__name__}"
    finally:
        patch.setattr(simulation, "build", original)
    bench = built[-1]
    assert isinstance(bench.circuit, WiredCircuit)
    engine = bench.circuit.engine
    assert isinstance(engine, Circuit)
    with (out / "results.csv").open(encoding="utf-8") as stream:
        decided = {row["part_id"]: row["decision"] for row in csv.DictReader(stream)}
    return Cell(
        fault=fault,
        stage=stage,
        ending=ending,
        decisions=decided,
        part_v=max((engine.voltage(n) for n in ("1", "2")), key=abs),
        rail_v=abs(engine.supply_voltage()),
        supply_contact=engine.contact_closed(engine.path.supply.channel),
        happened=tuple(event.kind for event in engine.events if event.kind != "wire broken"),
    )


if __name__ == "__main__":
    import sys
    from tempfile import TemporaryDirectory

    with TemporaryDirectory() as place, pytest.MonkeyPatch.context() as context:
        chosen = sys.argv[1:] or list(STAGES)
        for each in chosen:
            for kind in ("", *api.fault_kinds()):
                print(cell(kind, each, Path(place), context), flush=True)
