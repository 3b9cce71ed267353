"""An in-process bench under a virtual clock, with a knob for faults: what the fixture hands out."""

from collections.abc import AsyncIterator, Awaitable, Callable
from contextlib import asynccontextmanager
from pathlib import Path
from typing import TypeVar

import trio

from ohmward import api
from ohmward.api.preparing import Prepared
from ohmward.api.running import Outcome
from ohmward.api.simulation import build_bench, connections
from ohmward.api.under_test import (
    ADDRESS,
    INSTRUMENT,
    KINDS,
    Chance,
    Fault,
    SimulatedBench,
    bench_of_driver,
)
from ohmward.clock import Clock, run_in_virtual_time
from ohmward.errors import Problems
from ohmward.instruments.talker import Talker, open_talker
from ohmward.instruments.transcript import Transcripts
from ohmward.protocol.check import check_driver
from ohmward.setup.bench import load_bench
from ohmward.setup.bench_drivers import load_drivers
from ohmward.setup.driver import Driver
from ohmward.setup.parts import load_parts
from ohmward.setup.resources import find_file
from ohmward.terms.part import Part

T = TypeVar("T")


class OpenInstruments:
    """The instruments while a test talks to them; ``simulated`` is what is behind them."""

    def __init__(self, simulated: SimulatedBench, talkers: dict[str, Talker]) -> None:
        self.simulated = simulated
        self.talkers = talkers

    def __getitem__(self, name: str) -> Talker:
        """The talker of an instrument, by its name on the bench."""
        return self.talkers[name]

    @property
    def instrument(self) -> Talker:
        """The talker of the only instrument there is."""
        (only,) = self.talkers.values()
        return only

    def place(self, part_id: str, position: str = "") -> None:
        """Put a part into a position that is loaded by hand."""
        self.simulated.place(part_id, position, trio.current_time())


