"""The bench in time against ngspice `.tran`: another program, another method, the same circuit.

The netlist is written here from the bench's figures; only the part's relaxations come from its
model. ngspice integrates with gear and reltol 1e-7; its exit code says nothing, so that its file
is read. Voltages and currents agree within 1e-3.
"""

import os
import shutil
import subprocess
from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from ohmward.setup.resources import shipped
from ohmward.sim.build import relaxations
from ohmward.sim.circuit import Circuit
from ohmward.sim.parts import PhysicalPart
from ohmward.sim.path import ContactAt, PathTruth, PlaceTruth, RelayKind
from ohmward.sim.physical import PartTruth, read_model

NGSPICE = shutil.which("ngspice")
SERIES_OHM, DISCHARGE_OHM, SHORT_OHM, BURDEN_OHM, CONTACT_OHM = 10e3, 100e3, 10.0, 1e3, 0.1
DIVIDER_OHM, OUTPUT_OHM, BLEEDER_OHM, OUTPUT_F, RAIL_F = 1e9, 5.0, 10e6, 10e-9, 200e-12
INSULATION_OHM, RAIL_OHM, LEAD_OHM = 1e14, 1e13, 5e-3
MOVES_S = 1e-3
Array = NDArray[np.float64]


def bench(part: PhysicalPart) -> Circuit:
    def contact(channel: str) -> ContactAt:
        return ContactAt(channel=channel, relay="plain")

    path = PathTruth(
        supply=contact("supply"),
        bypass=contact("bypass"),
        places=(
            PlaceTruth(
                name="A",
                connect=contact("connect"),
                series_ohm=SERIES_OHM,
                discharge=contact("discharge"),
                discharge_ohm=DISCHARGE_OHM,
                short=contact("short"),
                short_ohm=SHORT_OHM,
                sense=(contact("high"), contact("low")),
            ),
        ),
        relays={
            "plain": RelayKind(
                contact_ohm=CONTACT_OHM, operate_s=MOVES_S, release_s=MOVES_S, bounces=0
            )
        },
        divider_ohm=DIVIDER_OHM,
        burden_ohm=BURDEN_OHM,
    )
    return Circuit(path, {"A": part})


def film(nominal: float) -> PhysicalPart:
    return PhysicalPart(
        part_id="C1",
        model=read_model(shipped("simulators") / "parts" / "film-pet.toml"),
        truth=PartTruth(model="film-pet"),
        nominal=nominal,
        tolerance=0.05,
        rated_v=400.0,
        rated_a=0.0,
        seed=5,
    )


