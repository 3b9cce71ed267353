"""What an instrument is for a sequence."""

from enum import StrEnum


class Role(StrEnum):
    """An instrument's role; its value is what people write in a bench or driver file."""

    IMPEDANCE_METER = "impedance meter"
    BIAS_SOURCE = "bias source"
    HIGH_VOLTAGE_SUPPLY = "high-voltage supply"
    CURRENT_METER = "current meter"
    VOLTMETER = "voltmeter"
    SCANNER = "scanner"
    THERMOMETER = "thermometer"
    INTERLOCK = "interlock"
