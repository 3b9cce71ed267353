"""Lines in fixed columns, and what a codec cannot do told as a problem."""

from pathlib import Path

import pytest

from ohmward.errors import Problems, ReplyMalformed
from ohmward.protocol.check import check_driver
from ohmward.protocol.codec import codec_of
from ohmward.setup.driver import Driver, load_driver
from ohmward.setup.resources import shipped
from ohmward.terms.status import Status

# an imagined manual: "C" and eight characters of capacitance in pF, a blank, "D" and six of D,
# a blank, and a letter: " " good, "O" overload
COLUMNS = """
format = 1
role = "impedance meter"
codec = "lines"
[reading.impedance]
ask = "M"
by = "offset"
starts_with = "C"
fields = [
  { name = "first", at = 1, length = 8, coding = "text", factor = 1e-12 },
  { name = "second", at = 11, length = 6, coding = "text", form = "NR2" },
  { name = "status", kind = "status", at = 18, length = 1, coding = "text" },
]
[status]
"" = "ok"
O = "overload"
"""


def own(folder: Path, text: str) -> Driver:
    (folder / "own.toml").write_text(text, encoding="utf-8")
    problems = Problems()
    driver = load_driver("own.toml", folder, problems)
    assert driver is not None, list(problems)
    return driver


def test_columns_both_ways(tmp_path: Path) -> None:
    driver = own(tmp_path, COLUMNS)
    layout = codec_of(driver).layout(driver.reading["impedance"])
    decoded = layout.decode(b"C  4712.3  0.0123  ")
    assert decoded.values["first"] == pytest.approx(4712.3e-12)
    assert decoded.values["second"] == 0.0123
    assert decoded.resolutions["first"] == pytest.approx(0.1e-12)
    assert decoded.status is Status.OK
    assert layout.decode(b"C  4712.3  0.0123 O").status is Status.OVERLOAD
    again = layout.decode(layout.encode(decoded.values))
    assert again.values["first"] == pytest.approx(4712.3e-12)


@pytest.mark.parametrize(
    "line",
    [
        b"",
        b"C  4712.3  0.0123 ",
        b"C  4712.3  0.0123   ",
        b"L  4712.3  0.0123  ",
        b"C  47 2.3  0.0123  ",
        b"C          0.0123  ",
        b"C  4712.3  0.0123 X",
    ],
)
def test_columns_that_cannot_be(tmp_path: Path, line: bytes) -> None:
    driver = own(tmp_path, COLUMNS)
    with pytest.raises(ReplyMalformed):
        codec_of(driver).layout(driver.reading["impedance"]).decode(line)


@pytest.mark.parametrize("name", sorted(path.stem for path in shipped("drivers").glob("*.toml")))
def test_every_shipped_driver_is_something_for_its_codec(name: str) -> None:
    problems = Problems()
    driver = load_driver(name, Path(), problems)
    assert driver is not None
    assert check_driver(driver, problems) is not None
    assert list(problems) == []


def test_a_codec_that_nobody_has_is_a_problem(tmp_path: Path) -> None:
    driver = own(tmp_path, COLUMNS.replace('"lines"', '"whispering"'))
    problems = Problems()
    assert check_driver(driver, problems) is None
    (problem,) = problems
    assert (problem.id, problem.key, problem.found) == (
        "driver-unknown-codec",
        "codec",
        "whispering",
    )
    assert "frames, lines, scpi, stream" in problem.expected