class Foreign:
    """The same bench in ngspice, phase by phase: each begins where the one before has ended."""

    def __init__(self, folder: Path, part: PhysicalPart, began_s: float) -> None:
        if NGSPICE is None:
            missing = "ngspice is not installed: this comparison with another program is NOT made"
            if os.environ.get("CI"):
                pytest.fail(missing)
            pytest.skip(missing)
        self.now_s = began_s
        self._folder = folder
        self._resistors = [
            f"Rbleed out 0 {BLEEDER_OHM}",
            f"Rrail rail 0 {RAIL_OHM}",
            f"Rburden ret 0 {BURDEN_OHM}",
            f"Rsupply out rail {CONTACT_OHM}",
            f"Rins clip ret {INSULATION_OHM}",
            f"Rhigh clip term {LEAD_OHM}",
            f"Rlow low ret {LEAD_OHM}",
        ]
        # what keeps its state: element, its nodes, value, what is saved of it
        self._kept = [("Cout", "out", "0", OUTPUT_F), ("Crail", "rail", "0", RAIL_F)]
        if part.kind == "capacitor":
            self._film(part)
        else:
            self._choke(part)
        self._state = dict.fromkeys((one[0] for one in self._kept), 0.0)

    def _film(self, part: PhysicalPart) -> None:
        figures = part.figures
        c, fast, slow = relaxations(figures, 0.0, 23.0)
        # ohm at 23 °C: the model's is at 25 °C, a tenth of it at 85 °C
        insulation_ohm = figures.drawn.insulation_s / figures.farad(20.0) * 10 ** (2 / 60)
        self._resistors += [
            f"Resr term core {figures.esr_ohm(23.0)!r}",
            f"Rleak core low {insulation_ohm!r}",
        ]
        self._kept.append(("Cmain", "core", "low", c + sum(each.farad for each in fast)))
        for number, each in enumerate(slow):
            self._resistors.append(f"Rb{number} core b{number} {each.ohm!r}")
            self._kept.append((f"Cb{number}", f"b{number}", "low", each.farad))

    def _choke(self, part: PhysicalPart) -> None:
        figures = part.figures
        self._resistors += [
            f"Rw term core {figures.winding_ohm(23.0)!r}",
            f"Rc core low {figures.core_ohm()!r}",
        ]
        self._kept.append(("Lmain", "core", "low", figures.drawn.value))

    def until(
        self, end_s: float, extra: Sequence[str], wanted: str, times: Sequence[float]
    ) -> Array:
        """Go on to an instant with these elements added; what was wanted at these instants."""
        lasts_s = end_s - self.now_s
        saved = [
            f"i({name})" if name[0] == "L" else f"v({a})-v({b})" if b != "0" else f"v({a})"
            for name, a, b, _ in self._kept
        ]
        deck = [
            "the bench in time",
            *self._resistors,
            *(
                f"{name} {a} {b} {value!r} ic={self._state[name]!r}"
                for name, a, b, value in self._kept
            ),
            *extra,
            ".options method=gear reltol=1e-7 abstol=1e-16 vntol=1e-10 chgtol=1e-20 gmin=1e-18",
            ".control",
            "set numdgt=12",
            f"tran {lasts_s / 1e6:.6g} {lasts_s:.15g} 0 {lasts_s / 5000:.6g} uic",
            f"wrdata found {' '.join([wanted, *saved])}",
            "quit",
            ".endc",
            ".end",
        ]
        (self._folder / "bench.cir").write_text("\n".join(deck) + "\n")
        (self._folder / "found").unlink(missing_ok=True)
        subprocess.run(
            [str(NGSPICE), "-b", "bench.cir"],
            capture_output=True,
            timeout=120,
            check=False,
            cwd=self._folder,
        )
        table = np.loadtxt(self._folder / "found")
        assert table[-1, 0] == pytest.approx(lasts_s), "ngspice did not reach the end"
        for place, (name, *_) in enumerate(self._kept):
            self._state[name] = float(table[-1, 2 * place + 3])
        since_s = np.array(times) - self.now_s
        self.now_s = end_s
        return np.interp(since_s, table[:, 0], table[:, 1])


CONNECTED = [f"Rconnect rail clip {SERIES_OHM + CONTACT_OHM}"]
DISCHARGING = [f"Rdischarge rail ret {DISCHARGE_OHM + CONTACT_OHM}"]
SHORTED = [f"Rshort clip ret {SHORT_OHM + CONTACT_OHM}"]


def supply(volts: float) -> list[str]:
    return [f"Vs s 0 {volts}", f"Rs s out {OUTPUT_OHM}"]


