"""The worked example of docs/drivers.md says what its imagined manual says."""

import re
from pathlib import Path

import pytest

from ohmward.errors import InstrumentRefused, Problems, ReplyMalformed
from ohmward.protocol.check import check_driver
from ohmward.protocol.codec import Codec
from ohmward.setup.driver import Driver, load_driver
from ohmward.terms.status import Status

PAGE = Path(__file__).parents[2] / "docs" / "drivers.md"


@pytest.fixture
def example(tmp_path: Path) -> tuple[Driver, Codec]:
    text = re.findall(r"```toml\n(.*?)```", PAGE.read_text(encoding="utf-8"), flags=re.DOTALL)[0]
    (tmp_path / "small-meter.toml").write_text(text, encoding="utf-8")
    problems = Problems()
    driver = load_driver("small-meter.toml", tmp_path, problems)
    assert driver is not None, list(problems)
    codec = check_driver(driver, problems)
    assert codec is not None, list(problems)
    return driver, codec


def test_commands_as_the_manual_has_them(example: tuple[Driver, Codec]) -> None:
    driver, codec = example
    frequency, level = driver.setting["frequency"], driver.setting["level"]
    assert codec.command(frequency.set, frequency).encode({"value": 1000.0}) == b"F1000"
    assert codec.command(level.set, level).encode({"value": 0.5}) == b"V0.50"
    assert codec.layout(frequency.layout).decode(b"F=1000").values == {"value": 1000.0}
    assert codec.layout(level.layout).decode(b"V=0.50").values == {"value": 0.5}


@pytest.mark.parametrize(
    ("answer", "status"),
    [
        (b"C=+102.34n D=+0.0021 *", Status.OK),
        (b"C=+102.34n D=+0.0021 >", Status.OVERLOAD),
        (b"C=+102.34n D=+0.0021 ~", Status.UNSETTLED),
    ],
)
def test_readings_as_the_manual_has_them(
    example: tuple[Driver, Codec], answer: bytes, status: Status
) -> None:
    driver, codec = example
    decoded = codec.layout(driver.reading["impedance"]).decode(answer)
    assert decoded.values["first"] == pytest.approx(102.34e-9)
    assert decoded.values["second"] == 0.0021
    assert decoded.status is status


@pytest.mark.parametrize(
    "answer",
    [
        b"C=+102.34n D=+0.0021",
        b"C=+102.34n D=+0.0021 * *",
        b"C=+102.34n D=+0.0021 #",
        b"C=102.34n D=+0.0021 *",
        b"D=+0.0021 * C=+102.34",
        b"OK",
    ],
)
def test_answers_that_the_manual_does_not_have(
    example: tuple[Driver, Codec], answer: bytes
) -> None:
    driver, codec = example
    with pytest.raises(ReplyMalformed):
        codec.layout(driver.reading["impedance"]).decode(answer)


def test_it_acknowledges_or_refuses(example: tuple[Driver, Codec]) -> None:
    _, codec = example
    done = codec.receiver(b"F1000", answers=False)
    done.feed(b"OK\r\n")
    assert done.next() == b""
    refused = codec.receiver(b"F5", answers=False)
    refused.feed(b"ERR 3\r\n")
    with pytest.raises(InstrumentRefused, match="ERR 3"):
        refused.next()
