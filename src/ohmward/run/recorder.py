"""Puts what happens into the journal, with the instant at which it happened."""

import json
from datetime import UTC, datetime, timedelta
from math import isnan

from ohmward.clock import Clock
from ohmward.journal import schema
from ohmward.journal.writer import Writer
from ohmward.safety.messages import Event, Held, Hold, Observation, Recover, to_line
from ohmward.sequence.brief import PlannedStage
from ohmward.terms.condition import Point
from ohmward.terms.part import Part
from ohmward.terms.reading import Environment, ImpedanceReading

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
MICROSECOND = timedelta(microseconds=1)


def _missing_is_null(number: float) -> float | None:
    return None if isnan(number) else number


def _as_json(message: Hold | Recover | Held) -> str:
    """A message's body as JSON; what is infinite is a string."""
    return str(json.dumps(json.loads(to_line(message))["body"], sort_keys=True))


class Recorder:
    """The run's pen: one method for each kind of thing that is kept.

    ``elapsed_offset_s`` is what had passed before this process took the run up again.
    """

    def __init__(self, writer: Writer, clock: Clock, *, elapsed_offset_s: float = 0.0) -> None:
        self._writer = writer
        self._clock = clock
        self._offset_s = elapsed_offset_s
        self._stage: PlannedStage | None = None
        self._happened: list[tuple[object, ...]] = []

    def _instant(self) -> tuple[int, float]:
        return (self._clock.utc() - EPOCH) // MICROSECOND, self._clock.elapsed_s() + self._offset_s

    async def fact(self, key: str, value: str) -> None:
        """Keep one fact of the run; a later one of the same key replaces it."""
        await self._writer.add(schema.INSERT_FACT, (key, value))

    async def instrument(
        self, *, name: str, role: str, address: str, identity: str, driver: str, sha256: str
    ) -> None:
        """Keep who answered at an address, and through which driver."""
        row = (name, role, address, identity, driver, sha256)
        await self._writer.add(schema.INSERT_INSTRUMENT, row)

    async def event(
        self, kind: str, detail: str = "", *, part: Part | None = None, stage: str = ""
    ) -> None:
        """Keep a thing that happened, after what the warden has told meanwhile."""
        await self._keep_happened()
        time_us, elapsed_s = self._instant()
        part_id, position = (part.part_id, part.position) if part else ("", "")
        row = (time_us, elapsed_s, part_id, position, stage, kind, detail)
        await self._writer.add(schema.INSERT_EVENT, row)

    def happened(self, event: Event) -> None:
        """Note what the warden tells, at its instant; it is kept with whatever is kept next."""
        stage = self._stage
        here = stage is not None and stage.part.position == event.position
        part_id = stage.part.part_id if stage is not None and here else ""
        name = stage.stage if stage is not None and here else ""
        instant = self._instant()
        self._happened.append(
            (*instant, part_id, event.position, name, event.kind.replace(" ", "-"), event.detail)
        )

    async def _keep_happened(self) -> None:
        while self._happened:
            row = self._happened.pop(0)
            await self._writer.add(schema.INSERT_EVENT, row)

    async def stage_begun(self, stage: PlannedStage) -> None:
        """Keep that a stage of a part began, or was taken up again."""
        self._stage, part = stage, stage.part
        row = (stage.number, stage.stage, stage.kind, part.part_id, part.position)
        await self._writer.add(schema.BEGIN_STAGE, row)
        await self.event("stage-begun", part=part, stage=stage.stage)

    async def stage_ended(self, stage: PlannedStage, state: str) -> None:
        """Keep how a stage ended: ``ended`` or ``stopped``; returns when all of it is lasting."""
        await self._writer.add(schema.END_STAGE, (state, stage.number))
        await self.event(f"stage-{state}", part=stage.part, stage=stage.stage)
        await self._writer.settled()

    async def begin_again(self, stage: PlannedStage) -> None:
        """Forget what a stage under voltage has read before: it starts from its beginning."""
        await self._writer.add(schema.FORGET_LEAKAGE, (stage.number,))
        await self._writer.add(schema.FORGET_HOLDS, (stage.number,))

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
        """Keep one reading under voltage as it was sent; returns when it is lasting."""
        await self._keep_happened()
        time_us, elapsed_s = self._instant()
        row = (
            stage.number,
            hold,
            time_us,
            elapsed_s,
            seen.since_voltage_s,
            seen.voltage_set_v,
            _missing_is_null(seen.voltage_v),
            None if seen.current_a is None else _missing_is_null(seen.current_a),
            seen.divider_a,
            background_a,
            seen.range_a,
            seen.status.value,
            _missing_is_null(environment.temperature_c),
            _missing_is_null(environment.humidity_pct),
            instrument,
            seen.current_reply,
            seen.voltage_reply,
        )
        await self._writer.add(schema.INSERT_LEAKAGE, row)
        await self._writer.settled()

    async def held(self, stage: PlannedStage, hold: int, asked: Hold | Recover, held: Held) -> None:
        """Keep what was asked of a hold and how it went."""
        await self._keep_happened()
        row = (stage.number, hold, _as_json(asked), _as_json(held))
        await self._writer.add(schema.INSERT_HOLD, row)

    async def settings(self, stage: PlannedStage, instrument: str, found: dict[str, str]) -> None:
        """Keep what an instrument was set to and read back at the start of a stage."""
        for name, value in found.items():
            row = (stage.number, instrument, name, value)
            await self._writer.add(schema.INSERT_SETTING, row)

    async def impedance(
        self,
        stage: PlannedStage,
        point_index: int,
        repeat: int,
        point: Point,
        reading: ImpedanceReading,
        *,
        integration: str,
        environment: Environment,
        instrument: str,
    ) -> None:
        """Keep one reading of an impedance meter, as it was sent."""
        time_us, elapsed_s = self._instant()
        row = (
            stage.number,
            point_index,
            repeat,
            time_us,
            elapsed_s,
            point.frequency_hz,
            point.level_v,
            _missing_is_null(reading.level_v),
            point.bias_v,
            _missing_is_null(reading.bias_v),
            point.bias_a,
            _missing_is_null(reading.bias_a),
            reading.range,
            integration,
            reading.status.value,
            reading.pair,
            _missing_is_null(reading.first),
            _missing_is_null(reading.second),
            reading.first_resolution,
            reading.second_resolution,
            _missing_is_null(environment.temperature_c),
            _missing_is_null(environment.humidity_pct),
            instrument,
            reading.reply,
        )
        await self._writer.add(schema.INSERT_IMPEDANCE, row)

    def elapsed_s(self) -> float:
        """Seconds since the run began, as they are written."""
        return self._clock.elapsed_s() + self._offset_s

    async def disconnected(self, stage: PlannedStage, since_s: float) -> None:
        """Keep that the part was not connected: its readings from ``since_s`` on are no numbers."""
        await self._writer.add(schema.DISCONNECT, (stage.number, since_s))
        await self.event("contact-lost", part=stage.part, stage=stage.stage)
        await self._writer.settled()  # before another reading, so that it meets only the old ones

    async def settled(self) -> None:
        """Return when everything kept so far is lasting."""
        await self._writer.settled()

    async def close(self) -> None:
        """Close the journal in order."""
        try:
            await self._keep_happened()
        finally:
            await self._writer.close()
