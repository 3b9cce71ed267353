"""Reads a file that a person named, whole, and says in a Problem why it cannot be read."""

import stat
from os import stat_result
from pathlib import Path

from ohmward.errors import Problems
from ohmward.setup.resources import FOLDERS, shipped

LARGEST_BYTES = 64 * 1024 * 1024  # of what people write by hand, a hundred times more than enough


def read_bytes(path: Path, problems: Problems) -> bytes | None:
    """The file's bytes, or None with a problem noted: missing, no file, too large, unreadable.

    A pipe or a device is refused before it is opened: it might never end, and a run keeps
    copies of its inputs, which can be read only once there.
    """
    try:
        wrong = _why_not(path.stat())
        if not wrong:
            return path.read_bytes()
    except FileNotFoundError:
        name, expected = _missing(path)
        problems.add(id="file-missing", file=name, key="-", expected=expected, found="none")
        return None
    except (OSError, ValueError) as error:  # ValueError: a name with a NUL in it
        wrong = getattr(error, "strerror", None) or str(error)
    problems.add(id="file-unreadable", file=path, key="-", expected="a file", found=wrong)
    return None


def is_file(path: Path) -> bool:
    """Whether there is a file of that name; False too for a name that no file can have."""
    try:
        return path.is_file()
    except (OSError, ValueError):
        return False


def _why_not(found: stat_result) -> str:
    if stat.S_ISDIR(found.st_mode):
        return "a folder"
    if not stat.S_ISREG(found.st_mode):
        return "a pipe or a device"
    if found.st_size > LARGEST_BYTES:
        return f"{found.st_size // 1_000_000} MB, which nobody wrote"
    return ""


def _missing(path: Path) -> tuple[str, str]:
    """How the person named it, and what would have been found instead."""
    for folder in FOLDERS:
        beside = shipped(folder)
        if path.parent == beside:
            names = sorted(one.stem for one in beside.glob(f"*{path.suffix}") if _is_meant(one))
            return path.stem, f"a file, or the name of a shipped one: {', '.join(names)}"
        if path.parent == Path() and (beside / path.name).is_file():
            return str(path), f"a file here; the shipped one is named '{path.stem}'"
    return str(path), "a file"


def _is_meant(path: Path) -> bool:
    """Whether a shipped file is one that commands ask for: a bench, not what is behind it."""
    if path.suffix != ".toml":
        return True
    with path.open(encoding="utf-8") as file:
        return file.readline().rstrip().endswith(("bench.json", "driver.json", "sequence.json"))
