"""Everything wrong in a TOML file is told at once, each by its key, expected and found."""

from pathlib import Path
from typing import Annotated, Any, Literal

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import AfterValidator, Field

from ohmward.errors import Problems
from ohmward.setup.quantities import (
    Hertz,
    Model,
    OneOrMany,
    PositiveHertz,
    Seconds,
    Volts,
    quantity,
    wrong,
)
from ohmward.setup.toml import dotted, load, one_of, read_toml, salvage, validate


class Sweep(Model):
    kind: Literal["sweep"]
    frequency_hz: OneOrMany[PositiveHertz] = Field(alias="frequency")
    level_v: Volts = Field(0.5, alias="level")


class Soak(Model):
    kind: Literal["soak"]
    dwell_s: Seconds = Field(alias="dwell")


class Plan(Model):
    format: Literal[1]
    name: str
    stages: tuple[Annotated[Sweep | Soak, Field(discriminator="kind")], ...] = Field(
        (), alias="stage"
    )
    spare: dict[str, Sweep] = Field(default_factory=dict)
    count: int = 1
    ratio: Annotated[float, quantity("1", minimum=0, maximum=1)] = 0.0


def _odd(value: int) -> int:
    if value % 2 == 0:
        raise wrong("an odd number", value, "not-odd")
    return value


def told(data: dict[str, Any]) -> dict[str, tuple[str, str, str]]:
    problems = Problems()
    assert validate(Plan, data, "plan.toml", problems) is None
    assert all(problem.file == "plan.toml" for problem in problems)
    return {problem.key: (problem.id, problem.expected, problem.found) for problem in problems}


def test_a_right_file_is_its_model() -> None:
    data = {
        "format": 1,
        "name": "x",
        "stage": [
            {"kind": "sweep", "frequency": "1 kHz"},
            {"kind": "sweep", "frequency": ["100 Hz", "1 kHz"], "level": 0},
            {"kind": "soak", "dwell": "1 min"},
        ],
        "ratio": 0.5,
    }
    problems = Problems()
    plan = validate(Plan, data, "plan.toml", problems)
    assert plan is not None
    assert not len(problems)
    first, second, third = plan.stages
    assert isinstance(first, Sweep)
    assert isinstance(second, Sweep)
    assert isinstance(third, Soak)
    assert first.frequency_hz == (1000.0,)
    assert second.frequency_hz == (100.0, 1000.0)
    assert second.level_v == 0.0
    assert third.dwell_s == 60.0


def test_all_problems_come_in_one_go_each_under_its_key() -> None:
    found = told(
        {
            "format": 1,
            "nam": "x",
            "count": "x",
            "ratio": 1.5,
            "stage": [
                {"kind": "sweep", "frequency": ["5 V", 100, "1 kHz", "-1 Hz"], "levell": "1 V"},
                {"kind": "swep"},
                {"frequency": "1 kHz"},
                {"kind": "soak", "dwell": "1 min", "frequency": "1 kHz"},
                {"kind": "sweep", "frequency": []},
                "sweep",
            ],
            "spare": {"a": {"kind": "sweep"}},
        }
    )
    assert {key: problem[0] for key, problem in found.items()} == {
        "name": "missing-key",
        "nam": "unknown-key",
        "count": "wrong-type",
        "ratio": "out-of-range",
        "stage[1].frequency[1]": "wrong-unit-or-value",
        "stage[1].frequency[2]": "missing-unit",
        "stage[1].frequency[4]": "out-of-range",
        "stage[1].levell": "unknown-key",
        "stage[2].kind": "unknown-word",
        "stage[3].kind": "unknown-word",
        "stage[4].frequency": "unknown-key",
        "stage[5].frequency": "empty-list",
        "stage[6]": "wrong-type",
        "spare.a.frequency": "missing-key",
    }


def test_an_unknown_key_is_told_the_nearest_that_is_known_there() -> None:
    found = told(
        {
            "format": 1,
            "name": "x",
            "stages": [],
            "stage": [{"kind": "soak", "dwel": "1 s"}],
            "spare": {"level": {"kind": "sweep", "frequency": "1 Hz", "levl": 0}},
        }
    )
    assert "'stage'" in found["stages"][1]
    assert "'dwell'" in found["stage[1].dwel"][1]
    assert "frequency" not in found["stage[1].dwel"][1]
    assert "'level'" in found["spare.level.levl"][1]