@pytest.mark.processes
@pytest.mark.slow
def test_charge_soak_short_and_recovery(tmp_path: Path) -> None:
    part = film(100e-9)
    ours = bench(part)
    for channel in ("supply", "connect"):
        ours.relay(channel, True)
    ours.advance(1.0)
    theirs = Foreign(tmp_path, part, 1.0)

    def same_volts(until_s: float, extra: list[str], times: Sequence[float]) -> None:
        volts = []
        for at_s in times:
            ours.advance(at_s)
            volts.append(ours.voltage("A"))
        found = theirs.until(until_s, extra, "v(core)-v(low)", times)
        np.testing.assert_allclose(volts, found, rtol=1e-3)

    ours.set_supply(400.0, 1e3, True)
    on = [*supply(400.0), *CONNECTED]
    same_volts(2.0, on, (1.0003, 1.001, 1.003, 1.02, 2.0))
    times = (3.0, 11.0, 31.0, 61.0, 301.0, 601.0, 900.9)
    amperes = []
    for at_s in times:
        ours.advance(at_s)
        amperes.append(ours.meter_current())
    found = theirs.until(900.9, on, "v(ret)", times) / BURDEN_OHM
    np.testing.assert_allclose(amperes, found, rtol=1e-3)
    ours.set_supply(0.0, 1e3, False)
    ours.relay("discharge", True)
    same_volts(900.9 + MOVES_S, CONNECTED, (900.9 + MOVES_S,))
    same_volts(902.0 + MOVES_S, [*CONNECTED, *DISCHARGING], (900.91, 900.93, 900.95, 901.5, 902.0))
    ours.relay("short", True)
    ours.advance(911.0)
    theirs.until(911.0 + MOVES_S, [*CONNECTED, *DISCHARGING, *SHORTED], "v(core)", (911.0,))
    for channel in ("short", "discharge", "connect"):
        ours.relay(channel, False)
    same_volts(1811.0, [], (912.0, 920.0, 1000.0, 1400.0, 1811.0))
    assert ours.voltage("A") > 0.1, "absorption charges it up again"


@pytest.mark.processes
@pytest.mark.slow
@pytest.mark.parametrize("wanted", ["the part", "the divider", "the supply"])
def test_charging_at_the_current_limit_with_the_divider(wanted: str, tmp_path: Path) -> None:
    part = film(4.7e-6)
    ours = bench(part)
    for channel in ("supply", "connect", "high", "low"):
        ours.relay(channel, True)
    ours.advance(0.1)
    ours.set_supply(300.0, 1e-3, True)
    times = (0.2, 0.5, 1.0, 1.3, 1.5, 1.55, 1.6, 1.7, 2.0, 3.0)
    looks: dict[str, tuple[Callable[[], float], str]] = {
        "the part": (lambda: ours.voltage("A"), "v(core)-v(low)"),
        "the divider": (ours.divider_voltage, "v(vmh)-v(vml)"),
        "the supply": (ours.supply_current, "i(vs)"),
    }
    look, expression = looks[wanted]
    found = []
    for at_s in times:
        ours.advance(at_s)
        found.append(look())
    sense = [f"Rh term vmh {CONTACT_OHM}", f"Rl low vml {CONTACT_OHM}"]
    limited = f"Bs 0 s I = min(1e-3, max(0, (300 - v(out))/{OUTPUT_OHM}))"
    extra = [*CONNECTED, *sense, f"Rdivider vmh vml {DIVIDER_OHM}", limited, "Vs s out 0"]
    theirs = Foreign(tmp_path, part, 0.1).until(3.0, extra, expression, times)
    np.testing.assert_allclose(found, theirs, rtol=1e-3)


@pytest.mark.processes
@pytest.mark.slow
def test_an_inductor_through_the_series_resistor(tmp_path: Path) -> None:
    part = PhysicalPart(
        part_id="L1",
        model=read_model(shipped("simulators") / "parts" / "choke-ferrite.toml"),
        truth=PartTruth(model="choke-ferrite"),
        nominal=10.0,
        tolerance=0.1,
        rated_v=0.0,
        rated_a=0.5,
        seed=5,
    )
    ours = bench(part)
    for channel in ("supply", "connect"):
        ours.relay(channel, True)
    ours.advance(0.1)
    ours.set_supply(100.0, 1e3, True)
    times = (0.1001, 0.1003, 0.101, 0.102, 0.105, 0.15)
    found = []
    for at_s in times:
        ours.advance(at_s)
        found.append(ours.meter_current())
    extra = [*supply(100.0), *CONNECTED]
    theirs = Foreign(tmp_path, part, 0.1).until(0.15, extra, "v(ret)", times) / BURDEN_OHM
    np.testing.assert_allclose(found, theirs, rtol=1e-3)
