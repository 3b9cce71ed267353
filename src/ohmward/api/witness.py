"""What really flowed into a simulated part at each reading, for truth.csv."""

from math import inf, nan

import trio

from ohmward.clock import Clock
from ohmward.journal.writer import Writer
from ohmward.run.recorder import Recorder
from ohmward.safety.messages import Observation
from ohmward.sequence.brief import PlannedStage
from ohmward.sim.bench import SimulatedBench
from ohmward.sim.circuit import Circuit
from ohmward.sim.wired_circuit import WiredCircuit
from ohmward.terms.reading import Environment

SAME_TIME_REL = 0.03
ROOM_C = 23.0


class Witness:
    """Truths under voltage by part and stage: (time since the voltage s, current A, voltage V)."""

    def __init__(self, bench: SimulatedBench) -> None:
        self._bench = bench
        self._seen: dict[tuple[str, str], list[tuple[float, float, float]]] = {}

    def saw(self, stage: PlannedStage, seen: Observation) -> None:
        """Note what is true at this instant."""
        if not isinstance(self._bench.circuit, WiredCircuit):
            return
        engine = self._bench.circuit.to(trio.current_time())
        if isinstance(engine, Circuit):
            position = stage.part.position
            row = (seen.since_voltage_s, engine.part_current(position), engine.voltage(position))
            self._seen.setdefault((stage.part.part_id, stage.stage), []).append(row)

    def truth(self, part_id: str, stage: str, quantity: str, since_s: float) -> float:
        """The true value of a quantity under voltage; NaN where nobody saw it."""
        rows = self._seen.get((part_id, stage), [])
        farad = self._farad(part_id)
        times = {"polarization_index": (60.0, 600.0), "absorption_ratio": (30.0, 60.0)}
        if quantity in times:
            early, late = (_at(rows, time_s)[0] for time_s in times[quantity])
            return early / late if late else nan
        amperes, volts = _at(rows, since_s)
        if quantity == "leakage_a":
            return amperes
        if quantity == "withstood_v":
            return self._bench.parts[part_id].figures.drawn.breakdown_v
        ohm = volts / amperes if amperes > 0.0 else nan
        return {"insulation_ohm": ohm, "insulation_time_s": ohm * farad}.get(quantity, nan)

    def _farad(self, part_id: str) -> float:
        figures = self._bench.parts[part_id].figures
        return float(figures.farad(ROOM_C))


def _at(rows: list[tuple[float, float, float]], since_s: float) -> tuple[float, float]:
    """Current and voltage at the reading that falls on this time."""
    near = min(rows, key=lambda row: abs(row[0] - since_s), default=(inf, nan, nan))
    if not abs(near[0] - since_s) <= SAME_TIME_REL * since_s + 0.5:
        return nan, nan
    return near[1], near[2]


class WitnessedRecorder(Recorder):
    """A recorder that also notes what is true at each reading under voltage."""

    def __init__(
        self, writer: Writer, clock: Clock, witness: Witness, *, elapsed_offset_s: float = 0.0
    ) -> None:
        super().__init__(writer, clock, elapsed_offset_s=elapsed_offset_s)
        self._witness = witness

    async def leakage(
        self,
        stage: PlannedStage,
        hold: int,
        seen: Observation,
        *,
        background_a: float | None,
        environment: Environment,
        instrument: str,
    ) -> None:
        """Note the truth, then keep the reading."""
        self._witness.saw(stage, seen)
        await super().leakage(
            stage,
            hold,
            seen,
            background_a=background_a,
            environment=environment,
            instrument=instrument,
        )
