"""The pytest plugin: the fixture ``virtual_bench``, and a bundle for every test that fails with it.

It is loaded with pytest wherever ohmward is installed, so it imports nothing heavy itself.
"""

import shlex
from collections.abc import Generator
from pathlib import Path
from typing import TYPE_CHECKING

import pytest

if TYPE_CHECKING:
    from ohmward.testing.bench import VirtualBench

FIXTURE = "virtual_bench"
BUNDLES = "ohmward-bundles"


def pytest_addoption(parser: pytest.Parser) -> None:
    """The options of the plugin."""
    group = parser.getgroup("ohmward")
    group.addoption(
        "--ohmward-seed",
        type=int,
        default=0,
        metavar="N",
        help="seed of the simulated bench; the same seed gives the same bytes",
    )
    group.addoption(
        "--ohmward-bundles",
        default=BUNDLES,
        metavar="DIR",
        help=f"where failing tests leave what is needed to replay them ({BUNDLES})",
    )
    group.addoption(
        "--ohmward-replay",
        default=None,
        metavar="DIR",
        help="run with the seed of a bundle, and tell whether all happened as it did there",
    )


@pytest.fixture
def virtual_bench(request: pytest.FixtureRequest) -> "VirtualBench":
    """A simulated bench in this process, under a virtual clock, with a knob for faults."""
    from ohmward.testing.bench import VirtualBench

    replay = request.config.getoption("--ohmward-replay")
    if replay is None:
        return VirtualBench(seed=request.config.getoption("--ohmward-seed"))
    from ohmward.testing.bundle import seed_of

    try:
        return VirtualBench(seed=seed_of(Path(replay)))
    except (OSError, ValueError) as error:
        raise pytest.UsageError(f"--ohmward-replay: {error}") from error


@pytest.hookimpl(wrapper=True)
def pytest_runtest_makereport(
    item: pytest.Item, call: pytest.CallInfo[None]
) -> Generator[None, pytest.TestReport, pytest.TestReport]:
    """Leave a bundle where a test that had a bench has failed; in a replay, compare."""
    report = yield
    bench = getattr(item, "funcargs", {}).get(FIXTURE)
    if report.when != "call" or bench is None:
        return report
    replay = item.config.getoption("--ohmward-replay")
    if replay is not None:
        report.sections.append(("ohmward", _compared(Path(replay), bench)))
    elif report.failed:
        report.sections.append(("ohmward", _left(item, bench)))
    return report


def _left(item: pytest.Item, bench: "VirtualBench") -> str:
    from ohmward.testing import bundle

    folder = bundle.folder_for(
        item.config.rootpath / item.config.getoption("--ohmward-bundles"), item.nodeid
    )
    command = f"pytest {shlex.quote(item.nodeid)} --ohmward-replay {shlex.quote(str(folder))}"
    try:
        bundle.write(folder, bench, test=item.nodeid, command=command)
    except OSError as error:
        return f"what is needed to replay this could not be kept: {error}"
    return f"seed {bench.seed}; what happened is in {folder}\nreplay it: {command}"


def _compared(folder: Path, bench: "VirtualBench") -> str:
    from ohmward.testing import bundle

    try:
        found = bundle.difference(folder, bench)
    except OSError as error:
        found = str(error)
    return found or f"all happened as in {folder}"
