"""What ships with ohmward is found, in a checkout here and in a wheel by its test."""

from pathlib import Path

import pytest

from ohmward.setup.resources import FOLDERS, find_file, shipped


@pytest.mark.parametrize("folder", FOLDERS)
def test_every_shipped_folder_is_there_and_has_files(folder: str) -> None:
    assert any(path.suffix in {".toml", ".json"} for path in shipped(folder).iterdir())


def test_no_other_folder_is_asked_for() -> None:
    with pytest.raises(ValueError, match="drivers"):
        shipped("src")


def test_a_name_is_a_shipped_file_and_a_path_a_path(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    assert find_file("film-sweep", "sequences") == shipped("sequences") / "film-sweep.toml"
    assert find_file("depot-lot", "simulators", ".csv") == shipped("simulators") / "depot-lot.csv"
    assert find_file("film-sweep.toml", "sequences") == Path("film-sweep.toml")
    assert find_file("mine/film-sweep", "sequences") == Path("mine/film-sweep")
    Path("film-sweep").touch()
    assert find_file("film-sweep", "sequences") == Path("film-sweep")
