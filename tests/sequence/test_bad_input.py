"""Every problem that a sequence can have, by the text that provokes it, and all of them at once."""

from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import pytest
from tests.sequence.given import (
    CAPACITORS,
    DRIVERS,
    HEAD,
    SWEEP,
    bench,
    capacitor,
    inductor,
    make,
    resistor,
)

from ohmward.errors import Problems
from ohmward.sequence.load import load_sequence
from ohmward.terms.kind import Polarity
from ohmward.terms.part import Part

LIMIT = """
[[limit]]
stage = "sweep"
quantity = "capacitance_f"
at = { frequency = "1 kHz" }
min = "-10 %"
source = "test"
"""


@dataclass(frozen=True, kw_only=True)
class Case:
    """A text with one thing wrong, and where that is noted."""

    id: str
    key: str
    text: str
    part: Part = capacitor()  # noqa: RUF009 - a part is frozen
    bench: Any = None


def sweep(**changes: str) -> str:
    """The plain sweep with keys replaced or added, values as TOML."""
    lines = {
        "kind": '"sweep"',
        "name": '"sweep"',
        "frequency": '["1 kHz", "10 kHz"]',
        "level": '"1 V"',
        **changes,
    }
    return CAPACITORS + "[[stage]]\n" + "".join(f"{k} = {v}\n" for k, v in lines.items() if v)


def limit(**changes: str) -> str:
    """The plain sweep with a limit whose keys are replaced or added; '' leaves one out."""
    lines = {
        "stage": '"sweep"',
        "quantity": '"capacitance_f"',
        "at": '{ frequency = "1 kHz" }',
        "min": '"-10 %"',
        "source": '"test"',
        **changes,
    }
    return sweep() + "[[limit]]\n" + "".join(f"{k} = {v}\n" for k, v in lines.items() if v)


def case(problem_id: str, key: str, text: str, **more: Any) -> Case:
    return Case(id=problem_id, key=key, text=text, **more)


POLAR = capacitor(polarity=Polarity.POLAR, dielectric="aluminium", rated_v=25.0)
COIL_HEAD = HEAD.replace('["capacitor", "inductor", "resistor"]', '"inductor"')

WITHIN = [
    # the file by itself
    case("unknown-format", "format", sweep().replace("format = 1", "format = 2")),
    case("unknown-key", "frob", "frob = 1\n" + sweep()),
    case("unknown-key", "stage[1].wait", sweep(wait='"1 s"')),
    case("missing-key", "follows", sweep().replace('follows = "nobody"', "")),
    case("unknown-word", "kinds", sweep().replace('"capacitor"', '"condenser"', 1)),
    case("unknown-word", "stage[1].kind", sweep(kind='"swep"')),
    case("missing-key", "stage[1].frequency", sweep(frequency="")),
    case("wrong-unit-or-value", "stage[1].frequency", sweep(frequency='"1 V"')),
    case("missing-unit", "stage[1].frequency[2]", sweep(frequency='["1 kHz", 3]')),
    case("empty-list", "stage[1].frequency", sweep(frequency="[]")),
    case("empty-list", "stage", CAPACITORS + "stage = []\n"),
    case("out-of-range", "stage[1].level", sweep(level='"0 V"')),
    case("wrong-unit-or-value", "stage[1].bias", sweep(bias='"5 ohm"')),
    case("wrong-value", "stage[1].name", sweep(name='"Sweep!"')),
    case("range-backwards", "stage[1].frequency",
         sweep(frequency='{ from = "1 MHz", to = "1 kHz", per_decade = 3 }')),
    case("too-many-points", "stage[1].frequency",
         sweep(frequency='{ from = "1e-20 Hz", to = "1 MHz", per_decade = 1000 }')),
    case("value-twice", "stage[1].frequency[2]", sweep(frequency='["1 kHz", "1000 Hz"]')),
    case("value-twice", "stage[1].level[3]", sweep(level='["1 V", "0.5 V", "1000 mV"]')),
    case("value-twice", "stage[1].bias[2]", sweep(bias='["0 V", "0 A"]')),
    case("out-of-range", "stage[1].bias[1]", sweep(bias='["120 % of rating", "0 V"]')),
    case("interval-without-repeats", "stage[1].interval", sweep(interval='"1 s"')),
    case("stage-name-twice", "stage[2].name", sweep() + SWEEP),
    case("filter-lets-nothing-in", "stage[1].parts", sweep(parts='{ kind = "inductor" }')),
    case("filter-lets-nothing-in", "stage[1].parts",
         sweep(parts='{ above = "2 nF", up_to = "1 nF" }')),
    # limits against stages
    case("limit-unknown-stage", "limit[1].stage", limit(stage='"swoop"')),
    case("limit-unknown-quantity", "limit[1].quantity", limit(quantity='"capacity"')),
    case("limit-kind-lacks-quantity", "limit[1].quantity",
         limit(quantity='"inductance_h"', min='"1 mH"')),
    case("limit-not-measured", "limit[1].at.frequency", limit(at='{ frequency = "2 kHz" }')),
    case("limit-not-measured", "limit[1].at.level", limit(at='{ level = "2 V" }')),
    case("limit-not-measured", "limit[1].at.bias", limit(at='{ bias = "5 V" }')),
    case("limit-condition-of-part", "limit[1].at.frequency",
         limit(quantity='"self_resonance_hz"', min='"1 MHz"')),
    case("limit-says-nothing", "limit[1]", limit(min="")),
    case("limit-says-two-things", "limit[1]", limit(rule='"marked-tolerance"')),
    case("times-without-rule", "limit[1].times", limit(times="2")),
    case("limit-crossed", "limit[1]", limit(max='"-20 %"')),
    case("limit-not-relative", "limit[1]", limit(quantity='"rs_ohm"', min="", max='"+5 %"')),
    case("wrong-value", "limit[1].min", limit(min='"95 %"')),
    case("wrong-unit-or-value", "limit[1].min", limit(min='"90 mH"')),
    case("missing-key", "limit[1].source", limit(source="")),
    case("limit-unknown-rule", "limit[1].rule", limit(min="", rule='"marked-tollerance"')),
    case("rule-other-quantity", "limit[1].quantity",
         limit(min="", rule='"class-1-q"', quantity='"d"')),
    case("rule-other-kind", "limit[1].rule",
         COIL_HEAD + SWEEP + '[[limit]]\nstage = "sweep"\nquantity = "q"\n'
         'rule = "class-1-q"\nsource = "x"\n'),
    case("rule-needs-frequency", "limit[1].at.frequency",
         limit(min="", at="", rule='"nominal-impedance"', quantity='"impedance_ohm"')),
    case("times-without-rule", "limit[1].times",
         limit(min="", rule='"nominal-impedance"', quantity='"impedance_ohm"', times="2")),
]  # fmt: skip

