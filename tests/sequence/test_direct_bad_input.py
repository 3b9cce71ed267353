"""What a stage under voltage, its bench and its parts can have wrong, each by its stable id."""

from dataclasses import dataclass
from pathlib import Path

import pytest
from tests.sequence.given import (
    CAPACITORS,
    HEAD,
    HIGH,
    HIGH_DRIVERS,
    bench,
    capacitor,
    inductor,
    make,
    make_high,
    resistor,
)
from tests.sequence.test_direct import REFORM, film, leakage, limit, path_with, stage, stored

from ohmward.errors import Problems
from ohmward.sequence.load import load_sequence
from ohmward.setup.bench import Bench
from ohmward.terms.part import Part
from ohmward.terms.role import Role


@dataclass(frozen=True, kw_only=True)
class Case:
    """A text, a part or a bench with one thing wrong, and where that is noted."""

    id: str
    key: str
    text: str = CAPACITORS + leakage()
    part: Part = film()  # noqa: RUF009 - a part is frozen
    bench: Bench | None = None


PLACES = HIGH.high_voltage.positions if HIGH.high_voltage else ()
RELAYS = HIGH.high_voltage.relays if HIGH.high_voltage else {}


def place_with(**changes: object) -> Bench:
    """The bench with other values at its first position."""
    return path_with(positions=(PLACES[0].model_copy(update=changes), *PLACES[1:]))


def without(role: Role) -> Bench:
    """The bench without one instrument."""
    left = {name: one for name, one in HIGH.instruments.items() if one.role is not role}
    return HIGH.model_copy(update={"instruments": left})


def vacuum_with(**changes: object) -> Bench:
    """The bench with a lesser sort of its main relay."""
    lesser = RELAYS["vacuum"].model_copy(update=changes)
    return path_with(relays={**RELAYS, "vacuum": lesser})


def resistor_with(name: str, **changes: object) -> Bench:
    """The bench with a lesser resistor at its first position."""
    return place_with(**{name: getattr(PLACES[0], name).model_copy(update=changes)})


BIG = film(nominal=100e-6)  # 8.8 J at 400 V

