"""Driver files: what is read, what is refused and how it is told, what extends what."""

import re
import tomllib
from pathlib import Path

import jsonschema  # type: ignore[import-untyped]  # ships no types
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.errors import Problem, Problems
from ohmward.setup.driver import Driver, load_driver
from ohmward.setup.resources import shipped
from ohmward.setup.schema import schema
from ohmward.setup.template import TemplateError, read_template
from ohmward.terms.role import Role

SHIPPED = sorted(path.stem for path in shipped("drivers").glob("*.toml"))

SMALLEST = """
format = 1
role = "impedance meter"
[reading.impedance]
ask = "READ?"
fields = ["first", "second"]
"""


def load(folder: Path, text: str, name: str = "own.toml") -> tuple[Driver | None, list[Problem]]:
    (folder / name).write_text(text, encoding="utf-8")
    problems = Problems()
    return load_driver(name, folder, problems), list(problems)


def good(folder: Path, text: str) -> Driver:
    driver, problems = load(folder, text)
    assert problems == []
    assert driver is not None
    return driver


def bad(folder: Path, text: str) -> dict[str, Problem]:
    driver, problems = load(folder, text)
    assert driver is None
    assert all(problem.file.endswith("own.toml") for problem in problems)
    return {problem.key: problem for problem in problems}


@pytest.mark.parametrize("name", SHIPPED)
def test_every_shipped_driver_loads(name: str) -> None:
    problems = Problems()
    driver = load_driver(name, Path("nowhere"), problems)
    assert list(problems) == []
    assert driver is not None
    assert driver.path.name == f"{name}.toml"
    assert driver.summary
    head = driver.path.read_text(encoding="utf-8").splitlines()[0]
    assert head.startswith("#:schema ")


@pytest.mark.parametrize("name", SHIPPED)
def test_every_shipped_driver_fits_the_schema(name: str) -> None:
    """What an editor says of a file is what the loader says of it; jsonschema is the referee."""
    path = shipped("drivers") / f"{name}.toml"
    data = tomllib.loads(path.read_text(encoding="utf-8"))
    if "extends" in data:
        return  # what a variation leaves out is in the file that it extends
    validator = jsonschema.Draft202012Validator(schema("driver"))
    assert [error.message for error in validator.iter_errors(data)] == []


def test_values_carry_their_units(tmp_path: Path) -> None:
    driver = good(
        tmp_path,
        SMALLEST
        + """
        [setting.frequency]
        unit = "Hz"
        set = "FREQ {value}"
        minimum = "20 Hz"
        maximum = "2 MHz"
        allowed = ["100 Hz", "1k"]
        tolerance = "0.01 %"
        """,
    )
    frequency = driver.setting["frequency"]
    assert (frequency.minimum, frequency.maximum) == (20.0, 2e6)
    assert frequency.allowed == (100.0, 1000.0)
    assert frequency.tolerance == pytest.approx(1e-4)


def test_every_problem_is_told_at_once(tmp_path: Path) -> None:
    found = bad(
        tmp_path,
        """
        format = 1
        role = "impedance meter"
        colour = "grey"
        [link]
        timeout = "2 V"
        baud_rat = 9600
        [setting.frequency]
        unit = "Hz"
        set = "FREQ {valeu}"
        minimum = "5 V"
        [setting.level]
        unit = "V"
        set = "VOLT {value"
        [setting.pair]
        kind = "word"
        set = "FUNC {value}"
        [reading.impedance]
        fields = ["first", "first"]
        """,
    )
    assert found["colour"].id == "unknown-key"
    assert found["link.timeout"].id == "wrong-unit-or-value"
    assert found["link.baud_rat"].expected.startswith("'baud_rate'")
    assert "'5 V'" in found["setting.frequency.minimum"].found
    assert found["setting.level.set"].id == "driver-template"
    assert "{{ for a brace" in found["setting.level.set"].expected
    assert "'words'" in found["setting.pair"].expected
    assert "first twice" in found["reading.impedance"].found


def test_unknown_placeholder_is_named(tmp_path: Path) -> None:
    text = SMALLEST + '[setting.level]\nunit = "V"\nset = "VOLT {valeu}"\n'
    found = bad(tmp_path, text)
    assert found["setting.level"].id == "driver-placeholder"
    assert "{valeu}" in found["setting.level"].found
    assert "{value}" in found["setting.level"].expected


def test_what_tables_say_of_each_other_is_checked(tmp_path: Path) -> None:
    found = bad(
        tmp_path,
        """
        format = 1
        role = "impedance meter"
        start = ["wake"]
        [setting.freqency]
        unit = "Hz"
        set = "FREQ {value}"
        [reading.impedance]
        fields = ["first", { name = "status", kind = "status" }]
        [watchdog]
        setting = "watchdog"
        """,
    )
    assert found["start"].id == "driver-name-leads-nowhere"
    assert "frequency" in found["setting.freqency"].expected
    assert found["reading.impedance.fields.status"].id == "driver-status-unmapped"
    assert "second" in found["reading.impedance.fields"].expected
    assert found["watchdog.setting"].id == "driver-name-leads-nowhere"


