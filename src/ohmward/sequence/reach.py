"""What an impedance meter can set, as its driver says, against what a stage asks for."""

from collections.abc import Mapping
from dataclasses import dataclass

from ohmward.sequence.model import FrequencyRange, SweepStage
from ohmward.sequence.notes import Notes
from ohmward.sequence.rules import same_frequency
from ohmward.sequence.values import Bias
from ohmward.setup.driver import Driver, Setting
from ohmward.units.values import format_quantity

OF_THE_PART = frozenset({"1", "working"})  # units of a bias that each part's own row settles
BIAS_SETTINGS = {"V": "bias_voltage", "A": "bias_current"}


@dataclass(frozen=True, kw_only=True, slots=True)
class Reach:
    """One meter's limits: asks of each setting whether a value can be set.

    Without a driver (what is wrong with it was noted) nothing is held against the meter, so
    that everything else can still be checked in the same go.
    """

    name: str
    driver: Driver | None

    def setting(self, name: str) -> Setting | None:
        """The meter's setting of that name, if it has one."""
        return None if self.driver is None else self.driver.setting.get(name)

    def can(self, setting: str, value: float) -> bool:
        """Whether the meter takes this value; False for a setting that it does not have."""
        found = self.setting(setting)
        if self.driver is None:
            return True
        if found is None:
            return any(same_frequency(value, one) for one in self._fixed(setting))
        return _takes(found, value)

    def _fixed(self, setting: str) -> tuple[float, ...]:
        """The values that there are where the driver cannot set this: a person or nobody does."""
        meter = None if self.driver is None else self.driver.meter
        if meter is None or setting not in {"frequency", "level"}:
            return ()
        if setting == "frequency":
            return meter.frequencies
        return () if meter.level is None else (meter.level,)

    def reading_s(self, integration: str, frequency_hz: float) -> float:
        """How long one reading takes."""
        return 0.0 if self.driver is None else self.driver.reading_time_s(integration, frequency_hz)

    def settling_s(self, frequency_hz: float) -> float:
        """How long the meter settles after a change."""
        return 0.0 if self.driver is None else self.driver.settling_time_s(frequency_hz)

    @property
    def fixed_pair(self) -> str:
        """The pair that it always sends, '' if it can be chosen."""
        meter = None if self.driver is None else self.driver.meter
        return "" if meter is None else meter.pair

    def span(self, setting: str, unit: str) -> str:
        """What the meter takes, in words."""
        found = self.setting(setting)
        fixed = self._fixed(setting)
        if found is None and fixed:
            return _one_of(fixed, unit, self.name)
        if found is None:
            return f"a meter that has this setting: {self.name} has none"
        if found.allowed:
            return _one_of(found.allowed, unit, self.name)
        if found.minimum is not None and found.maximum is not None:
            return f"{_shown(found.minimum, unit)} to {_shown(found.maximum, unit)} ({self.name})"
        if found.maximum is not None:
            return f"at most {_shown(found.maximum, unit)} ({self.name})"
        if found.minimum is not None:
            return f"at least {_shown(found.minimum, unit)} ({self.name})"
        return f"a value that {self.name} takes"


def _takes(setting: Setting, value: float) -> bool:
    if setting.allowed:
        return any(same_frequency(value, one) for one in setting.allowed)
    slack = 1e-9 * abs(value)
    return (setting.minimum is None or value >= setting.minimum - slack) and (
        setting.maximum is None or value <= setting.maximum + slack
    )


def _one_of(values: tuple[float, ...], unit: str, name: str) -> str:
    return f"one of {', '.join(_shown(value, unit) for value in values)} ({name})"


def _shown(value: float, unit: str) -> str:
    return format_quantity(value, unit, 6)


def reachable_frequencies(stage: SweepStage, reach: Reach) -> tuple[float, ...]:
    """The stage's frequencies, without those of a clipped range that the meter lacks."""
    if isinstance(stage.frequency, FrequencyRange) and stage.frequency.clip:
        return tuple(f for f in stage.frequencies_hz if reach.can("frequency", f))
    return stage.frequencies_hz


def check_reach(stage: SweepStage, reach: Reach, notes: Notes) -> None:
    """Note everything that the stage asks of the meter and that the meter cannot do."""
    key = f"stage[{stage.place}]"
    _check_frequencies(stage, reach, notes, key)
    for place, level in enumerate(stage.level, start=1):
        if not reach.can("level", level):
            notes.sequence(
                "level-beyond-meter",
                _item(f"{key}.level", place, len(stage.level)),
                expected=reach.span("level", "V"),
                found=_shown(level, "V"),
            )
    for place, bias in enumerate(stage.bias, start=1):
        if not can_bias(bias, reach):
            notes.sequence(
                "bias-beyond-meter",
                _item(f"{key}.bias", place, len(stage.bias)),
                expected=reach.span(BIAS_SETTINGS[bias.unit], bias.unit),
                found=str(bias),
            )
    _check_words(stage, reach, notes, key)
    if stage.range is not None and not reach.can("range", stage.range):
        notes.sequence(
            "range-beyond-meter",
            f"{key}.range",
            expected=reach.span("range", "ohm"),
            found=_shown(stage.range, "ohm"),
        )


def can_bias(bias: Bias, reach: Reach) -> bool:
    """Whether the meter can set this bias; a share of the rating is looked at part by part."""
    if bias.unit in OF_THE_PART or bias.value == 0:
        return True
    return reach.can(BIAS_SETTINGS[bias.unit], bias.value)


def _check_frequencies(stage: SweepStage, reach: Reach, notes: Notes, key: str) -> None:
    wanted = stage.frequencies_hz
    beyond = [frequency for frequency in wanted if not reach.can("frequency", frequency)]
    if not beyond:
        return
    expected = reach.span("frequency", "Hz")
    if isinstance(stage.frequency, FrequencyRange):
        if stage.frequency.clip and len(beyond) < len(wanted):
            return
        span = f"{_shown(stage.frequency.start, 'Hz')} to {_shown(stage.frequency.stop, 'Hz')}"
        notes.sequence("frequency-beyond-meter", f"{key}.frequency", expected=expected, found=span)
        return
    for place, frequency in enumerate(wanted, start=1):
        if frequency in beyond:
            notes.sequence(
                "frequency-beyond-meter",
                _item(f"{key}.frequency", place, len(wanted)),
                expected=expected,
                found=_shown(frequency, "Hz"),
            )


def _check_words(stage: SweepStage, reach: Reach, notes: Notes, key: str) -> None:
    for name, asked, only in (
        ("integration", stage.integration, ""),
        ("pair", stage.pair, reach.fixed_pair),
    ):
        setting = reach.setting(name)
        words: Mapping[str, str] = setting.words if setting is not None else {}
        known = tuple(words) or ((only,) if only else ())
        if asked is not None and known and asked not in known:
            notes.sequence(
                f"{name}-unknown",
                f"{key}.{name}",
                expected=f"one of {', '.join(known)}",
                found=asked,
            )


def _item(key: str, place: int, count: int) -> str:
    """The key of one value of a list; a list of one may have been written as a value."""
    return f"{key}[{place}]" if count > 1 else key
