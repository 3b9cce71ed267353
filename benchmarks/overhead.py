"""What a run costs beside its meter: readings per second against a bare PyVISA loop.

A served simulated meter takes 10 ms for a reading (short integration). The floor sends the
same query in a plain loop on PyVISA-py's own session; ours is `ohmward run`, journal, commits
and all, by the times in its own journal. Rounds alternate; at least 0.95 is asked for.
"""

import json
import sqlite3
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import pyvisa

READINGS = 400
ROUNDS = 3

SEQUENCE = f"""
format = 1
name = "overhead"
purpose = "One point, read as fast as it goes"
follows = "no standard: a measurement of the program itself"
kinds = "capacitor"

[[stage]]
kind = "sweep"
name = "reading"
frequency = "1 kHz"
level = "1 V"
repeats = {READINGS}
integration = "short"
"""


def bare(address: str) -> float:
    """Seconds per reading of a bare loop."""
    manager = pyvisa.ResourceManager("@py")
    meter = manager.open_resource(address, read_termination="\n", write_termination="\n")
    meter.query("*IDN?")
    for command in ("FREQ 1000", "VOLT 1", "APER SHOR", 'FUNC "RX"'):
        meter.write(command)
    meter.query("READ?")
    start = time.perf_counter()
    for _ in range(READINGS):
        [float(field) for field in meter.query("READ?").split(",")]
    seconds = time.perf_counter() - start
    meter.close()
    manager.close()
    return seconds / READINGS


def ours(folder: Path, bench: Path, round_: int) -> float:
    """Seconds per reading of a run, from the first reading to the last."""
    (folder / "overhead.toml").write_text(SEQUENCE)
    out = folder / f"run{round_}"
    command = [sys.executable, "-m", "ohmward", "run", str(folder / "overhead.toml")]
    command += ["--bench", str(bench), "--parts", "one-part", "--out", str(out)]
    subprocess.run(command, check=True, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    with sqlite3.connect(out / "journal.sqlite") as journal:
        first, last, count = journal.execute(
            "SELECT min(elapsed_s), max(elapsed_s), count(*) FROM impedance"
        ).fetchone()
    journal.close()
    return float(last - first) / (count - 1)


def main() -> None:
    """Serve the bench, run both in turn, print the ratio of medians."""
    command = [sys.executable, "-m", "ohmward", "serve", "depot-bench", "--parts", "one-part"]
    with (
        tempfile.TemporaryDirectory() as name,
        subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as server,
    ):
        folder = Path(name)
        lines: list[str] = []
        assert server.stdout is not None
        for line in server.stdout:
            lines.append(line)
            if line.startswith("meter_channels") and '"220"' in line:
                break
        bench = folder / "served.toml"
        bench.write_text("".join(lines))
        addresses = [
            json.loads(line.partition("=")[2]) for line in lines if line.startswith("address")
        ]
        try:
            floor, run = [], []
            for round_ in range(ROUNDS):
                floor.append(bare(addresses[0]))
                run.append(ours(folder, bench, round_))
        finally:
            server.terminate()
    ratio = statistics.median(floor) / statistics.median(run)
    print(
        f"overhead: bare {statistics.median(floor) * 1e3:.2f} ms, run "
        f"{statistics.median(run) * 1e3:.2f} ms per reading, "
        f"{ratio:.3f} of the bare rate (at least 0.95)"
    )


if __name__ == "__main__":
    main()
