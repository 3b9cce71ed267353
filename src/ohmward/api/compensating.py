"""Takes a fixture's compensation: open, short and load, position by position, into one file."""

import sys
from collections.abc import Callable, Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass
from datetime import datetime, timedelta
from math import inf
from pathlib import Path

import numpy as np
import trio
from numpy.typing import NDArray

from ohmward.api.operator import Hand, HandAsOperator, TerminalHand
from ohmward.clock import DRY_RUN_START_UTC, Clock, run_in_real_time, run_in_virtual_time
from ohmward.errors import BadInput, LinkError, NotProvenSafe, OhmwardError, Problem, Problems
from ohmward.instruments.impedance_meter import CORRECTIONS, ImpedanceMeter
from ohmward.metrology.errors import CompensationMismatch
from ohmward.metrology.immittance import impedance_of_pair
from ohmward.protocol.check import check_driver
from ohmward.results import compensations
from ohmward.run.bench import Connections, OpenBench, open_bench
from ohmward.run.compensated import refuse_twice
from ohmward.sequence.load import load_sequence
from ohmward.sequence.model import SweepStage
from ohmward.sequence.reach import Reach, reachable_frequencies
from ohmward.setup.bench import Bench, load_bench
from ohmward.setup.bench_drivers import load_drivers
from ohmward.setup.compensation_file import (
    CompensatedPosition,
    CompensationFile,
    as_toml,
)
from ohmward.setup.driver import Driver
from ohmward.setup.resources import find_file
from ohmward.setup.standards_file import Standards, load_standards
from ohmward.setup.toml import one_of
from ohmward.terms.condition import Point
from ohmward.terms.role import Role
from ohmward.terms.status import Status

REPEATS = 3  # readings of each point and insertion
Readings = NDArray[np.complex128]


@dataclass(frozen=True, kw_only=True, slots=True)
class Task:
    """What is to be taken, without a problem."""

    bench: Bench
    drivers: Mapping[str, Driver]
    standards: Standards
    positions: tuple[str, ...]
    frequency_hz: tuple[float, ...]
    level_v: float
    integration: str
    insertions: int

    @property
    def meter_name(self) -> str:
        """The impedance meter's name on the bench."""
        return self.bench.name_of_role(Role.IMPEDANCE_METER)

    @property
    def kinds(self) -> tuple[str, ...]:
        """The standards that are taken, in order."""
        return ("open", "short") if self.standards.load is None else ("open", "short", "load")


def compensate(
    *,
    bench: str | Path,
    sequence: str | Path,
    out: Path,
    dry: bool = False,
    seed: int = 0,
    insertions: int = 1,
    only: Sequence[str] = (),
    told: Callable[[str], None] = lambda text: None,
) -> CompensationFile:
    """Measure open, short and load wherever the sequence needs them, and write the file.

    ``insertions`` is how often the short and the load are put in: from 2 on the scatter of their
    contacts is known. ``only`` names positions (all if empty). ``dry`` takes it on the simulated
    bench, in virtual time. Raises BadInput with every problem, CompensationMismatch where the
    meter corrects for a fixture itself, LinkError when a link is lost.
    """
    task = _task(bench, sequence, insertions, only)
    if out.exists():
        found = Problem(
            id="output-exists",
            file=str(out),
            key="--out",
            expected="a file that does not exist yet",
            found="one that does",
        )
        raise BadInput((found,))
    file = _dry(task, seed, told) if dry else _real(task, told)
    with out.open("x", encoding="utf-8") as text:
        text.write(as_toml(file))
    return file


# --- what is to be done ---


