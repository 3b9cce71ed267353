"""Whatever a file holds, its loader notes problems and raises nothing."""

from collections.abc import Callable
from pathlib import Path
from tempfile import TemporaryDirectory

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.errors import Problems
from ohmward.protocol.check import check_driver
from ohmward.sequence.load import load_sequence
from ohmward.setup.bench import load_bench
from ohmward.setup.bench_drivers import load_drivers
from ohmward.setup.driver import load_driver
from ohmward.setup.parts import load_parts
from ohmward.setup.resources import shipped


def _bench(path: Path, problems: Problems) -> object:
    bench = load_bench(path, problems)
    if bench is not None:
        load_drivers(bench, problems)
    return bench


def _driver(path: Path, problems: Problems) -> object:
    driver = load_driver(path.name, path.parent, problems)
    if driver is not None:
        check_driver(driver, problems)
    return driver


LOADERS: dict[str, tuple[str, Callable[[Path, Problems], object]]] = {
    "bench": ("toml", _bench),
    "driver": ("toml", _driver),
    "sequence": ("toml", load_sequence),
    "parts": ("csv", lambda path, problems: load_parts(path, None, problems) or None),
}
SHIPPED = {
    "bench": sorted(shipped("simulators").glob("*bench*.toml")),
    "driver": sorted(shipped("drivers").glob("*.toml")),
    "sequence": sorted(shipped("sequences").glob("*.toml")),
    "parts": sorted(shipped("simulators").glob("*.csv")),
}


def loaded(kind: str, content: bytes) -> None:
    """Nothing is raised, and where nothing is made of a file it is said why."""
    suffix, load = LOADERS[kind]
    with TemporaryDirectory() as folder:
        path = Path(folder) / f"own.{suffix}"
        path.write_bytes(content)
        problems = Problems()
        found = load(path, problems)
        assert found is not None or len(problems)
        for problem in problems:
            assert all(problem.as_dict().values()), problem


@pytest.mark.parametrize("kind", LOADERS)
@given(content=st.binary(max_size=200))
def test_any_bytes(kind: str, content: bytes) -> None:
    loaded(kind, content)


LETTERS = "abcxyz_-.0123456789 \"'[]{}=,\n#µ±%/\\"


@pytest.mark.parametrize("kind", LOADERS)
@given(content=st.text(alphabet=LETTERS, max_size=120))
def test_any_text_of_toml_s_letters(kind: str, content: str) -> None:
    loaded(kind, content.encode())


WORDS = st.sampled_from(
    [
        *("0", "-1", "1e400", "nan", "inf", "true", '""', '"x"', "[]", "{}", "[[]]", '"1 kHz"'),
        *(
            '"-5 V"',
            '"{value}"',
            '"{"',
            '"{nobody}"',
            "1979-05-27",
            '"1e999 V"',
            "99999999999999999999",
        ),
        *('["1 V", "x"]', "{ a = 1 }", '"../../x.toml"', '"own.toml"', '"*?"', '"\\u0000"'),
    ]
)


@st.composite
def mutated(draw: st.DrawFn, kind: str) -> bytes:
    """A shipped file with some of its values, lines or bytes changed."""
    text = draw(st.sampled_from(SHIPPED[kind])).read_text("utf-8")
    lines = text.splitlines()
    for _ in range(draw(st.integers(1, 4))):
        at = draw(st.integers(0, len(lines) - 1))
        how = draw(st.sampled_from(["value", "value", "drop", "double", "swap", "cut"]))
        if how == "value" and kind == "parts":
            cells = lines[at].split(",")
            cells[draw(st.integers(0, len(cells) - 1))] = draw(WORDS | st.text(max_size=6))
            lines[at] = ",".join(cells)
        elif how == "value" and "=" in lines[at]:
            lines[at] = f"{lines[at].partition('=')[0]}= {draw(WORDS)}"
        elif how == "drop" and len(lines) > 1:
            del lines[at]
        elif how == "double":
            lines.insert(at, lines[at])
        elif how == "swap":
            other = draw(st.integers(0, len(lines) - 1))
            lines[at], lines[other] = lines[other], lines[at]
        elif how == "cut":
            lines[at] = lines[at][: draw(st.integers(0, len(lines[at])))]
    return "\n".join(lines).encode("utf-8", "surrogatepass")


@pytest.mark.parametrize("kind", LOADERS)
@given(data=st.data())
def test_shipped_files_with_mistakes(kind: str, data: st.DataObject) -> None:
    loaded(kind, data.draw(mutated(kind)))