BETWEEN = [
    # the meter
    case("frequency-beyond-meter", "stage[1].frequency[2]",
         sweep(frequency='["1 kHz", "3 MHz"]')),
    case("frequency-beyond-meter", "stage[1].frequency",
         sweep(frequency='{ from = "1 kHz", to = "3 MHz", per_decade = 1 }')),
    case("level-beyond-meter", "stage[1].level", sweep(level='"3 V"')),
    case("bias-beyond-meter", "stage[1].bias", sweep(bias='"41 V"')),
    case("integration-unknown", "stage[1].integration", sweep(integration='"slow"')),
    case("pair-unknown", "stage[1].pair", sweep(pair='"C-D"')),
    # the part
    case("bias-beyond-rating", "stage[1].bias", sweep(bias='"15 V"'), part=capacitor(rated_v=16.0)),
    case("bias-beyond-rating", "stage[1].bias",
         "rating_allowed = \"50 %\"\n" + sweep(bias='"8 V"'), part=capacitor(rated_v=16.0)),
    case("level-beyond-rating", "stage[1].bias", sweep(level='"2 V"'), part=capacitor(rated_v=2.5)),
    case("level-beyond-rating", "stage[1].bias", sweep(level='"2 V"'),
         part=capacitor(rated_v=None, rated_ac_v=1.5)),
    case("bias-reverse", "stage[1].bias", sweep(), part=POLAR),
    case("bias-reverse", "stage[1].bias", sweep(bias='"-5 V"'), part=POLAR),
    case("bias-wrong-for-kind", "stage[1].bias", sweep(bias='"10 mA"')),
    case("bias-wrong-for-kind", "stage[1].bias", COIL_HEAD + SWEEP + 'bias = "1 V"\n',
         part=inductor(position="P1")),
    case("bias-beyond-rating", "stage[1].bias", COIL_HEAD + SWEEP + 'bias = "60 mA"\n',
         part=inductor(position="P1", rated_a=0.05)),
    case("bias-beyond-rating", "stage[1].bias", HEAD + SWEEP + 'bias = "5 V"\n',
         part=resistor(position="P1", nominal=50.0)),
    case("rating-missing", "row 7, rated_voltage", sweep(bias='"5 V"'),
         part=capacitor(rated_v=None, row=7)),
    case("rating-missing", "row 7, rated_voltage", sweep(bias='"10 % of rating"'),
         part=capacitor(rated_v=None, row=7)),
    case("rating-missing", "row 7, rated_current", COIL_HEAD + SWEEP + 'bias = "10 mA"\n',
         part=inductor(position="P1", rated_a=None, row=7)),
    case("rating-missing", "row 7, rated_power", HEAD + SWEEP + 'bias = "5 V"\n',
         part=resistor(position="P1", rated_w=None, row=7)),
    case("rating-ac-as-dc", "row 7, rated_voltage", sweep(bias='"5 V"'),
         part=capacitor(rated_v=None, rated_ac_v=250.0, row=7)),
    case("rule-lacks-cell", "row 7, tolerance",
         limit(min="", rule='"marked-tolerance"'), part=capacitor(tolerance_low=None, row=7)),
    case("rule-other-frequency", "limit[1].at.frequency",
         limit(min="", quantity='"q"', rule='"class-1-q"'),
         part=capacitor(nominal=1e-11, dielectric="C0G")),
    case("limit-not-measured", "limit[1].stage",
         limit(min="", at="", quantity='"q"', rule='"class-1-q"'),
         part=capacitor(nominal=1e-11, dielectric="C0G")),
    case("limit-crossed", "limit[1]", limit(max='"50 nF"')),
    # the bench
    case("bias-beyond-bench", "stage[1].bias", sweep(bias='"20 V"'),
         bench=bench(bias_ceiling="10 V")),
    case("level-beyond-bench", "stage[1].bias", sweep(), bench=bench(level_ceiling="0.5 V")),
    case("unknown-position", "row 7, position", sweep(), part=capacitor(position="P9", row=7)),
    case("sequence-fits-no-part", "stage", sweep(parts='{ dielectric = "PET" }')),
]  # fmt: skip


