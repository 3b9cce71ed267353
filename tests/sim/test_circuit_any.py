"""Whatever is done to the bench, in any order: it goes on, and nothing exceeds its supply."""

import math

from hypothesis import given, settings
from hypothesis import strategies as st
from tests.sim.bench_path import ideal, made, wired

from ohmward.sim.circuit import Circuit
from ohmward.sim.parts import PhysicalPart

CHANNELS = sorted(contact.channel for contact in wired().contacts())
PARTS = (
    "pet",
    "leaky",
    "x7r",
    "aluminium",
    "bad aluminium",
    "ideal",
    "resistor",
    "shorted",
    "open",
)


def part(kind: str, part_id: str) -> PhysicalPart:
    match kind:
        case "pet":
            return made("film-pet", 1e-7, 400.0, part_id=part_id, clears=(1.2,))
        case "leaky":
            return made("film-pp", 1e-7, 400.0, part_id=part_id, fault="leaky at voltage")
        case "x7r":
            return made("ceramic-x7r", 1e-6, 50.0, part_id=part_id)
        case "aluminium":
            return made("aluminium-electrolytic", 47e-6, 450.0, part_id=part_id)
        case "bad aluminium":
            return made(
                "aluminium-electrolytic", 47e-6, 450.0, part_id=part_id, fault="badly formed"
            )
        case "resistor":
            return made("resistor-film", 1e4, 500.0, part_id=part_id)
        case "shorted" | "open":
            return made("film-pp", 1e-7, 400.0, part_id=part_id, fault=kind)
    return ideal(1e-8, part_id)


seconds = st.one_of(st.just(0.0), st.floats(1e-6, 1e-2), st.floats(0.1, 1e4))
deeds = st.one_of(
    st.tuples(st.just("relay"), st.sampled_from(CHANNELS), st.booleans()),
    st.tuples(st.just("stick"), st.sampled_from(CHANNELS), st.sampled_from(["", "open", "closed"])),
    st.tuples(
        st.just("supply"),
        st.floats(0.0, 600.0),
        st.sampled_from([math.inf, 500.0, 10.0]),
        st.sampled_from([1e-5, 1e-3, 1e-2]),
        st.booleans(),
    ),
    st.tuples(st.just("burden"), st.sampled_from([10.0, 1e3, 5e6])),
    st.tuples(st.just("bias"), st.floats(0.0, 40.0)),
    st.tuples(
        st.just("break"),
        st.sampled_from("AB"),
        st.sampled_from(["feed", "high", "low", "sense", "part"]),
    ),
    st.tuples(st.just("temperature"), st.floats(15.0, 35.0)),
    st.tuples(st.just("look")),
)


def do(circuit: Circuit, deed: tuple[object, ...]) -> None:
    match deed:
        case ("relay", str(channel), bool(closed)):
            circuit.relay(channel, closed)
        case ("stick", str(channel), str(how)):
            circuit.stick(channel, how)
        case ("supply", float(volts), float(slew), float(limit), bool(on)):
            circuit.set_supply(volts, limit, on, slew)
        case ("burden", float(ohm)):
            circuit.set_burden(ohm)
        case ("bias", float(volts)):
            circuit.set_meter_bias(volts)
        case ("break", str(position), str(wire)):
            circuit.break_wire(position, wire)
        case ("temperature", float(celsius)):
            circuit.set_temperature(celsius)
        case _:
            circuit.part_state("A")


@given(
    st.sampled_from(PARTS),
    st.sampled_from(PARTS),
    st.lists(st.tuples(deeds, seconds), min_size=1, max_size=25),
)
@settings(max_examples=25, deadline=None)
def test_any_order_of_deeds(
    first: str, second: str, story: list[tuple[tuple[object, ...], float]]
) -> None:
    circuit = Circuit(wired(), {"A": part(first, "C1"), "B": part(second, "C2")}, seed=1)
    highest = 0.0
    for deed, passes in story:
        if deed[0] in ("supply", "bias"):
            highest = max(highest, float(str(deed[1])))
        do(circuit, deed)
        circuit.advance(circuit.now_s + passes)
        for position in "AB":
            volts = circuit.voltage(position)
            assert math.isfinite(volts)
            assert abs(volts) <= highest * (1 + 1e-6) + 1e-3
        assert abs(circuit.divider_voltage()) <= highest * (1 + 1e-6) + 1e-3
        assert 0.0 <= circuit.supply_current() + 1e-9 <= 1.1e-2
        assert math.isfinite(circuit.meter_current())