def test_lacking_what_the_role_needs(tmp_path: Path) -> None:
    found = bad(tmp_path, 'format = 1\nrole = "scanner"\n')
    assert {"action.close", "action.open", "action.open_all", "reading.state"} <= set(found)


@pytest.mark.parametrize(
    ("identity", "wanted"),
    [
        ("", "one of 'exactly', 'starts_with' and 'fields'"),
        ('exactly = "A"\nstarts_with = "B"', "one of 'exactly', 'starts_with' and 'fields'"),
    ],
)
def test_identity_is_known_in_one_way(tmp_path: Path, identity: str, wanted: str) -> None:
    found = bad(tmp_path, f"{SMALLEST}[identity]\n{identity}\n")
    assert found["identity"].expected == wanted


def test_overlapping_fields_of_a_frame(tmp_path: Path) -> None:
    text = """
    format = 1
    role = "impedance meter"
    codec = "frames"
    [frame]
    header = "55 AA"
    length = 8
    [reading.impedance]
    by = "offset"
    fields = [
      { name = "first", at = 2, length = 2 },
      { name = "second", at = 3, length = 2 },
    ]
    """
    found = bad(tmp_path, text)
    assert found["reading.impedance"].id == "driver-overlap"
    assert "first and second" in found["reading.impedance"].found


def test_bits_of_one_byte_do_not_overlap(tmp_path: Path) -> None:
    text = """
    format = 1
    role = "impedance meter"
    codec = "frames"
    [frame]
    header = "55 AA"
    length = 4
    [reading.impedance]
    by = "offset"
    fields = [
      { name = "first", at = 2, length = 2, bits = [0, 11] },
      { name = "second", at = 2, length = 1, bits = [4, 7] },
    ]
    """
    good(tmp_path, text)


def test_a_field_outside_its_frame(tmp_path: Path) -> None:
    text = """
    format = 1
    role = "impedance meter"
    codec = "frames"
    [frame]
    header = "55"
    length = 4
    [reading.impedance]
    by = "offset"
    fields = [{ name = "first", at = 1, length = 2 }, { name = "second", at = 3, length = 2 }]
    """
    found = bad(tmp_path, text)
    assert found["reading.impedance.fields.second"].id == "driver-field-outside"


def test_a_variation_is_five_lines(tmp_path: Path) -> None:
    driver = good(
        tmp_path,
        """
        format = 1
        extends = "scpi-impedance-meter"
        [setting.frequency]
        maximum = "100 kHz"
        """,
    )
    base = load_driver("scpi-impedance-meter", tmp_path, Problems())
    assert base is not None
    assert driver.setting["frequency"].maximum == 100e3
    assert driver.setting["frequency"].minimum == base.setting["frequency"].minimum
    assert driver.setting["level"] == base.setting["level"]
    assert driver.digest != base.digest


def test_a_chain_of_variations(tmp_path: Path) -> None:
    (tmp_path / "base.toml").write_text(SMALLEST, encoding="utf-8")
    middle = 'format = 1\nextends = "base.toml"\n[link]\ntimeout = "1 s"\ngap = "10 ms"\n'
    (tmp_path / "middle.toml").write_text(middle, encoding="utf-8")
    driver = good(tmp_path, 'format = 1\nextends = "middle.toml"\n[link]\ntimeout = "7 s"\n')
    assert (driver.link.timeout, driver.link.gap) == (7.0, 0.01)


def test_going_in_circles_is_told(tmp_path: Path) -> None:
    (tmp_path / "other.toml").write_text('format = 1\nextends = "own.toml"\n', encoding="utf-8")
    _, problems = load(tmp_path, 'format = 1\nextends = "other.toml"\n')
    assert [problem.id for problem in problems] == ["driver-extends-itself"]


def test_a_base_that_is_missing_is_told(tmp_path: Path) -> None:
    _, problems = load(tmp_path, 'format = 1\nextends = "nobody"\n')
    assert [problem.id for problem in problems] == ["file-missing"]


def test_constants_fill_placeholders(tmp_path: Path) -> None:
    driver = good(
        tmp_path,
        SMALLEST
        + """
        [setting.level]
        unit = "V"
        set = "SOUR{slot}:VOLT {value}"
        ask = "SOUR{slot}:VOLT?"
        [constants]
        slot = "3"
        """,
    )
    assert driver.setting["level"].set == "SOUR3:VOLT {value}"
    assert driver.setting["level"].ask == "SOUR3:VOLT?"


def test_the_digest_is_of_the_content(tmp_path: Path) -> None:
    one = good(tmp_path, SMALLEST).digest
    assert good(tmp_path, SMALLEST + "# a remark\n").digest == one
    assert good(tmp_path, SMALLEST.replace("READ?", "FETC?")).digest != one


