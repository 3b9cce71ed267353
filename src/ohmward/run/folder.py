"""The folder of a run: made new, with copies of what the run was made from."""

import fcntl
import json
import os
import shutil
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

from ohmward.errors import BadInput, BenchHeld, OhmwardError, Problems
from ohmward.sequence.brief import Brief
from ohmward.setup.driver import Driver

JOURNAL = "journal.sqlite"
INPUTS = "inputs"


class FolderUnusable(OhmwardError):
    """The run's folder cannot be written to."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Sources:
    """The files that a person named, by what they are: sequence, bench, parts, physical file."""

    files: Mapping[str, Path]
    drivers: Mapping[str, Driver]


def note_unusable(out: Path, problems: Problems) -> None:
    """Note a problem when the folder is there already: nothing is ever written over."""
    try:
        out.lstat()
    except FileNotFoundError:
        return
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        _note(problems, "output-unusable", out, "a place for a new folder", reason)
        return
    _note(problems, "output-exists", out, "a folder that does not exist yet", "one that does")


def _note(problems: Problems, id: str, out: Path, expected: str, found: str) -> None:  # noqa: A002
    problems.add(id=id, file=out, key="--out", expected=expected, found=found)


@contextmanager
def held(folder: Path) -> Iterator[None]:
    """Keep other processes from writing into a run's folder; ends with the process at the latest.

    Raises BenchHeld when another process holds it. Where the file system knows no locks, nobody
    is kept from anything.
    """
    try:
        descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    except OSError:
        yield  # there is no such folder: whoever reads it will say so
        return
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        os.close(descriptor)
        raise BenchHeld(f"{folder}: this run is being carried out by another process") from None
    except OSError:
        pass
    try:
        yield
    finally:
        os.close(descriptor)


def make(out: Path, sources: Sources, brief: Brief) -> Path:
    """Make the folder with copies of the inputs; returns the path of the journal to be.

    Raises BadInput when it exists or cannot be made, FolderUnusable when it cannot be written.
    """
    problems = Problems()
    note_unusable(out, problems)
    problems.raise_if_any()
    try:
        out.mkdir(parents=True)
    except OSError as error:
        reason = error.strerror or str(error)
        _note(problems, "output-unusable", out, "a place for a new folder", reason)
        raise BadInput(tuple(problems)) from error
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