def _task(bench: str | Path, sequence: str | Path, insertions: int, only: Sequence[str]) -> Task:
    problems = Problems()
    sequence_path = find_file(str(sequence), "sequences")
    loaded = load_sequence(sequence_path, problems)
    on_bench = load_bench(find_file(str(bench), "simulators"), problems)
    drivers = load_drivers(on_bench, problems) if on_bench else None
    for driver in (drivers or {}).values():
        check_driver(driver, problems)
    standards = _standards(on_bench, problems)
    positions = _positions(on_bench, only, problems)
    if on_bench is not None and on_bench.of_role(Role.IMPEDANCE_METER) is None:
        problems.add(
            id="role-missing",
            file=on_bench.path,
            key="instrument",
            expected=f"an instrument with the role '{Role.IMPEDANCE_METER}'",
            found="none",
        )
    problems.raise_if_any()
    if loaded is None or on_bench is None or drivers is None or standards is None:
        raise OhmwardError("compensation was refused without a problem that says why")
    sweeps = [stage for stage in loaded.stage if isinstance(stage, SweepStage)]
    name = on_bench.name_of_role(Role.IMPEDANCE_METER)
    reach = Reach(name=name, driver=drivers[name])
    frequencies = sorted({f for stage in sweeps for f in reachable_frequencies(stage, reach)})
    if not frequencies:
        problems.add(
            id="nothing-to-compensate",
            file=sequence_path,
            key="stage",
            expected="a sweep with frequencies that the meter has",
            found="none",
        )
        problems.raise_if_any()
    longest = drivers[name].setting.get("integration")
    known = longest is not None and "long" in longest.words
    return Task(
        bench=on_bench,
        drivers=drivers,
        standards=standards,
        positions=positions,
        frequency_hz=tuple(frequencies),
        level_v=min(
            max(level for stage in sweeps for level in stage.level),
            inf if on_bench.level_ceiling_v is None else on_bench.level_ceiling_v,
        ),
        integration="long" if known else sweeps[0].integration,
        insertions=insertions,
    )


def _standards(bench: Bench | None, problems: Problems) -> Standards | None:
    if bench is None:
        return None
    path = bench.standards_path
    if path is None:
        problems.add(
            id="standards-missing",
            file=bench.path,
            key="fixture.standards",
            expected="a file that says what the open, short and load are",
            found="nothing",
        )
        return None
    return load_standards(path, problems)


def _positions(bench: Bench | None, only: Sequence[str], problems: Problems) -> tuple[str, ...]:
    known = [place.name for place in bench.positions] if bench else list(only)
    for name in only:
        if name not in known:
            problems.add(
                id="unknown-position",
                file="command line",
                key="--position",
                expected=one_of(name, known),
                found=name,
            )
    return tuple(name for name in known if not only or name in only)


# --- taking it ---


def _dry(task: Task, seed: int, told: Callable[[str], None]) -> CompensationFile:
    from ohmward.api import simulation

    simulated = simulation.build_bench(task.bench, task.drivers, (), seed=seed)

    class SimulatedHand:
        async def put(self, kind: str, position: str, insertion: int) -> None:
            simulated.place_standard(kind, position, trio.current_time())

    async def main(clock: Clock) -> CompensationFile:
        found = simulation.connections(simulated)
        return await _take(task, found, SimulatedHand(), clock, told)

    # a dry run begins when this ends at the latest, so that it is never older than its runs
    return run_in_virtual_time(main, start_utc=DRY_RUN_START_UTC - timedelta(days=1))


def _real(task: Task, told: Callable[[str], None]) -> CompensationFile:
    from pyvisa import ResourceManager

    from ohmward.links.thread_waiter import ThreadWaiter

    if not sys.stdin.isatty():
        problem = Problem(
            id="nobody-to-place-standards",
            file="command line",
            key="compensate",
            expected="a terminal at which a person is asked for each standard, or --dry",
            found="standard input is no terminal",
        )
        raise BadInput((problem,))

    async def main(clock: Clock) -> CompensationFile:
        manager = ResourceManager("@py")
        connections = Connections(manager=manager, waiter=ThreadWaiter(), operator=HandAsOperator())
        try:
            return await _take(task, connections, TerminalHand(), clock, told)
        finally:
            manager.close()

    return run_in_real_time(main)


async def _take(
    task: Task,
    connections: Connections,
    hand: Hand,
    clock: Clock,
    told: Callable[[str], None],
) -> CompensationFile:
    taken = clock.utc()
    with_hand = Connections(
        manager=connections.manager, waiter=connections.waiter, operator=HandAsOperator()
    )
    async with open_bench(task.bench, task.drivers, with_hand) as bench:
        try:
            await bench.meter.rest()
            await bench.warden.start()
            own = await _refuse_own_correction(bench.meter, task)
            shown = await _all_standards(task, bench, hand, told)
        except BaseException:
            await _at_rest(bench, raising=False)
            raise
        await _at_rest(bench, raising=True)
        identity = bench.identities[bench.meter_name]
    return _file(task, shown, taken, clock, identity, own)


async def _at_rest(bench: OpenBench, *, raising: bool) -> None:
    """Meter at rest and everything open, also while another error travels."""
    with trio.CancelScope(shield=True):
        with suppress(LinkError):
            await bench.meter.rest()
        ending = await bench.warden.stop()
    if raising and not ending.proven:
        raise NotProvenSafe("; ".join(ending.reasons))


