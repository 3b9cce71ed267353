"""Unrolls a sweep stage for one part: its points in order, checked, and how long they take."""

from dataclasses import dataclass

from ohmward.sequence.brief import PlannedSweep, Settle
from ohmward.sequence.model import SweepStage
from ohmward.sequence.notes import Notes
from ohmward.sequence.rating import Allowance, Stress, check_stress, resolve_bias
from ohmward.sequence.reach import BIAS_SETTINGS, OF_THE_PART, Reach, reachable_frequencies
from ohmward.sequence.values import Bias
from ohmward.terms.condition import Point
from ohmward.terms.part import Part

RELAYS_S = 0.01  # for a scanner whose driver does not say; twice for each stage


@dataclass(frozen=True, kw_only=True, slots=True)
class Given:
    """What a sweep is planned with: the meter, the room there is, how long relays take."""

    reach: Reach
    allowance: Allowance
    relays_s: float


@dataclass(frozen=True, kw_only=True, slots=True)
class BiasOf:
    """A bias of the stage as it comes out for one part."""

    written: Bias
    volts: float
    amperes: float


def plan_sweep(
    stage: SweepStage, part: Part, *, number: int, given: Given, notes: Notes
) -> tuple[PlannedSweep | None, tuple[BiasOf, ...]]:
    """The stage for this part, and the biases that the meter cannot set and that are left out.

    Every problem is noted. None when no point is left, or no bias can be worked out.
    """
    reached, left_out = _biases(stage, part, given, notes)
    frequencies = reachable_frequencies(stage, given.reach)
    points = tuple(
        Point(frequency_hz=frequency, level_v=level, bias_v=bias.volts, bias_a=bias.amperes)
        for bias in reached
        for level in stage.level
        for frequency in frequencies
    )
    if not points:
        return None, left_out
    if stage.closure:
        points = (*points, points[0])
    settle = stage.settle
    return (
        PlannedSweep(
            number=number,
            stage=stage.name,
            part=part,
            points=points,
            closure=stage.closure,
            repeats=stage.repeats,
            dwell_s=stage.dwell,
            interval_s=stage.interval,
            settle=None
            if settle is None
            else Settle(
                tolerance_rel=settle.tolerance,
                readings=settle.readings,
                at_most_s=settle.at_most,
            ),
            integration=stage.integration,
            pair=stage.pair,
            range_ohm=stage.range,
            duration_s=2 * given.relays_s + sum(_point_s(stage, p, given.reach) for p in points),
        ),
        left_out,
    )


def _biases(
    stage: SweepStage, part: Part, given: Given, notes: Notes
) -> tuple[list[BiasOf], tuple[BiasOf, ...]]:
    key = f"stage[{stage.place}].bias"
    reached: list[BiasOf] = []
    left_out: list[BiasOf] = []
    for bias in stage.bias:
        found = resolve_bias(bias, part, key, notes)
        if found is None:
            continue
        volts, amperes = found
        one = BiasOf(written=bias, volts=volts, amperes=amperes)
        stress = Stress(bias_v=volts, bias_a=amperes, level_v=max(stage.level))
        check_stress(stress, part, key, notes, given.allowance)
        if bias.unit in OF_THE_PART and not _meter_can(one, given.reach):
            left_out.append(one)
        else:
            reached.append(one)
    return reached, tuple(left_out)


def _meter_can(bias: BiasOf, reach: Reach) -> bool:
    unit, value = ("A", bias.amperes) if bias.amperes else ("V", bias.volts)
    return value == 0 or reach.can(BIAS_SETTINGS[unit], value)


def _point_s(stage: SweepStage, point: Point, reach: Reach) -> float:
    """Settling, dwell, the readings that settle it, then the repeats at their interval.

    A settle rule is reckoned at the fewest readings that can meet it.
    """
    reading_s = reach.reading_s(stage.integration, point.frequency_hz)
    settling_s = reach.settling_s(point.frequency_hz) + stage.dwell
    if stage.settle is not None:
        settling_s += stage.settle.readings * reading_s
    return settling_s + (stage.repeats - 1) * max(stage.interval, reading_s) + reading_s
