"""Runs what a README tells people to type, in a copy of the checkout, and keeps what it said.

Conventions: a ``sh`` block holds commands, run in order, all in one copy; a ``text`` block
directly after it is what they print, whole, but for white space and the copy's own path, with a
line ``…`` for what is left out; ``<!-- exits 2 -->`` directly before a ``sh`` block says that
its last command is refused, and what is shown then is what it says. A ``python`` block is a
script. A command that ends in ``&`` serves until the end. What would install something is
checked, not done: the environment of the tests is there already.
"""

import os
import re
import shlex
import shutil
import signal
import subprocess
import sys
import tomllib
from collections.abc import Iterator
from dataclasses import dataclass, field
from itertools import pairwise
from pathlib import Path

TIMEOUT_S = 180
_FENCE = re.compile(
    r"(?:<!-- *exits (?P<exits>[0-9]+) *-->\s*)?^```(?P<kind>[a-z]+)\n(?P<text>.*?)^```$",
    re.M | re.S,
)
_OMITTED = re.compile(r"^\s*(?:…|\.\.\.)\s*$", re.M)


@dataclass(frozen=True, kw_only=True)
class Block:
    """One fenced block; ``shown`` is the ``text`` block directly after it, None without one."""

    kind: str
    text: str
    exits: int = 0
    shown: str | None = None

    @property
    def commands(self) -> list[str]:
        """The block's commands: continued lines joined, prompts and comments left out."""
        joined = self.text.replace("\\\n", " ")
        lines = (line.strip().removeprefix("$ ").strip() for line in joined.splitlines())
        return [line for line in lines if line and not line.startswith("#")]


def blocks_of(readme: str) -> list[Block]:
    """The blocks in order; a ``text`` block that shows output belongs to the one before."""
    found: list[Block] = []
    ended = -1
    for match in _FENCE.finditer(readme):
        between = readme[ended : match.start()] if ended >= 0 else "x"
        directly = not re.sub(r"<!--.*?-->", "", between, flags=re.S).strip()
        if match["kind"] == "text" and directly and found and found[-1].kind in ("sh", "python"):
            last = found.pop()
            found.append(
                Block(kind=last.kind, text=last.text, exits=last.exits, shown=match["text"])
            )
        else:
            exits = int(match["exits"] or 0)
            found.append(Block(kind=match["kind"], text=match["text"], exits=exits))
        ended = match.end()
    return found


def copy_of(checkout: Path, target: Path) -> Path:
    """A copy of what the checkout holds, with the environment of this Python as its ``.venv``."""
    listed = subprocess.run(
        ["git", "ls-files", "-z", "--cached", "--others", "--exclude-standard"],
        cwd=checkout,
        capture_output=True,
        text=True,
        check=True,
    ).stdout
    for name in filter(None, listed.split("\0")):
        if (checkout / name).is_file():
            (target / name).parent.mkdir(parents=True, exist_ok=True)
            shutil.copy(checkout / name, target / name)
    (target / ".venv").mkdir()
    for one in Path(sys.prefix).iterdir():
        if not one.name.endswith("-stamp"):
            (target / ".venv" / one.name).symlink_to(one)
    for stamp in ("run-stamp", "dev-stamp"):  # made last: make finds nothing to install
        (target / ".venv" / stamp).touch()
    return target


@dataclass
class Shell:
    """Runs commands in a copy; a context, at whose end whatever still serves is stopped."""

    folder: Path
    said: str = ""
    _serving: list[subprocess.Popen[str]] = field(default_factory=list)

    def __enter__(self) -> "Shell":
        return self

    def __exit__(self, *_: object) -> None:
        for process in self._serving:
            process.send_signal(signal.SIGINT)
            process.communicate(timeout=TIMEOUT_S)

    @property
    def environment(self) -> dict[str, str]:
        """That of a plain terminal; the copy's own sources come first, pytest only collects."""
        inherited = {name: text for name, text in os.environ.items() if "MAKE" not in name}
        return {
            **inherited,
            "PYTHONPATH": str(self.folder / "src"),
            "PYTEST_ADDOPTS": "--collect-only -p no:cacheprovider tests/units",
            "COLUMNS": "80",
        }

    def run(self, block: Block) -> None:
        """Run a block; ``said`` is then what it printed. Fails where a command fails."""
        self.said = ""
        if block.kind == "python":
            self._run(shlex.join([".venv/bin/python", "-c", block.text]), block.exits)
            return
        *first, last = block.commands
        for command in first:
            self._run(command, 0)
        self._run(last, block.exits)

    def _run(self, command: str, exits: int) -> None:
        if re.search(r"-m venv\b|\bpip install\b", command):
            check_installation(command, self.folder)
            return
        process = subprocess.Popen(
            ["bash", "-c", "exec " + command.removesuffix("&")]
            if command.endswith("&")
            else ["bash", "-c", command],
            cwd=self.folder,
            env=self.environment,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            stdin=subprocess.DEVNULL,
            text=True,
        )
        if command.endswith("&"):
            self._serving.append(process)
            assert process.stdout is not None
            self.said += process.stdout.readline()
            return
        out, err = process.communicate(timeout=TIMEOUT_S)
        assert process.returncode == exits, f"{command}: exit {process.returncode}\n{out}{err}"
        assert "Traceback" not in err, err
        self.said += out + (err if exits else "")


def check_installation(command: str, folder: Path) -> None:
    """What an installation names must be there: constraints, extras, the package itself."""
    words = shlex.split(command)
    for option, value in pairwise(words):
        if option in ("-c", "-r"):
            assert (folder / value).is_file(), f"{command}: there is no {value}"
    project = tomllib.loads((folder / "pyproject.toml").read_text("utf-8"))["project"]
    for word in words:
        extras = re.fullmatch(r"[^\[]*\[(.+)\]", word)
        for extra in extras[1].split(",") if extras else ():
            assert extra in project["optional-dependencies"], f"{command}: no extra {extra}"


def differs(shown: str, said: str, folder: Path) -> str:
    """How what was printed differs from what is shown; '' where it does not."""
    masked = said.replace(f"{folder}/", "").replace(str(folder), ".")
    pieces = [" ".join(piece.split()) for piece in _OMITTED.split(shown)]
    pattern = ".*".join(re.escape(piece) for piece in pieces)
    if re.fullmatch(pattern, " ".join(masked.split())):
        return ""
    return f"README shows:\n{shown}\nbut the commands print:\n{masked}"


def make_targets(makefile: str) -> Iterator[str]:
    """The targets that a Makefile has rules for."""
    for match in re.finditer(r"^([A-Za-z][\w-]*):", makefile, re.M):
        yield match[1]