class VirtualBench:
    """A bench that is simulated in this process; time jumps, and the seed decides all chance.

    Choose what is on it (``use_driver`` or ``use_bench``), say what shall go wrong (``fault``,
    ``at_random``), then ``run`` an async function on it, or a whole sequence (``dry_run``). Each
    of these begins with a bench that was just switched on.
    """

    def __init__(self, seed: int = 0) -> None:
        self.seed = seed
        self.transcripts = Transcripts()
        self.simulated: SimulatedBench | None = None
        """The bench of the last run, for a look behind it."""
        self.journal: Path | None = None
        self._faults: list[tuple[str, Fault]] = []
        self._chances: list[tuple[str, Chance]] = []
        self._bench = "depot-bench"
        self._driver: Driver | None = None
        self._parts: str | None = None

    # --- what is on the bench

    def use_driver(self, file: str | Path, *, parts: str | Path | None = None) -> Driver:
        """One instrument, called ``instrument``: the one that a driver file describes.

        A shipped driver meets the simulated instrument that speaks like it, a home-made one a
        responder that is made of its own file. Raises BadInput with every problem of the files.
        """
        self._driver = api.read_driver(str(file))
        self._parts = None if parts is None else str(parts)
        return self._driver

    def use_bench(self, bench: str | Path, *, parts: str | Path | None = None) -> None:
        """All instruments of a bench file, or of a shipped bench by its name."""
        self._driver = None
        self._bench = str(bench)
        self._parts = None if parts is None else str(parts)

    # --- what goes wrong

    def fault(
        self,
        kind: str,
        *,
        instrument: str = INSTRUMENT,
        after: int = 0,
        times: int = 1,
        delay_s: float = 1.0,
        matching: bytes = b"",
    ) -> None:
        """Let a fault happen: ``after`` so many messages, then so many ``times`` in a row.

        ``matching`` restricts it to messages that hold these bytes. Raises ValueError for a
        kind that there is not; ``fault_kinds`` has them all.
        """
        made = Fault(kind=kind, after=after, times=times, delay_s=delay_s, matching=matching)
        self._faults.append((instrument, made))

    def at_random(
        self,
        *kinds: str,
        instrument: str = INSTRUMENT,
        share: float = 0.1,
        delay_s: float = 1.0,
    ) -> None:
        """Let each message meet one of these kinds with this share, once all is opened.

        In a dry run it may happen from the beginning, also while instruments are opened.
        """
        unknown = sorted(set(kinds) - set(KINDS))
        if unknown:
            raise ValueError(f"no fault is called {', '.join(unknown)}")
        self._chances.append((instrument, Chance(kinds=kinds, share=share, delay_s=delay_s)))

    @property
    def fault_kinds(self) -> dict[str, str]:
        """Every kind of fault, and what it does."""
        return dict(KINDS)

    # --- doing something

    def run(self, work: Callable[[OpenInstruments], Awaitable[T]]) -> T:
        """Run an async function on the opened bench, in virtual time; returns what it returns.

        All instruments have been opened and have said who they are. Raises whatever it raises,
        and LinkError when an instrument cannot be opened.
        """
        simulated, drivers, addresses = self._built()
        self._prepare(simulated)

        async def main(clock: Clock) -> T:
            async with self._opened(simulated, drivers, addresses) as opened:
                return await work(opened)

        return run_in_virtual_time(main)

    def dry_run(self, sequence: str | Path, *, out: Path, parts: str | Path) -> Outcome:
        """Carry a sequence out on the bench, faults included; its folder is ``out``.

        Raises what ``ohmward dryrun`` would tell: BadInput with every problem, LinkError.
        """
        prepared: Prepared = api.prepare(str(sequence), bench=self._bench, parts=str(parts))
        self.journal = out / "journal.sqlite"

        def on_bench(simulated: SimulatedBench) -> None:
            self._prepare(simulated)
            self._begin_chance(simulated)

        return api.dry_run(prepared, out=out, seed=self.seed, transcript=1000, on_bench=on_bench)

    def _prepare(self, simulated: SimulatedBench) -> None:
        self.simulated = simulated
        self.transcripts = Transcripts()
        for name, fault in self._faults:
            simulated.layers[name].inject(fault)

    def _begin_chance(self, simulated: SimulatedBench) -> None:
        for name, chance in self._chances:
            simulated.layers[name].at_random(chance)

    def _built(self) -> tuple[SimulatedBench, dict[str, Driver], dict[str, str]]:
        problems = Problems()
        if self._driver is not None:
            rows = self._rows(None, problems)
            problems.raise_if_any()
            simulated = bench_of_driver(self._driver, rows, self.seed)
            return simulated, {INSTRUMENT: self._driver}, {INSTRUMENT: ADDRESS}
        bench = load_bench(find_file(self._bench, "simulators"), problems)
        drivers = load_drivers(bench, problems) if bench else None
        for driver in (drivers or {}).values():
            check_driver(driver, problems)
        rows = self._rows(bench, problems)
        problems.raise_if_any()
        assert bench is not None
        assert drivers is not None
        simulated = build_bench(bench, drivers, rows, seed=self.seed, with_faults=True)
        addresses = {name: one.address for name, one in bench.instruments.items()}
        return simulated, dict(drivers), addresses

    def _rows(self, bench: object, problems: Problems) -> tuple[Part, ...]:
        if self._parts is None:
            return ()
        path = find_file(self._parts, "simulators", ".csv")
        return load_parts(path, bench, problems)  # type: ignore[arg-type]

    @asynccontextmanager
    async def _opened(
        self, simulated: SimulatedBench, drivers: dict[str, Driver], addresses: dict[str, str]
    ) -> AsyncIterator[OpenInstruments]:
        linked = connections(simulated)
        talkers = {
            name: open_talker(
                address=addresses[name],
                driver=driver,
                manager=linked.manager,
                waiter=linked.waiter,
                transcript=self.transcripts.of(name),
            )
            for name, driver in drivers.items()
        }
        try:
            for talker in talkers.values():
                await talker.identify()
            self._begin_chance(simulated)
            yield OpenInstruments(simulated, talkers)
        finally:
            with trio.CancelScope(shield=True):
                for talker in talkers.values():
                    await talker.aclose()
            linked.manager.close()
