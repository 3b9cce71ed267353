"""Works the pure rooms on data in memory and prints, as JSON, what they did to the world.

Run by test_house in a process of its own: audit hooks stay for a process's life. Everything is
done twice. The first time brings in what is imported late; the second time must open nothing.
Given the name of a sin, it commits that one too, so that the test knows that it would be seen.
"""

import json
import os
import pkgutil
import sys
from collections.abc import Callable
from importlib import import_module
from itertools import product
from pathlib import Path
from typing import Any

ROOMS = ("metrology", "protocol", "setup", "terms", "units", "results", "sequence")
MODULES = ("safety.rules", "safety.hazard", "safety.permit")
WORLDLY = (
    *("socket.", "subprocess.", "sqlite3.", "shutil.", "tempfile.", "ctypes.", "urllib."),
    *("os.system", "os.exec", "os.spawn", "os.posix_spawn", "os.fork", "os.startfile"),
    *("os.remove", "os.rename", "os.mkdir", "os.rmdir", "os.link", "os.symlink", "os.truncate"),
    *("os.chmod", "os.chown", "os.utime", "pty.", "signal."),
)
NUMBERS = b"+1.000000E+01,-1.500000E+02,0,+1.000000E+00,+0.000000E+00,+1.000000E+03\n"
WRITES = os.O_WRONLY | os.O_RDWR | os.O_CREAT | os.O_TRUNC | os.O_APPEND

found: dict[str, list[str]] = {}
phase = "import"


def watch(event: str, arguments: tuple[Any, ...]) -> None:
    """Note what writes, connects or starts something; and in ``memory`` what opens at all."""
    if event == "open":
        path, _, flags = arguments
        if phase == "memory" or (isinstance(flags, int) and flags & WRITES):
            found.setdefault(phase, []).append(f"open {path}")
    elif event.startswith(WORLDLY) and not (phase == "import" and event.startswith("ctypes.")):
        found.setdefault(phase, []).append(f"{event} {arguments[:1]}")


def modules() -> list[str]:
    """Every module of the pure rooms."""
    names = [f"ohmward.{name}" for name in MODULES]
    for room in ROOMS:
        package = import_module(f"ohmward.{room}")
        names.append(package.__name__)
        names += [one.name for one in pkgutil.walk_packages(package.__path__, f"ohmward.{room}.")]
    return names


def read_files() -> dict[str, Any]:
    """Setup may read files: the shipped sequence, bench, drivers and parts."""
    from ohmward.errors import Problems
    from ohmward.sequence.load import load_sequence
    from ohmward.setup.bench import load_bench
    from ohmward.setup.bench_drivers import load_drivers
    from ohmward.setup.parts import load_parts
    from ohmward.setup.resources import shipped

    problems = Problems()
    bench = load_bench(shipped("simulators") / "depot-bench.toml", problems)
    assert bench is not None
    read = {
        "bench": bench,
        "drivers": load_drivers(bench, problems),
        "parts": load_parts(shipped("simulators") / "depot-lot.csv", bench, problems),
        "sequence": load_sequence(shipped("sequences") / "depot-survey.toml", problems),
    }
    problems.raise_if_any()
    return read


def plan(read: dict[str, Any]) -> Any:
    """The brief, made of what was read."""
    from ohmward.errors import Problems
    from ohmward.sequence.unroll import unroll

    problems = Problems()
    brief = unroll(
        **read, sequence_file=Path("s.toml"), parts_file=Path("p.csv"), problems=problems
    )
    problems.raise_if_any()
    assert brief is not None
    brief.as_dict()
    return brief


def talk(read: dict[str, Any]) -> None:
    """A driver's codec writes a command, takes a reply in pieces and reads it."""
    from ohmward.protocol.codec import codec_of

    driver = read["drivers"]["meter"]
    codec = codec_of(driver)
    frequency = driver.setting["frequency"]
    assert codec.command(frequency.set, frequency).encode({"value": 1e3}) == b"FREQ 1000"
    reading = driver.reading["impedance"]
    receiver = codec.receiver(codec.command(reading.ask).encode({}))
    for piece in (NUMBERS[:20], NUMBERS[20:]):
        receiver.feed(piece)
        message = receiver.next()
    assert isinstance(message, bytes)
    assert codec.layout(reading).decode(message).values["first"] == 10.0


