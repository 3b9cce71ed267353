"""A bench, its drivers and a parts list for tests of sequences: name what matters."""

from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ohmward.errors import Problems
from ohmward.sequence.brief import Brief
from ohmward.sequence.load import load_sequence
from ohmward.sequence.unroll import unroll
from ohmward.setup.bench import Bench, load_bench
from ohmward.setup.bench_drivers import load_drivers
from ohmward.setup.driver import Driver, load_driver
from ohmward.setup.resources import shipped
from ohmward.setup.toml import validate
from ohmward.terms.kind import Kind
from ohmward.terms.part import Part

HEAD = """format = 1
name = "test"
purpose = "to be tested"
follows = "nobody"
kinds = ["capacitor", "inductor", "resistor"]
"""
CAPACITORS = HEAD.replace('["capacitor", "inductor", "resistor"]', '"capacitor"')
SWEEP = """
[[stage]]
kind = "sweep"
name = "sweep"
frequency = ["1 kHz", "10 kHz"]
level = "1 V"
"""


def bench(loading: str = "scanner", positions: int = 4, **more: Any) -> Bench:
    """A bench with the shipped meter and, for a scanner, the shipped scanner."""
    instrument = {
        "meter": {
            "role": "impedance meter",
            "driver": "scpi-impedance-meter",
            "address": "TCPIP::127.0.0.1::5025::SOCKET",
        }
    }
    if loading == "scanner":
        instrument["scanner"] = {
            "role": "scanner",
            "driver": "scpi-scanner",
            "address": "TCPIP::127.0.0.1::5026::SOCKET",
        }
    channels = loading == "scanner"
    table = {
        "format": 1,
        "name": "test bench",
        "instrument": instrument,
        "fixture": {"loading": loading},
        "position": [
            {"name": f"P{n}", "meter_channels": [f"10{n}", f"20{n}"] if channels else []}
            for n in range(1, positions + 1)
        ],
        **more,
    }
    problems = Problems()
    found = validate(Bench, table, "bench.toml", problems)
    assert found is not None, [str(problem) for problem in problems]
    return found


def shipped_drivers() -> dict[str, Driver]:
    """The drivers that `bench` names."""
    problems = Problems()
    found = {
        name: load_driver(driver, Path(), problems)
        for name, driver in (("meter", "scpi-impedance-meter"), ("scanner", "scpi-scanner"))
    }
    assert not len(problems)
    return {name: driver for name, driver in found.items() if driver is not None}


DRIVERS = shipped_drivers()


def high_bench() -> tuple[Bench, dict[str, Driver]]:
    """The shipped bench for rated voltage (16 positions, 10 kohm each, 800 V) and its drivers."""
    problems = Problems()
    found = load_bench(shipped("simulators") / "depot-retest-bench.toml", problems)
    assert found is not None, [str(problem) for problem in problems]
    drivers = load_drivers(found, problems)
    assert drivers is not None
    assert not len(problems)
    return found, dict(drivers)


HIGH, HIGH_DRIVERS = high_bench()


def capacitor(part_id: str = "C1", nominal: float = 100e-9, **more: Any) -> Part:
    """A capacitor, 100 nF ± 10 % 100 V PP unless told otherwise."""
    plain: dict[str, Any] = {
        "position": "P1",
        "tolerance_low": -0.1,
        "tolerance_high": 0.1,
        "rated_v": 100.0,
        "dielectric": "PP",
    }
    return Part(part_id=part_id, kind=Kind.CAPACITOR, nominal=nominal, **{**plain, **more})


def inductor(part_id: str = "L1", nominal: float = 10e-3, **more: Any) -> Part:
    """An inductor, 10 mH ± 10 % 0.2 A unless told otherwise."""
    plain: dict[str, Any] = {
        "position": "P2",
        "tolerance_low": -0.1,
        "tolerance_high": 0.1,
        "rated_a": 0.2,
    }
    return Part(part_id=part_id, kind=Kind.INDUCTOR, nominal=nominal, **{**plain, **more})


def resistor(part_id: str = "R1", nominal: float = 10e3, **more: Any) -> Part:
    """A resistor, 10 kohm ± 5 % 0.25 W unless told otherwise."""
    plain: dict[str, Any] = {
        "position": "P3",
        "tolerance_low": -0.05,
        "tolerance_high": 0.05,
        "rated_w": 0.25,
    }
    return Part(part_id=part_id, kind=Kind.RESISTOR, nominal=nominal, **{**plain, **more})


@dataclass(frozen=True, kw_only=True)
class Made:
    """What came of a sequence: the brief, or the problems by their ids and keys."""

    brief: Brief | None
    problems: Problems

    @property
    def ids(self) -> set[str]:
        """The ids of the problems."""
        return {problem.id for problem in self.problems}

    @property
    def keys(self) -> set[tuple[str, str]]:
        """(id, key) of the problems."""
        return {(problem.id, problem.key) for problem in self.problems}

    @property
    def good(self) -> Brief:
        """The brief; fails with the problems where there is none."""
        assert self.brief is not None, "\n".join(str(problem) for problem in self.problems)
        return self.brief


def make_high(folder: Path, text: str, *parts: Part, on: Bench | None = None) -> Made:
    """`make` on the bench for rated voltage; parts lie at its positions '1' to '16'."""
    return make(folder, text, *parts, on=on or HIGH, drivers=HIGH_DRIVERS)


def make(
    folder: Path,
    text: str,
    *parts: Part,
    on: Bench | None = None,
    drivers: dict[str, Driver] | None = None,
) -> Made:
    """Write the sequence, load it and unroll it."""
    path = folder / "sequence.toml"
    path.write_text(text, encoding="utf-8")
    problems = Problems()
    sequence = load_sequence(path, problems)
    brief = None
    if sequence is not None:
        brief = unroll(
            sequence,
            bench=on or bench(),
            drivers=DRIVERS if drivers is None else drivers,
            parts=parts or (capacitor(),),
            sequence_file=path,
            parts_file=folder / "parts.csv",
            problems=problems,
        )
    return Made(brief=brief, problems=problems)
