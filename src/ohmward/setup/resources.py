"""Finds the TOML and CSV files that come with ohmward, in a wheel and in a checkout alike."""

from importlib.resources import files
from pathlib import Path

FOLDERS = ("drivers", "sequences", "simulators", "schemas")


def shipped(folder: str) -> Path:
    """The folder of shipped files: ``drivers``, ``sequences``, ``simulators``, ``schemas``.

    A wheel carries it inside the package, a checkout at the top of the repository.
    Raises ValueError for any other name.
    """
    if folder not in FOLDERS:
        raise ValueError(f"expected one of {', '.join(FOLDERS)}, found {folder!r}")
    package = Path(str(files("ohmward")))
    inside = package / "shipped" / folder
    return inside if inside.is_dir() else package.parent.parent / folder


def find_file(name_or_path: str, folder: str, suffix: str = ".toml") -> Path:
    """The file that a person means: a path as it stands, else a shipped file by its name.

    ``film-sweep`` without a suffix or slash is ``sequences/film-sweep.toml`` of what is
    shipped, unless a file (not a folder) of just that name is there.
    """
    path = Path(name_or_path)
    plain = path.suffix != suffix and "/" not in name_or_path and "\\" not in name_or_path
    if plain and not _is_there(path):
        return shipped(folder) / f"{name_or_path}{suffix}"
    return path


def _is_there(path: Path) -> bool:
    """Whether there is such a file, pipe or link; False for a name that nothing can have."""
    try:
        return path.exists() and not path.is_dir()
    except (OSError, ValueError):
        return False
