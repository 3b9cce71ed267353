"""The program in processes of its own, many of them quickly: forked from one that has it loaded.

Each child runs ``ohmward.cli.main.main`` as the console script does, in its own process, with
its own standard streams and signals, and can be killed.
"""

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType

PARENT = """
import json, os, resource, signal, sys, time, warnings
warnings.simplefilter("ignore")
import importlib, pkgutil
import ohmward.api, ohmward.cli.main, ohmward.links.thread_waiter
import pyvisa, pyvisa_py, scipy.stats

for room in pkgutil.iter_modules(ohmward.api.__path__):  # they are loaded at need otherwise
    importlib.import_module(f"ohmward.api.{room.name}")

def child(request):
    for number, name in enumerate(("in", "out", "err")):
        flags = os.O_RDONLY if number == 0 else os.O_WRONLY | os.O_CREAT | os.O_TRUNC
        os.dup2(os.open(request[name], flags, 0o600), number)
    os.chdir(request["folder"])
    for number in request["ignored"]:
        signal.signal(number, signal.SIG_IGN)
    if request["largest_file"]:
        resource.setrlimit(resource.RLIMIT_FSIZE, (request["largest_file"],) * 2)
    sys.argv = ["ohmward", *request["arguments"]]
    ohmward.cli.main.main()

def wait(pid, seconds):
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        found, status = os.waitpid(pid, os.WNOHANG)
        if found:
            return os.waitstatus_to_exitcode(status)
        time.sleep(0.01)
    os.kill(pid, signal.SIGKILL)
    os.waitpid(pid, 0)
    return None

print("ready", flush=True)
for line in sys.stdin:
    request = json.loads(line)
    if "wait" in request:
        print(json.dumps(wait(request["wait"], request["seconds"])), flush=True)
        continue
    pid = os.fork()
    if pid == 0:
        try:
            child(request)
        except SystemExit as end:
            sys.stdout.flush()
            sys.stderr.flush()
            os._exit(end.code or 0)
        except BaseException:
            import traceback
            traceback.print_exc()
            sys.stderr.flush()
            os._exit(1)
        os._exit(0)
    print(pid, flush=True)
"""
PATIENCE_S = 60.0


@dataclass(frozen=True, kw_only=True)
class Ended:
    """How a process ended: its exit code, negative for the signal that killed it."""

    code: int
    out: str
    err: str


class Running:
    """One process of the program."""

    def __init__(self, program: "Program", pid: int, folder: Path) -> None:
        self._program = program
        self._folder = folder
        self.pid = pid

    def signal(self, number: int) -> None:
        """Send it a signal."""
        os.kill(self.pid, number)

    @property
    def said(self) -> str:
        """What it has written to standard error so far."""
        return (self._folder / "err").read_text("utf-8")

    def until(self, true: Callable[[], bool], seconds: float = PATIENCE_S) -> None:
        """Return as soon as it is true, which it becomes before the process ends."""
        end_s = time.monotonic() + seconds
        while not true():
            state = Path(f"/proc/{self.pid}/stat").read_text().rpartition(")")[2].split()[0]
            assert state != "Z", self.wait()
            assert time.monotonic() < end_s, "it never came true"
            time.sleep(0.005)

    def wait(self, seconds: float = PATIENCE_S) -> Ended:
        """Wait for its end, which comes."""
        code = self._program.answer({"wait": self.pid, "seconds": seconds})
        out, err = ((self._folder / name).read_text("utf-8") for name in ("out", "err"))
        assert isinstance(code, int), f"it did not end in {seconds} s:\n{out}\n{err}"
        return Ended(code=code, out=out, err=err)

    def killed(self) -> Ended:
        """Kill it as a power cut would."""
        self.signal(signal.SIGKILL)
        return self.wait()


class Program:
    """Starts the program again and again. Use as a context manager."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self._count = 0

    def __enter__(self) -> "Program":
        self._parent = subprocess.Popen(
            [sys.executable, "-c", PARENT],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
            env=os.environ | {"COLUMNS": "100", "OPENBLAS_NUM_THREADS": "1"},
        )
        assert self._parent.stdout is not None
        assert self._parent.stdout.readline() == "ready\n"
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._parent.communicate(timeout=PATIENCE_S)

    def answer(self, request: dict[str, object]) -> object:
        """Ask the parent of all these processes."""
        assert self._parent.stdin is not None
        assert self._parent.stdout is not None
        self._parent.stdin.write(json.dumps(request) + "\n")
        self._parent.stdin.flush()
        return json.loads(self._parent.stdout.readline())

    def start(
        self,
        *arguments: str,
        stdin: str = os.devnull,
        ignored: tuple[int, ...] = (),
        largest_file: int = 0,
    ) -> Running:
        """Start the program with these arguments."""
        self._count += 1
        folder = self._folder / f"process-{self._count}"
        folder.mkdir()
        for name in ("out", "err"):
            (folder / name).touch()
        request = {
            "arguments": arguments,
            "in": stdin,
            "out": str(folder / "out"),
            "err": str(folder / "err"),
            "folder": str(folder),
            "ignored": ignored,
            "largest_file": largest_file,
        }
        pid = self.answer(request)
        assert isinstance(pid, int)
        return Running(self, pid, folder)


def pause(seconds: float) -> None:
    """Let another process run for a while."""
    time.sleep(seconds)
