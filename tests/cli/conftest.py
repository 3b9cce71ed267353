"""Runs a command in this process, as typed, and keeps what it said."""

import sys
from pathlib import Path

import pytest
from tests.cli.told import Ohmward, Told

from ohmward.cli.main import main


@pytest.fixture
def ohmward(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> Ohmward:
    """Run ``ohmward`` with these arguments, in an empty folder."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr("signal.signal", lambda *_: None)

    def run(*arguments: object) -> Told:
        monkeypatch.setattr(sys, "argv", ["ohmward", *map(str, arguments)])
        with pytest.raises(SystemExit) as left:
            main()
        said = capsys.readouterr()
        assert "Traceback" not in said.err
        code = left.value.code
        assert isinstance(code, int)
        return Told(code=code, out=said.out, err=said.err)

    return run
