"""Builds the warden of a bench with high voltage, from the bench's file and its drivers."""

from collections.abc import Mapping
from math import inf

from ohmward.instruments.current_meter import CurrentMeter
from ohmward.instruments.interlock import Interlock
from ohmward.instruments.scanner import Scanner
from ohmward.instruments.supply import Supply
from ohmward.instruments.talker import Talker
from ohmward.instruments.voltmeter import Voltmeter
from ohmward.safety.equipment import Equipment, Facts
from ohmward.safety.equipment import Interlock as AnyInterlock
from ohmward.safety.messages import Events
from ohmward.safety.permit import Permit
from ohmward.safety.voltage import HighVoltageWarden
from ohmward.safety.wiring import wiring_of
from ohmward.setup.bench import Bench
from ohmward.setup.driver import Driver
from ohmward.setup.high_voltage import HighVoltage
from ohmward.terms.accuracy import ScalarAccuracy
from ohmward.terms.role import Role

INTEGRATION = "medium"
ONE_EXCHANGE_S = 0.01  # what a link adds to a reading, at least
UNKNOWN_SHARE = 1e-3  # of its largest current, where a driver does not say how well it reads


class NoInterlock:
    """The enclosure of a bench that declares none: a person keeps watch instead."""

    async def closed(self) -> bool:
        """Nobody can say otherwise."""
        return True


def high_voltage_warden(
    bench: Bench,
    drivers: Mapping[str, Driver],
    talkers: Mapping[str, Talker],
    *,
    permit: Permit,
    look_s: float,
    meter_bias_v: float,
    events: Events | None,
) -> HighVoltageWarden:
    """The warden of a bench that has ``[high_voltage]``; raises ValueError for one that has not.

    ``look_s`` is how often interlock, supply and part are looked at under voltage,
    ``meter_bias_v`` the highest bias that the impedance meter leaves on a part.
    """
    if bench.high_voltage is None:
        raise ValueError(f"{bench.name} has no high voltage")
    return HighVoltageWarden(
        permit=permit,
        wiring=wiring_of(bench.high_voltage),
        equipment=_equipment(bench, talkers),
        facts=facts_of(bench, drivers, look_s=look_s, meter_bias_v=meter_bias_v),
        events=events,
    )


def _equipment(bench: Bench, talkers: Mapping[str, Talker]) -> Equipment:
    def of(role: Role) -> Talker:
        return talkers[bench.name_of_role(role)]

    return Equipment(
        supply=Supply(of(Role.HIGH_VOLTAGE_SUPPLY)),
        current_meter=CurrentMeter(of(Role.CURRENT_METER)),
        voltmeter=Voltmeter(of(Role.VOLTMETER), integration=INTEGRATION),
        scanner=Scanner(of(Role.SCANNER)),
        interlock=_interlock(bench, talkers),
    )


def _interlock(bench: Bench, talkers: Mapping[str, Talker]) -> AnyInterlock:
    """The interlock's own module, else the supply's flag where it has one."""
    name = bench.name_of_role(Role.INTERLOCK)
    if name:
        return Interlock(talkers[name])
    supply = talkers[bench.name_of_role(Role.HIGH_VOLTAGE_SUPPLY)]
    flagged = supply.can_ask("state") and any(
        "interlock_open" in field.flags for field in supply.driver.reading["state"].fields
    )
    return Interlock(supply) if flagged else NoInterlock()


def facts_of(
    bench: Bench, drivers: Mapping[str, Driver], *, look_s: float, meter_bias_v: float
) -> Facts:
    """What the rules need to know of the instruments, from their drivers and the bench's path.

    Raises ValueError where a driver lacks an accuracy without which nothing could be decided.
    """
    path = bench.high_voltage
    if path is None:
        raise ValueError(f"{bench.name} has no high voltage")
    supply, ammeter, voltmeter = (
        drivers[bench.name_of_role(role)]
        for role in (Role.HIGH_VOLTAGE_SUPPLY, Role.CURRENT_METER, Role.VOLTMETER)
    )
    limit_a = min(path.current_ceiling_a, _most(supply, "current_limit"))
    reads_a = _scalar(ammeter)
    ranges_a = tuple(one.full_scale for one in reads_a.ranges)
    # the rules scale the lowest range's error with the range: take the worst that this gives
    error_a = max(ranges_a[0] * one.offset / one.full_scale for one in reads_a.ranges)
    return Facts(
        limit_a=limit_a,
        supply_error_a=_supply_error_a(supply, limit_a),
        voltmeter_resolution_v=_resolution_v(voltmeter, path),
        voltmeter_interval_s=voltmeter.reading_time_s(INTEGRATION, 0.0) + ONE_EXCHANGE_S,
        ranges_a=ranges_a,
        meter_error_a=error_a,
        check_s=look_s,
        meter_bias_v=meter_bias_v,
        rail_leak_ohm=_drains_ohm(supply, path),
    )


def _most(driver: Driver, setting: str) -> float:
    found = driver.setting[setting].maximum if setting in driver.setting else None
    return inf if found is None else found


def _scalar(driver: Driver) -> ScalarAccuracy:
    if driver.scalar_accuracy is None:
        raise ValueError(f"the driver {driver.name or driver.path.stem} states no accuracy")
    return driver.scalar_accuracy


def _supply_error_a(supply: Driver, limit_a: float) -> float:
    """Half-width of the supply's own current reading near zero (A)."""
    stated = supply.supply.current_reading_error if supply.supply else None
    return UNKNOWN_SHARE * limit_a if stated is None else stated


def _resolution_v(voltmeter: Driver, path: HighVoltage) -> float:
    """What two readings at the bench's ceiling must differ by to differ (V)."""
    ranges = _scalar(voltmeter).ranges
    fits = (one.offset for one in ranges if one.full_scale >= path.ceiling_v)
    return next(fits, ranges[-1].offset)


def _drains_ohm(supply: Driver, path: HighVoltage) -> float:
    """What drains the rail while the supply is off (ohm).

    A supply's own bleeder is often written down twice, as the rail's and as what the supply is
    when off: the lower of the two counts, not both.
    """
    stated = supply.supply.off_impedance if supply.supply else None
    return min(path.bleeder_ohm or inf, stated or inf)


def error_a(ammeter: Driver, current_a: float) -> float:
    """Half-width of what a current meter reads at this current, on a range with room for it (A).

    Raises ValueError where its driver states no accuracy.
    """
    ranges = _scalar(ammeter).ranges
    fits = (one for one in ranges if one.full_scale > 2.0 * abs(current_a))
    range_ = next(fits, ranges[-1])
    return range_.reading_rel * abs(current_a) + range_.offset
