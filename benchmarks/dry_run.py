"""How fast virtual time passes: a day of one reading a second, and what memory it takes.

The floor is a bare loop of trio, PyVISA and SQLite over the same simulated meter: sleep a
second, query, insert. Asked for: the dry run, tables and all, at 3,000 times real time or
better, growing by less than 30 MB.
"""

import sqlite3
import subprocess
import sys
import tempfile
import time
from pathlib import Path

READINGS = 86_400


def ours() -> None:
    """Dry-run day-soak in this process; prints seconds and growth in MB."""
    from ohmward import api
    from ohmward.api import tabulating  # noqa: F401 - loaded before memory is first looked at

    prepared = api.prepare("day-soak", bench="depot-bench", parts="one-part")
    short = api.prepare("film-sweep", bench="depot-bench", parts="one-part")
    with tempfile.TemporaryDirectory() as name:
        api.dry_run(short, out=Path(name) / "warm")
        before = peak_mb()
        start = time.perf_counter()
        api.dry_run(prepared, out=Path(name) / "run")
        seconds = time.perf_counter() - start
        print(seconds, peak_mb() - before)


def floor() -> None:
    """The bare loop in this process; prints seconds."""
    import pyvisa
    import trio
    import trio.testing

    from ohmward import api
    from ohmward.api import simulation
    from ohmward.sim.backend import InProcessLibrary

    prepared = api.prepare("day-soak", bench="depot-bench", parts="one-part")

    async def main() -> None:
        bench = simulation.build(prepared, seed=0)
        library = InProcessLibrary(bench, trio.current_time)
        manager = pyvisa.ResourceManager(library)
        address = prepared.bench.instruments["meter"].address
        meter = manager.open_resource(address, read_termination="\n", write_termination="\n")
        journal = sqlite3.connect(":memory:")
        journal.execute("CREATE TABLE reading (elapsed_s REAL, reply TEXT)")
        for _ in range(READINGS):
            await trio.sleep(1)
            meter.write("READ?")
            await trio.sleep_until(library.reply_due(meter.session) or 0)
            row = (trio.current_time(), meter.read())
            journal.execute("INSERT INTO reading VALUES (?, ?)", row)
        journal.close()

    start = time.perf_counter()
    trio.run(main, clock=trio.testing.MockClock(autojump_threshold=0))
    print(time.perf_counter() - start, 0)


def peak_mb() -> float:
    """The most memory this process has ever held."""
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith("VmHWM"):
            return int(line.split()[1]) / 1024
    raise OSError("this system does not say how much memory a process holds")


def measured(which: str) -> tuple[float, float]:
    """Run one of the two in a process of its own."""
    code = [sys.executable, __file__, which]
    output = subprocess.run(code, check=True, capture_output=True, text=True).stdout
    seconds, growth = output.split()[-2:]
    return float(seconds), float(growth)


def main() -> None:
    """Run both and print the ratios."""
    bare_s, _ = measured("floor")
    our_s, growth_mb = measured("ours")
    print(
        f"dry run of a day: {READINGS / our_s:,.0f} times real time (at least 3,000), "
        f"bare loop {READINGS / bare_s:,.0f}; growth {growth_mb:.0f} MB (under 30)"
    )


if __name__ == "__main__":
    {"ours": ours, "floor": floor, "": main}[sys.argv[1] if sys.argv[1:] else ""]()
