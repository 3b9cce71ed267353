"""Every command: its help, its exit codes, and what it does when its reader leaves."""

import json
import os
import signal
import subprocess
import sys
from pathlib import Path

import pytest
import typer.main
from tests.cli.told import Ohmward

from ohmward import __version__
from ohmward.cli import main
from ohmward.cli.streams import SPELT_OUT, prepare
from ohmward.errors import (
    BadInput,
    BenchHeld,
    LinkLost,
    NotAuthorised,
    NotProvenSafe,
    OhmwardError,
    Problem,
    SafetyTrip,
    Stopped,
)

NAMES = ("--bench", "depot-bench", "--parts", "depot-lot")


def commands() -> list[list[str]]:
    """Every command that there is, those of groups included."""
    program = typer.main.get_command(main.app)
    found = []
    for name, command in program.commands.items():  # type: ignore[attr-defined]  # it is a group
        inner = getattr(command, "commands", None)
        found += [[name, *([one] if one else [])] for one in (inner or [""])]
    return found


@pytest.mark.parametrize("command", commands(), ids=" ".join)
def test_help_of_every_command(ohmward: Ohmward, command: list[str]) -> None:
    told = ohmward(*command, "--help")
    assert told.code == 0
    assert told.err == ""
    usage, _, rest = told.out.partition("\n\n")
    assert " ".join(command) in usage
    assert rest.strip()[0].isupper()  # a sentence that says what it does
    assert max(len(line) for line in told.out.splitlines()) <= 80


def test_the_commands_that_issue_and_readme_name_are_there() -> None:
    names = {command[0] for command in commands()}
    assert names >= {"brief", "dryrun", "run", "resume", "serve", "convert", "schema", "demo"}


def test_the_program_itself(ohmward: Ohmward) -> None:
    told = ohmward("--help")
    assert told.code == 0
    for code in ("0 finished", "2 bad input", "5 the safe state is NOT proven", "130 stopped"):
        assert code in " ".join(told.out.split())
    assert ohmward("--version").out == f"ohmward {__version__}\n"
    assert ohmward().code == 2
    assert ohmward("no-such-command").code == 2
    assert ohmward("brief").code == 2
    assert ohmward("brief", "--no-such-option").code == 2


def test_a_wrong_command_line_is_told_as_json_where_that_is_asked_for(ohmward: Ohmward) -> None:
    for arguments in (["brief"], ["brief", "film-sweep"], ["brief", "--no-such-option"]):
        (problem,) = ohmward(*arguments, "--json").problems
        assert problem["id"] == "usage"
        assert problem["file"] == "command line"


PROBLEM = Problem(id="an-id", file="a.toml", key="a.key", expected="this", found="that")


@pytest.mark.parametrize(
    ("error", "code", "said"),
    [
        (OhmwardError("a fault"), 1, "a fault"),
        (BadInput((PROBLEM,)), 2, "a.toml: a.key: expected this, found that [an-id]"),
        (NotAuthorised("nobody signed"), 2, "nobody signed"),
        (SafetyTrip("tripped"), 3, "tripped"),
        (LinkLost("it left", address="TCPIP::x"), 4, "TCPIP::x: it left"),
        (NotProvenSafe("short it by hand"), 5, "NOT PROVEN"),
        (BenchHeld("held"), 6, "held"),
        (Stopped("stopped by SIGTERM"), 130, "stopped by SIGTERM"),
        (KeyboardInterrupt(), 130, "stopped"),
        (OSError(28, "No space left on device", "/full/disk"), 1, "/full/disk: No space left"),
        (BrokenPipeError(32, "Broken pipe"), 0, ""),
        (ZeroDivisionError("a bug"), 1, "fault of ohmward's own"),
    ],
    ids=lambda one: type(one).__name__ if isinstance(one, BaseException) else "",
)
def test_what_an_error_becomes(
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
    error: BaseException,
    code: int,
    said: str,
) -> None:
    """The tree of exit codes in DESIGN's order, at the one place that maps them."""

    def fail(name: str) -> None:
        raise error

    monkeypatch.setattr("ohmward.api.schema", fail)
    monkeypatch.setattr(sys, "argv", ["ohmward", "schema", "bench"])
    monkeypatch.setattr("signal.signal", lambda *_: None)
    with pytest.raises(SystemExit) as left:
        main.main()
    assert left.value.code == code
    assert said in capsys.readouterr().err


def test_success_prints_json_that_is_json(ohmward: Ohmward) -> None:
    brief = ohmward("brief", "film-sweep", *NAMES, "--json")
    assert brief.code == 0
    assert brief.json["name"] == "film sweep"
    for name in ("bench", "driver", "sequence"):
        assert ohmward("schema", name).json["type"] == "object"


