"""Carries out one sweep of one part: points in order, each settled, read as often as asked."""

from collections import deque
from dataclasses import replace

import trio

from ohmward.errors import InstrumentRefused
from ohmward.instruments.impedance_meter import ImpedanceMeter
from ohmward.instruments.thermometer import Thermometer
from ohmward.run.compensated import refuse_twice
from ohmward.run.recorder import Recorder
from ohmward.run.watcher import Watcher
from ohmward.safety.handle import Warden
from ohmward.sequence.brief import PlannedSweep, Settle
from ohmward.terms.condition import Point
from ohmward.terms.reading import Environment, ImpedanceReading
from ohmward.terms.status import Status

ENVIRONMENT_HOLDS_S = 60.0  # rooms change slowly; a thermometer is asked once a minute
LEAST_BETWEEN_S = 1e-3
AFTER_A_FAULT = frozenset({Status.TIMEOUT, Status.STALE})
"""A reading that ended so may have met a power cut, which opens a scanner's relays as well."""


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
    """One planned sweep on a meter that is connected to the part.

    Connected, or nothing counts: the contacts are read back at the end, and after a fault of
    the meter's link; readings since they were last seen closed count only if they still are.
    """

    def __init__(
        self,
        stage: PlannedSweep,
        *,
        meter: ImpedanceMeter,
        meter_name: str,
        warden: Warden,
        room: Room,
        recorder: Recorder,
        watcher: Watcher,
        compensated: bool = False,
    ) -> None:
        self._stage = stage
        self._compensated = compensated
        self._meter = meter
        self._meter_name = meter_name
        self._warden = warden
        self._room = room
        self._recorder = recorder
        self._watcher = watcher
        self._done = 0
        self._connected_s = 0.0

    async def carry_out(self, taken: set[tuple[int, int]]) -> None:
        """Take every reading that is not in ``taken`` (point index, repeat), in order.

        The lease on the part has just been given. Raises LinkError when a link is lost beyond
        its budget; what was read before is kept.
        """
        stage = self._stage
        self._done = len(taken)
        self._connected_s = self._recorder.elapsed_s()
        left = [
            (index, point, repeats)
            for index, point in enumerate(stage.points)
            if (repeats := [r for r in range(stage.repeats) if (index, r) not in taken])
        ]
        if not left:
            return
        try:
            found = await self._meter.prepare(
                pair=stage.pair, integration=stage.integration, range_ohm=stage.range_ohm
            )
        except InstrumentRefused as error:
            await self._tell_refused(error)
            for index, point, repeats in left:
                await self._keep_not_set(index, point, repeats)
            return
        await self._recorder.settings(stage, self._meter_name, found)
        if self._compensated:
            refuse_twice(self._meter_name, found)
        for index, point, repeats in left:
            await self._take(index, point, repeats)
        await self._see_contacts()

    async def _see_contacts(self) -> None:
        """Count what was read since the contacts were last seen only if they are still closed."""
        if not await self._warden.holds():
            await self._recorder.disconnected(self._stage, self._connected_s)
            part = self._stage.part
            self._watcher.note(
                f"{part.part_id}, {self._stage.stage}: its contacts did not stay closed; "
                "readings since they were last seen closed do not count"
            )
            await self._warden.release()
            await self._warden.lease(part.position, part.part_id)
        self._connected_s = self._recorder.elapsed_s()

    async def _take(self, index: int, point: Point, repeats: list[int]) -> None:
        stage = self._stage
        try:
            await self._meter.set_point(point)
        except InstrumentRefused as error:
            await self._tell_refused(error)
            await self._keep_not_set(index, point, repeats)
            return
        if stage.dwell_s:
            await trio.sleep(stage.dwell_s)
        settled = stage.settle is None or await self._settle(stage.settle)
        start_s = trio.current_time()
        for count, repeat in enumerate(repeats):
            if stage.interval_s:
                await trio.sleep_until(start_s + count * stage.interval_s)
            environment = await self._room.now()
            reading = await self._meter.read()
            if not settled and reading.status is Status.OK:
                reading = replace(reading, status=Status.UNSETTLED)
            await self._keep(index, repeat, point, reading, environment)
            if reading.status in AFTER_A_FAULT:
                await self._see_contacts()

    async def _settle(self, rule: Settle) -> bool:
        """Read until the last few agree within the rule's tolerance, or its time has passed."""
        deadline_s = trio.current_time() + rule.at_most_s
        last: deque[complex] = deque(maxlen=rule.readings)
        while (began_s := trio.current_time()) <= deadline_s:
            reading = await self._meter.read()
            if reading.status is Status.OK:
                last.append(complex(reading.first, reading.second))
            else:
                last.clear()
            if len(last) == rule.readings and _agree(last, rule.tolerance_rel):
                return True
            # a simulated instrument may answer at once, and virtual time must pass all the same
            await trio.sleep(LEAST_BETWEEN_S if trio.current_time() == began_s else 0)
        return False

    async def _tell_refused(self, error: InstrumentRefused) -> None:
        part, name = self._stage.part, self._stage.stage
        await self._recorder.event("not-set", str(error), part=part, stage=name)
        self._watcher.note(f"{part.part_id}, {name}: {error}")

    async def _keep_not_set(self, index: int, point: Point, repeats: list[int]) -> None:
        """Keep that the meter did not take this point: its readings are not-set, never numbers."""
        missing = ImpedanceReading(
            pair=self._stage.pair or "R-X",
            first=float("nan"),
            second=float("nan"),
            status=Status.NOT_SET,
        )
        for repeat in repeats:
            await self._keep(index, repeat, point, missing, await self._room.now())

    async def _keep(
        self,
        index: int,
        repeat: int,
        point: Point,
        reading: ImpedanceReading,
        environment: Environment,
    ) -> None:
        await self._recorder.impedance(
            self._stage,
            index,
            repeat,
            point,
            reading,
            integration=self._stage.integration,
            environment=environment,
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
