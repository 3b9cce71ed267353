"""What is wrong or missing in a bench's ``[high_voltage]``, across its keys."""

from collections.abc import Iterator, Mapping, Set

from ohmward.setup.high_voltage import HighVoltage, HighVoltagePosition
from ohmward.setup.toml import one_of
from ohmward.terms.role import Role
from ohmward.units.values import format_quantity

Finding = tuple[str, str, str, str]
_HERE = "high_voltage"


def findings(
    path: HighVoltage, *, meter_channels: Mapping[str, tuple[str, ...]]
) -> Iterator[Finding]:
    """Problems as (id, key, expected, found), whatever else the bench file lacks.

    ``meter_channels`` are those of every position of the bench, by its name.
    """
    yield from _relay_findings(path)
    yield from _channel_findings(path)
    seen: set[str] = set()
    for index, place in enumerate(path.positions):
        key = f"{_HERE}.position[{index + 1}]"
        if place.name not in meter_channels:
            expected = one_of(place.name, list(meter_channels))
            yield "unknown-position", f"{key}.name", expected, f"'{place.name}'"
        else:
            yield from _meter_findings(place, key, meter_channels[place.name])
        if place.name in seen:
            yield "duplicate-position", f"{key}.name", "each position once", f"'{place.name}' again"
        seen.add(place.name)
    if path.divider_ceiling_v < path.ceiling_v:
        yield (
            "divider-too-weak",
            f"{_HERE}.divider_ceiling",
            f"at least the ceiling, {format_quantity(path.ceiling_v, 'V')}",
            format_quantity(path.divider_ceiling_v, "V"),
        )


def missing(path: HighVoltage, roles: Set[Role]) -> Iterator[Finding]:
    """What the whole bench lacks for high voltage; ``roles`` are those of its instruments."""
    for role, why in (
        (Role.HIGH_VOLTAGE_SUPPLY, "to charge a part"),
        (Role.VOLTMETER, "that sees the part's own terminals"),
        (Role.SCANNER, "to move the contacts"),
    ):
        if role not in roles:
            yield "role-missing", "instrument", f"a {role.value} {why}", "none"
    if path.enclosure_interlock and Role.INTERLOCK not in roles:
        yield (
            "role-missing",
            "instrument",
            "an interlock that says whether the enclosure is shut",
            "none",
        )
    if Role.CURRENT_METER in roles:
        if path.bypass is None:
            yield "bypass-missing", f"{_HERE}.bypass", "a bypass of the current meter", "nothing"
        if path.meter_survives_a is None:
            yield (
                "rating-missing",
                f"{_HERE}.current_meter_survives",
                "the current that the current meter outlives",
                "nothing",
            )


def _relay_findings(path: HighVoltage) -> Iterator[Finding]:
    """Contacts of an unknown type, and types that do not hold the ceiling back."""
    for key, contact in path.contacts():
        relay = path.relays.get(contact.relay)
        if relay is None:
            yield (
                "unknown-relay",
                f"{_HERE}.{key}.relay",
                one_of(contact.relay, list(path.relays)),
                f"'{contact.relay}'",
            )
        elif relay.stand_off_v < path.ceiling_v and key != "bypass":
            yield (
                "relay-too-weak",
                f"{_HERE}.{key}.relay",
                f"one that holds back {format_quantity(path.ceiling_v, 'V')}",
                f"'{contact.relay}', which holds {format_quantity(relay.stand_off_v, 'V')}",
            )


def _channel_findings(path: HighVoltage) -> Iterator[Finding]:
    """One channel moves one contact; only discharge and short may be shared by positions."""
    users: dict[str, str] = {}
    for key, contact in path.contacts():
        user = users.setdefault(contact.channel, key)
        shared = key.rpartition(".")[2]
        may_share = shared in {"discharge", "short"} and user.endswith(f".{shared}")
        if user != key and not may_share:
            yield (
                "channel-taken",
                f"{_HERE}.{key}.channel",
                "a channel of its own",
                f"'{contact.channel}', which is {user}'s",
            )


def _meter_findings(
    place: HighVoltagePosition, key: str, meter_channels: tuple[str, ...]
) -> Iterator[Finding]:
    """The meter's contacts are the position's own, two in series or a changeover."""
    named = tuple(contact.channel for contact in place.meter)
    if set(named) != set(meter_channels):
        yield (
            "meter-contacts-differ",
            f"{key}.meter",
            f"the position's meter_channels: {', '.join(meter_channels) or 'none'}",
            ", ".join(named) or "nothing",
        )
    if len(named) == 1 and not place.meter_changeover:
        yield (
            "meter-not-apart",
            f"{key}.meter",
            "two contacts in series, or meter_changeover = true",
            "one contact",
        )
