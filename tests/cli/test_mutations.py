"""Shipped files with anything changed in them: a brief, or BadInput, and never anything else."""

import re
import string
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from ohmward import api
from ohmward.errors import BadInput
from ohmward.setup.resources import shipped

pytestmark = pytest.mark.slow

SEQUENCES = [path.stem for path in sorted(shipped("sequences").glob("*.toml"))]
SIMULATORS = shipped("simulators")
# What people and accidents write: hostile numbers, units, types, keys, and what breaks readers.
VALUES = [
    *('""', '" "', "0", "-1", "1e999", "nan", "inf", "true", "[]", "{}", '"1 kHz"', '"1 V"'),
    *('"-1 V"', '"1e400 Hz"', '"0 Hz"', '"\\u0000"', '"x"', "[[1]]", '["1 V", "x"]', "2026-01-01"),
    *(
        '{ from = "1 Hz", to = "1 Hz", per_decade = 0 }',
        '"../../etc"',
        "9" * 400,
        '"' + "x" * 5000 + '"',
    ),
    *('{ from = "1 V" }', '"1 MFD"', '"4,700 V"', '"NaN V"', '"∞ V"', "0x7fffffffffffffff", "''"),
]
CELLS = [
    *(
        "",
        " ",
        "-1",
        "0",
        "1e999 F",
        "nan",
        "inf",
        "1 MFD",
        "4,700 uF",
        "104K",
        "450",
        "V",
        "±",
        "%",
    ),
    *("=1+1", "\x00", "'", '"', "±1e999 %", "-200 %", "x" * 5000, "100 V AC", "1e-400 F", "٣ uF"),
    *("2026-13-01", "polar", "resistor", "X2", "-0", "1;2", "µ", "0/0", "999999999999999999999"),
]
QUIET = settings(
    deadline=None,
    max_examples=60,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
)


def prepared_or_refused(
    sequence: Path | str, bench: Path | str = "depot-bench", parts: Path | str = "depot-lot"
) -> None:
    """A brief comes of it that can be shown as JSON, or every problem is a whole one."""
    refused = None
    try:
        api.as_json(api.prepare(sequence, bench=bench, parts=parts).brief.as_dict())
    except BadInput as error:
        refused = error.problems
    assert refused or refused is None
    for problem in refused or ():
        assert all(problem.as_dict().values()), problem
        assert len(str(problem)) < 12_000


@st.composite
def spoilt(draw: st.DrawFn, text: str, values: list[str]) -> str:
    """The text with one to three of its lines, values, keys or letters changed."""
    for _ in range(draw(st.integers(1, 3))):
        lines = text.split("\n")
        at = draw(st.integers(0, len(lines) - 1))
        line = lines[at]
        how = draw(st.sampled_from(["value", "drop", "twice", "key", "letter", "cut", "swap"]))
        if how == "value" and "=" in line:
            lines[at] = line.split("=", 1)[0] + "= " + draw(st.sampled_from(values))
        elif how == "drop":
            del lines[at]
        elif how == "twice":
            lines.insert(at, line)
        elif how == "key" and "=" in line:
            lines[at] = draw(st.sampled_from(["x", "format", "kind", "name", "''"])) + " = 1"
        elif how == "letter" and line:
            place = draw(st.integers(0, len(line) - 1))
            new = draw(st.sampled_from([*string.printable, "\x00", "é", "\u202e", "\ufeff"]))
            lines[at] = line[:place] + new + line[place + 1 :]
        elif how == "cut":
            lines = lines[: at + 1]
        elif how == "swap" and at:
            lines[at - 1], lines[at] = lines[at], lines[at - 1]
        text = "\n".join(lines)
    return text


@pytest.mark.parametrize("name", SEQUENCES)
@given(data=st.data())
@settings(QUIET, max_examples=25)
def test_a_spoilt_sequence(tmp_path: Path, name: str, data: st.DataObject) -> None:
    text = (shipped("sequences") / f"{name}.toml").read_text("utf-8")
    # a day of readings is a brief like any other, but a long one to make
    text = re.sub(r"repeats = [\d_]+", "repeats = 3", text)
    path = tmp_path / "s.toml"
    path.write_text(data.draw(spoilt(text, VALUES)), "utf-8", newline="")
    prepared_or_refused(path)


@given(data=st.data())
@QUIET
def test_a_spoilt_bench(tmp_path: Path, data: st.DataObject) -> None:
    for name in ("depot-physics.toml", "depot-standards.toml"):
        (tmp_path / name).write_bytes((SIMULATORS / name).read_bytes())
    path = tmp_path / "b.toml"
    text = data.draw(spoilt((SIMULATORS / "depot-bench.toml").read_text("utf-8"), VALUES))
    path.write_text(text, "utf-8", newline="")
    prepared_or_refused("film-sweep", bench=path)


@given(data=st.data())
@QUIET
def test_a_spoilt_driver(tmp_path: Path, data: st.DataObject) -> None:
    for name in ("depot-physics.toml", "depot-standards.toml"):
        (tmp_path / name).write_bytes((SIMULATORS / name).read_bytes())
    driver = (shipped("drivers") / "scpi-impedance-meter.toml").read_text("utf-8")
    (tmp_path / "d.toml").write_text(data.draw(spoilt(driver, VALUES)), "utf-8", newline="")
    bench = (SIMULATORS / "depot-bench.toml").read_text("utf-8")
    path = tmp_path / "b.toml"
    path.write_text(bench.replace('"scpi-impedance-meter"', '"d.toml"'), "utf-8")
    prepared_or_refused("film-sweep", bench=path)


@given(data=st.data())
@QUIET
def test_a_spoilt_parts_list(tmp_path: Path, data: st.DataObject) -> None:
    rows = [
        row.split(",") for row in (SIMULATORS / "depot-lot.csv").read_text("utf-8").splitlines()
    ]
    for _ in range(data.draw(st.integers(1, 4))):
        row = data.draw(st.sampled_from(rows))
        if row:
            row[data.draw(st.integers(0, len(row) - 1))] = data.draw(st.sampled_from(CELLS))
    mark = data.draw(st.sampled_from([",", ";", "\t"]))
    text = "\n".join(mark.join(row) for row in rows)
    encoding = data.draw(st.sampled_from(["utf-8", "utf-8-sig", "utf-16"]))
    path = tmp_path / "p.csv"
    path.write_bytes(text.encode(encoding))
    prepared_or_refused("depot-survey", parts=path)


@given(raw=st.binary(max_size=300))
@QUIET
def test_any_bytes_at_all(tmp_path: Path, raw: bytes) -> None:
    path = tmp_path / "any"
    path.write_bytes(raw)
    prepared_or_refused(path, bench=path, parts=path)
