"""The depot's high-voltage bench: its two files describe one bench, and its faulty parts show."""

import pytest

from ohmward.errors import Problems
from ohmward.setup.bench import Bench, load_bench
from ohmward.setup.parts import load_parts
from ohmward.setup.resources import shipped
from ohmward.sim.circuit import Circuit
from ohmward.sim.parts import PhysicalPart
from ohmward.sim.path import PathTruth
from ohmward.sim.physical import Physical, read_physical
from ohmward.sim.tray import Models, fill

SIMULATORS = shipped("simulators")
LOTS = ("film", "electrolytic")


@pytest.fixture(scope="module")
def bench() -> Bench:
    problems = Problems()
    found = load_bench(SIMULATORS / "depot-retest-bench.toml", problems)
    assert found is not None, list(problems)
    return found


@pytest.fixture(scope="module")
def physical(bench: Bench) -> Physical:
    assert bench.physical_path is not None
    return read_physical(bench.physical_path)


def path_of(physical: Physical) -> PathTruth:
    assert physical.path is not None
    return physical.path


def test_both_files_name_the_same_contacts_and_none_is_promised_more_than_it_stands(
    bench: Bench, physical: Physical
) -> None:
    described = bench.high_voltage
    path = path_of(physical)
    assert described is not None
    truths = {contact.channel: contact for contact in path.contacts()}
    promised = {contact.channel: contact for _, contact in described.contacts()}
    assert truths.keys() == promised.keys()
    for channel, contact in promised.items():
        truth, relay = truths[channel], described.relay_of(contact)
        assert contact.made_unpowered == truth.rests_closed
        assert relay.switch_v <= path.kind(truth).switch_v
        assert relay.switch_a <= path.kind(truth).switch_a
    for place, one in zip(path.places, described.positions, strict=True):
        assert place.name == one.name
        assert place.connect.channel == one.connect.channel
        assert place.short.channel == one.short.channel
        assert [each.channel for each in place.sense] == [each.channel for each in one.sense]
        assert [each.channel for each in place.meter] == [each.channel for each in one.meter]
        assert place.series_ohm == pytest.approx(one.series.resistance_ohm, rel=0.01)
        assert place.discharge_ohm == pytest.approx(one.discharge_resistor.resistance_ohm, rel=0.01)
    assert path.divider_ohm == pytest.approx(described.divider_ohm, rel=0.01)


def lot(name: str, bench: Bench, physical: Physical, seed: int) -> dict[str, PhysicalPart]:
    problems = Problems()
    rows = load_parts(SIMULATORS / f"depot-{name}-lot.csv", bench, problems)
    assert not list(problems)
    plain = [
        {
            "part_id": part.part_id,
            "kind": part.kind.value,
            "nominal": part.nominal,
            "tolerance_low": part.tolerance_low,
            "tolerance_high": part.tolerance_high,
            "rated_v": part.rated_v,
        }
        for part in rows
    ]
    found = fill(plain, physical.parts, Models([SIMULATORS / "parts"]), seed)
    return {row.position: found[row.part_id] for row in rows}


@pytest.mark.parametrize("name", LOTS)
def test_every_part_has_its_truth(name: str, bench: Bench, physical: Physical) -> None:
    parts = lot(name, bench, physical, 1)
    assert {part.part_id for part in parts.values()} <= physical.parts.keys()
    assert sum(bool(part.fault) for part in parts.values()) >= 4


def test_the_lots_hold_every_fault_that_only_voltage_brings_out(physical: Physical) -> None:
    assert {one.fault for one in physical.parts.values()} >= {
        "leaky at voltage",
        "badly formed",
        "unrecoverable",
        "absorbs too much",
        "breaks down",
        "lost contact",
    }


