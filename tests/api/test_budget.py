"""The budget of a dry run's values, read from the run's folder alone."""

import json
import math
import shutil
from pathlib import Path

import pytest
from tests.api.clip_bench import SEQUENCE, write_bench

from ohmward import api
from ohmward.api.running import dry_run
from ohmward.errors import BadInput

REQUIRED = SEQUENCE[SEQUENCE.index("[compensation]") : SEQUENCE.index("[[stage]]")]


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A run whose bench, drivers and sequence are gone: the folder alone is left."""
    bench = write_bench(
        tmp_path_factory.mktemp("bench") / "here", sequence=SEQUENCE.replace(REQUIRED, "")
    )
    prepared = api.prepare(
        bench / "sequence.toml", bench=bench / "bench.toml", parts=bench / "parts.csv"
    )
    run = tmp_path_factory.mktemp("runs") / "run"
    dry_run(prepared, out=run)
    shutil.rmtree(bench)
    return run


def test_shares_come_to_one_and_contributions_to_u(folder: Path) -> None:
    found = api.budget(folder, "C", "capacitance_f")
    assert [point.point.frequency_hz for point in found.points] == [1e3, 1e4, 1e5]
    for point in found.points:
        parts = point.budget.contributions
        assert math.isclose(sum(part.share for part in parts), 1, rel_tol=1e-9)
        together = math.hypot(*(part.source.contribution for part in parts))
        assert math.isclose(together, point.budget.u, rel_tol=1e-9)
        assert {"repeatability", "accuracy of the magnitude"} <= {
            part.source.name for part in parts
        }


def test_it_is_the_uncertainty_of_the_table(folder: Path) -> None:
    (point,) = api.budget(folder, "C", "capacitance_f", at="100 kHz").points
    # by the driver's own table: 0.05 % and 1 nS over |Z|, 5 % more for a metre of cable, over
    # sqrt(3); 0.01 % of frequency beside it
    size = 1 / (2 * math.pi * 1e5 * point.budget.value)
    half = (0.0005 + 1e-9 * size + 0.001 / size) * 1.05
    wanted = math.hypot(half, 1e-4) / math.sqrt(3)
    assert point.view == "cp_f"
    assert point.budget.u / point.budget.value == pytest.approx(wanted, rel=0.02)


def test_repeats_have_their_degrees_of_freedom(folder: Path) -> None:
    (point,) = api.budget(folder, "C", "d", at="10 kHz").points
    degrees = {part.source.name: part.source.degrees for part in point.budget.contributions}
    assert degrees["repeatability"] == 2  # three readings
    assert math.isinf(degrees["accuracy of the phase"])


def test_it_is_json(folder: Path) -> None:
    text = json.dumps(api.budget(folder, "R", "rs_ohm").as_dict(), allow_nan=False)
    (point,) = json.loads(text)["points"]
    assert point["degrees"] is None  # infinite: nothing was repeated
    assert point["decided_by"] == "Monte Carlo"


@pytest.mark.parametrize(
    ("part", "quantity", "at", "key"),
    [
        ("nobody", "cp_f", None, "PART"),
        ("C", "colour", None, "QUANTITY"),
        ("C", "inductance_h", None, "QUANTITY"),
        ("C", "self_resonance_hz", None, "QUANTITY"),
        ("C", "cp_f", "2 kHz", "--at"),
        ("C", "cp_f", "2 kg", "--at"),
    ],
)
def test_what_is_not_there_is_told_by_its_key(
    folder: Path, part: str, quantity: str, at: str | None, key: str
) -> None:
    with pytest.raises(BadInput) as caught:
        api.budget(folder, part, quantity, at=at)
    assert [problem.key for problem in caught.value.problems] == [key]


def test_a_folder_without_a_run_is_bad_input(tmp_path: Path) -> None:
    with pytest.raises(BadInput):
        api.budget(tmp_path, "C", "cp_f")
