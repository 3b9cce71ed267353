"""Driver files: how one kind of meter talks, as a person writes it down from its manual."""

import hashlib
import json
from pathlib import Path
from typing import Any, Literal

from pydantic import Field, PrivateAttr, field_validator

from ohmward.errors import Problems
from ohmward.setup.driver_accuracy import AnyAccuracy, ImpedanceAccuracyTable, ScalarAccuracyTable
from ohmward.setup.driver_commands import Action, Reading, Setting
from ohmward.setup.driver_merge import fill_constants, find_driver, merged_driver
from ohmward.setup.driver_replies import NumberStyle, Reply, ReplyField, StatusWord
from ohmward.setup.driver_roles import VOCABULARY
from ohmward.setup.driver_tables import (
    ErrorsTable,
    FrameTable,
    IdentityTable,
    LinkTable,
    MeterTable,
    SupplyTable,
    TimingTable,
    WatchdogTable,
)
from ohmward.setup.quantities import Metres, Model, wrong
from ohmward.setup.toml import validate
from ohmward.terms.accuracy import ImpedanceAccuracy, ScalarAccuracy
from ohmward.terms.role import Role


class Driver(Model):
    """One kind of meter: its role, its words, its limits, its accuracy."""

    format: Literal[1]
    name: str = Field("", description="what it is called; the file's name where left out")
    summary: str = Field("", description="one sentence on what it drives")
    extends: str = Field("", description="driver that this one is a variation of")
    without: tuple[str, ...] = Field(
        (), description="keys of that driver that are not taken over", examples=[["numbers.width"]]
    )
    role: Role
    codec: str = Field("scpi", description="how bytes are made: scpi, lines, stream, frames, …")
    simulated_by: str = Field("", description="simulated instrument that speaks like this one")
    constants: dict[str, str] = Field(
        default_factory=dict,
        description="texts put in for placeholders everywhere, such as a channel number",
    )
    numbers: NumberStyle = Field(NumberStyle(), description="how this instrument writes numbers")
    link: LinkTable = LinkTable()
    identity: IdentityTable | None = None
    errors: ErrorsTable | None = None
    start: tuple[str, ...] = Field((), description="names of the actions to take after opening")
    setting: dict[str, Setting] = Field(default_factory=dict)
    reading: dict[str, Reading] = Field(default_factory=dict)
    action: dict[str, Action] = Field(default_factory=dict)
    status: dict[str, StatusWord] = Field(
        default_factory=dict, description="status code as sent = what it means for the reading"
    )
    overflow: dict[str, StatusWord] = Field(
        default_factory=dict, description="number as sent = what it means for the reading"
    )
    agree: tuple[str, ...] = Field(
        (),
        description="for a meter that talks unasked: fields of its reading that must be the same"
        " in two messages before a change of them counts",
    )
    frame: FrameTable | None = None
    timing: TimingTable = TimingTable()
    meter: MeterTable | None = None
    supply: SupplyTable | None = None
    watchdog: WatchdogTable | None = None
    cable_lengths: tuple[Metres, ...] = Field((), description="cable lengths it can correct for")
    accuracy: AnyAccuracy | None = None

    _path: Path = PrivateAttr(default=Path())

    @field_validator("overflow")
    @classmethod
    def _numbers(cls, value: dict[str, StatusWord]) -> dict[str, StatusWord]:
        for text in value:
            try:
                float(text)
            except ValueError:
                raise wrong("a number as the instrument sends it", text) from None
        return value

    @property
    def path(self) -> Path:
        """The file that this was read from."""
        return self._path

    @property
    def merged(self) -> dict[str, Any]:
        """What the file says as plain data: what it extends laid under, constants filled in,
        values in SI base units, and nothing that is left to a default.
        """
        return self.model_dump(mode="json", exclude_unset=True, exclude={"extends", "without"})

    @property
    def digest(self) -> str:
        """SHA-256 of what the file says: what a journal keeps to know the driver again."""
        text = json.dumps(self.merged, sort_keys=True, ensure_ascii=True)
        return hashlib.sha256(text.encode("ascii")).hexdigest()

    @property
    def impedance_accuracy(self) -> ImpedanceAccuracy | None:
        """Its accuracy as an impedance meter, if that is stated."""
        table = self.accuracy
        return table.as_terms() if isinstance(table, ImpedanceAccuracyTable) else None

    @property
    def scalar_accuracy(self) -> ScalarAccuracy | None:
        """Its accuracy as an instrument that reads one number, if that is stated."""
        table = self.accuracy
        return table.as_terms() if isinstance(table, ScalarAccuracyTable) else None

    def reading_time_s(self, integration: str, frequency_hz: float) -> float:
        """How long one reading takes at this integration and frequency; 0 when not stated."""
        stated = self.timing.reading.get(integration, 0.0)
        return max(stated, self.timing.least_periods / frequency_hz if frequency_hz else 0.0)

    def settling_time_s(self, frequency_hz: float) -> float:
        """How long it settles after a change of frequency, level or bias; 0 when not stated."""
        periods = self.timing.settling_periods / frequency_hz if frequency_hz else 0.0
        return self.timing.settling + periods


