"""What can be said of a sequence by itself: whether its stages and limits fit each other."""

from collections.abc import Callable, Iterable
from pathlib import Path
from typing import TypeVar

from ohmward.errors import Problems
from ohmward.sequence.direct import READ_AT_S, DirectStage
from ohmward.sequence.direct_check import check_direct
from ohmward.sequence.model import Condition, FrequencyRange, LimitTable, Sequence, SweepStage
from ohmward.sequence.rule_book import RULES
from ohmward.sequence.rules import same_frequency
from ohmward.sequence.tables import PartFilter, StageTable
from ohmward.sequence.values import Bias
from ohmward.setup.toml import one_of
from ohmward.terms.kind import Kind
from ohmward.terms.quantity import QUANTITIES
from ohmward.units.values import format_quantity

T = TypeVar("T")

# Quantities whose expected value is the nominal one, so that a share of nominal means something.
NOMINAL_QUANTITIES: dict[str, frozenset[Kind]] = {
    **dict.fromkeys(("capacitance_f", "cs_f", "cp_f"), frozenset({Kind.CAPACITOR})),
    **dict.fromkeys(("inductance_h", "ls_h", "lp_h"), frozenset({Kind.INDUCTOR})),
    **dict.fromkeys(
        ("resistance_ohm", "impedance_ohm", "rs_ohm", "rp_ohm", "direct_ohm"),
        frozenset({Kind.RESISTOR}),
    ),
}


def same_value(first: float, second: float) -> bool:
    """Whether two settings are one: equal within one part in a million."""
    return same_frequency(first, second)


def same_bias(first: Bias, second: Bias) -> bool:
    """Whether two biases as written are one; zero is zero in every unit."""
    if first.value == 0 and second.value == 0:
        return True
    return first.unit == second.unit and same_value(first.value, second.value)


def kinds_of(parts: PartFilter, among: Iterable[Kind]) -> frozenset[Kind]:
    """The kinds that a filter lets through, of those that there may be."""
    allowed = frozenset(among)
    if parts.kind:
        allowed &= frozenset(parts.kind)
    for end in (parts.above, parts.up_to):
        if end is not None:
            allowed &= {end.kind}
    return allowed


