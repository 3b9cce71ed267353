"""The manifest of a run folder: SHA-256 and size of every file in it."""

import hashlib
import json
from collections.abc import Mapping
from pathlib import Path

FILE = "manifest.json"


def sha256(path: Path) -> str:
    """The file's SHA-256, in hexadecimal, read in pieces."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def write(folder: Path, about: Mapping[str, str]) -> None:
    """Write the manifest of what is in the folder now, itself left out; ``about`` heads it."""
    files = {
        path.relative_to(folder).as_posix(): {
            "sha256": sha256(path),
            "bytes": path.stat().st_size,
        }
        for path in sorted(folder.rglob("*"))
        if path.is_file() and path.name != FILE
    }
    content = {"format": 1, **about, "files": files}
    (folder / FILE).write_text(json.dumps(content, indent=1, ensure_ascii=False) + "\n", "utf-8")