WITHIN = [
    Case(
        id="stage-says-two-ramps",
        key="stage[1]",
        text=CAPACITORS + leakage(ramp='"10 V/s"', ramp_time='"1 min"'),
    ),
    Case(
        id="stage-without-voltage", key="stage[1]", text=CAPACITORS + stage("leakage", soak='"1 s"')
    ),
    Case(
        id="stage-says-two-voltages",
        key="stage[1]",
        text=CAPACITORS + leakage(rule='"insulation-by-rating"'),
    ),
    Case(
        id="stage-unknown-rule",
        key="stage[1].rule",
        text=CAPACITORS + stage("insulation", rule='"by-rating"'),
    ),
    Case(
        id="out-of-range",
        key="stage[1].voltage",
        text=CAPACITORS + leakage(voltage='"120 % of rating"'),
    ),
    Case(
        id="wrong-unit-or-value", key="stage[1].voltage", text=CAPACITORS + leakage(voltage='"1 A"')
    ),
    Case(id="out-of-range", key="stage[1].voltage", text=CAPACITORS + leakage(voltage='"0 V"')),
    Case(id="missing-unit", key="stage[1].voltage", text=CAPACITORS + leakage(voltage="400")),
    Case(
        id="missing-key", key="stage[1].soak", text=CAPACITORS + stage("leakage", voltage='"1 V"')
    ),
    Case(id="unknown-key", key="stage[1].step", text=CAPACITORS + leakage(step='"1 V"')),
    Case(
        id="read-after-soak", key="stage[1].read_at", text=CAPACITORS + leakage(read_at='"10 min"')
    ),
    Case(
        id="times-not-rising",
        key="stage[1].read_at",
        text=CAPACITORS + leakage(read_at='["2 min", "1 min"]'),
    ),
    Case(id="stage-other-kind", key="stage[1].parts", text=HEAD + leakage()),
    Case(
        id="voltages-not-rising",
        key="stage[1].voltages",
        text=CAPACITORS
        + REFORM.replace('"50 % of rating"', '"100 % of rating"').replace('"400 V", ', ""),
    ),
    Case(
        id="reform-unlimited",
        key="stage[1].current_limit",
        text=CAPACITORS + REFORM.replace('current_limit = "5 mA"\n', ""),
    ),
    Case(
        id="budget-too-short",
        key="stage[1].budget",
        text=CAPACITORS + REFORM.replace('"20 min"', '"2 min"'),
    ),
    Case(
        id="stage-unknown-rule",
        key="stage[1].leakage_rule",
        text=CAPACITORS + REFORM + 'leakage_rule = "leakage-by-dielectric"\n',
    ),
    Case(
        id="limit-not-measured",
        key="limit[1].stage",
        text=CAPACITORS + leakage() + limit("capacitance_f", max='"1 uF"'),
    ),
    Case(
        id="limit-not-measured",
        key="limit[1].at.since_voltage",
        text=CAPACITORS
        + leakage()
        + limit("leakage_a", max='"1 uA"', at='{ since_voltage = "2 min" }'),
    ),
    Case(
        id="limit-not-measured",
        key="limit[1].stage",
        text=CAPACITORS + leakage() + limit("polarization_index", min="2"),
    ),
    Case(
        id="limit-condition-of-part",
        key="limit[1].at.frequency",
        text=CAPACITORS
        + leakage()
        + limit("leakage_a", max='"1 uA"', at='{ frequency = "1 kHz" }'),
    ),
    Case(
        id="limit-not-relative",
        key="limit[1]",
        text=CAPACITORS + leakage() + limit("leakage_a", max='"+5 %"'),
    ),
    Case(
        id="rule-other-quantity",
        key="limit[1].quantity",
        text=CAPACITORS + leakage() + limit("insulation_ohm", rule='"leakage-cv"'),
    ),
]

