"""Carries a brief out, part by part, and ends every run the same way: at rest and said so.

Whatever ends a run (the last stage, a signal, a lost link, a full disk, a fault of our own), the
meter is brought to rest, the warden makes everything safe, the journal says how it ended and is
closed; only then does the exception travel on.
"""

from collections.abc import Mapping
from contextlib import ExitStack, nullcontext, suppress
from dataclasses import dataclass
from functools import partial

import trio

from ohmward.errors import (
    BadInput,
    LinkError,
    NotProvenSafe,
    OhmwardError,
    Problems,
    Stopped,
    WrongIdentity,
)
from ohmward.run.bench import Connections, Leave, OpenBench, open_bench
from ohmward.run.high_voltage import error_a
from ohmward.run.holding import Holding
from ohmward.run.recorder import Recorder
from ohmward.run.stopping import StopSignals, catch_signals
from ohmward.run.sweep import Room, Sweep
from ohmward.run.watcher import Watcher
from ohmward.safety.handle import Ending
from ohmward.sequence.brief import Brief, PlannedDirect, PlannedStage, PlannedSweep
from ohmward.setup.bench import Bench
from ohmward.setup.driver import Driver
from ohmward.terms.role import Role


@dataclass(frozen=True, kw_only=True, slots=True)
class Order:
    """What a run is asked to do, and what of it has been done before.

    ``ended`` are the numbers of stages that are complete; ``taken`` the readings of the one
    that was interrupted, by stage number. ``identities`` are those that the bench must have
    (empty for a first run). ``compensated_by`` is the identity of the meter that took the
    fixture's compensation ("" where nothing is corrected).
    """

    brief: Brief
    bench: Bench
    drivers: Mapping[str, Driver]
    ended: frozenset[int] = frozenset()
    taken: Mapping[int, set[tuple[int, int]]]
    identities: Mapping[str, str]
    compensated_by: str = ""


async def carry_out(
    order: Order,
    connections: Connections,
    recorder: Recorder,
    watcher: Watcher,
    stop: StopSignals | None = None,
) -> None:
    """Run the order to its end and close the journal.

    ``stop`` are the signals that end it, where the caller catches them already.
    Raises Stopped after a signal, LinkError when a link is lost beyond its budget, SafetyTrip
    after a trip, BadInput when the bench is not the one that the run began with: each after the
    orderly end. NotProvenSafe stands before them all: the end could not be proven.
    """
    try:
        with ExitStack() as stack:
            signals = stop or stack.enter_context(catch_signals())
            await signals.run(partial(_on_open_bench, order, connections, recorder, watcher))
        await recorder.fact("state", "finished")
    except BaseException as error:
        with trio.CancelScope(shield=True):
            await _close_after(recorder, error)
        raise
    await recorder.close()


async def _on_open_bench(
    order: Order, connections: Connections, recorder: Recorder, watcher: Watcher
) -> None:
    """Open the bench, see that it is the right one, work on it and leave it at rest."""
    opened = False
    try:
        leave = _leave(order, recorder)
        async with open_bench(order.bench, order.drivers, connections, leave) as bench:
            opened = True
            await _note_identities(order, bench, recorder)
            await _work_then_end(order, bench, recorder, watcher)
    except WrongIdentity as error:
        if order.identities and not opened:
            raise _another_bench(order, error) from error
        raise


def _another_bench(order: Order, error: WrongIdentity) -> BadInput:
    """An instrument other than the bench file's own answers where a run is to be gone on with."""
    problems = Problems()
    for name, instrument in order.bench.instruments.items():
        if instrument.address == error.address and name in order.identities:
            _identity_changed(problems, order, name, str(error))
    return BadInput(tuple(problems))


def _identity_changed(problems: Problems, order: Order, name: str, found: str) -> None:
    problems.add(
        id="identity-changed",
        file=order.bench.path,
        key=f"instrument.{name}",
        expected=f"{order.identities[name]!r}, with which this run began",
        found=found,
    )


async def _work_then_end(
    order: Order, bench: OpenBench, recorder: Recorder, watcher: Watcher
) -> None:
    """Do the work, and whatever comes of it bring the bench to rest."""
    try:
        await _work(order, bench, recorder, watcher)
    except BaseException as error:
        ending = await _bring_to_rest(bench, recorder, watcher)
        if not ending.proven:
            raise NotProvenSafe("; ".join(ending.reasons)) from error
        if isinstance(error, NotProvenSafe) and isinstance(error.__cause__, LinkError):
            raise error.__cause__ from None  # relays that nobody reaches, and no voltage on them
        raise
    ending = await _bring_to_rest(bench, recorder, watcher)
    if not ending.proven:
        raise NotProvenSafe("; ".join(ending.reasons))


