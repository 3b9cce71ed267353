"""A small high-voltage bench for tests: two positions on one rail, every figure round."""

from pathlib import Path

from ohmward.sim.circuit import Circuit
from ohmward.sim.parts import PhysicalPart
from ohmward.sim.path import ContactAt, PathTruth, PlaceTruth, RelayKind, SupplyTruth
from ohmward.sim.physical import PartModel, PartTruth, read_model

MODELS = Path(__file__).parents[2] / "simulators" / "parts"
SERIES_OHM, DISCHARGE_OHM, SHORT_OHM, DIVIDER_OHM = 10e3, 100e3, 10.0, 1e9
OPERATE_S, RELEASE_S = 4e-3, 2e-3
KINDS = {
    "high": RelayKind(
        contact_ohm=0.1, operate_s=OPERATE_S, release_s=RELEASE_S, switch_v=1000.0, switch_a=0.5
    ),
    "dry": RelayKind(operate_s=1e-3, release_s=1e-3, bounces=0, switch_v=1.0, switch_a=0.05),
}


def contact(channel: str, relay: str = "high", **more: str | bool) -> ContactAt:
    return ContactAt(
        channel=channel,
        relay=relay,
        rests_closed=bool(more.get("rests_closed")),
        stuck=str(more.get("stuck", "")),
    )


def place(name: str, *, series_ohm: float = SERIES_OHM) -> PlaceTruth:
    return PlaceTruth(
        name=name,
        connect=contact(f"{name}.connect"),
        series_ohm=series_ohm,
        discharge=contact(f"{name}.discharge"),
        discharge_ohm=DISCHARGE_OHM,
        short=contact(f"{name}.short"),
        short_ohm=SHORT_OHM,
        sense=(contact(f"{name}.high"), contact(f"{name}.low")),
        meter=(contact(f"{name}.m1", "dry"), contact(f"{name}.m2", "dry")),
    )


def wired(
    *,
    series_ohm: float = SERIES_OHM,
    survives_a: float = 1.0,
    discharge_at: str = "rail",
    supply: SupplyTruth | None = None,
) -> PathTruth:
    return PathTruth(
        supply=contact("supply"),
        bypass=contact("bypass"),
        places=(place("A", series_ohm=series_ohm), place("B", series_ohm=series_ohm)),
        relays=KINDS,
        divider_ohm=DIVIDER_OHM,
        survives_a=survives_a,
        discharge_at=discharge_at,
        source=supply or SupplyTruth(),
    )


# a capacitor and nothing else: for closed forms
IDEAL = PartModel(kind="capacitor", spread=0.0, esr_spread=0.0)


def ideal(farad: float, part_id: str = "C1", rated_v: float = 1000.0) -> PhysicalPart:
    return PhysicalPart(
        part_id=part_id,
        model=IDEAL,
        truth=PartTruth(model="ideal"),
        nominal=farad,
        tolerance=0.0,
        rated_v=rated_v,
        rated_a=0.0,
        seed=0,
    )


def made(
    model: str,
    nominal: float,
    rated_v: float,
    *,
    fault: str = "",
    clears: tuple[float, ...] = (),
    part_id: str = "C1",
    seed: int = 4,
) -> PhysicalPart:
    return PhysicalPart(
        part_id=part_id,
        model=read_model(MODELS / f"{model}.toml"),
        truth=PartTruth(model=model, fault=fault, clears=clears),
        nominal=nominal,
        tolerance=0.1,
        rated_v=rated_v,
        rated_a=0.5,
        seed=seed,
    )


def close(circuit: Circuit, *channels: str) -> None:
    """Close channels and wait until their contacts are at rest."""
    for channel in channels:
        circuit.relay(channel, True)
    circuit.advance(circuit.now_s + 0.02)


def open_(circuit: Circuit, *channels: str) -> None:
    """Open channels and wait until their contacts are at rest."""
    for channel in channels:
        circuit.relay(channel, False)
    circuit.advance(circuit.now_s + 0.02)


def wait(circuit: Circuit, seconds: float) -> None:
    circuit.advance(circuit.now_s + seconds)


def kinds(circuit: Circuit) -> list[str]:
    """What has happened, in order."""
    return [event.kind for event in circuit.events]