def judge(read: dict[str, Any], brief: Any) -> None:
    """A reading of each point of the brief becomes rows, judged."""
    import numpy as np

    from ohmward.results.derive import derive_impedance
    from ohmward.results.judge import judge as judge_all

    points = [(stage, point) for stage in brief.stages for point in stage.points]
    count = len(points)
    text = {"pair": "R-X", "range": "1", "integration": "long", "status": "ok"}
    columns: dict[str, Any] = {
        name: np.array([value] * count, dtype=object)
        for name, value in {**text, "instrument": "meter"}.items()
    }
    for name, values in {
        "part_id": [stage.part.part_id for stage, _ in points],
        "position": [stage.part.position for stage, _ in points],
        "stage": [stage.stage for stage, _ in points],
    }.items():
        columns[name] = np.array(values, dtype=object)
    columns["reading"] = np.arange(count)
    columns["point"] = np.array([stage.points.index(point) for stage, point in points])
    columns["repeat"] = np.zeros(count, dtype=np.int64)
    columns["time_utc"] = np.full(count, np.datetime64("2026-01-01T00:00:00", "us"))
    plain = {"first": 10.0, "second": -150.0, "first_resolution": 0.0, "second_resolution": 0.0}
    plain |= {"elapsed_s": 0.0, "temperature_c": 23.0, "humidity_pct": 40.0}
    for name, value in plain.items():
        columns[name] = np.full(count, value)
    for name in ("frequency_hz", "level_v", "bias_v", "bias_a"):
        numbers = np.array([getattr(point, name) for _, point in points], dtype=np.float64)
        columns[name] = numbers
        if name != "frequency_hz":
            columns[name.replace("_v", "_set_v").replace("_a", "_set_a")] = numbers
    accuracies = {"meter": read["drivers"]["meter"].impedance_accuracy}
    derived = derive_impedance(columns, brief.parts, accuracies)
    assert judge_all(columns, derived, brief.parts, brief.limits, accuracies=accuracies)


def measure() -> None:
    """Metrology and units on plain numbers."""
    from ohmward.metrology.decide import decide
    from ohmward.metrology.immittance import covariance_of_pair, impedance_of_pair, views
    from ohmward.metrology.uncertain import Stated, UncertainImpedance, interval
    from ohmward.units.markings import read_marking
    from ohmward.units.rating import parse_rating
    from ohmward.units.tolerance import parse_tolerance
    from ohmward.units.values import format_quantity, parse_quantity

    r, x = impedance_of_pair("Cs-D", 1e-6, 0.1, 1e3)
    views(1e3, r, x, *covariance_of_pair("Cs-D", 1e-6, 0.1, 1e3, 1e-9, 1e-3), ("d", "cp_f"))
    stated = Stated(magnitude_rel=1e-3, phase_rad=1e-3)
    interval("d", UncertainImpedance(frequency_hz=1e3, r=0.1, x=-100.0, stated=stated))
    decide(1.0, 0.1, 2.0, 0.5, 1.5)
    read_marking("104K", "capacitor")
    parse_rating("450 V DC")
    parse_tolerance("-20/+80 %", 1e-6, "F")
    format_quantity(parse_quantity("4u7", "F"), "F")


def guard() -> None:
    """Every pair of safety's two tables, a node's hazard, and a request held against a permit."""
    from ohmward.safety.hazard import Path as Way
    from ohmward.safety.hazard import Stored, assess_node
    from ohmward.safety.permit import Ceiling, Permit, check_request
    from ohmward.safety.rules import (
        POSITION,
        SOURCE,
        PositionEvent,
        PositionState,
        SourceEvent,
        SourceState,
    )
    from ohmward.terms.kind import Kind

    for state, event in product(SourceState, SourceEvent):
        SOURCE.step(state, event)
    for place, happening in product(PositionState, PositionEvent):
        POSITION.step(place, happening)
    way = Way(series_ohm=1e3, discharge_ohm=1e4, target_v=1.0)
    assert assess_node("node", [Stored(name="C1", capacitance_f=1e-4, bias_v=450.0)], way).reasons
    ceiling = Ceiling(part_id="C1", position="1", kind=Kind.CAPACITOR, voltage_v=450.0)
    permit = Permit(brief_hash="c" * 64, ceilings=(ceiling,), bench_v=1000.0)
    assert check_request(permit, "C1", "1", bias_v=440.0, level_v=1.0) is ceiling


def work(name: str) -> None:
    """All of it; the name is that of the phase, the reading of files apart."""
    global phase
    phase = "reading"
    read = read_files()
    phase = name
    brief = plan(read)
    talk(read)
    judge(read, brief)
    measure()
    guard()
    phase = "reading"


def sin(name: str) -> None:
    """Do one of the things that no pure room may do."""
    import socket
    import sqlite3
    import subprocess

    deeds: dict[str, Callable[[], object]] = {
        "read": lambda: Path(__file__).read_text("utf-8"),
        "write": lambda: Path(os.devnull).write_text("x", "utf-8"),
        "socket": lambda: socket.socket().close(),
        "subprocess": lambda: subprocess.run(["true"], check=True),
        "sqlite": lambda: sqlite3.connect(":memory:").close(),
        "remove": lambda: Path("/nowhere/at/all").unlink(missing_ok=True),
    }
    deeds[name]()


sys.addaudithook(watch)
names = modules()
for name in names:
    import_module(name)
for name in ("warming", "memory"):
    work(name)
for name in sys.argv[1:]:
    phase = "reading"
    phase = "memory"
    sin(name)
phase = "over"
print(json.dumps({"modules": len(names), "found": found}))
