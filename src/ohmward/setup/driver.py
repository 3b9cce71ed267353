"""Driver files: how one kind of meter talks, as a person writes it down from its manual."""

import hashlib
import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any, Literal

from pydantic import Field, PrivateAttr, field_validator, model_validator

from ohmward.errors import Problems
from ohmward.setup.driver_accuracy import AnyAccuracy, ImpedanceAccuracyTable, ScalarAccuracyTable
from ohmward.setup.driver_commands import Action, Reading, Setting, check_placeholders
from ohmward.setup.driver_replies import NumberStyle, Reply, ReplyField, StatusWord
from ohmward.setup.driver_roles import VOCABULARY
from ohmward.setup.quantities import (
    Amperes,
    Farads,
    Metres,
    Model,
    Ohms,
    PositiveOhms,
    PositiveSeconds,
    Seconds,
    Volts,
    wrong,
)
from ohmward.setup.resources import shipped
from ohmward.setup.toml import read_toml, validate
from ohmward.terms.accuracy import ImpedanceAccuracy, ScalarAccuracy
from ohmward.terms.role import Role

MOST_EXTENDS = 8


class LinkTable(Model):
    """How bytes get there and back; what is left out is what most meters do."""

    write_termination: str = Field("\n", max_length=8, description="ends every command")
    read_termination: str = Field("\n", max_length=8, description="ends every reply")
    timeout: PositiveSeconds = Field(2.0, description="how long a reply may take")
    open_timeout: PositiveSeconds = Field(5.0, description="how long opening may take")
    opening_delay: Seconds = Field(0.0, description="rest after opening")
    banner: bool = Field(False, description="whether it speaks unasked when it is opened")
    gap: Seconds = Field(0.0, description="rest between two commands")
    drain: PositiveSeconds = Field(0.1, description="how long silence proves that nothing is left")
    reopen_budget: Seconds = Field(60.0, description="how long to try to get a link back")
    baud_rate: int = Field(9600, ge=50, le=4_000_000)
    data_bits: Literal[7, 8] = 8
    parity: Literal["none", "odd", "even"] = "none"
    stop_bits: Literal[1, 2] = 1
    flow: Literal["none", "hardware", "software"] = "none"
    echo: bool = Field(False, description="whether it sends every command back first")
    prompt: str = Field("", max_length=16, description="text that it sends when it is ready")
    acknowledge: str = Field("", max_length=32, description="its answer to what it has done: 'OK'")
    refusals: tuple[str, ...] = Field((), description="starts of its answers when it refuses")
    longest_reply: int = Field(65536, ge=1, le=16_777_216, description="bytes, no reply is longer")


class IdentityTable(Model):
    """How the instrument is known: its answer in whole, by field or by its start."""

    ask: str = Field("*IDN?", description="the query for its identity")
    exactly: str = Field("", description="the whole answer")
    starts_with: str = Field("", description="how the answer starts")
    fields: tuple[str, ...] = Field(
        (),
        description="the answer field by field, an empty one fits anything",
        examples=[["GENERIC", "SCANNER", "", ""]],
    )
    separator: str = Field(",", min_length=1, max_length=4)
    serial_field: int | None = Field(
        None, ge=1, description="which field is the serial number, counted from 1"
    )

    @model_validator(mode="after")
    def _one_way(self) -> "IdentityTable":
        ways = [way for way in (self.exactly, self.starts_with, self.fields) if way]
        if len(ways) != 1:
            raise wrong("one of 'exactly', 'starts_with' and 'fields'", len(ways) or "none")
        check_placeholders(self.ask, frozenset())
        return self


class ErrorsTable(Model):
    """The instrument's error queue."""

    ask: str = Field("SYST:ERR?", description="takes the oldest entry from the queue")
    after: Literal["settings", "differences"] = Field("settings", description="when it is read")
    at_most: int = Field(30, ge=1, le=1000, description="entries, no queue is longer")


class TimingTable(Model):
    """How long a reading takes, so that the brief can say how long a run will take."""

    reading: dict[str, Seconds] = Field(
        default_factory=dict, description="by the word of the integration setting"
    )
    least_periods: float = Field(0.0, ge=0, description="periods of the test signal at least")
    settling: Seconds = Field(0.0, description="after a change of frequency, level or bias")
    settling_periods: float = Field(0.0, ge=0, description="periods of the test signal besides")


class MeterTable(Model):
    """What an impedance meter is, beyond what it says."""

    source_resistance: Ohms = Field(100.0, description="in series with its test signal")
    pair: str = Field("", description="the pair that it always sends, if it cannot be chosen")
    foreign_voltage: Volts = Field(1.0, description="what it stands on its terminals")


class SupplyTable(Model):
    """What a supply does to the part, beyond what it says."""

    sinks_current: bool = Field(False, description="whether it can pull a charged part down")
    off_impedance: PositiveOhms | None = Field(None, description="across its output while off")
    output_capacitance: Farads = 0.0
    output_on_at_power_on: bool = Field(True, description="true unless the manual says otherwise")
    least_current_limit: Amperes = 0.0