async def _work(order: Order, bench: OpenBench, recorder: Recorder, watcher: Watcher) -> None:
    await bench.meter.rest()  # before any relay moves: it may stand there with its bias on
    await bench.warden.start()
    room = Room(bench.thermometer)
    given_up: dict[str, NotProvenSafe] = {}
    for stage in order.brief.stages:
        part_id = stage.part.part_id
        if stage.number in order.ended or part_id in given_up:
            continue
        watcher.stage(stage)
        await recorder.stage_begun(stage)
        state = "stopped"
        try:
            await _stage(stage, order, bench, room, recorder, watcher)
            state = "ended"
        except NotProvenSafe as error:
            if bench.high_voltage is None or bench.high_voltage.tripped:
                raise
            # it stays cut off from everything else: the lot goes on, and the end says so
            given_up[part_id] = error
            await recorder.event("given-up", str(error), part=stage.part, stage=stage.stage)
            watcher.note(f"{part_id}: {error}")
        finally:
            with trio.CancelScope(shield=True):
                await _note_stage_end(recorder, stage, state)


async def _stage(
    stage: PlannedStage,
    order: Order,
    bench: OpenBench,
    room: Room,
    recorder: Recorder,
    watcher: Watcher,
) -> None:
    """One stage of one part, by what kind of stage it is."""
    if isinstance(stage, PlannedDirect):
        if bench.high_voltage is None:
            raise OhmwardError(f"{order.bench.name} cannot energise, and {stage.stage} does")
        name = order.bench.name_of_role(Role.CURRENT_METER)
        await Holding(
            stage,
            warden=bench.high_voltage,
            meter_name=name,
            error_a=partial(error_a, order.drivers[name]),
            room=room,
            recorder=recorder,
            watcher=watcher,
        ).carry_out()
    elif isinstance(stage, PlannedSweep):
        sweep = Sweep(
            stage,
            meter=bench.meter,
            meter_name=bench.meter_name,
            warden=bench.warden,
            room=room,
            recorder=recorder,
            watcher=watcher,
            compensated=bool(order.compensated_by),
        )
        await bench.warden.lease(stage.part.position, stage.part.part_id)
        await sweep.carry_out(order.taken.get(stage.number, set()))
        await bench.meter.rest()
        await bench.warden.release()
    else:
        raise OhmwardError(f"nobody carries out a stage of kind {stage.kind}")


def _leave(order: Order, recorder: Recorder) -> Leave | None:
    """What this run may do with high voltage, as its brief's permit says."""
    permit = order.brief.permit
    if permit is None:
        return None
    biases = [point.bias_v for stage in order.brief.sweeps for point in stage.points]
    return Leave(permit=permit, meter_bias_v=max(biases, default=0.0), events=recorder)


async def _note_stage_end(recorder: Recorder, stage: PlannedStage, state: str) -> None:
    """Keep how the stage ended; while another error travels, a second one must not hide it."""
    with nullcontext() if state == "ended" else suppress(OhmwardError):
        await recorder.stage_ended(stage, state)


async def _bring_to_rest(bench: OpenBench, recorder: Recorder, watcher: Watcher) -> Ending:
    """Meter at rest, everything open; never raises, so that nothing keeps the rest from it.

    Relays that cannot be reached are told, but where the meter's bias is off and nothing else
    can energise, there is nothing that they could let through.
    """
    with trio.CancelScope(shield=True):
        rest, relays = await _rest_meter(bench), await bench.warden.stop()
        ending = Ending.of_all((rest, relays))
        detail = "proven" if ending.proven else "; ".join(ending.reasons)
        if rest.proven and bench.only_meter_energises and not relays.proven:
            ending = rest
            watcher.note(f"The meter's bias is off, but {'; '.join(relays.reasons)}")
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
    problems = Problems()
    for name, identity in bench.identities.items():
        if identity != order.identities.get(name, identity):
            _identity_changed(problems, order, name, repr(identity))
    if order.compensated_by not in ("", bench.identities[bench.meter_name]):
        problems.add(
            id="compensation-other-instrument",
            file=order.bench.path,
            key=f"instrument.{bench.meter_name}",
            expected=f"{order.compensated_by!r}, which took the compensation",
            found=repr(bench.identities[bench.meter_name]),
        )
    problems.raise_if_any()
    if order.identities:
        await recorder.event("resumed")
    for name, identity in bench.identities.items():
        instrument, driver = order.bench.instruments[name], order.drivers[name]
        await recorder.instrument(
            name=name,
            role=instrument.role.value,
            address=instrument.address,
            identity=identity,
            driver=driver.name or driver.path.stem,
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
    with suppress(OhmwardError):
        await recorder.close()
