"""The sequences that ship: readable, described by the schema, sourced, fit for their parts."""

import tomllib
from dataclasses import replace
from pathlib import Path

import jsonschema
import pytest
from tests.sequence.given import (
    CAPACITORS,
    DRIVERS,
    HIGH,
    HIGH_DRIVERS,
    SWEEP,
    bench,
    capacitor,
    inductor,
    resistor,
)

from ohmward.errors import Problems
from ohmward.sequence.brief import Brief
from ohmward.sequence.load import load_sequence
from ohmward.sequence.model import Sequence
from ohmward.sequence.unroll import unroll
from ohmward.setup.resources import shipped
from ohmward.setup.schema import schema, schema_text
from ohmward.terms.kind import Polarity
from ohmward.terms.part import Part

FILES = sorted(shipped("sequences").glob("*.toml"))
SCHEMA = shipped("schemas") / "sequence.json"

ENERGISING = {"absorption", "coupling-retest", "electrolytic-retest", "film-retest", "proof"}


def tray() -> tuple[Part, ...]:
    """A few good parts of each sort, one position each."""
    polar = Polarity.POLAR
    made = (
        capacitor("PP1", 100e-9, rated_v=400.0),
        capacitor("PP2", 4.7e-9, rated_v=63.0),
        capacitor("PET1", 1e-6, dielectric="PET", rated_v=100.0),
        capacitor("C0G1", 100e-12, dielectric="C0G", rated_v=50.0),
        capacitor("C0G2", 10e-9, dielectric="C0G", rated_v=50.0),
        capacitor("X7R1", 100e-9, dielectric="X7R", rated_v=50.0),
        capacitor("X7R2", 22e-6, dielectric="X7R", rated_v=16.0),
        capacitor("AL1", 10e-6, dielectric="aluminium", rated_v=63.0, polarity=polar),
        capacitor("AL2", 470e-6, dielectric="aluminium", rated_v=25.0, polarity=polar),
        capacitor("AL3", 1000e-6, dielectric="aluminium", rated_v=16.0, polarity=polar),
        inductor("L1", 10e-3),
        inductor("L2", 100e-6, rated_a=1.0),
        resistor("R1", 10e3),
        resistor("R2", 100.0),
    )
    return tuple(replace(part, position=f"P{n}") for n, part in enumerate(made, start=1))


def brief_of(path: Path) -> Brief:
    problems = Problems()
    sequence = load_sequence(path, problems)
    assert sequence is not None
    high = any(stage.energises for stage in sequence.stage)
    parts = tray()
    if high:
        parts = tuple(replace(part, position=part.position.removeprefix("P")) for part in parts)
    brief = unroll(
        sequence,
        bench=HIGH if high else bench(positions=14),
        drivers=HIGH_DRIVERS if high else DRIVERS,
        parts=parts,
        sequence_file=path,
        parts_file=Path("parts.csv"),
        problems=problems,
    )
    assert brief is not None, "\n".join(str(problem) for problem in problems)
    return brief


def test_the_named_ones_are_there() -> None:
    assert {path.stem for path in FILES} >= {
        *ENERGISING,
        "ceramic-bias",
        "day-soak",
        "depot-survey",
        "film-sweep",
        "inductor-survey",
        "resistor-survey",
    }


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.stem)
def test_file_schema_and_model_agree(path: Path) -> None:
    text = path.read_text(encoding="utf-8")
    assert text.startswith("#:schema ../schemas/sequence.json\n")
    jsonschema.validate(tomllib.loads(text), schema("sequence"), jsonschema.Draft202012Validator)
    problems = Problems()
    assert load_sequence(path, problems) is not None
    assert [str(problem) for problem in problems] == []


def test_the_schema_file_is_the_models_schema() -> None:
    assert SCHEMA.read_text(encoding="utf-8") == schema_text("sequence")
    jsonschema.Draft202012Validator.check_schema(schema("sequence"))


@pytest.mark.parametrize(
    "text",
    [
        CAPACITORS + SWEEP + "frob = 1\n",
        CAPACITORS + SWEEP.replace('"1 V"', "1"),
        CAPACITORS + SWEEP.replace('["1 kHz", "10 kHz"]', "[]"),
        CAPACITORS + SWEEP.replace('["1 kHz", "10 kHz"]', '{ from = "1 kHz" }'),
        CAPACITORS + SWEEP.replace('"sweep"\nname', '"swoop"\nname'),
        CAPACITORS + SWEEP + '[[limit]]\nstage = "sweep"\nquantity = "capacity"\nsource = "x"\n',
        CAPACITORS,
    ],
)
def test_schema_and_model_refuse_the_same(text: str, tmp_path: Path) -> None:
    with pytest.raises(jsonschema.ValidationError):
        jsonschema.validate(
            tomllib.loads(text), schema("sequence"), jsonschema.Draft202012Validator
        )
    path = tmp_path / "sequence.toml"
    path.write_text(text, encoding="utf-8")
    problems = Problems()
    load_sequence(path, problems)
    assert len(problems)


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.stem)
def test_it_says_whose_conditions_and_whose_limits(path: Path) -> None:
    sequence = load_sequence(path, Problems())
    assert isinstance(sequence, Sequence)
    assert len(sequence.follows) > 40
    assert all(limit.source for limit in sequence.limit)
    assert sequence.limit


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.stem)
def test_it_can_be_carried_out_and_decided_on_the_shipped_meter(path: Path) -> None:
    brief = brief_of(path)
    judged = {limit.part_id for limit in brief.limits}
    assert judged == {part.part_id for part in brief.parts}
    assert [doubt.reason for doubt in brief.cannot_decide] == []
    assert bool(brief.energising) == (path.stem in ENERGISING)
    assert brief.needs_authorisation == (path.stem in ENERGISING)


def test_the_depot_survey_leaves_no_part_out() -> None:
    brief = brief_of(shipped("sequences") / "depot-survey.toml")
    assert [part.part_id for part in brief.parts] == [part.part_id for part in tray()]


def test_the_day_soak_takes_a_day_of_seconds() -> None:
    brief = brief_of(shipped("sequences") / "day-soak.toml")
    assert {stage.readings for stage in brief.stages} == {86_400}
    assert all(stage.interval_s == 1.0 for stage in brief.stages)
