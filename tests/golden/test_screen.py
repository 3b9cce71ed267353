"""What a person sees, whole: a change of wording or layout must be meant.

Numbers are masked, so that only words, order and layout are held here; the numbers have tests of
their own.
"""

import io
import re
from pathlib import Path

import pytest
from rich.console import Console

from ohmward import api
from ohmward.output import screen

HERE = Path(__file__).parent
NUMBER = re.compile(r"-?\d+(?:\.\d+)?(?:e[+-]?\d+)?")


def masked(text: str) -> str:
    return "\n".join(NUMBER.sub("#", line).rstrip() for line in text.splitlines()) + "\n"


def held(name: str, text: str, *, renew: bool) -> None:
    path = HERE / f"{name}.txt"
    if renew:
        path.write_text(text, encoding="utf-8")
    assert path.read_text(encoding="utf-8") == text


@pytest.fixture
def renew(request: pytest.FixtureRequest) -> bool:
    return bool(request.config.getoption("--renew-goldens", default=False))


def printed(show: object) -> str:
    stream = io.StringIO()
    show(Console(file=stream, width=110, highlight=False))  # type: ignore[operator]
    return masked(stream.getvalue())


def test_a_brief(renew: bool) -> None:
    prepared = api.prepare("film-sweep", bench="depot-bench", parts="depot-lot")
    held("brief", printed(lambda c: screen.show_brief(c, prepared.brief)), renew=renew)


def test_decisions(renew: bool, tmp_path: Path) -> None:
    prepared = api.prepare("film-sweep", bench="depot-bench", parts="depot-lot")
    outcome = api.dry_run(prepared, out=tmp_path / "run", seed=0)
    text = printed(lambda c: screen.show_decisions(c, outcome.verdicts))
    held("decisions", text, renew=renew)