def load_driver(name_or_path: str, beside: Path, problems: Problems) -> Driver | None:
    """Read a driver file, with what it extends, or note every problem and return None.

    A name without ``.toml`` and without a slash is one of the shipped drivers; anything else
    is a path, relative to the folder ``beside``.
    """
    path = find_driver(name_or_path, beside)
    before = len(problems)
    merged = merged_driver(path, problems, ())
    if merged is None:
        return None
    fitted = fill_constants(merged, merged.get("constants"))
    driver = validate(Driver, fitted, path, problems)
    if driver is None:
        return None
    _check_whole(driver, path, problems)
    if len(problems) > before:
        return None
    driver._path = path
    return driver


def _check_whole(driver: Driver, path: Path, problems: Problems) -> None:
    """What one table cannot know of another: the role's words, names that refer to tables."""
    words = VOCABULARY[driver.role]
    for table, known, needed in (
        ("setting", words.settings, words.needed_settings),
        ("reading", words.readings, words.needed_readings),
        ("action", words.actions, words.needed_actions),
    ):
        names = set(getattr(driver, table))
        for name in sorted(names - known):
            problems.add(
                id="driver-unknown-name",
                file=path,
                key=f"{table}.{name}",
                expected=f"one of {', '.join(sorted(known))}",
                found=name,
            )
        for name in sorted(needed - names):
            problems.add(
                id="driver-lacks",
                file=path,
                key=f"{table}.{name}",
                expected=f"[{table}.{name}], which every {driver.role} needs",
                found="nothing",
            )
    _check_names(driver, path, problems)
    for name, reading in driver.reading.items():
        _check_reading(driver, f"reading.{name}", reading, path, problems)


def _check_names(driver: Driver, path: Path, problems: Problems) -> None:
    wanted = [("start", name, "action") for name in driver.start]
    if driver.watchdog is not None:
        wanted.append(("watchdog.setting", driver.watchdog.setting, "setting"))
        if driver.watchdog.feed:
            wanted.append(("watchdog.feed", driver.watchdog.feed, "action"))
    for key, name, table in wanted:
        if name not in getattr(driver, table):
            problems.add(
                id="driver-name-leads-nowhere",
                file=path,
                key=key,
                expected=f"the name of a table [{table}.…] of this driver",
                found=name,
            )
    said = {field.name for reading in driver.reading.values() for field in reading.fields}
    for name in sorted(set(driver.agree) - said):
        problems.add(
            id="driver-name-leads-nowhere",
            file=path,
            key="agree",
            expected="the name of a field of a reading",
            found=name,
        )
    if driver.codec == "frames" and driver.frame is None:
        problems.add(id="driver-lacks", file=path, key="frame", expected="[frame]", found="nothing")


def _check_reading(
    driver: Driver, key: str, reading: Reading, path: Path, problems: Problems
) -> None:
    fields: tuple[ReplyField, ...] = reading.fields
    for field in fields:
        if field.kind == "status" and not (field.codes or driver.status):
            problems.add(
                id="driver-status-unmapped",
                file=path,
                key=f"{key}.fields.{field.name}",
                expected="[status], or 'codes' here, that say what each code means",
                found="neither",
            )
    needed = VOCABULARY[driver.role].fields.get(key.partition(".")[2], frozenset())
    for name in sorted(needed - {field.name for field in fields}):
        problems.add(
            id="driver-lacks-field",
            file=path,
            key=f"{key}.fields",
            expected=f"a field named {name}",
            found=", ".join(field.name for field in fields),
        )
    if reading.by == "offset" and driver.frame is not None and driver.frame.length is not None:
        for field in fields:
            if (field.at or 0) + (field.length or 1) > driver.frame.length:
                problems.add(
                    id="driver-field-outside",
                    file=path,
                    key=f"{key}.fields.{field.name}",
                    expected=f"a place within {driver.frame.length} bytes",
                    found=f"{field.at} + {field.length}",
                )


__all__ = ["Driver", "Reading", "Reply", "ReplyField", "Setting", "load_driver"]