def test_100_nf_at_1_khz_is_good_to_a_part_in_a_thousand() -> None:
    """|Z| of 100 nF at 1 kHz is 1591.5 ohm (values.md, immittance table): D = 0."""
    driver = load_driver("scpi-impedance-meter", Path(), Problems())
    assert driver is not None
    accuracy = driver.impedance_accuracy
    assert accuracy is not None
    (band,) = (
        band for band in accuracy.bands if band.frequency_min_hz <= 1e3 < band.frequency_max_hz
    )
    share = band.magnitude_rel + accuracy.short_ohm / 1591.5 + accuracy.open_s * 1591.5
    factor = dict(accuracy.integration_factors)["medium"]
    assert share * factor == pytest.approx(1e-3, rel=0.05)


def test_the_bands_leave_no_gap() -> None:
    driver = load_driver("scpi-impedance-meter", Path(), Problems())
    assert driver is not None
    accuracy = driver.impedance_accuracy
    assert accuracy is not None
    edges = [(band.frequency_min_hz, band.frequency_max_hz) for band in accuracy.bands]
    assert [low for low, _ in edges[1:]] == [high for _, high in edges[:-1]]
    assert edges[0][0] == driver.setting["frequency"].minimum
    assert edges[-1][1] == driver.setting["frequency"].maximum


def test_template_syntax() -> None:
    template = read_template("A{value};B{{{channel}}}")
    assert template.names == ("value", "channel")
    assert template.fill({"value": "1", "channel": "2"}) == "A1;B{2}"


@pytest.mark.parametrize("text", ["{", "}", "{}", "{Value}", "{a b}", "{value:.3f}", "{a.b}"])
def test_nothing_more_than_names_in_braces(text: str) -> None:
    with pytest.raises(TemplateError):
        read_template(text)


@given(st.text(max_size=60))
def test_a_template_is_read_or_refused(text: str) -> None:
    try:
        template = read_template(text)
    except TemplateError:
        return
    assert template.fill(dict.fromkeys(template.names, "")) == "".join(template.literals)


WORDS = st.sampled_from(
    ["format", "role", "setting", "reading", "impedance", "fields", "ask", "set", "at", "name"]
)
VALUES = st.recursive(
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats()
    | st.text(max_size=8)
    | st.sampled_from(["impedance meter", "{value}", "1 kHz", "first", "label", "offset"]),
    lambda inner: (
        st.lists(inner, max_size=4)
        | st.dictionaries(WORDS | st.text(max_size=6), inner, max_size=5)
    ),
    max_leaves=20,
)


def toml(value: object) -> str | None:
    """A value as inline TOML; None where TOML has no such thing."""
    if value is None:
        return None
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, int | float):
        return repr(value)
    if isinstance(value, str):
        escaped = "".join(f"\\U{ord(letter):08x}" for letter in value)
        return f'"{escaped}"'
    if isinstance(value, list):
        inner = [toml(one) for one in value]
        return "[" + ", ".join(one for one in inner if one is not None) + "]"
    assert isinstance(value, dict)
    pairs = [(toml(key), toml(inner)) for key, inner in value.items()]
    return "{" + ", ".join(f"{key} = {text}" for key, text in pairs if text is not None) + "}"


@given(st.dictionaries(WORDS, VALUES, max_size=6))
def test_any_toml_is_loaded_or_told(tmp_path_factory: pytest.TempPathFactory, data: dict) -> None:  # type: ignore[type-arg]
    lines = [f"{key} = {text}" for key, value in data.items() if (text := toml(value)) is not None]
    text = "\n".join(lines)
    try:
        tomllib.loads(text)
    except tomllib.TOMLDecodeError:
        return
    folder = tmp_path_factory.getbasetemp()
    driver, problems = load(folder, text)
    assert (driver is None) == bool(problems)


def test_roles_have_their_words() -> None:
    from ohmward.setup.driver_roles import VOCABULARY

    assert set(VOCABULARY) == set(Role)
    for words in VOCABULARY.values():
        assert words.needed_settings <= words.settings
        assert words.needed_readings <= words.readings
        assert words.needed_actions <= words.actions
        assert set(words.fields) <= words.readings


def test_the_examples_in_the_documentation(tmp_path: Path) -> None:
    page = (Path(__file__).parents[2] / "docs" / "drivers.md").read_text(encoding="utf-8")
    first, second = re.findall(r"```toml\n(.*?)```", page, flags=re.DOTALL)
    (tmp_path / "small-meter.toml").write_text(first, encoding="utf-8")
    small = good(tmp_path, first)
    assert small.setting["level"].written.decimals == 2
    driver = good(tmp_path, second)
    assert driver.setting["frequency"].allowed == (100.0, 1e3, 1e4, 1e5)
    assert driver.reading == small.reading
