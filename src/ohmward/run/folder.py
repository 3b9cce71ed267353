"""The folder of a run: made new, with copies of what the run was made from."""

import json
import shutil
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from ohmward.errors import BadInput, OhmwardError, Problem
from ohmward.sequence.brief import Brief
from ohmward.setup.driver import Driver

JOURNAL = "journal.sqlite"
INPUTS = "inputs"


class FolderUnusable(OhmwardError):
    """The run's folder cannot be made or written to."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Sources:
    """The files that a person named, by what they are: sequence, bench, parts, physical file."""

    files: Mapping[str, Path]
    drivers: Mapping[str, Driver]


def refuse_existing(out: Path) -> None:
    """Raise BadInput when the folder is there already: nothing is ever written over."""
    if out.exists() or out.is_symlink():
        problem = Problem(
            id="output-exists",
            file=str(out),
            key="--out",
            expected="a folder that does not exist yet",
            found="one that does",
        )
        raise BadInput((problem,))


def make(out: Path, sources: Sources, brief: Brief) -> Path:
    """Make the folder with copies of the inputs; returns the path of the journal to be.

    Raises BadInput when it exists, FolderUnusable when it cannot be written.
    """
    refuse_existing(out)
    try:
        inputs = out / INPUTS
        (inputs / "drivers").mkdir(parents=True)
        for what, path in sources.files.items():
            shutil.copyfile(path, inputs / f"{what}{path.suffix}")
        for name, driver in sources.drivers.items():
            merged = json.dumps(driver.merged, indent=1, ensure_ascii=False, default=str)
            (inputs / "drivers" / f"{name}.json").write_text(merged + "\n", "utf-8")
        plain = json.dumps(brief.as_dict(), indent=1, ensure_ascii=False)
        (inputs / "brief.json").write_text(plain + "\n", "utf-8")
    except OSError as error:
        raise FolderUnusable(f"{out}: {error.strerror or error}") from error
    return out / JOURNAL


def forget_derived(folder: Path) -> None:
    """Remove what is computed from the journal, so that it can be computed again."""
    for path in folder.iterdir():
        if path.suffix == ".csv" or path.name.endswith("-metadata.json"):
            path.unlink()
    (folder / "manifest.json").unlink(missing_ok=True)
