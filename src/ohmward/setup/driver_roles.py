"""The names that a driver of each role may use, and those that it cannot do without."""

from dataclasses import dataclass, field

from ohmward.terms.role import Role


@dataclass(frozen=True, kw_only=True, slots=True)
class Vocabulary:
    """Names of settings, readings and actions; the ``needed_`` ones must be there.

    ``fields`` says, for a reading, which fields its reply must have.
    """

    settings: frozenset[str] = frozenset()
    readings: frozenset[str] = frozenset()
    actions: frozenset[str] = frozenset()
    needed_settings: frozenset[str] = frozenset()
    needed_readings: frozenset[str] = frozenset()
    needed_actions: frozenset[str] = frozenset()
    fields: dict[str, frozenset[str]] = field(default_factory=dict)


def _names(text: str) -> frozenset[str]:
    return frozenset(text.split())


_SCALAR_METER = _names("range range_automatic integration zero_check zero_correct watchdog remote")
_SUPPLY_SETTINGS = _names(
    "voltage output current_limit voltage_limit range ramp polarity watchdog remote"
)
_SUPPLY_READINGS = _names("voltage current state interlock")
_COMMON_ACTIONS = _names("reset clear remote local trigger feed")

VOCABULARY: dict[Role, Vocabulary] = {
    Role.IMPEDANCE_METER: Vocabulary(
        settings=_names(
            "frequency level bias_voltage bias_voltage_output bias_current bias_current_output "
            "pair integration range range_automatic correction_open correction_short "
            "correction_load cable_length trigger remote watchdog"
        ),
        readings=_names("impedance last_impedance"),
        actions=_COMMON_ACTIONS,
        needed_readings=_names("impedance"),
        fields={"impedance": _names("first second")},
    ),
    Role.BIAS_SOURCE: Vocabulary(
        settings=_SUPPLY_SETTINGS,
        readings=_SUPPLY_READINGS,
        actions=_COMMON_ACTIONS | _names("off"),
        needed_settings=_names("voltage output"),
        needed_readings=_names("voltage"),
        fields={"voltage": _names("voltage")},
    ),
    Role.HIGH_VOLTAGE_SUPPLY: Vocabulary(
        settings=_SUPPLY_SETTINGS,
        readings=_SUPPLY_READINGS,
        actions=_COMMON_ACTIONS | _names("off clear_trip"),
        needed_settings=_names("voltage output current_limit"),
        needed_readings=_names("voltage"),
        fields={"voltage": _names("voltage"), "current": _names("current")},
    ),
    Role.CURRENT_METER: Vocabulary(
        settings=_SCALAR_METER,
        readings=_names("current"),
        actions=_COMMON_ACTIONS,
        needed_readings=_names("current"),
        fields={"current": _names("current")},
    ),
    Role.VOLTMETER: Vocabulary(
        settings=_SCALAR_METER | _names("function input_resistance"),
        readings=_names("voltage resistance current"),
        actions=_COMMON_ACTIONS,
        needed_readings=_names("voltage"),
        fields={"voltage": _names("voltage")},
    ),
    Role.SCANNER: Vocabulary(
        readings=_names("closed state"),
        actions=_COMMON_ACTIONS | _names("close open open_all"),
        needed_readings=_names("state"),
        needed_actions=_names("close open open_all"),
        fields={"state": _names("channels")},
    ),
    Role.THERMOMETER: Vocabulary(
        settings=_names("integration"),
        readings=_names("temperature humidity"),
        actions=_COMMON_ACTIONS,
        needed_readings=_names("temperature"),
        fields={"temperature": _names("temperature"), "humidity": _names("humidity")},
    ),
    Role.INTERLOCK: Vocabulary(
        settings=_names("watchdog"),
        readings=_names("interlock"),
        actions=_COMMON_ACTIONS,
        needed_readings=_names("interlock"),
        fields={"interlock": _names("interlock")},
    ),
}
