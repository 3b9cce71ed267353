"""A fixture's compensation, taken on the simulator and applied to runs whose truth is known."""

import csv
import io
import math
from pathlib import Path

import pytest
from tests.api.clip_bench import PHYSICS, SEQUENCE, STANDARDS, write_bench

from ohmward import api
from ohmward.api.compensating import compensate
from ohmward.api.running import dry_run, run
from ohmward.errors import BadInput, Problems
from ohmward.metrology.errors import CompensationMismatch
from ohmward.setup.compensation_file import CompensationFile, as_toml, load_compensation

REQUIRED = SEQUENCE[SEQUENCE.index("[compensation]") : SEQUENCE.index("[[stage]]")]
PLAIN = SEQUENCE.replace(REQUIRED, "")


def take(folder: Path, name: str = "fixture.toml", **more: object) -> CompensationFile:
    return compensate(
        bench=folder / "bench.toml",
        sequence=folder / "sequence.toml",
        out=folder / name,
        dry=True,
        **more,  # type: ignore[arg-type]
    )


@pytest.fixture(scope="module")
def clips(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A bench with its compensation, from three insertions of each standard."""
    folder = write_bench(tmp_path_factory.mktemp("clips"))
    take(folder, insertions=3)
    return folder


def prepared(
    folder: Path, compensation: Path | None, sequence: str = "sequence.toml"
) -> api.Prepared:
    return api.prepare(
        folder / sequence,
        bench=folder / "bench.toml",
        parts=folder / "parts.csv",
        compensation=compensation,
    )


def ids(folder: Path, compensation: Path | None, sequence: str = "sequence.toml") -> set[str]:
    with pytest.raises(BadInput) as caught:
        prepared(folder, compensation, sequence)
    return {problem.id for problem in caught.value.problems}


def errors(folder: Path) -> dict[tuple[str, str, float], float]:
    """Error over U of every value of a dry run, by part, quantity and frequency."""
    rows, truths = (
        list(csv.DictReader(io.StringIO((folder / name).read_text("utf-8"))))
        for name in ("results.csv", "truth.csv")
    )
    found = {}
    for row, truth in zip(rows, truths, strict=True):
        if row["value"] and row["u_expanded"] and truth["true_value"]:
            key = row["part_id"], row["quantity"], float(row["frequency_hz"])
            error = float(row["value"]) - float(truth["true_value"])
            found[key] = error / float(row["u_expanded"])
    return found


def test_a_compensated_run_holds_the_truth_that_the_fixture_hides(clips: Path) -> None:
    first = prepared(clips, clips / "fixture.toml")
    assert "open, short and load" in first.brief.compensation
    dry_run(first, out=clips / "compensated")
    corrected = errors(clips / "compensated")
    assert max(abs(error) for error in corrected.values()) <= 1.0
    (clips / "plain.toml").write_text(PLAIN, "utf-8")
    dry_run(prepared(clips, None, "plain.toml"), out=clips / "as-it-is")
    plain = errors(clips / "as-it-is")
    # 4 pF beside 100 pF, 150 nH and 80 mohm beside 4.7 uH and 1 ohm: far outside of U
    for key in (("C", "cp_f", 1e5), ("L", "ls_h", 1e5), ("R", "rs_ohm", 1e3)):
        assert abs(plain[key]) > 3


def test_the_run_keeps_its_compensation_and_its_budget_names_each_cause(clips: Path) -> None:
    dry_run(prepared(clips, clips / "fixture.toml"), out=clips / "kept")
    kept = (clips / "kept" / "inputs" / "compensation.toml").read_bytes()
    assert kept == (clips / "fixture.toml").read_bytes()
    (point,) = api.budget(clips / "kept", "R", "rs_ohm").points
    shares = {part.source.name: part.share for part in point.budget.contributions}
    assert math.isclose(sum(shares.values()), 1, rel_tol=1e-9)
    assert {"compensation: short", "compensation: contact of the part"} <= set(shares)
    # at 1 ohm the stated 1 mohm of a short counts twice: with the short itself and with the part
    assert 0.1 < shares["compensation: short"] < 0.5
    # one by one the causes come to what the decision was made with
    assert math.isclose(point.budget.u, point.interval.u, rel_tol=0.02)


def test_the_same_seed_gives_the_same_bytes(tmp_path: Path) -> None:
    folder = write_bench(tmp_path / "bench")
    take(folder, "one.toml", insertions=2, only=["1"])
    take(folder, "two.toml", insertions=2, only=["1"])
    take(folder, "other.toml", insertions=2, only=["1"], seed=1)
    one, two, other = ((folder / f"{name}.toml").read_bytes() for name in ("one", "two", "other"))
    assert one == two != other


def test_contacts_are_known_only_from_more_than_one_insertion(tmp_path: Path) -> None:
    folder = write_bench(tmp_path / "bench")
    single = take(folder, "one.toml")
    assert (single.contact_resistance_ohm, single.contact_reactance_ohm) == (0.0, 0.0)
    # 3 positions x 9 degrees of freedom: the deviation drawn, 0.3 mohm, is met within 40 %
    many = take(folder, "many.toml", insertions=10)
    assert many.contact_resistance_ohm == pytest.approx(3e-4, rel=0.4)
    assert many.contact_reactance_ohm == pytest.approx(2 * math.pi * 1e5 * 2e-10, rel=0.4)


def test_the_load_shows_a_fixture_that_is_not_symmetric(tmp_path: Path) -> None:
    crooked = PHYSICS.replace("series_ohm = 0.08", "series_ohm = 5.0")
    crooked = crooked.replace("stray_f = 4e-12", "stray_f = 1e-9")
    folder = write_bench(tmp_path / "bench", physics=crooked)
    found = take(folder, only=["1"]).positions[0].symmetric
    # the error is of the order of |Zs/Zo|: 3e-5 at 1 kHz, 0.3 % at 100 kHz
    assert found[0]
    assert not found[-1]


@pytest.mark.parametrize(
    ("true", "forgotten", "what"),
    [
        ("series_ohm = 2.3e-4", "series_ohm = 1e9", "the short showed"),
        ("series_ohm = 100.003", "series_ohm = 1e9", "the load came out"),
        ("series_ohm = 100.003", "series_ohm = 50.0", "the load came out"),
    ],
)
def test_a_standard_that_was_not_in_is_noticed(
    tmp_path: Path, true: str, forgotten: str, what: str
) -> None:
    folder = write_bench(tmp_path / "bench", physics=PHYSICS.replace(true, forgotten))
    with pytest.raises(CompensationMismatch, match=what):
        take(folder, only=["1"])
    assert not (folder / "fixture.toml").exists()


def test_a_sequence_that_requires_one_is_refused_without(clips: Path) -> None:
    assert ids(clips, None) == {"compensation-missing"}


@pytest.mark.parametrize(
    ("changed", "problem"),
    [
        ({"fixture": "other clips"}, "compensation-other-fixture"),
        ({"bench": "other bench"}, "compensation-other-fixture"),
        ({"cable_m": 2.0}, "compensation-other-cable"),
        ({"instrument": "other"}, "compensation-other-instrument"),
    ],
)
def test_one_that_belongs_elsewhere_is_refused(
    clips: Path, tmp_path: Path, changed: dict[str, object], problem: str
) -> None:
    assert ids(clips, altered(clips, tmp_path, **changed)) == {problem}


def altered(clips: Path, folder: Path, **changed: object) -> Path:
    """The compensation with something else in it."""
    problems = Problems()
    file = load_compensation(clips / "fixture.toml", problems)
    assert file is not None
    path = folder / "altered.toml"
    path.write_text(as_toml(file.model_copy(update=changed)), "utf-8")
    return path


def test_one_that_is_too_old_or_of_a_later_time_is_refused(clips: Path, tmp_path: Path) -> None:
    file = load_compensation(clips / "fixture.toml", Problems())
    assert file is not None
    for taken in (file.taken.replace(month=11, day=1), file.taken.replace(year=2027)):
        path = altered(clips, tmp_path, taken=taken)
        assert ids(clips, path) == {"compensation-too-old"}


def test_one_from_another_meter_is_refused_when_that_answers(clips: Path, tmp_path: Path) -> None:
    other = altered(clips, tmp_path, identity="GENERIC,IMPEDANCE-METER,OTHER,1.0")
    with pytest.raises(BadInput) as caught:
        dry_run(prepared(clips, other), out=tmp_path / "run")
    assert {problem.id for problem in caught.value.problems} == {"compensation-other-instrument"}


def test_a_simulated_fixture_never_corrects_a_real_one(clips: Path, tmp_path: Path) -> None:
    with pytest.raises(BadInput, match="compensation-other-world"):
        run(prepared(clips, clips / "fixture.toml"), out=tmp_path / "run")
    assert not (tmp_path / "run").exists()


def test_what_it_does_not_cover_is_told(clips: Path, tmp_path: Path) -> None:
    folder = write_bench(tmp_path / "bench", standards=STANDARDS[: STANDARDS.index("[load]")])
    take(folder, "short.toml", only=["1"])
    assert ids(folder, folder / "short.toml") == {
        "compensation-lacks-load",
        "compensation-lacks-position",
    }
    wider = SEQUENCE.replace('"100 kHz"]', '"100 kHz", "1 MHz"]', 1)
    (folder / "wider.toml").write_text(wider, "utf-8")
    assert "compensation-lacks-frequency" in ids(folder, clips / "fixture.toml", "wider.toml")


def test_between_frequencies_it_is_interpolated_and_said(clips: Path) -> None:
    between = SEQUENCE.replace('"10 kHz", "100 kHz"]', '"30 kHz", "100 kHz"]')
    (clips / "between.toml").write_text(between, "utf-8")
    first = prepared(clips, clips / "fixture.toml", "between.toml")
    assert "1 frequency interpolated" in first.brief.compensation
    dry_run(first, out=clips / "between")
    assert max(abs(error) for error in errors(clips / "between").values()) <= 1.0


OWN = """format = 1
extends = "scpi-impedance-meter"
start = ["remote"]
[action.remote]
send = "CORR:OPEN ON"
"""


def test_the_meters_own_correction_is_refused_both_ways(clips: Path, tmp_path: Path) -> None:
    folder = write_bench(tmp_path / "bench")
    bench = (folder / "bench.toml").read_text("utf-8")
    (folder / "own.toml").write_text(OWN, "utf-8")
    own = bench.replace('driver = "scpi-impedance-meter"', 'driver = "./own.toml"')
    (folder / "bench.toml").write_text(own, "utf-8")
    with pytest.raises(CompensationMismatch, match="own open correction is on"):
        take(folder)
    assert not (folder / "fixture.toml").exists()
    with pytest.raises(CompensationMismatch, match="own open correction is on"):
        dry_run(prepared(folder, clips / "fixture.toml"), out=folder / "run")


def test_a_file_that_is_there_is_not_written_over(clips: Path) -> None:
    before = (clips / "fixture.toml").read_bytes()
    with pytest.raises(BadInput, match="output-exists"):
        take(clips)
    assert (clips / "fixture.toml").read_bytes() == before


def test_without_a_terminal_nobody_is_asked(tmp_path: Path) -> None:
    folder = write_bench(tmp_path / "bench")
    with pytest.raises(BadInput, match="nobody-to-place-standards"):
        compensate(
            bench=folder / "bench.toml",
            sequence=folder / "sequence.toml",
            out=folder / "fixture.toml",
        )


@pytest.mark.parametrize(
    ("old", "new", "key"),
    [
        ("frequency_hz = [1000.0,", "frequency_hz = [-1000.0,", "-"),
        ("insertions = 3", "insertions = 0", "insertions"),
        ("correlation = [", "correlation = [3.0, ", "correlation"),
        ("u_resistance_ohm = [", "u_resistance_ohm = [nan, ", "u_resistance_ohm"),
        ("format = 1", "format = 2", "format"),
    ],
)
def test_a_damaged_file_is_told_by_its_key(
    clips: Path, tmp_path: Path, old: str, new: str, key: str
) -> None:
    text = (clips / "fixture.toml").read_text("utf-8")
    assert old in text
    path = tmp_path / "damaged.toml"
    path.write_text(text.replace(old, new, 1), "utf-8")
    problems = Problems()
    assert load_compensation(path, problems) is None
    assert any(key in problem.key for problem in problems)