class Retest:
    """One part of a lot at its position, as a careful person would take it through by hand."""

    def __init__(self, position: str, part: PhysicalPart, path: PathTruth) -> None:
        self.part, self.position = part, position
        self.rated_v = part.figures.rated_v
        self.circuit = Circuit(path, {position: part})
        n = int(position)
        self._tell(**{"302": True, "303": True, "301": True, str(400 + n): True})
        self._tell(**{str(500 + n): True, str(600 + n): True})

    def _tell(self, **closed: bool) -> None:
        for channel, close in closed.items():
            self.circuit.relay(channel, close)
        self.wait(0.05)

    def wait(self, seconds: float) -> None:
        self.circuit.advance(self.circuit.now_s + seconds)

    def charge(self, share: float, seconds: float, limit_a: float = 5e-3) -> None:
        volts = share * self.rated_v
        self.circuit.set_supply(volts, limit_a, True, 100.0)
        self.wait(volts / 100.0 + seconds)

    def leakage_a(self) -> float:
        """The meter's current less the divider's, as the bench knows it."""
        return self.circuit.meter_current() - self.circuit.divider_voltage() / 1.002e9

    def down(self, wait_s: float, short_s: float) -> None:
        """Off, through the discharge resistor, shorted; then open and alone."""
        n = int(self.position)
        self.circuit.set_supply(0.0, 5e-3, False)
        self._tell(**{"303": False})
        self.wait(wait_s)
        self._tell(**{str(700 + n): True, str(500 + n): False, str(400 + n): False})
        self.wait(short_s)
        self._tell(**{str(700 + n): False})


@pytest.mark.slow
def test_film_lot_by_hand(bench: Bench, physical: Physical) -> None:
    for seed in range(3):
        for position, part in lot("film", bench, physical, seed).items():
            retest = Retest(position, part, path_of(physical))
            volts, farad = retest.rated_v, part.figures.drawn.value
            retest.charge(1.0, 60.0)
            reached = retest.circuit.voltage(position) > 0.99 * volts
            assert reached == (part.fault != "lost contact"), part.part_id
            # a fifth of the least τ of makers' tables (values.md: PET 10000 MΩ·µF)
            assert (retest.leakage_a() > volts * farad / 2000) == (
                part.fault == "leaky at voltage"
            ), part.part_id
            retest.charge(1.0, 840.0)
            retest.down(2.0, 10.0)
            retest.wait(900.0)
            came_back = retest.circuit.voltage(position) / volts
            assert (came_back > 0.006) == (part.fault == "absorbs too much"), part.part_id
            proven = Retest(position, part, path_of(physical))
            proven.charge(1.25, 60.0)
            fell = "breakdown" in [event.kind for event in proven.circuit.events]
            assert fell == (part.fault == "breaks down"), part.part_id


def limit_a(farad: float, volts: float) -> float:
    """A general-purpose series (values.md): to 100 V 0.01·CV or 3 µA, above two lines in CV."""
    cv = farad * 1e6 * volts
    if volts <= 100.0:
        return max(0.01 * cv, 3.0) * 1e-6
    return (0.03 * cv + 15.0 if cv <= 1000.0 else 0.02 * cv + 25.0) * 1e-6


@pytest.mark.slow
def test_electrolytic_lot_by_hand(bench: Bench, physical: Physical) -> None:
    for position, part in lot("electrolytic", bench, physical, 1).items():
        retest = Retest(position, part, path_of(physical))
        volts, nominal = retest.rated_v, part.figures.drawn.value
        most_a = limit_a(nominal, volts)
        retest.charge(1.0, 120.0 if volts <= 100.0 else 300.0)
        reached = retest.circuit.voltage(position) > 0.98 * volts
        if part.fault in ("", "dried out"):
            assert reached, part.part_id
            assert retest.leakage_a() < 0.5 * most_a, part.part_id
        elif part.fault == "lost contact":
            assert not reached, part.part_id
        else:
            assert retest.leakage_a() > 1.2 * most_a, part.part_id
            retest.wait(2 * 3600.0)
            recovered = retest.leakage_a() < most_a
            assert recovered == (part.fault == "badly formed"), part.part_id