BETWEEN = [
    # the part
    Case(id="rating-missing", key="row 7, rated_voltage", part=film(rated_v=None, row=7)),
    Case(
        id="rating-missing",
        key="row 7, rated_voltage",
        text=CAPACITORS + leakage(voltage='"10 V"'),
        part=film(rated_v=None, row=7),
    ),
    Case(
        id="rating-missing",
        key="row 7, rated_voltage",
        text=CAPACITORS + stage("insulation"),
        part=film(rated_v=None, row=7),
    ),
    Case(
        id="rating-ac-as-dc",
        key="row 7, rated_voltage",
        part=film(rated_v=None, rated_ac_v=250.0, row=7),
    ),
    Case(
        id="rating-ac-as-dc",
        key="row 7, rated_voltage",
        text=CAPACITORS + leakage(voltage='"10 V"'),
        part=film(rated_v=None, rated_ac_v=250.0, row=7),
    ),
    Case(
        id="rating-ac-as-dc",
        key="row 7, rated_voltage",
        text=CAPACITORS + stage("insulation"),
        part=film(rated_v=None, rated_ac_v=250.0, row=7),
    ),
    Case(
        id="voltage-beyond-rating",
        key="stage[1].voltage",
        text=CAPACITORS + leakage(voltage='"401 V"'),
    ),
    Case(
        id="voltage-beyond-rating",
        key="stage[1].voltage",
        text='rating_allowed = "80 %"\n' + CAPACITORS + leakage(),
    ),
    Case(
        id="voltage-beyond-rating",
        key="stage[1].voltage",
        text=CAPACITORS + stage("proof", voltage='"500 V"', dwell='"1 s"'),
    ),
    Case(id="reform-missing", key="row 7, last_energised", part=stored(row=7)),
    Case(
        id="rule-not-stated",
        key="stage[1].rule",
        text=CAPACITORS + stage("proof", rule='"proof-ceramic"', dwell='"1 s"'),
    ),
    Case(
        id="rule-lacks-cell",
        key="row 7, dielectric",
        text=CAPACITORS + stage("proof", rule='"proof-film"', dwell='"1 s"'),
        part=film(dielectric="", row=7),
    ),
    Case(
        id="high-voltage-before-impedance",
        key="stage 'leakage'",
        text=CAPACITORS + leakage() + stage("sweep", frequency='"1 kHz"', level='"1 V"'),
        part=film(dielectric="X7R"),
    ),
    Case(
        id="rating-missing",
        key="row 7, rated_current",
        text=HEAD.replace('["capacitor", "inductor", "resistor"]', '"inductor"')
        + stage("resistance", current='"5 mA"'),
        part=inductor(position="1", rated_a=None, row=7),
    ),
    Case(
        id="bias-beyond-rating",
        key="stage[1].current",
        text=HEAD.replace('["capacitor", "inductor", "resistor"]', '"resistor"')
        + stage("resistance", current='"10 mA"'),
        part=resistor(position="1", rated_w=0.25),
    ),
    Case(
        id="limit-not-measured",
        key="limit[1].stage",
        text=CAPACITORS
        + REFORM
        + leakage(read_at='"1 min"')
        + limit("leakage_a", rule='"leakage-jan-c-62"'),
        part=stored(),
    ),
    Case(
        id="limit-not-measured",
        key="limit[1].at.voltage",
        text=CAPACITORS + leakage() + limit("leakage_a", max='"1 uA"', at='{ voltage = "100 V" }'),
    ),
    # the bench
    Case(id="voltage-beyond-bench", key="stage[1].voltage", part=film(rated_v=900.0)),
    Case(
        id="voltage-beyond-divider",
        key="stage[1].voltage",
        bench=path_with(divider_ceiling_v=300.0),
    ),
    Case(
        id="voltage-beyond-supply",
        key="stage[1].voltage",
        part=film(rated_v=1100.0),
        bench=path_with(ceiling_v=2000.0, divider_ceiling_v=2000.0),
    ),
    Case(
        id="current-beyond-bench",
        key="stage[1].current",
        text=HEAD.replace('["capacitor", "inductor", "resistor"]', '"inductor"')
        + stage("resistance", current='"20 mA"'),
        part=inductor(position="1"),
    ),
    Case(
        id="droop-too-large",
        key="stage[1].read_at",
        part=film(nominal=1e-9),
        text=CAPACITORS + stage("absorption", voltage='"200 V"'),
    ),
    Case(
        id="path-missing", key="high_voltage", bench=HIGH.model_copy(update={"high_voltage": None})
    ),
    Case(
        id="position-without-high-voltage",
        key="high_voltage.position",
        bench=path_with(positions=PLACES[1:]),
    ),
    Case(
        id="relay-too-weak",
        key="high_voltage.position[1].discharge.relay",
        bench=vacuum_with(switch_v=300.0),
    ),
    Case(
        id="relay-too-weak",
        key="high_voltage.position[1].discharge.relay",
        bench=vacuum_with(switch_a=1e-3),
    ),
    Case(
        id="relay-too-weak",
        key="high_voltage.position[1].sense[2].relay",
        bench=vacuum_with(switch_v=300.0),
    ),
    Case(
        id="relay-too-weak",
        key="high_voltage.position[1].meter[1].relay",
        bench=path_with(
            relays={**RELAYS, "reed": RELAYS["reed"].model_copy(update={"stand_off_v": 300.0})}
        ),
    ),
    Case(
        id="resistor-too-small",
        key="high_voltage.position[1].discharge_resistor.pulse",
        part=BIG,
        bench=resistor_with("discharge_resistor", pulse_j=5.0),
    ),
    Case(
        id="resistor-too-small",
        key="high_voltage.position[1].series.pulse",
        part=BIG,
        bench=resistor_with("series", pulse_j=0.5),
    ),
    Case(
        id="resistor-too-small",
        key="high_voltage.position[1].series.power",
        bench=resistor_with("series", power_w=0.5),
    ),
    Case(
        id="current-meter-unprotected",
        key="high_voltage.position[1].series.resistance",
        bench=path_with(meter_survives_a=0.02),
    ),
    Case(id="role-missing", key="instrument", bench=without(Role.VOLTMETER)),
    Case(id="role-missing", key="instrument", bench=without(Role.CURRENT_METER)),
    Case(id="role-missing", key="instrument", bench=without(Role.HIGH_VOLTAGE_SUPPLY)),
]