class Checker:
    """Notes problems of one sequence file under the keys where a person mends them."""

    def __init__(
        self, sequence: Sequence, names: tuple[str, ...], path: Path, problems: Problems
    ) -> None:
        self._sequence = sequence
        self._names = names
        self._path = path
        self._problems = problems

    def note(self, problem_id: str, key: str, /, *, expected: str, found: object) -> None:
        """Note one problem of this file."""
        self._problems.add(
            id=problem_id, file=self._path, key=key, expected=expected, found=str(found)
        )

    def stages(self) -> None:
        """Names that stand twice, lists that repeat themselves, filters that let nothing in."""
        for place, name in enumerate(self._names, start=1):
            if name and name in self._names[: place - 1]:
                self.note(
                    "stage-name-twice",
                    f"stage[{place}].name",
                    expected="a name that no stage before it has",
                    found=name,
                )
        for stage in self._sequence.stage:
            key = f"stage[{stage.place}]"
            self._filter(stage.parts, f"{key}.parts", self._sequence.kinds)
            if isinstance(stage, SweepStage):
                self._sweep(stage, key)
            elif isinstance(stage, DirectStage):
                check_direct(stage, key, self._sequence.kinds, self.note)

    def _sweep(self, stage: SweepStage, key: str) -> None:
        if not isinstance(stage.frequency, FrequencyRange):
            self._repeated(f"{key}.frequency", stage.frequency, same_frequency, _hertz)
        self._repeated(f"{key}.level", stage.level, same_value, _volts)
        self._repeated(f"{key}.bias", stage.bias, same_bias, str)
        for place, bias in enumerate(stage.bias, start=1):
            if bias.unit == "1" and not 0 <= bias.value <= 1:
                self.note(
                    "out-of-range",
                    f"{key}.bias[{place}]",
                    expected="0 % to 100 % of rating",
                    found=bias,
                )
        if stage.interval and stage.repeats == 1:
            self.note(
                "interval-without-repeats",
                f"{key}.interval",
                expected="'repeats' above 1, or no interval",
                found="repeats = 1",
            )

    def _repeated(
        self,
        key: str,
        values: tuple[T, ...],
        same: Callable[[T, T], bool],
        show: Callable[[T], str],
    ) -> None:
        for place, value in enumerate(values, start=1):
            if any(same(value, before) for before in values[: place - 1]):
                self.note(
                    "value-twice",
                    f"{key}[{place}]",
                    expected="each value once",
                    found=f"{show(value)} again",
                )

    def _filter(self, parts: PartFilter, key: str, among: Iterable[Kind]) -> None:
        possible = tuple(among)
        if not kinds_of(parts, possible):
            self.note(
                "filter-lets-nothing-in",
                key,
                expected=f"parts among {', '.join(possible)}, with values in their unit",
                found=_filter_text(parts),
            )
        above, up_to = parts.above, parts.up_to
        if above and up_to and above.unit == up_to.unit and above.value >= up_to.value:
            self.note("filter-lets-nothing-in", key, expected="'above' below 'up_to'", found=above)

    def limits(self) -> None:
        """Limits that name what is not there, cannot be met, or say nothing."""
        for limit in self._sequence.limit:
            key = f"limit[{limit.place}]"
            stages = self._stages_of(limit, key)
            self._filter(limit.parts, f"{key}.parts", self._sequence.kinds)
            kinds = self._kinds_of(limit, stages)
            self._quantity(limit, key, kinds)
            self._bounds(limit, key, kinds)
            for stage in stages:
                self._condition(limit.at, stage, key, limit)

    def _stages_of(self, limit: LimitTable, key: str) -> list[StageTable]:
        found: list[StageTable] = []
        for name in limit.stage:
            if name not in self._names:
                known = [known for known in self._names if known]
                self.note(
                    "limit-unknown-stage", f"{key}.stage", expected=one_of(name, known), found=name
                )
            found += [stage for stage in self._sequence.stage if stage.name == name]
        return found

    def _kinds_of(self, limit: LimitTable, stages: list[StageTable]) -> frozenset[Kind]:
        """The kinds of part that the limit judges; none where its stages are not known."""
        among = [kinds_of(stage.parts, self._sequence.kinds) for stage in stages]
        return kinds_of(limit.parts, frozenset[Kind]().union(*among))

    def _quantity(self, limit: LimitTable, key: str, kinds: frozenset[Kind]) -> None:
        quantity = QUANTITIES[limit.quantity]
        lacking = kinds - quantity.kinds
        if kinds and lacking:
            self.note(
                "limit-kind-lacks-quantity",
                f"{key}.quantity",
                expected=f"a quantity of every {' and '.join(sorted(kinds))} that it judges",
                found=f"{limit.quantity}, which no {' and no '.join(sorted(lacking))} has",
            )
        for name, asked, pers in (
            ("frequency", limit.at.frequency, {"point"}),
            ("level", limit.at.level, {"point", "part"}),
            ("bias", limit.at.bias, {"point", "part"}),
            ("voltage", limit.at.voltage, {"time", "hold"}),
            ("since_voltage", limit.at.since_voltage, {"time", "hold"}),
        ):
            if asked is not None and quantity.per not in pers:
                self.note(
                    "limit-condition-of-part",
                    f"{key}.at.{name}",
                    expected=f"no {name}: {limit.quantity} does not depend on one",
                    found=asked if not isinstance(asked, float) else _plain(name, asked),
                )

    def _bounds(self, limit: LimitTable, key: str, kinds: frozenset[Kind]) -> None:
        ends = [end for end in (limit.minimum, limit.maximum) if end is not None]
        if limit.rule is None:
            if not ends and limit.whole:
                self.note("limit-says-nothing", key, expected="min, max or rule", found="none")
            if limit.times != 1:
                self.note(
                    "times-without-rule", f"{key}.times", expected="a rule", found="min and max"
                )
        else:
            self._rule(limit, limit.rule, key, kinds)
            if ends:
                self.note(
                    "limit-says-two-things",
                    key,
                    expected="either a rule or min and max",
                    found=f"rule = '{limit.rule}' and a bound",
                )
        if any(end.relative for end in ends) and not kinds <= NOMINAL_QUANTITIES.get(
            limit.quantity, frozenset()
        ):
            self.note(
                "limit-not-relative",
                key,
                expected=f"an absolute bound: {limit.quantity} of {_some(kinds)} has no nominal",
                found="a share of nominal",
            )
        low, high = limit.minimum, limit.maximum
        if low and high and low.relative == high.relative and low.value > high.value:
            self.note("limit-crossed", key, expected="min below max", found="min above max")

    def _rule(self, limit: LimitTable, name: str, key: str, kinds: frozenset[Kind]) -> None:
        rule = RULES.get(name)
        if rule is None:
            self.note(
                "limit-unknown-rule", f"{key}.rule", expected=one_of(name, list(RULES)), found=name
            )
        elif limit.quantity not in rule.quantities:
            self.note(
                "rule-other-quantity",
                f"{key}.quantity",
                expected=" or ".join(sorted(rule.quantities)),
                found=limit.quantity,
            )
        elif rule.needs_frequency and limit.at.frequency is None:
            self.note(
                "rule-needs-frequency",
                f"{key}.at.frequency",
                expected=f"the frequency at which {name} is to hold",
                found="nothing",
            )
        elif not rule.widens and limit.times != 1:
            self.note(
                "times-without-rule",
                f"{key}.times",
                expected=f"no factor: {name} has its own",
                found=limit.times,
            )
        elif kinds - rule.kinds:
            self.note(
                "rule-other-kind",
                f"{key}.rule",
                expected=f"a rule for every {' and '.join(sorted(kinds))} that it judges",
                found=f"{name}, which is for {' and '.join(sorted(rule.kinds))}",
            )

    def _condition(self, at: Condition, stage: StageTable, key: str, limit: LimitTable) -> None:
        if limit.quantity not in stage.measures:
            self.note(
                "limit-not-measured",
                f"{key}.stage",
                expected=f"a stage that measures {limit.quantity}",
                found=f"'{stage.name}', which does not",
            )
            return
        if isinstance(stage, DirectStage):
            self._direct_condition(limit, stage, key)
        if not isinstance(stage, SweepStage) or not stage.whole:
            return
        if QUANTITIES[limit.quantity].per == "point":
            frequencies = stage.frequencies_hz
            self._measured(f"{key}.at.frequency", at.frequency, frequencies, same_frequency, _hertz)
        self._measured(f"{key}.at.level", at.level, stage.level, same_value, _volts)
        between = at.bias is not None and at.bias.unit == "working" and len(stage.bias) > 1
        if not (between and limit.quantity == "capacitance_change"):
            self._measured(f"{key}.at.bias", at.bias, stage.bias, same_bias, str)

    def _direct_condition(self, limit: LimitTable, stage: DirectStage, key: str) -> None:
        """Times under voltage that a limit names, or that its quantity is made of."""
        if not stage.whole:
            return
        times: tuple[float, ...] = getattr(stage, "read_at_s", ())
        ratio = READ_AT_S.get(limit.quantity, ())
        asked = limit.at.since_voltage
        if asked is not None and ratio:
            self.note(
                "limit-condition-of-part",
                f"{key}.at.since_voltage",
                expected=f"no since_voltage: {limit.quantity} has two times of its own",
                found=_seconds(asked),
            )
        for one in ratio or (() if asked is None else (asked,)):
            where = f"{key}.stage" if ratio else f"{key}.at.since_voltage"
            self._measured(where, one, times, same_value, _seconds)

    def _measured(
        self,
        key: str,
        asked: T | None,
        values: tuple[T, ...],
        same: Callable[[T, T], bool],
        show: Callable[[T], str],
    ) -> None:
        if asked is not None and not any(same(asked, value) for value in values):
            shown = ", ".join(show(value) for value in values[:6]) or "none"
            more = f" and {len(values) - 6} more" if len(values) > 6 else ""
            self.note(
                "limit-not-measured",
                key,
                expected=f"a value that the stage measures: {shown}{more}",
                found=show(asked),
            )


def check_sequence(
    sequence: Sequence, names: tuple[str, ...], path: Path, problems: Problems
) -> None:
    """Note everything that does not fit within the sequence; ``names`` are all stages' names."""
    checker = Checker(sequence, names, path, problems)
    checker.stages()
    checker.limits()


def _hertz(value: float) -> str:
    return format_quantity(value, "Hz", 6)


def _seconds(value: float) -> str:
    return format_quantity(value, "s", 6)


def _plain(name: str, value: float) -> str:
    units = {"frequency": "Hz", "since_voltage": "s"}
    return format_quantity(value, units.get(name, "V"), 6)


def _volts(value: float) -> str:
    return format_quantity(value, "V", 6)


def _some(kinds: frozenset[Kind]) -> str:
    return " or ".join(sorted(kinds)) or "such a part"


def _filter_text(parts: PartFilter) -> str:
    said = [*parts.kind, *(str(end) for end in (parts.above, parts.up_to) if end)]
    return ", ".join(said) or "no kind"
