"""Start-up: ``ohmward --help`` against ``import typer``, and what it must not import.

Prints the ratio of medians of interleaved runs; at most 1.5 is asked for.
"""

import statistics
import subprocess
import sys
import time

RUNS = 15
HEAVY = ("numpy", "pandas", "scipy", "pyvisa", "pydantic", "trio", "rich.console")


def seconds(code: str) -> float:
    """Wall time of a fresh interpreter that runs this code."""
    start = time.perf_counter()
    subprocess.run([sys.executable, "-c", code], check=True, stdout=subprocess.DEVNULL)
    return time.perf_counter() - start


def main() -> None:
    """Run both in turn and print medians, the ratio and what help imported."""
    help_code = (
        "import sys; sys.argv = ['ohmward', '--help']\nfrom ohmward.cli.main import main; main()"
    )
    floor, ours = [], []
    for _ in range(RUNS):
        floor.append(seconds("import typer"))
        ours.append(seconds(help_code))
    ratio = statistics.median(ours) / statistics.median(floor)
    imported = subprocess.run(
        [
            sys.executable,
            "-c",
            f"import sys, ohmward.cli.main; print([n for n in {HEAVY!r} if n in sys.modules])",
        ],
        check=True,
        capture_output=True,
        text=True,
    ).stdout.strip()
    print(
        f"startup: help {statistics.median(ours) * 1e3:.0f} ms, import typer "
        f"{statistics.median(floor) * 1e3:.0f} ms, ratio {ratio:.2f} (at most 1.5); "
        f"heavy imports: {imported}"
    )


if __name__ == "__main__":
    main()
