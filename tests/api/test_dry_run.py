"""Same seed, same bytes; a folder that is there is never touched; parts loaded by hand."""

from collections.abc import Callable
from pathlib import Path

import pytest
from tests.run.workbench import HAND_BENCH, Workbench, decisions, places, sequence, table

from ohmward import api
from ohmward.errors import BadInput


def everything(folder: Path) -> dict[str, bytes]:
    return {
        path.relative_to(folder).as_posix(): path.read_bytes()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def test_the_same_seed_gives_the_same_bytes_in_another_folder(tmp_path: Path) -> None:
    workbench = Workbench(tmp_path)
    (tmp_path / "deeper").mkdir()
    one, other = workbench.dry_run("one", seed=5), workbench.dry_run("deeper/other", seed=5)
    ours, theirs = everything(one), everything(other)
    assert list(ours) == list(theirs)
    assert [name for name in ours if ours[name] != theirs[name]] == []
    assert "journal.sqlite" in ours


def test_another_seed_gives_other_noise_and_the_same_rows(tmp_path: Path) -> None:
    workbench = Workbench(tmp_path)
    one, other = workbench.dry_run("one", seed=5), workbench.dry_run("other", seed=6)
    assert places(one) == places(other)
    pairs = zip(table(one, "impedance"), table(other, "impedance"), strict=True)
    assert all(row["reactance_ohm"] != twin["reactance_ohm"] for row, twin in pairs)
    times = [[row["elapsed_s"] for row in table(each, "impedance")] for each in (one, other)]
    assert times[0] == times[1]


def a_folder(out: Path) -> None:
    out.mkdir()
    (out / "results.csv").write_text("mine", "utf-8")


def an_empty_folder(out: Path) -> None:
    out.mkdir()


def a_file(out: Path) -> None:
    out.write_text("mine", "utf-8")


def a_link_to_nowhere(out: Path) -> None:
    out.symlink_to("nowhere")


@pytest.mark.parametrize("put", [a_folder, an_empty_folder, a_file, a_link_to_nowhere])
@pytest.mark.parametrize("how", ["dryrun", "run"])
def test_an_output_folder_that_is_there_is_left_alone(
    tmp_path: Path, put: Callable[[Path], None], how: str
) -> None:
    workbench = Workbench(tmp_path)
    out = tmp_path / "out"
    put(out)
    before = everything(tmp_path)
    with pytest.raises(BadInput, match=r"out.*does not exist yet.*\[output-exists\]") as caught:
        # the bench's addresses are real ones: were they tried, this would not end so
        (api.dry_run if how == "dryrun" else api.run)(workbench.prepare(), out=out)
    assert caught.value.exit_code == 2
    assert everything(tmp_path) == before
    assert out.is_symlink() or out.exists()


def test_a_place_where_nothing_can_be_made_is_named(tmp_path: Path) -> None:
    """A parent that is a file stands for every other reason: it stops root as well."""
    workbench = Workbench(tmp_path)
    out = tmp_path / "parts.csv" / "out"
    with pytest.raises(BadInput, match=r"parts\.csv/out.*\[output-unusable\]"):
        api.dry_run(workbench.prepare(), out=out)


def test_a_hand_loaded_fixture(tmp_path: Path) -> None:
    """The simulated person puts every part where it belongs, as the scanner would have done."""
    workbench = Workbench(tmp_path)
    wired = workbench.dry_run("wired")
    workbench.write("bench.toml", HAND_BENCH)
    lot = (tmp_path / "parts.csv").read_text("utf-8")
    for position in "123":
        lot = lot.replace(f",{position},capacitor", ",clips,capacitor")
    workbench.write("parts.csv", lot)
    by_hand = workbench.dry_run("by-hand")
    assert [row[-1] for row in decisions(by_hand)] == [row[-1] for row in decisions(wired)]
    assert {row["position"] for row in table(by_hand, "impedance")} == {"clips"}
    for row, twin in zip(table(by_hand, "truth"), table(wired, "truth"), strict=True):
        assert (row["part_id"], row["true_value"]) == (twin["part_id"], twin["true_value"])


def test_a_run_without_a_terminal_is_refused_before_anything_is_opened(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Exit 2: the run was started where nobody can be asked, and nothing has been done yet."""
    workbench = Workbench(tmp_path)
    workbench.write("bench.toml", HAND_BENCH)
    workbench.write(
        "parts.csv", (tmp_path / "parts.csv").read_text("utf-8").replace(",2,", ",clips,")
    )
    lot = (tmp_path / "parts.csv").read_text("utf-8").splitlines()
    workbench.write("parts.csv", "\n".join([lot[0], lot[2]]) + "\n")
    with (tmp_path / "nothing").open("w+") as nothing:
        monkeypatch.setattr("sys.stdin", nothing)
        with pytest.raises(BadInput, match=r"\[nobody-to-load-parts\]") as caught:
            api.run(workbench.prepare(), out=tmp_path / "out")
    assert caught.value.exit_code == 2
    assert not (tmp_path / "out").exists()


def test_a_home_made_driver_whose_readings_never_settle_ends(tmp_path: Path) -> None:
    """Its responder answers at once: in virtual time the settle rule must end all the same."""
    workbench = Workbench(tmp_path)
    workbench.driver('simulated_by = ""\n')
    rule = 'settle = { tolerance = "0.0001 %", readings = 8, at_most = "1 s" }'
    workbench.write("sequence.toml", sequence(rule, repeats="1"))
    rows = table(workbench.dry_run(), "impedance")
    assert len(rows) == 3 * 4
    assert {row["status"] for row in rows} <= {"ok", "unsettled"}
