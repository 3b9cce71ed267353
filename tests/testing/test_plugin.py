"""The shipped fixture as its users have it: in pytest runs of their own, from the docs."""

import json
import re
import shlex
from pathlib import Path

import pandas  # noqa: F401 - an inner pytest run forgets what it loads, and these load once
import pytest
import scipy.stats  # noqa: F401

from ohmward.testing.bench import VirtualBench

pytest_plugins = ["pytester"]

DOCS = Path(__file__).parents[2] / "docs" / "testing.md"

FAILING = """
from ohmward.instruments.voltmeter import Voltmeter
from ohmward.terms.status import Status


def test_it(virtual_bench):
    virtual_bench.use_driver("scpi-multimeter")
    virtual_bench.at_random("garbage", "silent", "late", share=0.5, delay_s=9.0)

    async def work(opened):
        meter = Voltmeter(opened.instrument)
        for _ in range(20):
            assert (await meter.read()).status is Status.OK

    virtual_bench.run(work)
"""


@pytest.fixture(autouse=True)
def _alone(pytester: pytest.Pytester, monkeypatch: pytest.MonkeyPatch) -> None:
    """In this process, and as a user without our own configuration."""
    monkeypatch.delenv("HYPOTHESIS_PROFILE", raising=False)
    pytester.makeini("[pytest]\naddopts = -p no:cacheprovider")


def run(pytester: pytest.Pytester, *arguments: str) -> pytest.RunResult:
    return pytester.runpytest_inprocess(*arguments)


def test_the_examples_of_the_docs_pass(pytester: pytest.Pytester) -> None:
    examples = re.findall(r"```python\n(.*?)```", DOCS.read_text("utf-8"), re.DOTALL)
    assert len(examples) == 2
    pytester.makepyfile(test_docs="\n".join(examples))
    run(pytester).assert_outcomes(passed=4)


def test_what_the_docs_say_of_the_faults_is_so() -> None:
    assert f"`fault_kinds` names the {len(VirtualBench().fault_kinds)} there are" in (
        DOCS.read_text("utf-8")
    )


def test_a_failing_test_leaves_what_replays_it(pytester: pytest.Pytester) -> None:
    pytester.makepyfile(test_mine=FAILING)
    result = run(pytester, "--ohmward-seed", "5")
    result.assert_outcomes(failed=1)
    bundle = pytester.path / "ohmward-bundles" / "test_mine.py-test_it"
    content = json.loads((bundle / "bundle.json").read_text("utf-8"))
    assert content["seed"] == 5
    assert content["faults"]["instrument"]
    assert (bundle / "transcript" / "instrument.jsonl").read_text("ascii").count("\n") > 1
    record = (bundle / "record" / "instrument.jsonl").read_text("ascii")
    assert '"heard"' in record
    assert '"said"' in record

    (line,) = (line for line in result.outlines if line.startswith("replay it: "))
    program, *arguments = shlex.split(line.removeprefix("replay it: "))
    assert program == "pytest"
    again = run(pytester, *arguments)
    again.assert_outcomes(failed=1)
    again.stdout.fnmatch_lines(["*all happened as in *test_mine.py-test_it"])


def test_a_replay_says_where_it_goes_another_way(pytester: pytest.Pytester) -> None:
    pytester.makepyfile(test_mine=FAILING)
    run(pytester).assert_outcomes(failed=1)
    pytester.makepyfile(
        test_mine=FAILING.replace(
            "meter = V", "await opened.instrument.errors()\n        meter = V"
        )
    )
    bundle = "ohmward-bundles/test_mine.py-test_it"
    result = run(pytester, "--ohmward-replay", bundle)
    result.stdout.fnmatch_lines(["instrument*entr*"])


def test_the_same_seed_fails_alike_and_another_otherwise(pytester: pytest.Pytester) -> None:
    pytester.makepyfile(test_mine=FAILING)
    records = []
    for seed in ("1", "1", "2"):
        run(pytester, "--ohmward-seed", seed)
        bundle = pytester.path / "ohmward-bundles" / "test_mine.py-test_it"
        records.append((bundle / "record" / "instrument.jsonl").read_bytes())
    assert records[0] == records[1]
    assert records[0] != records[2]


def test_a_dry_run_that_fails_leaves_its_journal(pytester: pytest.Pytester) -> None:
    pytester.makepyfile(
        test_mine="""
def test_it(virtual_bench, tmp_path):
    virtual_bench.use_bench("depot-bench")
    virtual_bench.dry_run("film-sweep", parts="depot-lot", out=tmp_path / "run")
    assert False
"""
    )
    run(pytester).assert_outcomes(failed=1)
    bundle = pytester.path / "ohmward-bundles" / "test_mine.py-test_it"
    assert (bundle / "journal.sqlite").stat().st_size > 10_000
    assert {one.name for one in (bundle / "transcript").iterdir()} >= {"meter.jsonl"}


def test_what_is_no_bundle_and_what_is_no_fault(pytester: pytest.Pytester) -> None:
    pytester.makepyfile(
        test_mine="""
import pytest


def test_it(virtual_bench):
    with pytest.raises(ValueError, match="no fault is called"):
        virtual_bench.fault("gremlin")
    with pytest.raises(ValueError, match="gremlin"):
        virtual_bench.at_random("late", "gremlin")
"""
    )
    run(pytester).assert_outcomes(passed=1)
    run(pytester, "--ohmward-replay", "nowhere").assert_outcomes(errors=1)
    assert not (pytester.path / "ohmward-bundles").exists()
