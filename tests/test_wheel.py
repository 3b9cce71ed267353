"""The wheel alone is ohmward: built, installed into an empty environment, used from elsewhere."""

import ast
import csv
import json
import os
import subprocess
import sys
import sysconfig
import venv
import zipfile
from importlib.metadata import packages_distributions
from importlib.util import find_spec
from pathlib import Path

import pytest
from packaging.requirements import Requirement
from packaging.utils import canonicalize_name
from tests.readme import copy_of

ROOT = Path(__file__).parents[1]
PART_OF = {"pydantic_core": {"pydantic"}}  # pydantic needs one exact version of it
FOLDERS = ("drivers", "sequences", "simulators", "schemas")

pytestmark = [pytest.mark.processes, pytest.mark.slow]


def run(*command: object, folder: Path) -> subprocess.CompletedProcess[str]:
    """Run a command that must end well; no path of the checkout is in its environment."""
    environment = {name: text for name, text in os.environ.items() if name != "PYTHONPATH"}
    done = subprocess.run(
        [str(word) for word in command],
        cwd=folder,
        env=environment,
        capture_output=True,
        text=True,
        timeout=300,
        check=False,
    )
    assert done.returncode == 0, done.stdout + done.stderr
    return done


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The wheel, built of a copy of the checkout by its own build backend."""
    folder = tmp_path_factory.mktemp("wheel")
    checkout = copy_of(ROOT, folder / "checkout")
    here = ["--no-isolation"] if find_spec("hatchling") else []
    run(sys.executable, "-m", "build", "--wheel", *here, "--outdir", "..", folder=checkout)
    (found,) = folder.glob("*.whl")
    return found


@pytest.fixture(scope="module")
def environment(wheel: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """An empty environment with the wheel in it; what it depends on is lent by this one.

    The lent folder comes last and its own .pth files are not read, so that an ohmward that is
    installed there for editing cannot stand in for the wheel.
    """
    folder = tmp_path_factory.mktemp("environment")
    venv.create(folder, with_pip=False, symlinks=True)
    python = folder / "bin" / "python"
    pip = (sys.executable, "-m", "pip", "--python", python, "--disable-pip-version-check")
    run(*pip, "install", "--quiet", "--no-deps", "--no-index", wheel, folder=folder)
    paths = {"base": str(folder), "platbase": str(folder)}
    site = Path(sysconfig.get_path("purelib", "venv", paths))
    (site / "lent.pth").write_text(sysconfig.get_path("purelib") + "\n", "utf-8")
    return folder


def test_what_people_copy_and_read_is_in_the_wheel(wheel: Path) -> None:
    names = set(zipfile.ZipFile(wheel).namelist())
    for folder in FOLDERS:
        for path in (ROOT / folder).rglob("*"):
            if path.is_file():
                inside = f"ohmward/shipped/{folder}/{path.relative_to(ROOT / folder).as_posix()}"
                assert inside in names
    assert "ohmward/py.typed" in names
    assert not [name for name in names if name.startswith(("tests/", "src/"))]


def test_what_is_imported_is_what_the_wheel_says_it_needs(wheel: Path) -> None:
    """Installed alone it brings everything along; an extra may bring what is asked for rarely."""
    with zipfile.ZipFile(wheel) as archive:
        (name,) = [one for one in archive.namelist() if one.endswith(".dist-info/METADATA")]
        metadata = archive.read(name).decode("utf-8")
        entry_points = archive.read(name.replace("METADATA", "entry_points.txt")).decode("utf-8")
    assert "ohmward = ohmward.cli.main:main" in entry_points
    needed = {
        canonicalize_name(Requirement(line.removeprefix("Requires-Dist: ")).name)
        for line in metadata.splitlines()
        if line.startswith("Requires-Dist: ") and "extra == 'dev'" not in line.replace('"', "'")
    }
    brought = packages_distributions()
    for root in imported_roots() - sys.stdlib_module_names - {"ohmward"}:
        by = {canonicalize_name(one) for one in brought.get(root, [root])} | PART_OF.get(
            root, set()
        )
        assert by & needed, f"{root} is imported, and the wheel does not say that it needs it"


def imported_roots() -> set[str]:
    """The first word of every import in the package."""
    found: set[str] = set()
    for path in (ROOT / "src").rglob("*.py"):
        for node in ast.walk(ast.parse(path.read_text("utf-8"))):
            if isinstance(node, ast.Import):
                found.update(alias.name.split(".")[0] for alias in node.names)
            elif isinstance(node, ast.ImportFrom) and node.module:
                found.add(node.module.split(".")[0])
    return found


def test_the_demo_runs_from_another_folder(environment: Path, tmp_path: Path) -> None:
    elsewhere = tmp_path / "stores, Prüffeld"
    elsewhere.mkdir()
    ohmward = environment / "bin" / "ohmward"
    told = run(ohmward, "demo", folder=elsewhere)
    assert "accept" in told.stdout
    where = run(environment / "bin" / "python", "-c", "import ohmward; print(ohmward.__file__)",
                folder=elsewhere)  # fmt: skip
    assert str(environment) in where.stdout
    with (elsewhere / "demo-run" / "results.csv").open(encoding="utf-8", newline="") as file:
        assert {row["decision"] for row in csv.DictReader(file)} >= {"accept", "reject"}


def test_a_dry_run_by_shipped_names_is_the_same_as_in_the_checkout(
    environment: Path, tmp_path: Path
) -> None:
    """Same seed, same bytes: where ohmward is installed is no part of a run."""
    arguments = ("dryrun", "film-sweep", "--bench", "depot-bench", "--parts", "depot-lot")
    run(environment / "bin" / "ohmward", *arguments, "--out", "one", folder=tmp_path)
    run(sys.executable, "-m", "ohmward", *arguments, "--out", "two", folder=tmp_path)
    for name in ("impedance.csv", "results.csv", "truth.csv"):
        assert (tmp_path / "one" / name).read_bytes() == (tmp_path / "two" / name).read_bytes()


def test_schemas_and_help_come_along(environment: Path, tmp_path: Path) -> None:
    ohmward = environment / "bin" / "ohmward"
    stored = json.loads((ROOT / "schemas" / "bench.json").read_text("utf-8"))
    assert json.loads(run(ohmward, "schema", "bench", folder=tmp_path).stdout) == stored
    assert "dryrun" in run(ohmward, "--help", folder=tmp_path).stdout