async def _refuse_own_correction(meter: ImpedanceMeter, task: Task) -> str:
    """``off`` or ``unknown``; raises CompensationMismatch where one of them is on."""
    found = await meter.prepare(pair=None, integration=task.integration, range_ohm=None)
    refuse_twice(task.meter_name, found)
    return "off" if all(name in found for name in CORRECTIONS) else "unknown"


async def _all_standards(
    task: Task, bench: OpenBench, hand: Hand, told: Callable[[str], None]
) -> dict[str, dict[str, Readings]]:
    """By position and standard, readings of shape (insertions, repeats, points)."""
    shown: dict[str, dict[str, Readings]] = {name: {} for name in task.positions}
    for kind in task.kinds:
        for position in task.positions:
            count = 1 if kind == "open" else task.insertions
            rows = []
            for insertion in range(count):
                await hand.put(kind, position, insertion)
                await bench.warden.lease(position, f"the {kind}")
                rows.append(await _points(task, bench.meter, kind, position))
                await bench.meter.rest()
                await bench.warden.release()
            shown[position][kind] = np.array(rows)
            told(f"{kind} of position {position}: {len(task.frequency_hz)} frequencies")
    return shown


async def _points(
    task: Task, meter: ImpedanceMeter, kind: str, position: str
) -> list[list[complex]]:
    """REPEATS readings of each point, by repeat; an open beyond the meter's reach is infinite."""
    found: list[list[complex]] = [[] for _ in range(REPEATS)]
    await meter.prepare(pair=None, integration=task.integration, range_ohm=None)
    for frequency_hz in task.frequency_hz:
        await meter.set_point(Point(frequency_hz=frequency_hz, level_v=task.level_v))
        for repeat in range(REPEATS):
            reading = await meter.read()
            if reading.status is Status.OVERLOAD and kind == "open":
                found[repeat].append(complex(inf, 0.0))
                continue
            if reading.status is not Status.OK:
                raise CompensationMismatch(
                    f"the {kind} of position {position} could not be read at {frequency_hz:g} Hz "
                    f"({reading.status}): nothing was kept"
                )
            r, x = impedance_of_pair(reading.pair, reading.first, reading.second, frequency_hz)
            found[repeat].append(complex(float(r), float(x)))
    return found


# --- the file ---


def _file(
    task: Task,
    shown: Mapping[str, Mapping[str, Readings]],
    taken: datetime,
    clock: Clock,
    identity: str,
    own: str,
) -> CompensationFile:
    accuracy = task.drivers[task.meter_name].impedance_accuracy
    if accuracy is None:
        raise CompensationMismatch(
            f"the driver of {task.meter_name} states no accuracy: a compensation without an "
            "uncertainty decides nothing"
        )
    one = task.bench.instruments[task.meter_name]
    meter = compensations.Meter(
        accuracy=accuracy,
        level_v=task.level_v,
        integration=task.integration,
        cable_m=one.cable_m,
    )
    contact = compensations.contact_of([kinds["short"].mean(axis=1) for kinds in shown.values()])
    places = []
    for name, kinds in shown.items():
        known = {
            kind: compensations.values_of(compensations.seen(readings, task.frequency_hz, meter))
            for kind, readings in kinds.items()
        }
        places.append(CompensatedPosition(name=name, **known))
    driver = task.drivers[task.meter_name]
    file = CompensationFile(
        format=1,
        taken=taken,
        bench=task.bench.name,
        fixture=task.bench.fixture.name,
        instrument=task.meter_name,
        identity=identity,
        driver=driver.name or driver.path.stem,
        driver_sha256=driver.digest,
        cable_m=one.cable_m,
        simulated=clock.virtual,
        own_correction="off" if own == "off" else "unknown",
        level_v=task.level_v,
        integration=task.integration,
        insertions=task.insertions,
        contact_resistance_ohm=contact[0],
        contact_reactance_ohm=contact[1],
        frequency_hz=task.frequency_hz,
        standards=compensations.standards_at(task.standards, task.frequency_hz),
        positions=tuple(places),
    )
    compensations.refuse_implausible(file)
    if task.standards.load is None:
        return file
    return file.model_copy(
        update={
            "positions": tuple(
                place.model_copy(update={"symmetric": compensations.symmetric(file, place.name)})
                for place in file.positions
            )
        }
    )