class WatchdogTable(Model):
    """The instrument's own time-out on its link, after which it makes itself safe."""

    setting: str = Field(description="name of the setting that arms it, in seconds")
    feed: str = Field("", description="name of the action that feeds it; empty: any command does")
    least: PositiveSeconds = 1.0
    most: PositiveSeconds = 60.0


class FrameTable(Model):
    """Frames of bytes that a meter sends."""

    header: str = Field(
        pattern=r"^([0-9A-Fa-f]{2})( ?[0-9A-Fa-f]{2})*$", description="first bytes, hexadecimal"
    )
    length: int | None = Field(None, ge=2, le=4096, description="bytes of a whole frame")
    length_at: int | None = Field(None, ge=1, le=64, description="offset of the byte that counts")
    length_adds: int = Field(0, ge=-64, le=256, description="whole frame = that byte + this")
    check: Literal["none", "sum8", "xor8", "crc16-modbus", "crc16-ccitt"] = "none"
    check_from: int = Field(0, ge=0, description="offset of the first byte that is checked")
    check_endian: Literal["big", "little"] = "big"
    agree: tuple[str, ...] = Field(
        (), description="fields that must be the same in two frames before a change of them counts"
    )

    @model_validator(mode="after")
    def _one_length(self) -> "FrameTable":
        if (self.length is None) == (self.length_at is None):
            raise wrong(
                "one of 'length' and 'length_at'", "none" if self.length is None else "both"
            )
        return self

    @property
    def header_bytes(self) -> bytes:
        """The header as bytes."""
        return bytes.fromhex(self.header)


class Driver(Model):
    """One kind of meter: its role, its words, its limits, its accuracy."""

    format: Literal[1]
    name: str = Field("", description="what it is called; the file's name where left out")
    summary: str = Field("", description="one sentence on what it drives")
    extends: str = Field("", description="driver that this one is a variation of")
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
    frame: FrameTable | None = None
    timing: TimingTable = TimingTable()
    meter: MeterTable | None = None
    supply: SupplyTable | None = None
    watchdog: WatchdogTable | None = None
    cable_lengths: tuple[Metres, ...] = Field((), description="cable lengths it can correct for")
    accuracy: AnyAccuracy | None = None

    _path: Path = PrivateAttr(default=Path())
    _merged: dict[str, Any] = PrivateAttr(default_factory=dict)

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
        """The file's content as plain data, what it extends included."""
        return self._merged

    @property
    def digest(self) -> str:
        """SHA-256 of the merged content: what a journal keeps to know the driver again."""
        text = json.dumps(self._merged, sort_keys=True, ensure_ascii=True, default=str)
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
    path = _find(name_or_path, beside)
    merged = _merged(path, problems, ())
    if merged is None:
        return None
    fitted = _fill_constants(merged, merged.get("constants"))
    before = len(problems)
    driver = validate(Driver, fitted, path, problems)
    if driver is None:
        return None
    _check_whole(driver, path, problems)
    if len(problems) > before:
        return None
    driver._path = path
    driver._merged = merged
    return driver


def _find(name_or_path: str, beside: Path) -> Path:
    if name_or_path.endswith(".toml") or "/" in name_or_path or "\\" in name_or_path:
        return beside / name_or_path
    return shipped("drivers") / f"{name_or_path}.toml"


def _merged(path: Path, problems: Problems, seen: tuple[Path, ...]) -> dict[str, Any] | None:
    """The file's tables laid over those of what it extends."""
    own = read_toml(path, problems)
    if own is None:
        return None
    base_name = own.get("extends", "")
    if not isinstance(base_name, str) or not base_name:
        return own
    seen = (*seen, path.resolve())
    base_path = _find(base_name, path.parent)
    if base_path.resolve() in seen or len(seen) > MOST_EXTENDS:
        problems.add(
            id="driver-extends-itself",
            file=path,
            key="extends",
            expected="a driver that does not lead back to this one",
            found=base_name,
        )
        return None
    base = _merged(base_path, problems, seen)
    return None if base is None else _laid_over(base, own)


def _laid_over(base: Mapping[str, Any], own: Mapping[str, Any]) -> dict[str, Any]:
    """Tables are merged key by key; anything else, lists included, is replaced."""
    merged = dict(base)
    for key, value in own.items():
        under = merged.get(key)
        if isinstance(value, dict) and isinstance(under, dict):
            merged[key] = _laid_over(under, value)
        else:
            merged[key] = value
    return merged


def _fill_constants(value: Any, constants: Any) -> Any:
    """Put the driver's constants into every text; placeholders of other names stay."""
    if not isinstance(constants, dict) or not constants:
        return value
    if isinstance(value, str):
        for name, text in constants.items():
            value = value.replace(f"{{{name}}}", str(text))
        return value
    if isinstance(value, dict):
        return {
            key: inner if key == "constants" else _fill_constants(inner, constants)
            for key, inner in value.items()
        }
    if isinstance(value, list):
        return [_fill_constants(inner, constants) for inner in value]
    return value


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