@pytest.mark.parametrize("wrong", WITHIN + BETWEEN, ids=lambda one: f"{one.id} {one.key}")
def test_each_problem_is_found_where_a_person_mends_it(wrong: Case, tmp_path: Path) -> None:
    made = make(tmp_path, wrong.text, wrong.part, on=wrong.bench)
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


def test_the_plain_texts_have_nothing_wrong(tmp_path: Path) -> None:
    for text in (sweep(), limit()):
        assert make(tmp_path, text).ids == set()


def test_a_missing_role_is_a_problem_of_the_bench(tmp_path: Path) -> None:
    plain = bench()
    alone = plain.model_copy(update={"instruments": {"scanner": plain.instruments["scanner"]}})
    made = make(tmp_path, sweep(), on=alone, drivers={"scanner": DRIVERS["scanner"]})
    assert made.keys == {("role-missing", "instrument")}


def test_everything_is_reported_in_one_go(tmp_path: Path) -> None:
    text = """format = 1
name = "test"
purpose = "to be tested"
follows = "nobody"
kinds = ["capacitor", "inductor"]
color = "red"

[[stage]]
kind = "sweep"
name = "first"
parts = { kind = "capacitor" }
frequency = ["1 kHz", "5 MHz"]
level = "1 V"
bias = ["0 V", "5 ohm", "30 V"]

[[stage]]
kind = "sweep"
name = "second"
frequency = "1 kHz"
level = []

[[limit]]
stage = "third"
quantity = "capacitance_f"
min = "95 %"
source = "test"

[[limit]]
stage = "first"
quantity = "d"
rule = "class-1-z"
source = "test"
"""
    made = make(tmp_path, text, capacitor(rated_v=16.0), capacitor("C2", rated_v=None, row=3))
    assert made.brief is None
    assert made.keys == {
        ("unknown-key", "color"),
        ("wrong-unit-or-value", "stage[1].bias[2]"),
        ("empty-list", "stage[2].level"),
        ("limit-unknown-stage", "limit[1].stage"),
        ("wrong-value", "limit[1].min"),
        ("limit-unknown-rule", "limit[2].rule"),
        ("frequency-beyond-meter", "stage[1].frequency[2]"),
        ("bias-beyond-rating", "stage[1].bias"),
        ("rating-missing", "row 3, rated_voltage"),
    }
    assert all(p.expected and p.found and p.file for p in made.problems)


def test_without_bench_and_driver_the_rest_is_still_checked(tmp_path: Path) -> None:
    made = make(tmp_path, sweep(bias='"15 V"', level='"9 V"'), capacitor(rated_v=16.0), drivers={})
    assert made.ids == {"bias-beyond-rating"}
    assert made.brief is None


def test_a_missing_file_and_broken_toml_are_problems(tmp_path: Path) -> None:
    problems = Problems()
    assert load_sequence(tmp_path / "none.toml", problems) is None
    (tmp_path / "broken.toml").write_text("format = ", encoding="utf-8")
    assert load_sequence(tmp_path / "broken.toml", problems) is None
    assert [problem.id for problem in problems] == ["file-missing", "toml-syntax"]


@pytest.mark.parametrize(
    ("bias", "level", "reverse_v", "accepted"),
    [
        # bias − √2·level ≥ −reverse on a polar part
        ("0 V", "1 V", 0.0, False),
        ("1.4 V", "1 V", 0.0, False),
        ("1.42 V", "1 V", 0.0, True),
        ("0 V", "1 V", 1.5, True),
        ("-1 V", "0.3 V", 1.5, True),
        ("-1.1 V", "0.3 V", 1.5, False),
        # bias + √2·level ≤ rating of 25 V
        ("23.58 V", "1 V", 0.0, True),
        ("23.6 V", "1 V", 0.0, False),
    ],
)
def test_a_polar_part_stays_between_reverse_and_rating(
    bias: str, level: str, reverse_v: float, accepted: bool, tmp_path: Path
) -> None:
    text = sweep(bias=f'"{bias}"', level=f'"{level}"')
    made = make(tmp_path, text, replace(POLAR, reverse_v=reverse_v))
    assert (made.brief is not None) is accepted, made.ids
