"""Carries out one stage under voltage: what the warden reads is kept before it is answered.

A part that misbehaves ends its stage and the lot goes on; what the bench does wrong travels on
as a trip. A stage that is taken up again starts from its beginning.
"""

from collections.abc import Callable
from dataclasses import replace
from math import inf, isnan

import trio

from ohmward.results.forming import Forming, FormingRule, Step
from ohmward.run.recorder import Recorder
from ohmward.run.sweep import Room
from ohmward.run.watcher import Watcher
from ohmward.safety.messages import Directive, Held, Hold, Observation, Recover
from ohmward.safety.voltage import HighVoltageWarden
from ohmward.sequence.planned import (
    PlannedAbsorption,
    PlannedDirect,
    PlannedLeakage,
    PlannedProof,
    PlannedReform,
)
from ohmward.terms.status import Status

Policy = Callable[[Observation], Directive]

GO_ON = Directive()
STOP = Directive(do="stop")
RISEN_REL = 0.5  # a leakage that has risen so far above its least is on its way to a breakdown
FORMING_WITHIN_REL = 0.1  # what an oxide that forms may drop across the series resistor
SETTLED_S = 10.0  # before that what falls off is charging and absorption


class Holding:
    """One planned stage under voltage at the warden's hands.

    ``meter_name`` is the current meter's name on the bench, ``error_a`` gives the half-width of
    its reading of a current (A).
    """

    def __init__(
        self,
        stage: PlannedDirect,
        *,
        warden: HighVoltageWarden,
        meter_name: str,
        error_a: Callable[[float], float],
        room: Room,
        recorder: Recorder,
        watcher: Watcher,
    ) -> None:
        self._stage = stage
        self._warden = warden
        self._meter_name = meter_name
        self._error_a = error_a
        self._room = room
        self._recorder = recorder
        self._watcher = watcher
        self._done = 0

    async def carry_out(self) -> None:
        """Do the stage from its beginning; the part is proven dead when this returns.

        Raises SafetyTrip when the bench was the cause, NotProvenSafe when the part is not
        proven dead, LinkError; ValueError for a kind of stage that is not known here.
        """
        stage = self._stage
        await self._recorder.begin_again(stage)
        await self._recorder.settled()
        match stage:
            case PlannedLeakage():
                await self._hold(1, self._asked(stage.voltage_v, stage.soak_s), self._not_rising())
            case PlannedReform():
                await self._reform(stage)
            case PlannedProof():
                await self._prove_strength(stage)
            case PlannedAbsorption():
                await self._absorb(stage)
            case _:
                raise ValueError(f"a stage of kind {stage.kind} is not carried out here")

    def _asked(self, voltage_v: float, soak_s: float) -> Hold:
        stage = self._stage
        return Hold(
            part_id=stage.part.part_id,
            position=stage.part.position,
            voltage_v=voltage_v,
            ramp_v_per_s=stage.ramp_v_per_s,
            soak_s=soak_s,
            every_s=stage.interval_s,
            also_s=stage.times_s if isinstance(stage, PlannedLeakage) else (soak_s,),
            current_max_a=inf if stage.current_max_a is None else stage.current_max_a,
            power_max_w=inf if stage.power_max_w is None else stage.power_max_w,
        )

    async def _hold(self, number: int, hold: Hold, policy: Policy) -> Held:
        held = await self._warden.hold(hold, _Kept(self, number, policy))
        await self._ended(number, hold, held)
        return held

    async def _ended(self, number: int, asked: Hold | Recover, held: Held) -> None:
        await self._recorder.held(self._stage, number, asked, held)
        if held.stopped:
            part = self._stage.part
            await self._recorder.event(
                "part-stopped", held.stopped, part=part, stage=self._stage.stage
            )
            self._watcher.note(f"{part.part_id}, {self._stage.stage}: {held.stopped}")
        await self._recorder.settled()

    async def keep(self, number: int, seen: Observation) -> None:
        """Journal one observation, with the room it was taken in."""
        environment = await self._room.now()
        await self._recorder.leakage(
            self._stage,
            number,
            seen,
            background_a=None,
            environment=environment,
            instrument=self._meter_name,
        )
        self._done += 1
        self._watcher.reading(self._stage, done=self._done, of=self._stage.readings)

    # ---- what a reading is answered with

    def _not_rising(self) -> Policy:
        """Go on until the leakage rises."""
        least_a = inf

        def answer(seen: Observation) -> Directive:
            nonlocal least_a
            net_a = _net_a(seen)
            if net_a is None or seen.since_voltage_s < SETTLED_S:
                return GO_ON
            if net_a > least_a + RISEN_REL * abs(least_a) + 2.0 * self._error_a(
                seen.current_a or 0.0
            ):
                self._watcher.note(
                    f"{self._stage.part.part_id}, {self._stage.stage}: its leakage rises"
                )
                return STOP
            least_a = min(least_a, net_a)
            return GO_ON

        return answer

    async def _reform(self, stage: PlannedReform) -> None:
        forming = Forming(forming_rule(stage, self._error_a(stage.next_below_a)))

        def answer(seen: Observation) -> Directive:
            elapsed_s = self._recorder.elapsed_s()
            step = forming.take(
                elapsed_s=elapsed_s,
                since_voltage_s=seen.since_voltage_s,
                voltage_v=seen.voltage_set_v,
                net_a=_net_a(seen),
            )
            if step is Step.WAIT:
                return GO_ON
            if step is Step.NEXT:
                return Directive(
                    do="change",
                    voltage_v=forming.after(seen.voltage_set_v),
                    soak_s=max(forming.left_s(elapsed_s), stage.interval_s),
                )
            return STOP

        asked = replace(
            self._asked(stage.voltages_v[0], stage.budget_s), within_rel=FORMING_WITHIN_REL
        )
        await self._hold(1, asked, answer)
        await trio.sleep(stage.rest_s)

    async def _prove_strength(self, stage: PlannedProof) -> None:
        """A part may clear a weak spot and try again; a breakdown that stays ends it."""
        for number in range(1, stage.attempts + 1):
            held = await self._hold(
                number, self._asked(stage.voltage_v, stage.dwell_s), lambda _: GO_ON
            )
            if not held.stopped:
                return

    async def _absorb(self, stage: PlannedAbsorption) -> None:
        recover = Recover(
            hold=self._asked(stage.voltage_v, stage.charge_s),
            short_s=stage.short_s,
            read_s=tuple(sorted(stage.read_at_s)),
        )
        held = await self._warden.recover(recover, _Kept(self, 1, lambda _: GO_ON))
        await self._ended(1, recover, held)


class _Kept:
    """The observer of one hold: keeps what it is shown, then lets the policy answer."""

    def __init__(self, holding: Holding, number: int, policy: Policy) -> None:
        self._holding = holding
        self._number = number
        self._policy = policy

    async def observe(self, observation: Observation) -> Directive:
        """Keep the observation, then say what to do next."""
        await self._holding.keep(self._number, observation)
        return self._policy(observation)


def forming_rule(stage: PlannedReform, error_a: float) -> FormingRule:
    """The rule by which a planned stage forms its part."""
    return FormingRule(
        voltages_v=stage.voltages_v,
        hold_s=stage.hold_s,
        next_below_a=stage.next_below_a,
        rise_rel=stage.rise_rel,
        budget_s=stage.budget_s,
        error_a=error_a,
    )


def _net_a(seen: Observation) -> float | None:
    """The part's own current, the divider's taken off; None where it was not read."""
    if seen.current_a is None or seen.status is not Status.OK or isnan(seen.current_a):
        return None
    return seen.current_a - seen.divider_a