@pytest.mark.slow
def test_a_local_file_or_folder_does_not_stand_in_for_the_demos(
    ohmward: Ohmward, tmp_path: Path
) -> None:
    (tmp_path / "depot-survey").write_text("nonsense", "utf-8")
    (tmp_path / "depot-bench").mkdir()
    assert ohmward("demo", "--out", "out").code == 0
    assert ohmward("brief", "film-sweep", *NAMES).code == 0  # a folder is no bench file
    assert ohmward("brief", "depot-survey", *NAMES).code == 2  # a file of that name is meant


@pytest.mark.slow
def test_names_with_spaces_umlauts_and_links(ohmward: Ohmward, tmp_path: Path) -> None:
    folder = tmp_path / "Prüffeld 2 (Werkstatt)"
    folder.mkdir()
    (tmp_path / "link").symlink_to(folder)
    (tmp_path / "sub").mkdir()
    for out in (folder / "ein Lauf", tmp_path / "link" / "two", "sub/../three", "./four/five"):
        told = ohmward("dryrun", "film-sweep", *NAMES, "--out", out)
        assert told.code == 0, told.err
        assert str(out).removeprefix("./") in told.out
    found = {path.parent.resolve() for path in tmp_path.glob("**/manifest.json")}
    expected = ("ein Lauf", "two", "three", "five")
    assert sorted(path.name for path in found) == sorted(expected)


def command(*arguments: str) -> list[str]:
    return [sys.executable, "-m", "ohmward", *arguments]


def shell(text: str, folder: Path, **environment: str) -> subprocess.CompletedProcess[str]:
    """Run a line of bash in which ``ohmward`` is this one."""
    program = f'ohmward() {{ "{sys.executable}" -m ohmward "$@"; }}; set -o pipefail; '
    return subprocess.run(
        ["bash", "-c", program + text],
        cwd=folder,
        env={**os.environ, "COLUMNS": "80", **environment},
        capture_output=True,
        text=True,
        encoding="utf-8",
        errors="replace",
        timeout=120,
        check=False,
    )


@pytest.mark.processes
@pytest.mark.slow
@pytest.mark.parametrize(
    "text",
    [
        "ohmward schema bench | head -1",
        "ohmward schema bench | true",
        "ohmward brief film-sweep --bench depot-bench --parts depot-lot | true",
        "ohmward --help | true",
        "ohmward schema bench >&-",
    ],
)
def test_a_reader_may_leave(tmp_path: Path, text: str) -> None:
    done = shell(text, tmp_path)
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""


@pytest.mark.processes
@pytest.mark.slow
def test_a_run_whose_progress_nobody_reads_is_whole(tmp_path: Path) -> None:
    run = "ohmward dryrun film-sweep --bench depot-bench --parts depot-lot --out"
    assert shell(f"{run} one 2>&1 | head -1", tmp_path).returncode == 0
    assert shell(f"{run} two 2>/dev/full >/dev/null", tmp_path).returncode == 0
    full = shell(f"{run} three >/dev/full", tmp_path)
    assert full.returncode == 1
    assert "No space left" in full.stderr
    for folder in ("one", "two", "three"):
        assert (tmp_path / folder / "manifest.json").is_file()


@pytest.mark.processes
@pytest.mark.slow
@pytest.mark.parametrize(
    ("environment", "expected"),
    [
        ({"LANG": "C", "LC_ALL": "C", "PYTHONUTF8": "0", "PYTHONCOERCECLOCALE": "0"}, "µF"),
        ({"PYTHONIOENCODING": "ascii"}, "µF"),
        ({"PYTHONIOENCODING": "utf-8", "NO_COLOR": "1", "TERM": "dumb"}, "µF"),
        ({"PYTHONIOENCODING": "iso8859-5"}, "uF"),
    ],
)
def test_any_terminal_reads_the_same(
    tmp_path: Path, environment: dict[str, str], expected: str
) -> None:
    done = shell("ohmward convert Cs=1uF D=0.1 --frequency 1kHz", tmp_path, **environment)
    assert done.returncode == 0
    assert f"1 {expected}" in done.stdout
    assert "\x1b" not in done.stdout
    assert "?" not in done.stdout


def test_letters_are_spelt_out() -> None:
    prepare()
    said = "470 µF ± 5 %, 10 kΩ, 14 × 1, −84°, ♥".encode("ascii", SPELT_OUT)
    assert said == b"470 uF +- 5 %, 10 kohm, 14 x 1, -84deg, ?"


@pytest.mark.processes
@pytest.mark.slow
@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_a_signal_ends_serving_in_order(tmp_path: Path, number: signal.Signals) -> None:
    process = subprocess.Popen(
        command("serve", "depot-bench", "--parts", "depot-lot", "--json"),
        cwd=tmp_path,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    assert process.stdout is not None
    told = json.loads(process.stdout.readline())
    assert told["meter"]["role"] == "impedance meter"
    assert told["meter"]["scpi"] is True
    process.send_signal(number)
    _, err = process.communicate(timeout=60)
    assert process.returncode == 130
    assert "Traceback" not in err
