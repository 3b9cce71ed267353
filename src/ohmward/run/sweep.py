"""Carries out one sweep of one part: points in order, each settled, read as often as asked."""

from collections import deque
from dataclasses import replace

import trio

from ohmward.errors import InstrumentRefused
from ohmward.instruments.impedance_meter import ImpedanceMeter
from ohmward.instruments.thermometer import Thermometer
from ohmward.run.recorder import Recorder
from ohmward.run.watcher import Watcher
from ohmward.sequence.brief import PlannedSweep, Settle
from ohmward.terms.condition import Point
from ohmward.terms.reading import Environment, ImpedanceReading
from ohmward.terms.status import Status

ENVIRONMENT_HOLDS_S = 60.0  # rooms change slowly; a thermometer is asked once a minute


class Room:
    """The room's temperature and humidity, asked of the thermometer no more than once a minute."""

    def __init__(self, thermometer: Thermometer | None) -> None:
        self._thermometer = thermometer
        self._last = Environment()
        self._asked_s = -float("inf")

    async def now(self) -> Environment:
        """The last reading, renewed when it is a minute old; NaN on a bench without one."""
        if self._thermometer is None or trio.current_time() - self._asked_s < ENVIRONMENT_HOLDS_S:
            return self._last
        self._asked_s = trio.current_time()
        self._last = await self._thermometer.read()
        return self._last


class Sweep:
    """One planned sweep on a meter that is connected to the part."""

    def __init__(
        self,
        stage: PlannedSweep,
        *,
        meter: ImpedanceMeter,
        meter_name: str,
        room: Room,
        recorder: Recorder,
        watcher: Watcher,
    ) -> None:
        self._stage = stage
        self._meter = meter
        self._meter_name = meter_name
        self._room = room
        self._recorder = recorder
        self._watcher = watcher
        self._done = 0

    async def carry_out(self, taken: set[tuple[int, int]]) -> None:
        """Take every reading that is not in ``taken`` (point index, repeat), in order.

        Raises LinkError when the meter is lost beyond its link's budget; what was read before
        is kept.
        """
        stage = self._stage
        self._done = len(taken)
        found = await self._meter.prepare(
            pair=stage.pair, integration=stage.integration, range_ohm=stage.range_ohm
        )
        await self._recorder.settings(stage, self._meter_name, found)
        for index, point in enumerate(stage.points):
            repeats = [r for r in range(stage.repeats) if (index, r) not in taken]
            if repeats:
                await self._take(index, point, repeats)

    async def _take(self, index: int, point: Point, repeats: list[int]) -> None:
        stage = self._stage
        try:
            await self._meter.set_point(point)
        except InstrumentRefused as error:
            await self._refused(index, point, repeats, error)
            return
        if stage.dwell_s:
            await trio.sleep(stage.dwell_s)
        settled = stage.settle is None or await self._settle(stage.settle)
        start_s = trio.current_time()
        for count, repeat in enumerate(repeats):
            if stage.interval_s:
                await trio.sleep_until(start_s + count * stage.interval_s)
            reading = await self._meter.read()
            if not settled and reading.status is Status.OK:
                reading = replace(reading, status=Status.UNSETTLED)
            await self._keep(index, repeat, point, reading)

    async def _settle(self, rule: Settle) -> bool:
        """Read until the last few agree within the rule's tolerance, or its time has passed."""
        deadline_s = trio.current_time() + rule.at_most_s
        last: deque[complex] = deque(maxlen=rule.readings)
        while trio.current_time() <= deadline_s:
            reading = await self._meter.read()
            if reading.status is Status.OK:
                last.append(complex(reading.first, reading.second))
            else:
                last.clear()
            if len(last) == rule.readings and _agree(last, rule.tolerance_rel):
                return True
            await trio.sleep(0)
        return False

    async def _refused(
        self, index: int, point: Point, repeats: list[int], error: InstrumentRefused
    ) -> None:
        """Keep that the meter did not take this point: its readings are not-set, never numbers."""
        part, name = self._stage.part, self._stage.stage
        await self._recorder.event("not-set", str(error), part=part, stage=name)
        self._watcher.note(f"{part.part_id}, {name}: {error}")
        missing = ImpedanceReading(
            pair=self._stage.pair or "R-X",
            first=float("nan"),
            second=float("nan"),
            status=Status.NOT_SET,
        )
        for repeat in repeats:
            await self._keep(index, repeat, point, missing)

    async def _keep(self, index: int, repeat: int, point: Point, reading: ImpedanceReading) -> None:
        await self._recorder.impedance(
            self._stage,
            index,
            repeat,
            point,
            reading,
            integration=self._stage.integration,
            environment=await self._room.now(),
            instrument=self._meter_name,
        )
        self._done += 1
        self._watcher.reading(
            self._stage, done=self._done, of=len(self._stage.points) * self._stage.repeats
        )


def _agree(values: deque[complex], tolerance_rel: float) -> bool:
    """Whether all values lie within a fraction of their mean's magnitude of each other."""
    mean = sum(values) / len(values)
    return all(abs(value - mean) <= tolerance_rel * abs(mean) for value in values)