def test_a_unit_error_says_what_was_expected_and_found() -> None:
    stage = {"kind": "sweep", "frequency": "5 V"}
    _, expected, found = told({"format": 1, "name": "x", "stage": [stage]})["stage[1].frequency"]
    assert "Hz" in expected
    assert found == "'5 V', a voltage"


@pytest.mark.parametrize("version", [0, 2, "1", True, None])
def test_another_format_is_refused_as_a_whole(version: object) -> None:
    found = told({"format": version, "anything": 1})
    assert list(found) == ["format"]
    assert found["format"][:2] == ("unknown-format", "1")


def test_a_missing_format_is_a_missing_key() -> None:
    assert told({"name": "x"})["format"][0] == "missing-key"


def test_numbers_from_python_need_no_unit() -> None:
    assert Sweep(kind="sweep", frequency_hz=(1000.0,), level_v=1.0).frequency_hz == (1000.0,)


def test_salvage_leaves_out_what_is_wrong_and_keeps_the_rest() -> None:
    data = {
        "format": 1,
        "nam": 3,
        "ratio": "half",
        "stage": [{"kind": "soak"}, {"kind": "soak", "dwell": "1 s"}],
    }
    assert salvage(Plan, data) is None
    plan = salvage(Plan, data, {"name": "-"})
    assert plan is not None
    assert (plan.name, plan.ratio, len(plan.stages)) == ("-", 0.0, 1)


def test_lists_count_from_one() -> None:
    assert dotted(("stage", 1, "frequency")) == "stage[2].frequency"
    assert dotted(()) == "-"


def test_the_nearest_name_comes_first() -> None:
    assert one_of("capacitr", ["inductor", "capacitor"]).startswith("'capacitor'")
    assert one_of("zzz", ["a", "b"]) == "one of a, b"


@pytest.mark.parametrize(
    ("content", "kind"),
    [
        (None, "file-missing"),
        (b"name = \xff", "not-utf8"),
        (b"name = ", "toml-syntax"),
        (b"a = 1\na = 2", "toml-syntax"),
        (b"a = " + b"[" * 5000, "toml-syntax"),
        (b"a = " + b"9" * 5000, "toml-syntax"),
    ],
)
def test_a_file_that_is_no_toml_is_one_problem(
    tmp_path: Path, content: bytes | None, kind: str
) -> None:
    path = tmp_path / "plan.toml"
    if content is not None:
        path.write_bytes(content)
    problems = Problems()
    assert read_toml(path, problems) is None
    assert [problem.id for problem in problems] == [kind]


def test_a_folder_is_no_file(tmp_path: Path) -> None:
    problems = Problems()
    assert load(Plan, tmp_path, problems) is None
    assert [problem.id for problem in problems] == ["file-unreadable"]


def test_an_editor_may_have_left_a_byte_order_mark(tmp_path: Path) -> None:
    path = tmp_path / "plan.toml"
    path.write_bytes(b'\xef\xbb\xbfformat = 1\nname = "x"\n')
    problems = Problems()
    plan = load(Plan, path, problems)
    assert plan is not None
    assert plan.name == "x"


values = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=8) | st.dates(),
    lambda inner: (
        st.lists(inner, max_size=3)
        | st.dictionaries(
            st.sampled_from(
                ["format", "name", "stage", "kind", "frequency", "dwell", "spare", "ratio", "x"]
            ),
            inner,
            max_size=4,
        )
    ),
    max_leaves=12,
)


@given(st.dictionaries(st.sampled_from(["format", "name", "stage", "spare", "ratio"]), values))
def test_any_table_is_a_model_or_problems(data: dict[str, Any]) -> None:
    problems = Problems()
    model = validate(Plan, data, "plan.toml", problems)
    assert (model is None) == (len(problems) > 0)
    salvage(Plan, data, {"format": 1, "name": "-"})


def test_a_validator_may_say_what_it_expected() -> None:
    class Odd(Model):
        count: Annotated[int, AfterValidator(_odd)]

    problems = Problems()
    assert validate(Odd, {"count": 2}, "odd.toml", problems) is None
    assert [problem.as_dict() for problem in problems] == [
        {
            "id": "not-odd",
            "file": "odd.toml",
            "key": "count",
            "expected": "an odd number",
            "found": "2",
        }
    ]


def test_one_or_many_holds_a_tuple() -> None:
    class Many(Model):
        at: OneOrMany[Hertz]

    assert Many(at=(1.0, 2.0)).at == (1.0, 2.0)