@pytest.mark.parametrize("wrong", WITHIN + BETWEEN, ids=lambda one: f"{one.id} {one.key}")
def test_each_problem_is_found_where_a_person_mends_it(wrong: Case, tmp_path: Path) -> None:
    made = make_high(tmp_path, wrong.text, wrong.part, on=wrong.bench)
    assert made.brief is None
    assert (wrong.id, wrong.key) in made.keys, [str(problem) for problem in made.problems]


@pytest.mark.parametrize("wrong", WITHIN, ids=lambda one: f"{one.id} {one.key}")
def test_one_mistake_is_one_problem(wrong: Case, tmp_path: Path) -> None:
    path = tmp_path / "sequence.toml"
    path.write_text(wrong.text, encoding="utf-8")
    problems = Problems()
    load_sequence(path, problems)
    assert {(one.id, one.key) for one in problems} == {(wrong.id, wrong.key)}, [
        str(problem) for problem in problems
    ]


@pytest.mark.parametrize("wrong", BETWEEN, ids=lambda one: f"{one.id} {one.key}")
def test_nothing_else_is_blamed_for_it(wrong: Case, tmp_path: Path) -> None:
    made = make_high(tmp_path, wrong.text, wrong.part, on=wrong.bench)
    follows = {
        # more than the divider or the supply stands is also more than their neighbours stand
        "voltage-beyond-supply": {"relay-too-weak", "current-meter-unprotected"},
    }
    assert made.ids <= {wrong.id} | follows.get(wrong.id, set()), list(map(str, made.problems))


def test_what_lies_on_a_low_voltage_bench_lacks_all_of_it_at_once(tmp_path: Path) -> None:
    made = make(tmp_path, CAPACITORS + leakage(), capacitor(), on=bench())
    assert made.ids == {"path-missing", "role-missing"}
    lacking = {problem.expected for problem in made.problems if problem.id == "role-missing"}
    assert any("sees the part's own terminals" in text for text in lacking)
    assert len(lacking) == 3  # supply, current meter, voltmeter: the scanner is there


def test_everything_wrong_comes_in_one_go(tmp_path: Path) -> None:
    """Wrong in the sequence, in the parts list and on the bench."""
    text = CAPACITORS + leakage(soak='"1 s"', read_at='"1 h"') + limit("d", max="1")
    parts = (film("C1", rated_v=None, row=2), film("C2", 100e-6, position="2", row=3))
    made = make_high(tmp_path, text, *parts, on=path_with(meter_survives_a=0.02))
    assert made.ids == {
        "read-after-soak",
        "limit-not-measured",
        "rating-missing",
        "current-meter-unprotected",
    }


def test_the_plain_ones_have_nothing_wrong(tmp_path: Path) -> None:
    for text, part in (
        (CAPACITORS + leakage(), film()),
        (CAPACITORS + stage("insulation"), film()),
        (CAPACITORS + REFORM + leakage(), stored()),
        (CAPACITORS + stage("absorption", voltage='"200 V"'), film()),
    ):
        assert make_high(tmp_path, text, part).ids == set()
    assert set(HIGH_DRIVERS) == set(HIGH.instruments)
