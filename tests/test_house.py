"""The house: who may import whom, who may touch the world, and how a file begins."""

import ast
import json
import os
import re
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

ROOT = Path(__file__).parents[1]
PACKAGE = ROOT / "src" / "ohmward"
MODULES = sorted(PACKAGE.rglob("*.py"))
TESTS = sorted([*ROOT.glob("tests/**/*.py"), *ROOT.glob("benchmarks/**/*.py")])
LONGEST = 500
LONGEST_TEST = 700
HEAVY = ("numpy", "pandas", "scipy", "pyvisa", "pyvisa_py", "trio", "matplotlib", "jinja2")
SINS = ("read", "write", "socket", "subprocess", "sqlite", "remove")


def named(path: Path) -> str:
    return str(path.relative_to(ROOT))


def python(*arguments: str, timeout_s: float = 60) -> subprocess.CompletedProcess[str]:
    """Run this Python in a process of its own; nothing is written beside the sources."""
    return subprocess.run(
        [sys.executable, *arguments],
        cwd=ROOT,
        env={**os.environ, "PYTHONDONTWRITEBYTECODE": "1"},
        capture_output=True,
        text=True,
        timeout=timeout_s,
        check=False,
    )


@pytest.mark.processes
@pytest.mark.slow
def test_imports_run_strictly_downward() -> None:
    run = python(
        "-c", "import sys; from importlinter.cli import lint_imports; sys.exit(lint_imports())"
    )
    assert run.returncode == 0, run.stdout + run.stderr
    assert "0 broken" in run.stdout


def imports_of(path: Path) -> set[str]:
    """Every module that a file names in an import, functions' own included."""
    found: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text("utf-8"))):
        if isinstance(node, ast.Import):
            found.update(alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{named(path)} imports relatively, which no contract sees"
            found.update(f"{node.module}.{alias.name}" for alias in node.names)
    return found


def test_only_the_api_knows_the_simulator() -> None:
    """The contract on tested rooms says the same of those; this says it of everybody."""
    knowing = {
        path.relative_to(PACKAGE).parts[0]
        for path in MODULES
        if any(name.startswith("ohmward.sim") for name in imports_of(path))
    }
    assert knowing == {"api", "sim"}


def exercised(*sins: str) -> dict[str, Any]:
    run = python(str(ROOT / "tests" / "pure_rooms.py"), *sins)
    assert run.returncode == 0, run.stderr
    told: dict[str, Any] = json.loads(run.stdout)
    return told


@pytest.mark.processes
@pytest.mark.slow
def test_the_pure_rooms_open_write_connect_and_start_nothing() -> None:
    told = exercised()
    assert told["modules"] > 60
    assert told["found"] == {}


@pytest.mark.processes
@pytest.mark.slow
def test_whoever_sins_is_seen() -> None:
    seen = " ".join(exercised(*SINS)["found"]["memory"])
    for trace in ("pure_rooms.py", os.devnull, "socket.", "subprocess.", "sqlite3."):
        assert trace in seen
    assert "os.remove" in seen


@pytest.mark.parametrize("path", [*MODULES, *TESTS], ids=named)
def test_a_file_says_in_one_sentence_what_it_is_for(path: Path) -> None:
    text = path.read_text("utf-8")
    first = (ast.get_docstring(ast.parse(text)) or "").split("\n\n")[0]
    sentence = " ".join(first.split())
    assert re.fullmatch(r"\S.+[.?!:]", sentence), f"no sentence at the top: {sentence!r}"
    assert not re.search(r"[a-z`)][.?!] [A-Z]", sentence), f"more than one sentence: {sentence!r}"
    longest = LONGEST if path in MODULES else LONGEST_TEST
    assert len(text.splitlines()) <= longest, f"longer than {longest} lines"


def test_there_is_no_empty_room() -> None:
    for folder in {path.parent for path in MODULES}:
        assert (folder / "__init__.py").is_file(), f"{named(folder)} is no package"


@pytest.mark.processes
@pytest.mark.slow
@pytest.mark.parametrize(
    ("arguments", "needed"),
    [
        ("--help", set()),
        ("--version", set()),
        ("brief --help", set()),
        ("schema bench", set()),
        ("convert Cs=1uF D=0.1 --frequency 1kHz", {"numpy"}),
        ("brief film-sweep --bench depot-bench --parts depot-lot", {"numpy", "pyvisa", "trio"}),
    ],
)
def test_nothing_heavy_is_imported_before_it_is_needed(arguments: str, needed: set[str]) -> None:
    """What is not imported costs nothing: help needs no number, a conversion no link."""
    script = (
        "import sys; from ohmward.cli.main import main; sys.argv[0] = 'ohmward'\n"
        "try: main()\n"
        "except SystemExit as left: assert not left.code, left.code\n"
        f"print('HEAVY', *[name for name in {HEAVY!r} if name in sys.modules])"
    )
    run = python("-c", script, *arguments.split())
    assert run.returncode == 0, run.stderr
    _, *heavy = run.stdout.splitlines()[-1].split()
    assert set(heavy) <= needed
