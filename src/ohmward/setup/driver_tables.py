"""The tables of a driver file that say what the instrument is, besides what it says."""

from typing import Literal

from pydantic import Field, model_validator

from ohmward.setup.driver_commands import check_placeholders
from ohmward.setup.quantities import (
    Amperes,
    Farads,
    Hertz,
    Model,
    Ohms,
    PositiveOhms,
    PositiveSeconds,
    Seconds,
    Volts,
    wrong,
)


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
    frequencies: tuple[Hertz, ...] = Field(
        (), description="its frequencies, where a person chooses them and the driver cannot"
    )
    level: Volts | None = Field(None, description="its level, where it cannot be set")
    pair: str = Field("", description="the pair that it always sends, if it cannot be chosen")
    foreign_voltage: Volts = Field(1.0, description="what it stands on its terminals")


class SupplyTable(Model):
    """What a supply does to the part, beyond what it says."""

    sinks_current: bool = Field(False, description="whether it can pull a charged part down")
    off_impedance: PositiveOhms | None = Field(None, description="across its output while off")
    output_capacitance: Farads = 0.0
    output_on_at_power_on: bool = Field(True, description="true unless the manual says otherwise")
    least_current_limit: Amperes = 0.0
    current_reading_error: Amperes | None = Field(
        None, description="half-width of its own reading of its current, near zero"
    )


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
