"""Carries a brief out, part by part, and ends every run the same way: at rest and said so.

Whatever ends a run (the last stage, a signal, a lost link, a full disk, a fault of our own), the
meter is brought to rest, the warden makes everything safe, the journal says how it ended and is
closed; only then does the exception travel on.
"""

from collections.abc import Mapping
from contextlib import nullcontext, suppress
from dataclasses import dataclass
from functools import partial

import trio

from ohmward.errors import BadInput, NotProvenSafe, OhmwardError, Problem, Stopped
from ohmward.run.bench import Connections, OpenBench, open_bench
from ohmward.run.recorder import Recorder
from ohmward.run.stopping import StopSignals, catch_signals
from ohmward.run.sweep import Room, Sweep
from ohmward.run.watcher import Watcher
from ohmward.safety.handle import Ending
from ohmward.sequence.brief import Brief, PlannedStage
from ohmward.setup.bench import Bench
from ohmward.setup.driver import Driver


@dataclass(frozen=True, kw_only=True, slots=True)
class Order:
    """What a run is asked to do, and what of it has been done before.

    ``ended`` are the numbers of stages that are complete; ``taken`` the readings of the one
    that was interrupted, by stage number. ``identities`` are those that the bench must have
    (empty for a first run).
    """

    brief: Brief
    bench: Bench
    drivers: Mapping[str, Driver]
    ended: frozenset[int] = frozenset()
    taken: Mapping[int, set[tuple[int, int]]]
    identities: Mapping[str, str]


async def carry_out(
    order: Order, connections: Connections, recorder: Recorder, watcher: Watcher
) -> Ending:
    """Run the order to its end and close the journal; returns how the bench was left.

    Raises Stopped after a signal, LinkError when a link is lost beyond its budget, SafetyTrip
    after a trip, BadInput when the bench is not the one that the run began with: each after the
    orderly end. NotProvenSafe stands before them all: the end could not be proven.
    """
    try:
        with catch_signals() as stop:
            async with open_bench(order.bench, order.drivers, connections) as bench:
                await _note_identities(order, bench, recorder)
                ending = await _work_then_end(order, bench, recorder, watcher, stop)
        await recorder.fact("state", "finished")
    except BaseException as error:
        with trio.CancelScope(shield=True):
            await _close_after(recorder, error)
        raise
    await recorder.close()
    return ending


async def _work_then_end(
    order: Order, bench: OpenBench, recorder: Recorder, watcher: Watcher, stop: StopSignals
) -> Ending:
    """Do the work, and whatever comes of it bring the bench to rest."""
    try:
        await stop.run(partial(_work, order, bench, recorder, watcher))
    except BaseException as error:
        ending = await _bring_to_rest(bench, recorder)
        if not ending.proven:
            raise NotProvenSafe("; ".join(ending.reasons)) from error
        raise
    ending = await _bring_to_rest(bench, recorder)
    if not ending.proven:
        raise NotProvenSafe("; ".join(ending.reasons))
    return ending


async def _work(order: Order, bench: OpenBench, recorder: Recorder, watcher: Watcher) -> None:
    await bench.warden.start()
    room = Room(bench.thermometer)
    for stage in order.brief.stages:
        if stage.number in order.ended:
            continue
        watcher.stage(stage)
        taken = order.taken.get(stage.number, set())
        sweep = Sweep(
            stage,
            meter=bench.meter,
            meter_name=bench.meter_name,
            room=room,
            recorder=recorder,
            watcher=watcher,
        )
        await recorder.stage_begun(stage)
        state = "stopped"
        try:
            await bench.warden.lease(stage.part.position, stage.part.part_id)
            await sweep.carry_out(taken)
            await bench.meter.rest()
            await bench.warden.release()
            state = "ended"
        finally:
            with trio.CancelScope(shield=True):
                await _note_stage_end(recorder, stage, state)


async def _note_stage_end(recorder: Recorder, stage: PlannedStage, state: str) -> None:
    """Keep how the stage ended; while another error travels, a second one must not hide it."""
    with nullcontext() if state == "ended" else suppress(OhmwardError):
        await recorder.stage_ended(stage, state)


async def _bring_to_rest(bench: OpenBench, recorder: Recorder) -> Ending:
    """Meter at rest, everything open; never raises, so that nothing keeps the rest from it."""
    with trio.CancelScope(shield=True):
        endings = [await _rest_meter(bench), await bench.warden.stop()]
        ending = Ending.of_all(tuple(endings))
        detail = "proven" if ending.proven else "; ".join(ending.reasons)
        with suppress(OhmwardError):  # a failing journal raises again where it is closed
            await recorder.event("made-safe" if ending.proven else "not-proven-safe", detail)
    return ending


async def _rest_meter(bench: OpenBench) -> Ending:
    """Bias off; where the meter does not answer, what it last confirmed decides."""
    try:
        await bench.meter.rest()
    except OhmwardError as error:
        if bench.meter.bias_is_off:
            return Ending(proven=True)
        reason = f"{bench.meter_name}'s bias may still be on, switch it off by hand: {error}"
        return Ending(proven=False, reasons=(reason,))
    return Ending(proven=True)


async def _note_identities(order: Order, bench: OpenBench, recorder: Recorder) -> None:
    for name, identity in bench.identities.items():
        expected = order.identities.get(name, identity)
        instrument, driver = order.bench.instruments[name], order.drivers[name]
        if identity != expected:
            problem = Problem(
                id="identity-changed",
                file=str(order.bench.path),
                key=f"instrument.{name}",
                expected=f"{expected!r}, with which this run began",
                found=repr(identity),
            )
            raise BadInput((problem,))
        await recorder.instrument(
            name=name,
            role=instrument.role.value,
            address=instrument.address,
            identity=identity,
            driver=driver.name,
            sha256=driver.digest,
        )


async def _close_after(recorder: Recorder, error: BaseException) -> None:
    """Say in the journal what ended the run and close it; a failing journal hides no error.

    A run that was refused because the bench is another one leaves the journal as it was.
    """
    with suppress(OhmwardError):
        if not isinstance(error, BadInput):
            stopped = isinstance(error, Stopped)
            await recorder.fact("state", "stopped" if stopped else "failed")
            await recorder.event("stopped" if stopped else "failed", str(error))
        await recorder.close()
